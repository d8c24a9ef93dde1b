//! A whole star of given mass and effective temperature: core matched to its envelope.
//!
//! In: mass, Teff, layer thickness. Out: [`StarModel`] with radius, central temperature and what the
//! cooling needs. Unknowns are the photospheric radius, the central density and temperature and the
//! neutrino luminosity; they make radius, pressure and temperature of core and envelope equal at the
//! base of the helium layer, and the neutrinos those that the core emits (Newton in four dimensions).
//! General relativity is in the pressure gradient. Mass is rest mass of nucleons and electrons.
//! Convergence 1e-7; accuracy against published models: `validate_published_masses`.

use nalgebra::{Matrix4, Vector4};

use super::cold::{ColdPressure, Gravity, cold_star_of_mass};
use super::core::{Core, CoreInput, CoreMaterial, CoreSolution, Shell, integrate_core};
use super::envelope::{EnvelopeInput, EnvelopePoint, integrate_envelope, luminosity_erg_s};
use crate::physics::constants::{GRAVITATION_CGS, SOLAR_MASS_G, SOLAR_RADIUS_CM};

/// Helium layer and everything above it, over the stellar mass.
pub const HELIUM_FRACTION: f64 = 1e-2;
/// Longest step in ln P of envelopes.
const ENVELOPE_STEP: f64 = 0.1;
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
    /// Central temperature, K.
    pub central_temperature_k: f64,
    /// Central density, g/cm3.
    pub central_density_g_cm3: f64,
    /// Neutrino luminosity, erg/s.
    pub neutrino_luminosity_erg_s: f64,
    /// Share of the core mass that is crystallised.
    pub crystallised_fraction: f64,
    /// Core shells from the centre outward, the same mass fractions in every model.
    pub core: Vec<Shell>,
    /// Envelope from the surface inward.
    pub envelope: Vec<EnvelopePoint>,
    unknowns: Vector4<f64>,
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

/// Starting values for the Newton iteration: ln of radius (cm), central density (g/cm3), central
/// temperature (K) and neutrino luminosity (erg/s).
#[derive(Debug, Clone, Copy)]
pub struct Guess(Vector4<f64>);

impl Guess {
    /// From the cold star of the same mass; only good for cool stars.
    pub fn cold(mass_msun: f64, core: Core) -> Option<Self> {
        let star = cold_star_of_mass(mass_msun, &core.composition(), ColdPressure::Coulomb, Gravity::Newton)?;
        // Central temperature of a star near 10 000 K; neutrinos do not matter there.
        Some(Guess(Vector4::new(
            (1.03 * star.radius_rsun * SOLAR_RADIUS_CM).ln(),
            star.central_density_g_cm3.ln(),
            7e6f64.ln(),
            1e25f64.ln(),
        )))
    }

    /// From a neighbouring model.
    pub fn from_model(model: &StarModel) -> Self {
        Guess(model.unknowns)
    }

    /// Continues the trend of two models to a third temperature, linearly in ln Teff.
    pub fn continued(older: &StarModel, newer: &StarModel, teff_k: f64) -> Self {
        let step = (teff_k / newer.teff_k).ln() / (newer.teff_k / older.teff_k).ln();
        Guess(newer.unknowns + (newer.unknowns - older.unknowns) * step)
    }
}

/// A trial: envelope and core for one set of unknowns, and how badly they fit.
struct Trial {
    envelope: Vec<EnvelopePoint>,
    core: CoreSolution,
    mismatch: Vector4<f64>,
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
    /// Longest Newton step in each unknown.
    const LONGEST: [f64; 4] = [0.1, 0.4, 0.4, 5.0];
    let mass_g = mass_msun * SOLAR_MASS_G;
    let material = CoreMaterial::shared(core)?;
    let envelope = |unknowns: &Vector4<f64>| {
        integrate_envelope(&EnvelopeInput {
            mass_g,
            radius_cm: unknowns[0].exp(),
            teff_k,
            hydrogen_fraction: layer.mass_fraction(),
            envelope_fraction: HELIUM_FRACTION,
            gravity: Gravity::Einstein,
            step: ENVELOPE_STEP,
        })
    };
    let trial = |unknowns: &Vector4<f64>, envelope: Vec<EnvelopePoint>| -> Option<Trial> {
        let input = CoreInput {
            mass_g,
            ln_central_density: unknowns[1],
            ln_central_temperature: unknowns[2],
            luminosity_erg_s: luminosity_erg_s(unknowns[0].exp(), teff_k),
            neutrino_luminosity_erg_s: unknowns[3].exp(),
            gravity: Gravity::Einstein,
        };
        let core = integrate_core(&input, material)?;
        let (base, top) = (envelope.last()?, core.shells.last()?.matter);
        let mismatch = Vector4::new(
            (core.radius_cm / base.radius_cm).ln(),
            top.pressure_cgs.ln() - base.ln_pressure,
            top.temperature_k.ln() - base.ln_temperature,
            core.neutrino_luminosity_erg_s.ln() - unknowns[3],
        );
        Some(Trial { envelope, core, mismatch })
    };
    let mut unknowns = guess.0;
    for _ in 0..40 {
        let here = trial(&unknowns, envelope(&unknowns)?)?;
        if here.mismatch.amax() < TOLERANCE {
            return finish(mass_msun, teff_k, unknowns, here);
        }
        let mut jacobian = Matrix4::zeros();
        for k in 0..4 {
            let mut moved = unknowns;
            moved[k] += DELTA;
            // Only the radius changes the envelope.
            let outer = if k == 0 { envelope(&moved)? } else { here.envelope.clone() };
            let column = (trial(&moved, outer)?.mismatch - here.mismatch) / DELTA;
            jacobian.set_column(k, &column);
        }
        let step = jacobian.lu().solve(&(-here.mismatch))?;
        let damping = (0..4).map(|k| LONGEST[k] / step[k].abs()).fold(1.0, f64::min);
        if !damping.is_finite() {
            return None;
        }
        unknowns += step * damping;
    }
    None
}

/// Sums what the outside wants from a converged trial.
fn finish(mass_msun: f64, teff_k: f64, unknowns: Vector4<f64>, trial: Trial) -> Option<StarModel> {
    let Trial { envelope, core, .. } = trial;
    let mut solid_g = 0.0;
    for pair in core.shells.windows(2) {
        let share = pair.iter().filter(|shell| shell.matter.is_solid()).count() as f64 / 2.0;
        solid_g += share * (pair[1].mass_g - pair[0].mass_g);
    }
    let radius_cm = unknowns[0].exp();
    Some(StarModel {
        mass_msun,
        teff_k,
        radius_cm,
        luminosity_erg_s: luminosity_erg_s(radius_cm, teff_k),
        central_temperature_k: core.shells.first()?.matter.temperature_k,
        central_density_g_cm3: core.shells.first()?.matter.density_g_cm3,
        neutrino_luminosity_erg_s: core.neutrino_luminosity_erg_s,
        crystallised_fraction: solid_g / core.shells.last()?.mass_g,
        core: core.shells,
        envelope,
        unknowns,
    })
}
