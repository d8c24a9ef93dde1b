//! Occupation probability of hydrogen levels in a plasma.
//!
//! The probability that a level n (real-valued where a dissolved level is meant) survives its
//! neighbours: w = w_charged * w_neutral. Charged perturbers follow Hummer & Mihalas (1988, ApJ
//! 331, 794) in the fitted form of Hubeny, Hummer & Lanz (1994, A&A 282, 151, appendix), for a
//! neutral radiator; neutral perturbers are hard spheres (Hummer & Mihalas 1988, eq. 3.4).

use super::constants::BOHR_RADIUS_CM;

/// Radius of a hydrogen atom in level n as a fraction of n^2 a0.
///
/// The orbital radius itself (factor 1) removes high levels of cool stars that are seen; half of
/// it is what modern analyses of DA stars adopt (Bergeron, Wesemael & Fontaine 1991, ApJ 367,
/// 253; kept by Tremblay & Bergeron 2009). physics.md: the choice moves log g by 0.28 dex at
/// 8 000 K and nothing above 12 000 K.
pub const NEUTRAL_RADIUS_FACTOR: f64 = 0.5;

/// Critical field of n = 1 in units of the Holtsmark field at unit density:
/// 1 / (16 a0^2 * 2.603), from F_crit = k_n e / (16 a0^2 n^4) and F0 = 2.603 e n_e^(2/3).
pub const CRITICAL_FIELD_SCALE: f64 = 8.57e14;

/// Critical field of a level in units of the Holtsmark field F0 = 2.603 e n_e^(2/3).
///
/// # Reference
/// Hubeny, Hummer & Lanz 1994: k_n = 1 up to n = 3 and (16/3) n/(n+1)^2 above.
pub fn critical_beta(level: f64, electron_density_per_cm3: f64) -> f64 {
    let quantum_factor = if level <= 3.0 { 1.0 } else { 16.0 / 3.0 * level / (level + 1.0).powi(2) };
    CRITICAL_FIELD_SCALE * quantum_factor / (level.powi(4) * electron_density_per_cm3.powf(2.0 / 3.0))
}

/// What decides the occupation probabilities at one place, with its powers taken once.
#[derive(Debug, Clone, Copy)]
pub struct Surroundings {
    critical_scale: f64,
    correlation: f64,
    neutral_volume_per_cm3: f64,
}

impl Surroundings {
    /// Temperature in K, densities of electrons and of neutral perturbers per cm^3.
    pub fn new(temperature_k: f64, electron_density_per_cm3: f64, neutral_density_per_cm3: f64) -> Self {
        let screening = 0.09 * electron_density_per_cm3.powf(1.0 / 6.0) / temperature_k.sqrt();
        let radius_cm = NEUTRAL_RADIUS_FACTOR * BOHR_RADIUS_CM;
        Surroundings {
            critical_scale: CRITICAL_FIELD_SCALE / electron_density_per_cm3.powf(2.0 / 3.0),
            correlation: (1.0 + screening).powf(3.15),
            neutral_volume_per_cm3: 4.0 * std::f64::consts::PI / 3.0
                * neutral_density_per_cm3
                * radius_cm.powi(3),
        }
    }

    /// Occupation probability of a level, 0 to 1.
    pub fn occupation(&self, level: f64) -> f64 {
        let squared = level * level;
        let quantum_factor =
            if level <= 3.0 { 1.0 } else { 16.0 / 3.0 * level / ((level + 1.0) * (level + 1.0)) };
        let beta = self.critical_scale * quantum_factor / (squared * squared);
        let beta_three_halves = beta * beta.sqrt();
        let odds = 0.1402 * self.correlation * beta_three_halves * beta_three_halves
            / (1.0 + 0.1285 * self.correlation * beta_three_halves);
        let charged = if odds.is_finite() { odds / (1.0 + odds) } else { 1.0 };
        let neutral = (-self.neutral_volume_per_cm3 * (squared + 1.0).powi(3)).exp();
        charged * neutral
    }
}
