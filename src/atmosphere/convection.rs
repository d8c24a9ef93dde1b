//! Convective flux by the mixing-length theory, version ML2.
//!
//! Böhm-Vitense's theory in the notation of Tassoul, Fontaine & Winget (1990, ApJS 72, 335) with
//! a = 1, b = 2, c = 16, and the mixing length in pressure scale heights. Radiative losses of the
//! elements follow Mihalas (1978, Stellar Atmospheres, eq. 7-76), which goes from optically thick
//! to thin.

use crate::physics::constants::STEFAN_BOLTZMANN_CGS;
use crate::physics::state::{State, Thermodynamics};

/// Mixing length in pressure scale heights, calibrated on ZZ Ceti and on 3-D models (Tremblay et
/// al. 2010, ApJ 720, 581).
pub const MIXING_LENGTH: f64 = 0.8;

const VELOCITY_FACTOR: f64 = 1.0;
const FLUX_FACTOR: f64 = 2.0;
const LOSS_FACTOR: f64 = 16.0;

/// One end of an interval of the atmosphere.
#[derive(Debug, Clone, Copy)]
pub struct Point {
    /// Temperature, K.
    pub temperature_k: f64,
    /// Gas pressure, dyn cm^-2.
    pub pressure_cgs: f64,
    /// Rosseland opacity, cm^2 g^-1.
    pub rosseland_cm2_g: f64,
}

/// Convective flux between two points, erg cm^-2 s^-1; zero where the gradient is stable.
pub fn convective_flux(above: Point, below: Point, gravity_cgs: f64) -> f64 {
    let temperature_k = (above.temperature_k * below.temperature_k).sqrt();
    let pressure_cgs = (above.pressure_cgs * below.pressure_cgs).sqrt();
    let gradient =
        (below.temperature_k / above.temperature_k).ln() / (below.pressure_cgs / above.pressure_cgs).ln();
    // The adiabatic gradient never falls below 0.05 in hydrogen, and this saves the equation of
    // state in the outer, nearly isothermal layers.
    if gradient < 0.04 {
        return 0.0;
    }
    let thermodynamics = Thermodynamics::new(temperature_k, pressure_cgs);
    let superadiabatic = gradient - thermodynamics.adiabatic_gradient;
    if superadiabatic <= 0.0 {
        return 0.0;
    }
    let density = State::new(temperature_k, pressure_cgs).density_g_cm3;
    let opacity = (above.rosseland_cm2_g * below.rosseland_cm2_g).sqrt();
    let scale_height_cm = pressure_cgs / (density * gravity_cgs);
    let length_cm = MIXING_LENGTH * scale_height_cm;
    let heat_capacity = thermodynamics.heat_capacity_erg_g_k;
    let speed_per_root =
        length_cm * (VELOCITY_FACTOR * gravity_cgs * thermodynamics.expansion / scale_height_cm).sqrt();
    let element_depth = opacity * density * length_cm;
    let loss = LOSS_FACTOR / 2.0 * STEFAN_BOLTZMANN_CGS * temperature_k.powi(3) * element_depth
        / (density * heat_capacity * speed_per_root * (1.0 + 0.5 * element_depth * element_depth));
    // Element excess x over its surroundings: superadiabatic = x + loss sqrt(x); written so that
    // the root stays exact when losses dominate.
    let root = superadiabatic / (0.5 * loss + (0.25 * loss * loss + superadiabatic).sqrt());
    FLUX_FACTOR * density * heat_capacity * temperature_k * MIXING_LENGTH * speed_per_root * root.powi(3)
}
