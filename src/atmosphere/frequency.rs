//! The frequencies on which the temperature structure is computed.
//!
//! Logarithmic base grid wide enough that the Planck function outside it carries less than 1e-5 of
//! the flux, both sides of the series limits, and clusters that follow the lines from core to wing.

use crate::physics::constants::{BOLTZMANN_ERG_K, LIGHT_SPEED_CM_S, PLANCK_ERG_S};
use crate::physics::hydrogen::Line;
use crate::physics::opacity::{HighestLevels, LYMAN_LIMIT_HZ};

/// The lines that shape the temperature structure, and that its frequencies resolve.
pub const STRUCTURE_LINES: HighestLevels = [10, 13, 9, 7];

/// No lines at all.
pub const NO_LINES: HighestLevels = [0; 4];

/// Base points per unit of ln(nu), for the structure and for its starting model.
const BASE_PER_E_FOLD: f64 = 36.0;
const START_PER_E_FOLD: f64 = 15.0;

/// Smallest detuning from a line's centre and growth from point to point; relative to wavelength.
const FIRST_DETUNING: f64 = 8e-6;
const DETUNING_GROWTH: f64 = 1.55;
const LAST_DETUNING: f64 = 0.06;

/// Frequencies in order of growing wavelength with their quadrature weights.
#[derive(Debug, Clone)]
pub struct FrequencyGrid {
    /// Hz, descending.
    pub frequency_hz: Vec<f64>,
    /// Vacuum wavelength, A, ascending.
    pub wave_vac_aa: Vec<f64>,
    /// Trapezoidal weight, Hz.
    pub weight_hz: Vec<f64>,
}

impl FrequencyGrid {
    /// Grid of a model of given effective temperature, K.
    pub fn for_structure(teff_k: f64) -> Self {
        Self::new(teff_k, BASE_PER_E_FOLD, STRUCTURE_LINES)
    }

    /// Coarse grid without lines, for the mean opacities of the starting model.
    pub fn for_start(teff_k: f64) -> Self {
        Self::new(teff_k, START_PER_E_FOLD, NO_LINES)
    }

    fn new(teff_k: f64, per_e_fold: f64, followed: HighestLevels) -> Self {
        let thermal_hz = BOLTZMANN_ERG_K * teff_k / PLANCK_ERG_S;
        // The deepest layers are about four times hotter than Teff.
        let (highest_hz, lowest_hz) = (70.0 * thermal_hz, 0.02 * thermal_hz);
        let count = ((highest_hz / lowest_hz).ln() * per_e_fold).ceil() as usize;
        let mut frequency_hz: Vec<f64> = (0..=count)
            .map(|i| highest_hz * (lowest_hz / highest_hz).powf(i as f64 / count as f64))
            .collect();
        for level in 1..=8 {
            let limit_hz = LYMAN_LIMIT_HZ / f64::from(level * level);
            frequency_hz.extend([limit_hz * (1.0 + 1e-7), limit_hz * (1.0 - 1e-7)]);
        }
        for (lower, highest) in (1..).zip(followed) {
            for upper in lower + 1..=highest {
                let centre_hz = 1e8 * LIGHT_SPEED_CM_S / Line { lower, upper }.wave_vac_aa();
                frequency_hz.push(centre_hz);
                let mut detuning = FIRST_DETUNING;
                while detuning < LAST_DETUNING {
                    frequency_hz.extend([centre_hz * (1.0 + detuning), centre_hz * (1.0 - detuning)]);
                    detuning *= DETUNING_GROWTH;
                }
            }
        }
        frequency_hz.retain(|hz| (lowest_hz..=highest_hz).contains(hz));
        frequency_hz.sort_by(|a, b| b.total_cmp(a));
        frequency_hz.dedup_by(|next, kept| (*kept / *next - 1.0).abs() < 5e-8);
        Self::from_frequencies(frequency_hz)
    }

    /// Grid on given vacuum wavelengths, A, ascending.
    pub fn from_wavelengths(wave_vac_aa: &[f64]) -> Self {
        Self::from_frequencies(wave_vac_aa.iter().map(|wave| 1e8 * LIGHT_SPEED_CM_S / wave).collect())
    }

    fn from_frequencies(frequency_hz: Vec<f64>) -> Self {
        let last = frequency_hz.len() - 1;
        let weight_hz = (0..=last)
            .map(|i| 0.5 * (frequency_hz[i.saturating_sub(1)] - frequency_hz[(i + 1).min(last)]))
            .collect();
        let wave_vac_aa = frequency_hz.iter().map(|hz| 1e8 * LIGHT_SPEED_CM_S / hz).collect();
        FrequencyGrid { frequency_hz, wave_vac_aa, weight_hz }
    }

    /// Number of frequencies.
    pub fn len(&self) -> usize {
        self.frequency_hz.len()
    }
}
