//! Free-free absorption by electrons in the field of protons.
//!
//! The classical coefficient times the exact non-relativistic Gaunt factor (Karzas & Latter 1961,
//! ApJS 6, 167), averaged over a Maxwellian. The average is tabulated against gamma^2 = Ry / kT and
//! u = h nu / kT and read by Catmull-Rom cubics. Domain 500 K - 1.5e7 K and u = 1e-4 - 316, clamped
//! outside; interpolation is good to 1e-3 (`validate_free_free_gaunt_between_table_points`).
//! Relativistic corrections are below 0.3 % up to 1e7 K (van Hoof et al. 2014, from memory).

use super::bound_free::LYMAN_LIMIT_HZ;
use super::free_free_table::{FIRST_LOG_GAMMA2, FIRST_LOG_PHOTON, GAUNT, LOG_STEP};
use crate::physics::planck::PLANCK_OVER_BOLTZMANN_K_S;

/// 4 e^6 / (3 h c m_e) sqrt(2 pi / (3 k m_e)), cgs: the classical coefficient of free-free
/// absorption (Rybicki & Lightman 1979, eq. 5.18b).
pub const KRAMERS_FREE_FREE_CGS: f64 = 3.692_348e8;

/// Number of tabulated photon energies.
const PHOTONS: usize = GAUNT[0].len();

/// Free-free absorption at one temperature: the table's temperature half, taken once.
#[derive(Debug, Clone)]
pub struct FreeFree {
    coefficient_cgs: f64,
    /// log10 of h / kT, so that frequencies may come as logarithms.
    log_photon_per_hz: f64,
    gaunt: [f64; PHOTONS],
}

impl FreeFree {
    /// Prepares a temperature, K.
    pub fn new(temperature_k: f64) -> Self {
        let log_photon_per_hz = (PLANCK_OVER_BOLTZMANN_K_S / temperature_k).log10();
        let log_gamma2 = LYMAN_LIMIT_HZ.log10() + log_photon_per_hz;
        let (row, weights) = catmull_rom(log_gamma2, FIRST_LOG_GAMMA2, GAUNT.len());
        FreeFree {
            coefficient_cgs: KRAMERS_FREE_FREE_CGS / temperature_k.sqrt(),
            log_photon_per_hz,
            gaunt: std::array::from_fn(|photon| {
                weights.iter().enumerate().map(|(i, weight)| weight * GAUNT[row + i][photon]).sum()
            }),
        }
    }

    /// Thermally averaged Gaunt factor at a frequency given as log10 of Hz.
    pub fn gaunt_factor(&self, log_frequency: f64) -> f64 {
        let (first, weights) = catmull_rom(self.log_photon_per_hz + log_frequency, FIRST_LOG_PHOTON, PHOTONS);
        weights.iter().zip(&self.gaunt[first..first + 4]).map(|(weight, value)| weight * value).sum()
    }

    /// Absorption coefficient per electron and proton, cm^5 Hz^3, to be divided by the cube of the
    /// frequency; without stimulated emission.
    pub fn cm5_hz3(&self, log_frequency: f64) -> f64 {
        self.coefficient_cgs * self.gaunt_factor(log_frequency)
    }
}

/// Free-free absorption coefficient per electron and proton, cm^5, without stimulated emission.
pub fn free_free_cm5(frequency_hz: f64, temperature_k: f64) -> f64 {
    FreeFree::new(temperature_k).cm5_hz3(frequency_hz.log10()) / frequency_hz.powi(3)
}

/// Thermally averaged free-free Gaunt factor of hydrogen.
pub fn gaunt_factor(frequency_hz: f64, temperature_k: f64) -> f64 {
    FreeFree::new(temperature_k).gaunt_factor(frequency_hz.log10())
}

/// First of the four table points around a place, and their weights; clamped to the cells that
/// have neighbours on both sides.
fn catmull_rom(place: f64, first: f64, count: usize) -> (usize, [f64; 4]) {
    let position = ((place - first) / LOG_STEP).clamp(1.0, (count - 2) as f64);
    let cell = (position as usize).min(count - 3);
    let t = position - cell as f64;
    let (t2, t3) = (t * t, t * t * t);
    let weights = [
        0.5 * (-t + 2.0 * t2 - t3),
        0.5 * (2.0 - 5.0 * t2 + 3.0 * t3),
        0.5 * (t + 4.0 * t2 - 3.0 * t3),
        0.5 * (t3 - t2),
    ];
    (cell - 1, weights)
}
