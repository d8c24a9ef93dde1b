//! Photoionisation of hydrogen, and the pseudo-continuum of dissolved levels.

use crate::physics::constants::{BOHR_RADIUS_CM, LIGHT_SPEED_CM_S, RYDBERG_H_PER_CM};
use crate::physics::occupation::Surroundings;
use crate::physics::state::LEVELS;

/// Ionisation frequency of the ground state, Hz.
pub const LYMAN_LIMIT_HZ: f64 = LIGHT_SPEED_CM_S * RYDBERG_H_PER_CM;

/// Fine-structure constant (CODATA 2018).
const FINE_STRUCTURE: f64 = 7.297_352_569_3e-3;

/// Kramers cross-section of level 1 at its threshold, cm^2: 64 pi alpha a0^2 / (3 sqrt 3).
const KRAMERS_THRESHOLD_CM2: f64 =
    64.0 * std::f64::consts::PI * FINE_STRUCTURE * BOHR_RADIUS_CM * BOHR_RADIUS_CM
        / (3.0 * 1.732_050_807_568_877_2);

/// Photoionisation cross-section of level n averaged over its sublevels, cm^2, at or above its
/// threshold; below it, the smooth continuation as nu^-3 that the pseudo-continuum needs.
///
/// # Reference
/// n = 1, 2 exactly (Stobbe 1930, as in Bethe & Salpeter 1957, sect. 71); n > 2 Kramers with the
/// asymptotic Gaunt factor (Menzel & Pekeris 1935), good to 0.4 % at the n = 3 threshold.
pub fn cross_section_cm2(level: usize, frequency_hz: f64) -> f64 {
    let n = level as f64;
    let threshold_hz = LYMAN_LIMIT_HZ / (n * n);
    let kramers = |ratio: f64| KRAMERS_THRESHOLD_CM2 * n * ratio.powi(3);
    if frequency_hz < threshold_hz {
        return cross_section_cm2(level, threshold_hz) * (threshold_hz / frequency_hz).powi(3);
    }
    let ratio = threshold_hz / frequency_hz;
    match level {
        1 | 2 => exact_low_level(n, ratio),
        _ => kramers(ratio) * asymptotic_gaunt(n, 1.0 / ratio - 1.0),
    }
}

/// Exact cross-sections of n = 1 and 2; `ratio` is threshold over photon frequency.
fn exact_low_level(n: f64, ratio: f64) -> f64 {
    let common = std::f64::consts::PI.powi(2) * FINE_STRUCTURE * BOHR_RADIUS_CM.powi(2) * ratio.powi(4);
    // Coulomb parameter of the ejected electron; infinite at threshold.
    let excess = (1.0 / ratio - 1.0) / (n * n);
    let exponential = if excess < 1e-10 {
        (-4.0 * n).exp()
    } else {
        let coulomb = 1.0 / excess.sqrt();
        let arc_cotangent = (n / coulomb).atan();
        (-4.0 * coulomb * arc_cotangent).exp() / (1.0 - (-std::f64::consts::TAU * coulomb).exp())
    };
    if n < 1.5 {
        512.0 / 3.0 * common * exponential
    } else {
        16_384.0 / 12.0 * common * (1.0 + 6.0 * ratio + 8.0 * ratio * ratio) * exponential
    }
}

/// Bound-free Gaunt factor for an ejected energy of `u` thresholds.
fn asymptotic_gaunt(n: f64, u: f64) -> f64 {
    let scale = (n * (u + 1.0)).powf(-2.0 / 3.0);
    1.0 + 0.1728 * scale * (u - 1.0) - 0.0496 * scale * scale * (u * u + 4.0 * u / 3.0 + 1.0)
}

/// Fraction of transitions from a level that end in dissolved states, for photons between the
/// series' first line and its limit; 1 above the limit, 0 below the first line.
///
/// The first line is where the pseudo-continuum ends: there is no bound level below its upper one
/// that could be dissolved, and running the formula on would give the Lyman series an unphysical
/// opacity in the optical.
///
/// # Reference
/// Dappen, Anderson & Mihalas 1987, ApJ 319, 195: D = 1 - w(n*) / w(n).
pub fn dissolved_fraction(
    level: usize,
    frequency_hz: f64,
    occupation: &[f64; LEVELS],
    surroundings: &Surroundings,
) -> f64 {
    let n = level as f64;
    let inverse_square = 1.0 / (n * n) - frequency_hz / LYMAN_LIMIT_HZ;
    if inverse_square <= 0.0 {
        return 1.0;
    }
    let effective_level = 1.0 / inverse_square.sqrt();
    if effective_level <= n + 1.0 {
        return 0.0;
    }
    // A level that is itself gone has no atoms to absorb.
    if occupation[level - 1] < f64::MIN_POSITIVE {
        return 1.0;
    }
    (1.0 - surroundings.occupation(effective_level) / occupation[level - 1]).clamp(0.0, 1.0)
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Threshold cross-sections from the exact theory: 6.304e-18 cm^2 for n = 1 (Bethe & Salpeter
    /// 1957), and Gaunt factors 0.7973, 0.8762, 0.9075, 0.9247 of n = 1 .. 4 (Karzas & Latter 1961, ApJS 6,
    /// 167; from memory).
    #[test]
    fn validate_thresholds() {
        let at_threshold = |n: usize| cross_section_cm2(n, LYMAN_LIMIT_HZ / (n * n) as f64 * (1.0 + 1e-9));
        assert!((at_threshold(1) / 6.304e-18 - 1.0).abs() < 2e-3, "{}", at_threshold(1));
        for (n, gaunt, tolerance) in
            [(1, 0.7973, 2e-3), (2, 0.8762, 2e-3), (3, 0.9075, 4e-3), (4, 0.9247, 4e-3)]
        {
            let ours = at_threshold(n) / (KRAMERS_THRESHOLD_CM2 * n as f64);
            assert!((ours / gaunt - 1.0).abs() < tolerance, "n = {n}: {ours} against {gaunt}");
        }
    }

    /// The exact n = 2 cross-section and the asymptotic one agree where the latter holds.
    #[test]
    fn verify_exact_joins_asymptotic() {
        for ratio in [0.8, 0.6, 0.4] {
            let exact = exact_low_level(2.0, ratio);
            let asymptotic =
                KRAMERS_THRESHOLD_CM2 * 2.0 * ratio.powi(3) * asymptotic_gaunt(2.0, 1.0 / ratio - 1.0);
            assert!((asymptotic / exact - 1.0).abs() < 0.01, "at {ratio}: {asymptotic:e} against {exact:e}");
        }
    }

    #[test]
    fn verify_pseudo_continuum_ends_at_the_first_line() {
        let state = crate::physics::state::State::new(12_000.0, 3e5);
        let of = |wave_aa: f64| {
            let hz = 1e8 * LIGHT_SPEED_CM_S / wave_aa;
            dissolved_fraction(2, hz, &state.occupation, &state.surroundings)
        };
        assert_eq!(of(3600.0), 1.0);
        assert!(of(3700.0) > 0.5 && of(4000.0) < 0.5);
        assert_eq!(of(6600.0), 0.0);
    }
}
