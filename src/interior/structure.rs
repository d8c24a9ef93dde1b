//! A whole star: the model record, and isothermal stars as starting points of the cooling.
//!
//! In: mass, Teff, layer thickness. Out: [`StarModel`]. For an isothermal star the unknowns are the
//! photospheric radius and the central density; they make radius and pressure of core and envelope
//! equal at the base of the helium layer, whose temperature the core has (Newton, convergence 1e-8).
//! Stars with heat flow in the core come from [`super::evolution`].
//! General relativity is in the pressure gradient. Mass is that of nucleons and electrons at rest: binding and
//! internal energy, below 0.3 % even at 1.36 Msun, are not weighed.

use nalgebra::{Matrix2, Vector2};

use super::cold::{ColdPressure, Gravity, cold_star_of_mass};
use super::core::{Core, CoreMaterial, Shell, isothermal_core};
use super::envelope::{EnvelopeInput, EnvelopePoint, HELIUM_FRACTION, integrate_envelope, luminosity_erg_s};
use super::matter::solid_share;
use crate::physics::constants::{GRAVITATION_CGS, SOLAR_MASS_G, SOLAR_RADIUS_CM};

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
}

impl StarModel {
    /// Gathers a model from its parts.
    pub fn assemble(
        mass_msun: f64,
        teff_k: f64,
        radius_cm: f64,
        core: Vec<Shell>,
        envelope: Vec<EnvelopePoint>,
        material: &CoreMaterial,
    ) -> Option<Self> {
        let (mut solid_g, mut neutrinos, mut inner_g) = (0.0, 0.0, 0.0);
        for pair in core.windows(2) {
            let shell_g = pair[1].mass_g - pair[0].mass_g;
            inner_g += shell_g;
            for shell in pair {
                let m = &shell.matter;
                solid_g += 0.5 * shell_g * solid_share(m.coupling);
                neutrinos += 0.5 * shell_g * material.neutrinos_erg_g_s(m.density_g_cm3, m.temperature_k);
            }
        }
        let central = core.first()?.matter;
        Some(StarModel {
            mass_msun,
            teff_k,
            radius_cm,
            luminosity_erg_s: luminosity_erg_s(radius_cm, teff_k),
            central_temperature_k: central.temperature_k,
            central_density_g_cm3: central.density_g_cm3,
            neutrino_luminosity_erg_s: neutrinos,
            crystallised_fraction: solid_g / inner_g,
            core,
            envelope,
        })
    }

    /// Surface gravity, log10 cm/s2, Newtonian as in the definition spectroscopists use.
    pub fn log_g(&self) -> f64 {
        (GRAVITATION_CGS * self.mass_msun * SOLAR_MASS_G / self.radius_cm.powi(2)).log10()
    }

    /// Radius, solar.
    pub fn radius_rsun(&self) -> f64 {
        self.radius_cm / SOLAR_RADIUS_CM
    }
}

/// The envelope of a star in the models' standard resolution.
pub fn envelope_of(
    mass_msun: f64,
    ln_radius: f64,
    ln_teff: f64,
    layer: HydrogenLayer,
) -> Option<Vec<EnvelopePoint>> {
    integrate_envelope(&EnvelopeInput {
        mass_g: mass_msun * SOLAR_MASS_G,
        radius_cm: ln_radius.exp(),
        teff_k: ln_teff.exp(),
        hydrogen_fraction: layer.mass_fraction(),
        envelope_fraction: HELIUM_FRACTION,
        gravity: Gravity::Einstein,
        step: ENVELOPE_STEP,
    })
}

/// Starting values for the Newton iteration: ln of radius (cm) and central density (g/cm3).
#[derive(Debug, Clone, Copy)]
pub struct Guess(Vector2<f64>);

impl Guess {
    /// From the cold star of the same mass; only good for cool stars.
    pub fn cold(mass_msun: f64, core: Core) -> Option<Self> {
        let star = cold_star_of_mass(mass_msun, &core.composition(), ColdPressure::Coulomb, Gravity::Newton)?;
        let radius_cm = 1.03 * star.radius_rsun * SOLAR_RADIUS_CM;
        Some(Guess(Vector2::new(radius_cm.ln(), star.central_density_g_cm3.ln())))
    }

    /// From a neighbouring model.
    pub fn from_model(model: &StarModel) -> Self {
        Guess(Vector2::new(model.radius_cm.ln(), model.central_density_g_cm3.ln()))
    }

    /// Continues the trend of two models to a third temperature, linearly in ln Teff.
    pub fn continued(older: &StarModel, newer: &StarModel, teff_k: f64) -> Self {
        let step = (teff_k / newer.teff_k).ln() / (newer.teff_k / older.teff_k).ln();
        let (a, b) = (Guess::from_model(older).0, Guess::from_model(newer).0);
        Guess(b + (b - a) * step)
    }
}

/// Solves an isothermal star; `None` if there is none (too hot for its mass, or outside the tables).
pub fn isothermal_star(
    mass_msun: f64,
    teff_k: f64,
    layer: HydrogenLayer,
    core: Core,
    guess: Guess,
) -> Option<StarModel> {
    const TOLERANCE: f64 = 1e-8;
    const DELTA: f64 = 1e-5;
    /// Longest Newton step in each unknown.
    const LONGEST: [f64; 2] = [0.1, 0.4];
    let material = CoreMaterial::shared(core)?;
    let envelope = |unknowns: &Vector2<f64>| envelope_of(mass_msun, unknowns[0], teff_k.ln(), layer);
    let interior = |unknowns: &Vector2<f64>, outer: &[EnvelopePoint]| {
        let temperature_k = outer.last()?.ln_temperature.exp();
        let mass_g = mass_msun * SOLAR_MASS_G;
        isothermal_core(mass_g, unknowns[1], temperature_k, &material.composition, Gravity::Einstein)
    };
    let mismatch = |outer: &[EnvelopePoint], inner: &[Shell]| -> Option<Vector2<f64>> {
        let (base, top) = (outer.last()?, inner.last()?);
        Some(Vector2::new(
            (top.radius_cm / base.radius_cm).ln(),
            top.matter.pressure_cgs.ln() - base.ln_pressure,
        ))
    };
    let mut unknowns = guess.0;
    for _ in 0..40 {
        let outer = envelope(&unknowns)?;
        let inner = interior(&unknowns, &outer)?;
        let here = mismatch(&outer, &inner)?;
        if here.amax() < TOLERANCE {
            return StarModel::assemble(mass_msun, teff_k, unknowns[0].exp(), inner, outer, material);
        }
        let mut jacobian = Matrix2::zeros();
        for k in 0..2 {
            let mut moved = unknowns;
            moved[k] += DELTA;
            // Only the radius changes the envelope.
            let there = if k == 0 {
                let outer = envelope(&moved)?;
                mismatch(&outer, &interior(&moved, &outer)?)?
            } else {
                mismatch(&outer, &interior(&moved, &outer)?)?
            };
            jacobian.set_column(k, &((there - here) / DELTA));
        }
        let step = jacobian.lu().solve(&(-here))?;
        let damping = (0..2).map(|k| LONGEST[k] / step[k].abs()).fold(1.0, f64::min);
        if !damping.is_finite() {
            return None;
        }
        unknowns += step * damping;
    }
    None
}
