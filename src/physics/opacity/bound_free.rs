//! Photoionisation of hydrogen, and the pseudo-continuum of dissolved levels.

use crate::physics::constants::{BOHR_RADIUS_CM, LIGHT_SPEED_CM_S, RYDBERG_H_PER_CM};
use crate::physics::occupation::{LEAST_OCCUPATION, LevelShape, Surroundings};
use crate::physics::state::LEVELS;

/// Ionisation frequency of the ground state, Hz.
pub const LYMAN_LIMIT_HZ: f64 = LIGHT_SPEED_CM_S * RYDBERG_H_PER_CM;

/// Fine-structure constant (CODATA 2018).
const FINE_STRUCTURE: f64 = 7.297_352_569_3e-3;

/// Kramers cross-section of level 1 at its threshold, cm^2: 64 pi alpha a0^2 / (3 sqrt 3).
const KRAMERS_THRESHOLD_CM2: f64 =
    64.0 * std::f64::consts::PI * FINE_STRUCTURE * BOHR_RADIUS_CM * BOHR_RADIUS_CM
        / (3.0 * 1.732_050_807_568_877_2);

/// Highest level whose exact cross-section is written out.
const EXACT_LEVELS: usize = 4;

/// Polynomials in threshold / photon frequency of the exact cross-sections of n = 1 .. 4, lowest
/// power first.
const EXACT_POLYNOMIALS: [&[f64]; EXACT_LEVELS] = [
    &[1.0],
    &[1.0, 6.0, 8.0],
    &[1.0, 56.0 / 3.0, 304.0 / 3.0, 512.0 / 3.0, 256.0 / 3.0],
    &[1.0, 38.0, 1384.0 / 3.0, 6544.0 / 3.0, 39_808.0 / 9.0, 11_008.0 / 3.0, 1024.0],
];

/// Photoionisation cross-section of level n averaged over its sublevels, cm^2. Below the threshold,
/// where the pseudo-continuum needs it, it goes on as what the lines would be if their strength were spread
/// over the spacing of the levels: sigma = (pi e^2 / m c) f dn*/dnu, the same formula with n* real.
///
/// # Domain
/// Photon energies above zero for n = 1 .. 4. Above n = 4 the error is below 0.2 % from the threshold to
/// three times it, 0.5 % at ten times and grows beyond, where lower levels absorb all that matters
/// (`validate_bound_free_gaunt_factors`).
///
/// # Reference
/// n = 1 .. 4 exactly (dipole integrals of hydrogen, as Stobbe 1930 and Karzas & Latter 1961; the
/// polynomials were derived in 40-digit arithmetic from the closed radial integrals); n > 4
/// Kramers with the asymptotic Gaunt factor (Menzel & Pekeris 1935). Below the thresholds:
/// `validate_cross_section_goes_on_as_lines`.
pub fn cross_section_cm2(level: usize, frequency_hz: f64) -> f64 {
    let n = level as f64;
    let ratio = LYMAN_LIMIT_HZ / (n * n) / frequency_hz;
    if level <= EXACT_LEVELS {
        exact_cross_section_cm2(level, ratio)
    } else {
        KRAMERS_THRESHOLD_CM2 * n * ratio.powi(3) * asymptotic_gaunt(n, 1.0 / ratio - 1.0)
    }
}

/// Exact cross-section; `ratio` is threshold over photon frequency.
fn exact_cross_section_cm2(level: usize, ratio: f64) -> f64 {
    let n = level as f64;
    let common = 512.0 / 3.0 * std::f64::consts::PI.powi(2) * FINE_STRUCTURE * BOHR_RADIUS_CM.powi(2);
    // Energy of the electron after the absorption, in units of the ionisation energy of n = 1.
    let energy = (1.0 / ratio - 1.0) / (n * n);
    let exponential = if energy > 1e-10 {
        let coulomb = 1.0 / energy.sqrt();
        (-4.0 * coulomb * (n / coulomb).atan()).exp() / (1.0 - (-std::f64::consts::TAU * coulomb).exp())
    } else if energy < -1e-10 {
        let effective_level = 1.0 / (-energy).sqrt();
        (-4.0 * effective_level * (n / effective_level).atanh()).exp()
    } else {
        (-4.0 * n).exp()
    };
    let polynomial = EXACT_POLYNOMIALS[level - 1].iter().rev().fold(0.0, |sum, factor| sum * ratio + factor);
    common * n.powi(3) * ratio.powi(4) * polynomial * exponential
}

/// Bound-free Gaunt factor for an ejected energy of `u` thresholds.
fn asymptotic_gaunt(n: f64, u: f64) -> f64 {
    let scale = (n * (u + 1.0)).powf(-2.0 / 3.0);
    1.0 + 0.1728 * scale * (u - 1.0) - 0.0496 * scale * scale * (u * u + 4.0 * u / 3.0 + 1.0)
}

/// Transitions from a level below its series limit that may end in dissolved states.
#[derive(Debug, Clone, Copy)]
pub struct Dissolution {
    /// Lower level, 1-based.
    pub level: usize,
    upper: LevelShape,
}

impl Dissolution {
    /// `None` beyond the series limit, where all transitions are to the continuum, and to the red
    /// of the series' first line.
    ///
    /// The first line is where the pseudo-continuum ends: there is no bound level below its upper
    /// one that could be dissolved, and running the formula on would give the Lyman series an
    /// unphysical opacity in the optical.
    pub fn at(level: usize, frequency_hz: f64) -> Option<Self> {
        let n = level as f64;
        let inverse_square = 1.0 / (n * n) - frequency_hz / LYMAN_LIMIT_HZ;
        if inverse_square <= 0.0 {
            return None;
        }
        let effective_level = 1.0 / inverse_square.sqrt();
        (effective_level > n + 1.0).then(|| Dissolution { level, upper: LevelShape::new(effective_level) })
    }

    /// Fraction of the transitions that end in dissolved states.
    ///
    /// # Reference
    /// Dappen, Anderson & Mihalas 1987, ApJ 319, 195: D = 1 - w(n*) / w(n).
    pub fn fraction(&self, occupation: &[f64; LEVELS], surroundings: &Surroundings) -> f64 {
        let survival = occupation[self.level - 1];
        // A level that is itself gone has no atoms to absorb.
        if survival <= LEAST_OCCUPATION {
            return 1.0;
        }
        (1.0 - surroundings.occupation_of(&self.upper) / survival).clamp(0.0, 1.0)
    }
}
