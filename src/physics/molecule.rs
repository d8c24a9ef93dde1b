//! Hydrogen molecules: partition functions of H2 and H2+ and their dissociation equilibria.
//!
//! Rotation-vibration levels from spectroscopic constants (Huber & Herzberg 1979, Constants of
//! Diatomic Molecules), summed over the levels below dissociation. Domain 1 000 - 20 000 K. The
//! dissociation constant of H2 agrees with the JANAF tables to 3 % at 1 000 - 6 000 K
//! (`validate_h2_dissociation_constant`).

use std::sync::LazyLock;

use super::constants::{BOLTZMANN_ERG_K, HYDROGEN_MASS_G, LIGHT_SPEED_CM_S, PLANCK_ERG_S};

/// Second radiation constant, cm K: converts wavenumbers to temperatures.
const WAVENUMBER_K: f64 = PLANCK_ERG_S * LIGHT_SPEED_CM_S / BOLTZMANN_ERG_K;

/// Spectroscopic constants of one electronic ground state, all in 1/cm.
struct Diatomic {
    vibration: f64,
    anharmonicity: f64,
    cubic_anharmonicity: f64,
    rotation: f64,
    rotation_vibration: f64,
    rotation_vibration_quadratic: f64,
    stretching: f64,
    dissociation: f64,
    electronic_weight: f64,
}

/// H2 X 1Sigma_g+ (Huber & Herzberg 1979); D0 = 36 118.07 1/cm (4.4781 eV).
const H2: Diatomic = Diatomic {
    vibration: 4401.213,
    anharmonicity: 121.336,
    cubic_anharmonicity: 0.8129,
    rotation: 60.853,
    rotation_vibration: 3.0622,
    rotation_vibration_quadratic: 0.0577,
    stretching: 0.0471,
    dissociation: 36_118.07,
    electronic_weight: 1.0,
};

/// H2+ X 2Sigma_g+ (Huber & Herzberg 1979; the cubic term from the second differences of the
/// computed levels v = 0 .. 5); D0 = 21 379.4 1/cm (2.6507 eV).
const H2_PLUS: Diatomic = Diatomic {
    vibration: 2321.7,
    anharmonicity: 66.2,
    cubic_anharmonicity: 0.6,
    rotation: 30.2,
    rotation_vibration: 1.685,
    rotation_vibration_quadratic: 0.0,
    stretching: 0.0198,
    dissociation: 21_379.4,
    electronic_weight: 2.0,
};

/// A rotation-vibration level.
struct Level {
    weight: f64,
    /// Energy above the lowest level, 1/cm.
    energy: f64,
}

static H2_LEVELS: LazyLock<Vec<Level>> = LazyLock::new(|| H2.levels());
static H2_PLUS_LEVELS: LazyLock<Vec<Level>> = LazyLock::new(|| H2_PLUS.levels());

/// A molecule's equilibrium with its parts, and its mean internal energy.
#[derive(Debug, Clone, Copy)]
pub struct Equilibrium {
    /// n(molecule) / (n(part 1) n(part 2)), cm^3; parts in their ground states.
    pub association_cm3: f64,
    /// Mean rotation-vibration energy above the molecular ground state, erg.
    pub internal_energy_erg: f64,
    /// Dissociation energy, erg.
    pub dissociation_energy_erg: f64,
}

/// H + H to H2; both atoms in the ground state (statistical weight 2 each).
pub fn h2_equilibrium(temperature_k: f64) -> Equilibrium {
    equilibrium(temperature_k, &H2_LEVELS, H2.dissociation, 4.0)
}

/// H + H+ to H2+; the atom in the ground state (weight 2), the proton with weight 1.
pub fn h2_plus_equilibrium(temperature_k: f64) -> Equilibrium {
    equilibrium(temperature_k, &H2_PLUS_LEVELS, H2_PLUS.dissociation, 2.0)
}

impl Diatomic {
    /// Levels below dissociation, with nuclear spin weights 1/4 and 3/4, since the atoms' nuclear
    /// spin is left out too.
    fn levels(&self) -> Vec<Level> {
        let vibrational = |v: f64| {
            let x = v + 0.5;
            x * (self.vibration - x * (self.anharmonicity - x * self.cubic_anharmonicity))
        };
        let zero_point = vibrational(0.0);
        let mut levels = Vec::new();
        let mut previous = -1.0;
        for v in 0..40 {
            let v = f64::from(v);
            let base = vibrational(v) - zero_point;
            // The expansion turns over at dissociation: levels past its top are not real.
            if base <= previous || base > self.dissociation {
                break;
            }
            previous = base;
            let x = v + 0.5;
            let rotation =
                self.rotation - x * (self.rotation_vibration - x * self.rotation_vibration_quadratic);
            for j in 0..100 {
                let jj = f64::from(j * (j + 1));
                // Stretching as a quotient: B jj - D jj^2 + ..., which does not turn over at high J
                // as the two terms alone do (that put 8 % too many levels in at 6 000 K).
                let energy = base + rotation * jj / (1.0 + self.stretching / rotation * jj);
                if energy > self.dissociation {
                    break;
                }
                let spin_weight = if j % 2 == 0 { 0.25 } else { 0.75 };
                let weight = self.electronic_weight * spin_weight * f64::from(2 * j + 1);
                levels.push(Level { weight, energy });
            }
        }
        levels
    }
}

/// Law of mass action; reduced mass of the parts is half a hydrogen atom's.
fn equilibrium(temperature_k: f64, levels: &[Level], dissociation: f64, parts_weight: f64) -> Equilibrium {
    let (mut partition, mut energy_sum) = (0.0, 0.0);
    for level in levels {
        let population = level.weight * (-WAVENUMBER_K * level.energy / temperature_k).exp();
        partition += population;
        energy_sum += population * level.energy;
    }
    let reduced_mass_g = HYDROGEN_MASS_G / 2.0;
    let thermal_wave2_cm2 = PLANCK_ERG_S.powi(2)
        / (2.0 * std::f64::consts::PI * reduced_mass_g * BOLTZMANN_ERG_K * temperature_k);
    let erg_per_wavenumber = PLANCK_ERG_S * LIGHT_SPEED_CM_S;
    Equilibrium {
        association_cm3: thermal_wave2_cm2.powf(1.5) * partition / parts_weight
            * (WAVENUMBER_K * dissociation / temperature_k).exp(),
        internal_energy_erg: energy_sum / partition * erg_per_wavenumber,
        dissociation_energy_erg: dissociation * erg_per_wavenumber,
    }
}
