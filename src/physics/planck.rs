//! The Planck function.

use super::constants::{BOLTZMANN_ERG_K, LIGHT_SPEED_CM_S, PLANCK_ERG_S};

/// Planck constant over Boltzmann constant, K s.
pub const PLANCK_OVER_BOLTZMANN_K_S: f64 = PLANCK_ERG_S / BOLTZMANN_ERG_K;

/// Planck function B_nu, erg s^-1 cm^-2 Hz^-1 sr^-1.
pub fn planck_per_hz(frequency_hz: f64, temperature_k: f64) -> f64 {
    let x = PLANCK_OVER_BOLTZMANN_K_S * frequency_hz / temperature_k;
    wien_factor(frequency_hz) / x.exp_m1()
}

/// Derivative of [`planck_per_hz`] with temperature, erg s^-1 cm^-2 Hz^-1 sr^-1 K^-1.
pub fn planck_slope_per_hz(frequency_hz: f64, temperature_k: f64) -> f64 {
    let x = PLANCK_OVER_BOLTZMANN_K_S * frequency_hz / temperature_k;
    let exp_minus = (-x).exp();
    wien_factor(frequency_hz) * x / temperature_k * exp_minus / (1.0 - exp_minus).powi(2)
}

fn wien_factor(frequency_hz: f64) -> f64 {
    2.0 * PLANCK_ERG_S * frequency_hz.powi(3) / LIGHT_SPEED_CM_S.powi(2)
}
