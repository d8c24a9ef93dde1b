//! Equation of state of hydrogen gas: populations, density and energy at given temperature and
//! gas pressure.
//!
//! Species: H I with levels n = 1 .. 40, H+, e-, H-, H2, H2+ in ionisation and dissociation
//! equilibrium (Saha, law of mass action), with the occupation probabilities of
//! [`super::occupation`] inside the partition function. Pressure is the ideal-gas pressure of all
//! particles; the non-ideal part of the free energy enters through the populations only, which
//! is the usual approximation in white-dwarf photospheres. H3+ is left out: it matters below
//! 5 000 K.
//!
//! Domain 1 500 - 3e6 K and photospheric densities. Every input up to 1e17 dyn cm^-2 gives finite
//! numbers, and charge, pressure and nuclei add up, but above about 1e12 dyn cm^-2 (0.1 g cm^-3)
//! a hydrogen gas that is not fully ionised is neither ideal nor made of free atoms, and hotter
//! gas becomes degenerate: there the answer is a number, not physics (tests
//! `verif_state_at_extremes`, `verif_energy_and_pressure_belong_together`).

use super::constants::{
    BOLTZMANN_ERG_K, ELECTRON_MASS_G, ELECTRON_VOLT_ERG, HYDROGEN_MASS_G, LIGHT_SPEED_CM_S, PLANCK_ERG_S,
    RYDBERG_H_PER_CM,
};
use super::molecule::{h2_equilibrium, h2_plus_equilibrium};
use super::occupation::{LevelShape, Surroundings};

/// Highest bound level that is followed.
pub const LEVELS: usize = 40;

/// Ionisation energy of hydrogen (non-relativistic, reduced mass), erg.
pub const IONISATION_ERG: f64 = PLANCK_ERG_S * LIGHT_SPEED_CM_S * RYDBERG_H_PER_CM;

/// Electron affinity of hydrogen, erg: 0.754195 eV (Lykke, Murray & Lineberger 1991, PRA 43, 6104).
const H_MINUS_BINDING_ERG: f64 = 0.754_195 * ELECTRON_VOLT_ERG;

/// Bound on the iteration between densities and occupation probabilities.
const MOST_ITERATIONS: usize = 200;

/// After this many iterations, steps are halved: only pressure ionisation takes so long.
const UNDAMPED_ITERATIONS: usize = 20;

/// Hydrogen gas in equilibrium.
#[derive(Debug, Clone)]
pub struct State {
    /// Temperature, K.
    pub temperature_k: f64,
    /// Gas pressure, dyn cm^-2.
    pub pressure_cgs: f64,
    /// Mass density, g cm^-3.
    pub density_g_cm3: f64,
    /// Electron density, cm^-3.
    pub electrons_per_cm3: f64,
    /// Proton density, cm^-3.
    pub protons_per_cm3: f64,
    /// Neutral atoms in all levels, cm^-3.
    pub neutrals_per_cm3: f64,
    /// Population of level n at index n - 1, cm^-3.
    pub levels_per_cm3: [f64; LEVELS],
    /// Occupation probability of level n at index n - 1.
    pub occupation: [f64; LEVELS],
    /// What decides occupation probabilities here.
    pub surroundings: Surroundings,
    /// H- density, cm^-3.
    pub h_minus_per_cm3: f64,
    /// H2 density, cm^-3.
    pub h2_per_cm3: f64,
    /// H2+ density, cm^-3.
    pub h2_plus_per_cm3: f64,
    /// Internal energy relative to ground-state atoms at rest, erg g^-1.
    pub energy_erg_g: f64,
}

/// Equilibrium constants that depend on temperature alone.
struct Equilibria {
    thermal_energy_erg: f64,
    /// (h^2 / 2 pi m_e k T)^(3/2), cm^3.
    thermal_volume_cm3: f64,
    h_minus_cm3: f64,
    h2_cm3: f64,
    h2_plus_cm3: f64,
    h2_binding_erg: f64,
    h2_plus_binding_erg: f64,
}

impl Equilibria {
    fn new(temperature_k: f64) -> Self {
        let thermal_energy_erg = BOLTZMANN_ERG_K * temperature_k;
        let thermal_volume_cm3 = (PLANCK_ERG_S.powi(2)
            / (2.0 * std::f64::consts::PI * ELECTRON_MASS_G * thermal_energy_erg))
            .powf(1.5);
        // At every temperature: left out above some limit, H2+ would end in a step (0.2 % of the
        // density at 25 000 K and 1e9 dyn cm^-2).
        let h2 = h2_equilibrium(temperature_k);
        let h2_plus = h2_plus_equilibrium(temperature_k);
        Equilibria {
            thermal_energy_erg,
            thermal_volume_cm3,
            // Weights: H- has 1, the atom and the electron have 2 each.
            h_minus_cm3: thermal_volume_cm3 / 4.0 * (H_MINUS_BINDING_ERG / thermal_energy_erg).exp(),
            h2_cm3: h2.association_cm3,
            h2_plus_cm3: h2_plus.association_cm3,
            h2_binding_erg: h2.internal_energy_erg - h2.dissociation_energy_erg,
            h2_plus_binding_erg: h2_plus.internal_energy_erg - h2_plus.dissociation_energy_erg,
        }
    }
}

/// Particle densities at a trial electron density.
#[derive(Clone, Copy)]
struct Densities {
    protons: f64,
    neutrals: f64,
    h_minus: f64,
    h2: f64,
    h2_plus: f64,
}

impl Densities {
    /// `neutral_per_pair` is n(H I) / (n_e n_p) and `ground_fraction` n(1) / n(H I).
    fn at(electrons: f64, neutral_per_pair: f64, ground_fraction: f64, equilibria: &Equilibria) -> Self {
        let ground_per_proton = electrons * neutral_per_pair * ground_fraction;
        // Charge: n_e + n(H-) = n_p + n(H2+), quadratic in n_p; each root is written so that nothing
        // cancels.
        let quadratic = ground_per_proton * equilibria.h2_plus_cm3;
        let linear = 1.0 - ground_per_proton * equilibria.h_minus_cm3 * electrons;
        let root = (linear * linear + 4.0 * quadratic * electrons).sqrt();
        let protons = if linear > 0.0 {
            2.0 * electrons / (linear + root)
        } else {
            (root - linear) / (2.0 * quadratic)
        };
        let neutrals = protons * electrons * neutral_per_pair;
        let ground = neutrals * ground_fraction;
        Densities {
            protons,
            neutrals,
            h_minus: ground * electrons * equilibria.h_minus_cm3,
            h2: ground * ground * equilibria.h2_cm3,
            h2_plus: ground * protons * equilibria.h2_plus_cm3,
        }
    }

    fn particles(&self, electrons: f64) -> f64 {
        electrons + self.protons + self.neutrals + self.h_minus + self.h2 + self.h2_plus
    }
}

impl State {
    /// Solves the equilibrium at a temperature (K) and gas pressure (dyn cm^-2), both positive.
    pub fn new(temperature_k: f64, pressure_cgs: f64) -> State {
        let equilibria = Equilibria::new(temperature_k);
        let total = pressure_cgs / equilibria.thermal_energy_erg;
        let boltzmann: [f64; LEVELS] = std::array::from_fn(|index| {
            let level = (index + 1) as f64;
            let excitation = IONISATION_ERG * (1.0 - 1.0 / (level * level));
            2.0 * level * level * (-excitation / equilibria.thermal_energy_erg).exp()
        });
        let ionisation_factor = equilibria.thermal_volume_cm3 / 2.0
            * (IONISATION_ERG / equilibria.thermal_energy_erg).min(600.0).exp();

        let shapes: [LevelShape; LEVELS] = std::array::from_fn(|index| LevelShape::new((index + 1) as f64));
        let mut electrons = initial_electrons(total, ionisation_factor * boltzmann[0]);
        let mut neutral_perturbers = (total - 2.0 * electrons).max(1e-30 * total);
        let mut occupation = [1.0; LEVELS];
        let mut partition = boltzmann[0];
        let mut surroundings = Surroundings::new(temperature_k, electrons, neutral_perturbers);
        // In a photosphere the occupation probabilities barely depend on the densities and this
        // contracts fast. Under pressure ionisation the neutrals push themselves out: the response
        // is steep, and the step is damped by its slope, 2 ln(1 / w) where H2 dominates.
        let mut solved = electrons;
        for iteration in 0..MOST_ITERATIONS {
            surroundings = Surroundings::new(temperature_k, electrons, neutral_perturbers);
            for (value, shape) in occupation.iter_mut().zip(&shapes) {
                *value = surroundings.occupation_of(shape);
            }
            partition = boltzmann.iter().zip(&occupation).map(|(b, w)| b * w).sum();
            let ground_fraction = boltzmann[0] * occupation[0] / partition;
            let neutral_per_pair = ionisation_factor * partition;
            solved = solve_electrons(electrons, total, neutral_per_pair, ground_fraction, &equilibria);
            let densities = Densities::at(solved, neutral_per_pair, ground_fraction, &equilibria);
            let perturbers = (densities.neutrals + densities.h2).max(f64::MIN_POSITIVE);
            let change = (solved / electrons - 1.0).abs() + (perturbers - neutral_perturbers).abs() / total;
            let slope = 2.0 * surroundings.neutral_exponent(&shapes[0]);
            let stride = if iteration < UNDAMPED_ITERATIONS { 1.0 } else { 0.5 };
            electrons *= (solved / electrons).powf(stride);
            neutral_perturbers *= (perturbers / neutral_perturbers).powf(stride / (1.0 + slope));
            if change < 1e-13 {
                break;
            }
        }
        // Not the damped value: populations must add up even where the iteration gave out.
        let electrons = solved;
        let ground_fraction = boltzmann[0] * occupation[0] / partition;
        let densities = Densities::at(electrons, ionisation_factor * partition, ground_fraction, &equilibria);
        let levels_per_cm3: [f64; LEVELS] = std::array::from_fn(|index| {
            densities.neutrals * boltzmann[index] * occupation[index] / partition
        });
        let nuclei = densities.protons
            + densities.neutrals
            + densities.h_minus
            + 2.0 * (densities.h2 + densities.h2_plus);
        let density_g_cm3 = nuclei * HYDROGEN_MASS_G;
        let excitation: f64 = levels_per_cm3
            .iter()
            .enumerate()
            .map(|(index, population)| {
                population * IONISATION_ERG * (1.0 - 1.0 / ((index + 1) as f64).powi(2))
            })
            .sum();
        let energy_per_cm3 = 1.5 * pressure_cgs + excitation + IONISATION_ERG * densities.protons
            - H_MINUS_BINDING_ERG * densities.h_minus
            + equilibria.h2_binding_erg * densities.h2
            + (IONISATION_ERG + equilibria.h2_plus_binding_erg) * densities.h2_plus;
        State {
            temperature_k,
            pressure_cgs,
            density_g_cm3,
            electrons_per_cm3: electrons,
            protons_per_cm3: densities.protons,
            neutrals_per_cm3: densities.neutrals,
            levels_per_cm3,
            occupation,
            surroundings,
            h_minus_per_cm3: densities.h_minus,
            h2_per_cm3: densities.h2,
            h2_plus_per_cm3: densities.h2_plus,
            energy_erg_g: energy_per_cm3 / density_g_cm3,
        }
    }

    /// Specific enthalpy, erg g^-1.
    pub fn enthalpy_erg_g(&self) -> f64 {
        self.energy_erg_g + self.pressure_cgs / self.density_g_cm3
    }
}

/// Electron density of ideal hydrogen without molecules: root of n_e (2 + n_e S) = N.
fn initial_electrons(total: f64, neutral_per_pair: f64) -> f64 {
    total / (1.0 + (1.0 + neutral_per_pair * total).sqrt())
}

/// Newton iteration on the logarithm of the electron density until the particle count fits, kept
/// inside a bracket that starts at no electrons and at nothing but electrons.
fn solve_electrons(
    start: f64,
    total: f64,
    neutral_per_pair: f64,
    ground_fraction: f64,
    equilibria: &Equilibria,
) -> f64 {
    let excess = |log_electrons: f64| {
        let electrons = log_electrons.exp();
        let densities = Densities::at(electrons, neutral_per_pair, ground_fraction, equilibria);
        (densities.particles(electrons) / total).ln()
    };
    let (mut low, mut high) = (f64::MIN_POSITIVE.ln(), total.ln());
    let mut log_electrons = start.ln();
    for _ in 0..100 {
        let value = excess(log_electrons);
        if value < 0.0 {
            low = log_electrons;
        } else {
            high = log_electrons;
        }
        let slope = (excess(log_electrons + 1e-5) - excess(log_electrons - 1e-5)) / 2e-5;
        let newton = log_electrons - value / slope;
        // A count that is infinite gives no slope.
        let next = if newton >= low && newton <= high { newton } else { 0.5 * (low + high) };
        let step = next - log_electrons;
        log_electrons = next;
        if step.abs() < 1e-14 || value.abs() < 1e-15 {
            break;
        }
    }
    log_electrons.exp()
}

/// Thermodynamic derivatives at constant pressure that convection needs.
#[derive(Debug, Clone, Copy)]
pub struct Thermodynamics {
    /// Specific heat at constant pressure, erg g^-1 K^-1.
    pub heat_capacity_erg_g_k: f64,
    /// Expansion -(d ln rho / d ln T)_P.
    pub expansion: f64,
    /// Adiabatic gradient (d ln T / d ln P)_S.
    pub adiabatic_gradient: f64,
}

impl Thermodynamics {
    /// Central differences of the equation of state (step 1e-3 in ln T), so that ionisation,
    /// dissociation and pressure ionisation are all in.
    pub fn new(temperature_k: f64, pressure_cgs: f64) -> Self {
        let step = 1e-3_f64;
        let above = State::new(temperature_k * step.exp(), pressure_cgs);
        let below = State::new(temperature_k * (-step).exp(), pressure_cgs);
        let density = (above.density_g_cm3 * below.density_g_cm3).sqrt();
        let heat_capacity_erg_g_k =
            (above.enthalpy_erg_g() - below.enthalpy_erg_g()) / (above.temperature_k - below.temperature_k);
        let expansion = -(above.density_g_cm3 / below.density_g_cm3).ln() / (2.0 * step);
        Thermodynamics {
            heat_capacity_erg_g_k,
            expansion,
            adiabatic_gradient: pressure_cgs * expansion / (density * heat_capacity_erg_g_k * temperature_k),
        }
    }
}
