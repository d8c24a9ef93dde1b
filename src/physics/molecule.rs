//! Hydrogen molecules: partition functions of H2 and H2+ and their dissociation equilibria.
//!
//! Rotation-vibration levels from spectroscopic constants (Huber & Herzberg 1979, Constants of
//! Diatomic Molecules), summed over the levels below dissociation. Domain 1 000 - 20 000 K;
//! anharmonicity beyond second order is neglected, which matters by a few per cent above 6 000 K,
//! where the molecules themselves are a trace.

use super::constants::{BOLTZMANN_ERG_K, HYDROGEN_MASS_G, LIGHT_SPEED_CM_S, PLANCK_ERG_S};

/// Second radiation constant, cm K: converts wavenumbers to temperatures.
const WAVENUMBER_K: f64 = PLANCK_ERG_S * LIGHT_SPEED_CM_S / BOLTZMANN_ERG_K;

/// Spectroscopic constants of one electronic ground state, all in 1/cm.
struct Diatomic {
    vibration: f64,
    anharmonicity: f64,
    rotation: f64,
    rotation_vibration: f64,
    stretching: f64,
    dissociation: f64,
    electronic_weight: f64,
}

/// H2 X 1Sigma_g+ (Huber & Herzberg 1979); D0 = 36 118.07 1/cm (4.4781 eV).
const H2: Diatomic = Diatomic {
    vibration: 4401.213,
    anharmonicity: 121.336,
    rotation: 60.853,
    rotation_vibration: 3.0622,
    stretching: 0.0471,
    dissociation: 36_118.07,
    electronic_weight: 1.0,
};

/// H2+ X 2Sigma_g+ (Huber & Herzberg 1979); D0 = 21 379.4 1/cm (2.6507 eV).
const H2_PLUS: Diatomic = Diatomic {
    vibration: 2321.7,
    anharmonicity: 66.2,
    rotation: 30.2,
    rotation_vibration: 1.685,
    stretching: 0.0198,
    dissociation: 21_379.4,
    electronic_weight: 2.0,
};

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
    H2.equilibrium(temperature_k, 4.0)
}

/// H + H+ to H2+; the atom in the ground state (weight 2), the proton with weight 1.
pub fn h2_plus_equilibrium(temperature_k: f64) -> Equilibrium {
    H2_PLUS.equilibrium(temperature_k, 2.0)
}

impl Diatomic {
    /// Partition function over ground-state-referenced levels (nuclear spin weights 1/4 and 3/4,
    /// since the atoms' nuclear spin is left out too) and the mean internal energy in erg.
    fn partition(&self, temperature_k: f64) -> (f64, f64) {
        let vibrational = |v: f64| self.vibration * (v + 0.5) - self.anharmonicity * (v + 0.5).powi(2);
        let zero_point = vibrational(0.0);
        let (mut sum, mut energy_sum, mut previous) = (0.0, 0.0, -1.0);
        for v in 0..40 {
            let v = f64::from(v);
            let base = vibrational(v) - zero_point;
            // The parabola turns over at dissociation: levels past its top are not real.
            if base <= previous || base > self.dissociation {
                break;
            }
            previous = base;
            let rotation = self.rotation - self.rotation_vibration * (v + 0.5);
            let (mut j, mut last) = (0.0, -1.0);
            loop {
                let jj = j * (j + 1.0);
                let level = base + rotation * jj - self.stretching * jj * jj;
                if level <= last || level > self.dissociation {
                    break;
                }
                last = level;
                let spin_weight = if (j as i64) % 2 == 0 { 0.25 } else { 0.75 };
                let weight = spin_weight * (2.0 * j + 1.0) * (-WAVENUMBER_K * level / temperature_k).exp();
                sum += weight;
                energy_sum += weight * level;
                j += 1.0;
            }
        }
        let erg_per_wavenumber = PLANCK_ERG_S * LIGHT_SPEED_CM_S;
        (self.electronic_weight * sum, energy_sum / sum * erg_per_wavenumber)
    }

    /// Law of mass action; reduced mass of the parts is half a hydrogen atom's.
    fn equilibrium(&self, temperature_k: f64, parts_weight: f64) -> Equilibrium {
        let (partition, internal_energy_erg) = self.partition(temperature_k);
        let reduced_mass_g = HYDROGEN_MASS_G / 2.0;
        let thermal_wave2_cm2 = PLANCK_ERG_S.powi(2)
            / (2.0 * std::f64::consts::PI * reduced_mass_g * BOLTZMANN_ERG_K * temperature_k);
        let exponent = WAVENUMBER_K * self.dissociation / temperature_k;
        Equilibrium {
            association_cm3: thermal_wave2_cm2.powf(1.5) * partition / parts_weight * exponent.exp(),
            internal_energy_erg,
            dissociation_energy_erg: PLANCK_ERG_S * LIGHT_SPEED_CM_S * self.dissociation,
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Dissociation constant of H2 in atmospheres: log10 Kp = -1.606 at 3 000 K (JANAF tables, from
    /// memory), which is the textbook 7.8 % dissociation at 1 atm.
    #[test]
    fn validate_hydrogen_dissociation() {
        const ATMOSPHERE_CGS: f64 = 1.013_25e6;
        let association = h2_equilibrium(3000.0).association_cm3;
        let pressure = BOLTZMANN_ERG_K * 3000.0 / association / ATMOSPHERE_CGS;
        assert!((pressure.log10() + 1.606).abs() < 0.02, "log Kp = {}", pressure.log10());
    }
}
