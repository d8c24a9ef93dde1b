//! Occupation probability of hydrogen levels in a plasma.
//!
//! The probability that a level n (real-valued where a dissolved level is meant) survives its
//! neighbours: w = w_charged * w_neutral. Charged perturbers follow Hummer & Mihalas (1988, ApJ
//! 331, 794) in the fitted form of Hubeny, Hummer & Lanz (1994, A&A 282, 151, appendix), for a
//! neutral radiator, with the critical field of [`critical_beta`]; neutral perturbers are hard spheres (Hummer & Mihalas 1988, eq. 3.4).

use super::constants::BOHR_RADIUS_CM;

/// Radius of a hydrogen atom in level n as a fraction of n^2 a0.
///
/// The orbital radius itself (factor 1) removes high levels of cool stars that are seen; half of
/// it is what modern analyses of DA stars adopt (Bergeron, Wesemael & Fontaine 1991, ApJ 367,
/// 253; kept by Tremblay & Bergeron 2009). physics.md: the choice moves log g by 0.28 dex at
/// 8 000 K and nothing above 12 000 K.
pub const NEUTRAL_RADIUS_FACTOR: f64 = 0.5;

/// Where occupation probabilities end, so that a partition function of levels that are all gone is
/// still a number to divide by.
pub const LEAST_OCCUPATION: f64 = 1e-100;

/// Critical field of n = 1 in units of the Holtsmark field at unit density:
/// 1 / (16 a0^2 * 2.603), from F_crit = k_n e / (16 a0^2 n^4) and F0 = 2.603 e n_e^(2/3).
pub const CRITICAL_FIELD_SCALE: f64 = 8.57e14;

/// Critical field of a level in units of the Holtsmark field F0 = 2.603 e n_e^(2/3).
///
/// The smaller of two fields: where the saddle of the potential opens, e/(16 a0^2 n^4), and where the
/// uppermost Stark component of level n meets the lowest of n + 1. Linear Stark shifts of (3/2) n (n-1) and
/// (3/2) n (n+1) atomic units per unit field against the gap (1/2)(1/n^2 - 1/(n+1)^2) put that at
/// (2n+1)/(6 n^4 (n+1)^2) e/a0^2, hence k_n = (16/3) (n+1/2)/(n+1)^2. The quadratic and cubic shifts lower it by
/// 0.7/n^2 of itself. Hubeny, Hummer & Lanz 1994 write n for n + 1/2, which is 12 % less at n = 4, 6 % at
/// n = 8; with it the higher lines of published models come out too shallow.
pub fn critical_beta(level: f64, electron_density_per_cm3: f64) -> f64 {
    CRITICAL_FIELD_SCALE * quantum_factor(level) / (level.powi(4) * electron_density_per_cm3.powf(2.0 / 3.0))
}

/// What decides the fate of a level, with its powers taken once.
#[derive(Debug, Clone, Copy)]
pub struct LevelShape {
    /// Critical field relative to that of n = 1, to the power 3/2.
    critical_three_halves: f64,
    /// Cube of the level's radius plus that of the ground state, in units of n = 1's.
    volume: f64,
}

impl LevelShape {
    /// A level, real-valued where a dissolved one is meant.
    pub fn new(level: f64) -> Self {
        let squared = level * level;
        LevelShape {
            critical_three_halves: (quantum_factor(level) / (squared * squared)).powf(1.5),
            volume: (squared + 1.0).powi(3),
        }
    }
}

fn quantum_factor(level: f64) -> f64 {
    (16.0 / 3.0 * (level + 0.5) / (level + 1.0).powi(2)).min(1.0)
}

/// What decides the occupation probabilities at one place, with its powers taken once.
#[derive(Debug, Clone, Copy)]
pub struct Surroundings {
    /// Critical field of n = 1 in units of the Holtsmark field, to the power 3/2.
    critical_three_halves: f64,
    correlation: f64,
    neutral_volume_per_cm3: f64,
}

impl Surroundings {
    /// Temperature in K, densities of electrons and of neutral perturbers per cm^3.
    pub fn new(temperature_k: f64, electron_density_per_cm3: f64, neutral_density_per_cm3: f64) -> Self {
        let screening = 0.09 * electron_density_per_cm3.powf(1.0 / 6.0) / temperature_k.sqrt();
        let radius_cm = NEUTRAL_RADIUS_FACTOR * BOHR_RADIUS_CM;
        Surroundings {
            critical_three_halves: CRITICAL_FIELD_SCALE.powf(1.5) / electron_density_per_cm3,
            correlation: (1.0 + screening).powf(3.15),
            neutral_volume_per_cm3: 4.0 * std::f64::consts::PI / 3.0
                * neutral_density_per_cm3
                * radius_cm.powi(3),
        }
    }

    /// Excluded volume of a level times the density of neutral perturbers: -ln of the neutral factor.
    pub fn neutral_exponent(&self, shape: &LevelShape) -> f64 {
        self.neutral_volume_per_cm3 * shape.volume
    }

    /// Occupation probability of a level, [`LEAST_OCCUPATION`] to 1.
    pub fn occupation(&self, level: f64) -> f64 {
        self.occupation_of(&LevelShape::new(level))
    }

    /// As [`Surroundings::occupation`], for a level whose powers are known.
    pub fn occupation_of(&self, shape: &LevelShape) -> f64 {
        // f / (1 + f) with f = alive / spread.
        let beta_three_halves = self.critical_three_halves * shape.critical_three_halves;
        let alive = 0.1402 * self.correlation * beta_three_halves * beta_three_halves;
        let spread = 1.0 + 0.1285 * self.correlation * beta_three_halves;
        let charged = if alive.is_finite() { alive / (spread + alive) } else { 1.0 };
        (charged * (-self.neutral_exponent(shape)).exp()).max(LEAST_OCCUPATION)
    }
}
