//! Continuous opacity on a fixed set of frequencies.
//!
//! What depends on frequency alone is computed once; a depth point then costs a few hundred
//! multiplications per frequency.

use super::bound_free::{Dissolution, cross_section_cm2};
use super::free_free::FreeFree;
use super::h_minus;
use super::h2_plus::H2Plus;
use super::scattering::{rayleigh_h_cm2, rayleigh_h2_cm2};
use crate::physics::constants::{BOLTZMANN_ERG_K, LIGHT_SPEED_CM_S, THOMSON_CM2};
use crate::physics::planck::PLANCK_OVER_BOLTZMANN_K_S;
use crate::physics::state::{LEVELS, State};

/// Occupation probability below which a level's absorption is left out.
const LEAST_FOLLOWED: f64 = 1e-9;

/// The frequency-dependent half of the continuous opacities.
#[derive(Debug, Clone)]
pub struct Continuum {
    points: Vec<Point>,
}

#[derive(Debug, Clone)]
struct Point {
    frequency_hz: f64,
    log_frequency: f64,
    inverse_cube_s3: f64,
    /// Photoionisation cross-section per level, cm^2, continued below threshold.
    bound_free_cm2: [f64; LEVELS],
    /// First level whose threshold lies at or below this frequency (1-based).
    lowest_ionised: usize,
    /// Lower levels whose series reach this frequency through dissolved states, ascending.
    dissolutions: Vec<Dissolution>,
    h_minus_cm2: f64,
    h_minus_free_free: h_minus::FreeFree,
    h2_plus: Option<H2Plus>,
    rayleigh_h_cm2: f64,
    rayleigh_h2_cm2: f64,
}

impl Continuum {
    /// Prepares a set of frequencies, Hz, in any order.
    pub fn new(frequency_hz: &[f64]) -> Self {
        Continuum { points: frequency_hz.iter().map(|frequency| Point::new(*frequency)).collect() }
    }

    /// Writes true absorption and scattering, per cm, at one place; slices as long as the set.
    pub fn evaluate(&self, state: &State, absorption_per_cm: &mut [f64], scattering_per_cm: &mut [f64]) {
        let electron_pressure_cgs = state.electrons_per_cm3 * BOLTZMANN_ERG_K * state.temperature_k;
        let thomson_per_cm = state.electrons_per_cm3 * THOMSON_CM2;
        let ground = state.levels_per_cm3[0];
        let free_free = FreeFree::new(state.temperature_k);
        let free_pairs = state.electrons_per_cm3 * state.protons_per_cm3;
        // Levels beyond hold no atoms that could absorb.
        let highest = state.occupation.partition_point(|occupation| *occupation > LEAST_FOLLOWED).max(1);
        let emission_rate_s = -PLANCK_OVER_BOLTZMANN_K_S / state.temperature_k;
        let outputs = absorption_per_cm.iter_mut().zip(scattering_per_cm);
        for (point, (absorption, scattering)) in self.points.iter().zip(outputs) {
            let emission = 1.0 - (emission_rate_s * point.frequency_hz).exp();
            let mut stimulated = point.bound_free_per_cm(state, highest)
                + free_pairs * free_free.cm5_hz3(point.log_frequency) * point.inverse_cube_s3
                + state.h_minus_per_cm3 * point.h_minus_cm2;
            if let Some(h2_plus) = point.h2_plus {
                stimulated += ground * state.protons_per_cm3 * h2_plus.cm5(state.temperature_k);
            }
            *absorption = stimulated * emission
                + ground * electron_pressure_cgs * point.h_minus_free_free.cm4_per_dyn(state.temperature_k);
            *scattering =
                thomson_per_cm + ground * point.rayleigh_h_cm2 + state.h2_per_cm3 * point.rayleigh_h2_cm2;
        }
    }
}

impl Point {
    fn new(frequency_hz: f64) -> Self {
        let wave_vac_aa = 1e8 * LIGHT_SPEED_CM_S / frequency_hz;
        let threshold_level = (super::bound_free::LYMAN_LIMIT_HZ / frequency_hz).sqrt();
        Point {
            frequency_hz,
            log_frequency: frequency_hz.log10(),
            inverse_cube_s3: frequency_hz.powi(-3),
            bound_free_cm2: std::array::from_fn(|index| cross_section_cm2(index + 1, frequency_hz)),
            dissolutions: (1..=LEVELS).filter_map(|level| Dissolution::at(level, frequency_hz)).collect(),
            lowest_ionised: threshold_level.ceil().max(1.0) as usize,
            h_minus_cm2: h_minus::bound_free_cm2(wave_vac_aa),
            h_minus_free_free: h_minus::FreeFree::at(wave_vac_aa),
            h2_plus: H2Plus::at(frequency_hz),
            rayleigh_h_cm2: rayleigh_h_cm2(wave_vac_aa),
            rayleigh_h2_cm2: rayleigh_h2_cm2(wave_vac_aa),
        }
    }

    /// Photoionisation of levels up to `highest`, including dissolved upper states, without
    /// stimulated emission.
    fn bound_free_per_cm(&self, state: &State, highest: usize) -> f64 {
        let lowest_ionised = self.lowest_ionised.min(highest + 1);
        let ionised = lowest_ionised - 1..highest;
        let mut sum: f64 = state.levels_per_cm3[ionised.clone()]
            .iter()
            .zip(&self.bound_free_cm2[ionised])
            .map(|(population, cross_section)| population * cross_section)
            .sum();
        for dissolution in &self.dissolutions {
            let index = dissolution.level - 1;
            if index < highest {
                let fraction = dissolution.fraction(&state.occupation, &state.surroundings);
                sum += state.levels_per_cm3[index] * self.bound_free_cm2[index] * fraction;
            }
        }
        sum
    }
}
