//! Convection by mixing length, version ML2 (Bohm & Cassinelli 1971; constants as in Tassoul,
//! Fontaine & Winget 1990, ApJS 72, 335).
//!
//! In: local state and the gradient that radiation and conduction alone would need. Out: the
//! actual gradient d ln T / d ln P. One cubic in the square root of the superadiabatic excess of the
//! rising element over its surroundings, solved by Newton; it has a single positive root.

use crate::physics::constants::STEFAN_BOLTZMANN_CGS;

/// Mixing length over pressure scale height, as in the model atmospheres.
pub const MIXING_LENGTH: f64 = 0.8;
/// ML2: squared velocity, flux and radiative loss constants.
const VELOCITY: f64 = 1.0;
const FLUX: f64 = 2.0;
const LOSS: f64 = 16.0;

/// Local quantities that convection needs, cgs.
#[derive(Debug, Clone, Copy)]
pub struct LocalState {
    /// Pressure, dyn/cm2.
    pub pressure_cgs: f64,
    /// Temperature, K.
    pub temperature_k: f64,
    /// Density, g/cm3.
    pub density_g_cm3: f64,
    /// Opacity with conduction, cm2/g.
    pub opacity_cm2_g: f64,
    /// Heat capacity at constant pressure, erg/g/K.
    pub heat_capacity_p_erg_g_k: f64,
    /// -(d ln rho / d ln T) at constant pressure.
    pub expansion: f64,
    /// Adiabatic gradient.
    pub adiabatic_gradient: f64,
    /// Gravity, cm/s2.
    pub gravity_cgs: f64,
}

/// Actual temperature gradient where radiation alone would need `radiative_gradient`.
pub fn temperature_gradient(state: &LocalState, radiative_gradient: f64) -> f64 {
    let excess = radiative_gradient - state.adiabatic_gradient;
    if excess <= 0.0 {
        return radiative_gradient;
    }
    let LocalState { temperature_k: t, density_g_cm3: rho, opacity_cm2_g: kappa, .. } = *state;
    let cp = state.heat_capacity_p_erg_g_k;
    let height = state.pressure_cgs / (rho * state.gravity_cgs);
    let length = MIXING_LENGTH * height;
    // Velocity = speed * xi with xi^2 = gradient of surroundings minus that of the element.
    let speed = length * (VELOCITY * state.gravity_cgs * state.expansion.max(1e-10) / height).sqrt();
    let efficiency = kappa * rho * rho * cp * length * speed / (LOSS * STEFAN_BOLTZMANN_CGS * t.powi(3));
    let flux = FLUX * rho * cp * t * speed * MIXING_LENGTH * 3.0 * kappa * rho * height
        / (16.0 * STEFAN_BOLTZMANN_CGS * t.powi(4));
    // excess = xi^2 + xi / efficiency + flux xi^3, monotonic in xi: start above the root.
    let mut xi = excess.sqrt().min((excess / flux).cbrt()).min(excess * efficiency);
    for _ in 0..50 {
        let value = xi * (xi + 1.0 / efficiency + flux * xi * xi) - excess;
        let step = value / (2.0 * xi + 1.0 / efficiency + 3.0 * flux * xi * xi);
        xi -= step;
        if step.abs() < 1e-12 * xi {
            break;
        }
    }
    radiative_gradient - flux * xi.powi(3)
}
