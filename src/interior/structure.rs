//! A whole star of given mass and effective temperature: isothermal core matched to its envelope.
//!
//! In: mass, Teff, layer thickness. Out: [`StarModel`] with radius, core temperature and what the
//! cooling needs. Unknowns are the photospheric radius and the central density; they make radius
//! and pressure of core and envelope equal at the base of the helium layer (two-dimensional Newton).
//! The core has the temperature of that base: conduction keeps it isothermal to a few per cent below
//! 50 000 K. General relativity is in the pressure gradient. Mass is rest mass of nucleons and electrons.
//! Convergence 1e-7 in both; accuracy against published models: `validate_published_masses`.

use std::f64::consts::PI;

use super::cold::{ColdPressure, Gravity, cold_star_of_mass};
use super::envelope::{EnvelopeInput, EnvelopePoint, integrate_envelope, luminosity_erg_s};
use super::matter::{Composition, MatterState, matter_state};
use super::neutrinos::neutrino_loss_erg_g_s;
use crate::physics::constants::{GRAVITATION_CGS, SOLAR_MASS_G, SOLAR_RADIUS_CM};

/// Helium layer and everything above it, over the stellar mass.
pub const HELIUM_FRACTION: f64 = 1e-2;
/// Cores below this mass are helium: the core mass at helium ignition (0.45 - 0.47 Msun), common practice.
pub const HELIUM_CORE_BELOW_MSUN: f64 = 0.45;
/// Longest step in ln P of envelopes.
const ENVELOPE_STEP: f64 = 0.1;
/// Nodes of the core: first in m^(2/3), then in the logarithm of the mass outside.
const INNER_NODES: usize = 60;
const OUTER_NODES: usize = 60;
/// Mass fraction where the second part begins.
const INNER_SHARE: f64 = 0.8;

/// Thickness of the hydrogen layer.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum HydrogenLayer {
    /// 1e-4 of the mass: what evolution of single stars leaves.
    Thick,
    /// 1e-10 of the mass.
    Thin,
}

impl HydrogenLayer {
    /// Hydrogen mass over stellar mass.
    pub fn mass_fraction(self) -> f64 {
        match self {
            HydrogenLayer::Thick => 1e-4,
            HydrogenLayer::Thin => 1e-10,
        }
    }
}

/// Material of the core.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Core {
    /// Helium.
    Helium,
    /// Carbon and oxygen, half each.
    CarbonOxygen,
    /// Oxygen and neon.
    OxygenNeon,
}

impl Core {
    /// The core that single-star evolution gives a mass, as the table assumes.
    pub fn of_mass(mass_msun: f64) -> Self {
        if mass_msun < HELIUM_CORE_BELOW_MSUN { Core::Helium } else { Core::CarbonOxygen }
    }

    /// Its composition.
    pub fn composition(self) -> Composition {
        match self {
            Core::Helium => Composition::helium(),
            Core::CarbonOxygen => Composition::carbon_oxygen(),
            Core::OxygenNeon => Composition::oxygen_neon(),
        }
    }
}

/// One shell of the core.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Shell {
    /// Enclosed mass, g.
    pub mass_g: f64,
    /// Thermodynamic state.
    pub matter: MatterState,
}

/// A model star.
#[derive(Debug, Clone)]
pub struct StarModel {
    /// Mass, solar.
    pub mass_msun: f64,
    /// Effective temperature, K.
    pub teff_k: f64,
    /// Photospheric radius, cm.
    pub radius_cm: f64,
    /// Luminosity, erg/s.
    pub luminosity_erg_s: f64,
    /// Core temperature, K.
    pub core_temperature_k: f64,
    /// Neutrino luminosity, erg/s.
    pub neutrino_luminosity_erg_s: f64,
    /// Share of the core mass that is crystallised.
    pub crystallised_fraction: f64,
    /// Core shells from the centre outward, the same mass fractions in every model.
    pub core: Vec<Shell>,
    /// Envelope from the surface inward.
    pub envelope: Vec<EnvelopePoint>,
    ln_central_density: f64,
}

impl StarModel {
    /// Surface gravity, log10 cm/s2, Newtonian as in the definition spectroscopists use.
    pub fn log_g(&self) -> f64 {
        (GRAVITATION_CGS * self.mass_msun * SOLAR_MASS_G / self.radius_cm.powi(2)).log10()
    }

    /// Radius, solar.
    pub fn radius_rsun(&self) -> f64 {
        self.radius_cm / SOLAR_RADIUS_CM
    }
}

/// Mass fractions of the core nodes.
fn core_nodes() -> Vec<f64> {
    let split = INNER_SHARE.powf(2.0 / 3.0);
    let mut nodes: Vec<f64> =
        (0..=INNER_NODES).map(|i| (split * i as f64 / INNER_NODES as f64).powf(1.5)).collect();
    let (first, last) = ((1.0 - INNER_SHARE).ln(), HELIUM_FRACTION.ln());
    nodes.extend(
        (1..=OUTER_NODES)
            .map(|i| 1.0 - (first + (last - first) * i as f64 / OUTER_NODES as f64).exp()),
    );
    nodes
}

struct CoreSolution {
    shells: Vec<Shell>,
    radius_cm: f64,
    pressure_cgs: f64,
}

/// Integrates an isothermal core outward in z = m^(2/3), for r^2 and ln rho, regular at the centre.
fn integrate_core(
    mass_g: f64,
    ln_central_density: f64,
    temperature_k: f64,
    composition: &Composition,
    gravity: Gravity,
) -> Option<CoreSolution> {
    let slope = |z: f64, r2: f64, ln_density: f64| -> Option<(f64, f64)> {
        let rho = ln_density.exp();
        let state = matter_state(composition, rho, temperature_k);
        let (r, m) = (r2.max(0.0).sqrt(), z.powf(1.5));
        let dr2 = 3.0 * z.sqrt() / (4.0 * PI * r * rho);
        let dp = -1.5 * GRAVITATION_CGS * z * z / (4.0 * PI * r2 * r2)
            * gravity.factor(state.pressure_cgs, rho, r, m);
        let d = dp / (state.pressure_cgs * state.chi_density);
        (dr2.is_finite() && d.is_finite() && state.chi_density > 0.0).then_some((dr2, d))
    };
    let nodes = core_nodes();
    let central = matter_state(composition, ln_central_density.exp(), temperature_k);
    let mut shells = vec![Shell { mass_g: 0.0, matter: central }];
    // Uniform ball up to a thousandth of the first node.
    let mut z = (nodes[1] * 1e-3 * mass_g).powf(2.0 / 3.0);
    let mut r2 = (3.0 * z.powf(1.5) / (4.0 * PI * central.density_g_cm3)).powf(2.0 / 3.0);
    let mut ln_density = ln_central_density
        - 2.0 * PI / 3.0 * GRAVITATION_CGS * central.density_g_cm3.powi(2) * r2
            / (central.pressure_cgs * central.chi_density);
    for node in &nodes[1..] {
        let mass = node * mass_g;
        let h = mass.powf(2.0 / 3.0) - z;
        let k1 = slope(z, r2, ln_density)?;
        let k2 = slope(z + 0.5 * h, r2 + 0.5 * h * k1.0, ln_density + 0.5 * h * k1.1)?;
        let k3 = slope(z + 0.5 * h, r2 + 0.5 * h * k2.0, ln_density + 0.5 * h * k2.1)?;
        let k4 = slope(z + h, r2 + h * k3.0, ln_density + h * k3.1)?;
        r2 += h / 6.0 * (k1.0 + 2.0 * k2.0 + 2.0 * k3.0 + k4.0);
        ln_density += h / 6.0 * (k1.1 + 2.0 * k2.1 + 2.0 * k3.1 + k4.1);
        z += h;
        shells.push(Shell { mass_g: mass, matter: matter_state(composition, ln_density.exp(), temperature_k) });
    }
    let pressure_cgs = shells.last()?.matter.pressure_cgs;
    Some(CoreSolution { shells, radius_cm: r2.sqrt(), pressure_cgs })
}

/// Starting values for the Newton iteration.
#[derive(Debug, Clone, Copy)]
pub struct Guess {
    ln_radius: f64,
    ln_central_density: f64,
}

impl Guess {
    /// From the cold star of the same mass.
    pub fn cold(mass_msun: f64, core: Core) -> Option<Self> {
        let star = cold_star_of_mass(mass_msun, &core.composition(), ColdPressure::Coulomb, Gravity::Newton)?;
        Some(Guess {
            ln_radius: (1.03 * star.radius_rsun * SOLAR_RADIUS_CM).ln(),
            ln_central_density: star.central_density_g_cm3.ln(),
        })
    }

    /// From a neighbouring model.
    pub fn from_model(model: &StarModel) -> Self {
        Guess { ln_radius: model.radius_cm.ln(), ln_central_density: model.ln_central_density }
    }

    /// Continues the trend of two models to a third temperature, linearly in ln Teff.
    pub fn continued(older: &StarModel, newer: &StarModel, teff_k: f64) -> Self {
        let (a, b) = (Guess::from_model(older), Guess::from_model(newer));
        let step = (teff_k / newer.teff_k).ln() / (newer.teff_k / older.teff_k).ln();
        Guess {
            ln_radius: b.ln_radius + step * (b.ln_radius - a.ln_radius),
            ln_central_density: b.ln_central_density + step * (b.ln_central_density - a.ln_central_density),
        }
    }
}

/// Solves one star; `None` if no hydrostatic model is found (too hot for its mass, or outside the tables).
pub fn solve_star(
    mass_msun: f64,
    teff_k: f64,
    layer: HydrogenLayer,
    core: Core,
    guess: Guess,
) -> Option<StarModel> {
    const TOLERANCE: f64 = 1e-7;
    const DELTA: f64 = 1e-5;
    let mass_g = mass_msun * SOLAR_MASS_G;
    let composition = core.composition();
    let envelope = |ln_radius: f64| {
        integrate_envelope(&EnvelopeInput {
            mass_g,
            radius_cm: ln_radius.exp(),
            teff_k,
            hydrogen_fraction: layer.mass_fraction(),
            envelope_fraction: HELIUM_FRACTION,
            gravity: Gravity::Einstein,
            step: ENVELOPE_STEP,
        })
    };
    let interior = |ln_density: f64, outer: &[EnvelopePoint]| {
        let temperature_k = outer.last()?.ln_temperature.exp();
        integrate_core(mass_g, ln_density, temperature_k, &composition, Gravity::Einstein)
    };
    let mismatch = |outer: &[EnvelopePoint], inner: &CoreSolution| -> Option<[f64; 2]> {
        let base = outer.last()?;
        Some([(inner.radius_cm / base.radius_cm).ln(), inner.pressure_cgs.ln() - base.ln_pressure])
    };
    let Guess { mut ln_radius, mut ln_central_density } = guess;
    for _ in 0..25 {
        let outer = envelope(ln_radius)?;
        let inner = interior(ln_central_density, &outer)?;
        let f = mismatch(&outer, &inner)?;
        if f[0].abs() < TOLERANCE && f[1].abs() < TOLERANCE {
            return finish(mass_msun, teff_k, ln_radius, ln_central_density, &composition, outer, inner);
        }
        let moved = envelope(ln_radius + DELTA)?;
        let f_radius = mismatch(&moved, &interior(ln_central_density, &moved)?)?;
        let f_density = mismatch(&outer, &interior(ln_central_density + DELTA, &outer)?)?;
        let a = [(f_radius[0] - f[0]) / DELTA, (f_density[0] - f[0]) / DELTA];
        let b = [(f_radius[1] - f[1]) / DELTA, (f_density[1] - f[1]) / DELTA];
        let determinant = a[0] * b[1] - a[1] * b[0];
        let step_radius = (a[1] * f[1] - b[1] * f[0]) / determinant;
        let step_density = (b[0] * f[0] - a[0] * f[1]) / determinant;
        if !(step_radius.is_finite() && step_density.is_finite()) {
            return None;
        }
        let damping = (0.1 / step_radius.abs()).min(0.4 / step_density.abs()).min(1.0);
        ln_radius += damping * step_radius;
        ln_central_density += damping * step_density;
    }
    None
}

/// Sums what the outside wants from a converged pair.
fn finish(
    mass_msun: f64,
    teff_k: f64,
    ln_radius: f64,
    ln_central_density: f64,
    composition: &Composition,
    envelope: Vec<EnvelopePoint>,
    inner: CoreSolution,
) -> Option<StarModel> {
    let core_temperature_k = envelope.last()?.ln_temperature.exp();
    let charge2_per_mass = composition
        .species()
        .iter()
        .map(|s| s.number_fraction * s.charge * s.charge)
        .sum::<f64>()
        / composition.species().iter().map(|s| s.number_fraction * s.mass_u).sum::<f64>();
    let (mut neutrinos, mut solid) = (0.0, 0.0);
    for pair in inner.shells.windows(2) {
        let shell_g = pair[1].mass_g - pair[0].mass_g;
        for shell in pair {
            let m = &shell.matter;
            neutrinos += 0.5
                * shell_g
                * neutrino_loss_erg_g_s(
                    composition.mass_per_electron_u(),
                    charge2_per_mass,
                    m.density_g_cm3,
                    m.temperature_k,
                );
            solid += if m.is_solid() { 0.5 * shell_g } else { 0.0 };
        }
    }
    let radius_cm = ln_radius.exp();
    Some(StarModel {
        mass_msun,
        teff_k,
        radius_cm,
        luminosity_erg_s: luminosity_erg_s(radius_cm, teff_k),
        core_temperature_k,
        neutrino_luminosity_erg_s: neutrinos,
        crystallised_fraction: solid / inner.shells.last()?.mass_g,
        core: inner.shells,
        envelope,
        ln_central_density,
    })
}
