//! Partly ionised hydrogen and helium: ionisation balance, equation of state and particle densities.
//!
//! In: layer, density (g/cm3), temperature (K). Out: a [`LayerState`]. The free energy adds the
//! neutral and ionised species as ideal gases in their ground states, Fermi-Dirac electrons with
//! exchange, the Coulomb energy of the ions in the free electrons, and an excluded volume of bound
//! states by all nuclei (the neutral occupation probability of Hummer & Mihalas 1988 in the form
//! that pressure-ionises); the balance is its minimum at fixed density and temperature. First
//! derivatives are exact at the minimum, second ones are central differences of the first.
//! Left out: molecules (below 5 000 K they change the adiabat), excited states in the partition
//! function. In the limit of full ionisation it joins [`super::matter`]
//! (test `verif_layers_join_ionised_matter`); the weak limit is Saha's law (`validate_saha_limit`).

use std::f64::consts::PI;

use super::electrons::ElectronGas;
use super::ions;
use super::jet::Jet;
use super::matter::{MatterState, electron_coupling, exchange_jet, ideal_ion};
use crate::physics::constants::{
    ATOMIC_MASS_UNIT_G, BOHR_RADIUS_CM, BOLTZMANN_ERG_K, ELECTRON_VOLT_ERG,
};

/// A layer of the envelope, pure hydrogen or pure helium.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Layer {
    /// Outer layer.
    Hydrogen,
    /// Layer between hydrogen and core.
    Helium,
}

/// Constants of one ionisation stage.
struct Stage {
    charge: f64,
    statistical_weight: f64,
    /// Energy above the bare nucleus and free electrons, eV: minus all ionisation energies to come.
    energy_ev: f64,
    /// Radius of the bound electrons, Bohr radii.
    radius_bohr: f64,
}

/// Ionisation energies: H 13.598 eV, He I 24.587 eV, He II 54.418 eV (NIST Atomic Spectra Database).
const HYDROGEN_STAGES: [Stage; 2] = [
    Stage { charge: 0.0, statistical_weight: 2.0, energy_ev: -13.598, radius_bohr: 1.0 },
    Stage { charge: 1.0, statistical_weight: 1.0, energy_ev: 0.0, radius_bohr: 0.0 },
];
const HELIUM_STAGES: [Stage; 3] = [
    // Radii: a0 over the (effective) charge, 27/16 in the variational ground state of helium.
    Stage { charge: 0.0, statistical_weight: 1.0, energy_ev: -79.005, radius_bohr: 0.593 },
    Stage { charge: 1.0, statistical_weight: 2.0, energy_ev: -54.418, radius_bohr: 0.5 },
    Stage { charge: 2.0, statistical_weight: 1.0, energy_ev: 0.0, radius_bohr: 0.0 },
];

impl Layer {
    fn stages(self) -> &'static [Stage] {
        match self {
            Layer::Hydrogen => &HYDROGEN_STAGES,
            Layer::Helium => &HELIUM_STAGES,
        }
    }

    /// Atomic mass, g.
    pub fn atomic_mass_g(self) -> f64 {
        match self {
            Layer::Hydrogen => 1.007_825 * ATOMIC_MASS_UNIT_G,
            Layer::Helium => 4.002_602 * ATOMIC_MASS_UNIT_G,
        }
    }

    /// Nuclear charge.
    pub fn charge(self) -> f64 {
        match self {
            Layer::Hydrogen => 1.0,
            Layer::Helium => 2.0,
        }
    }

    /// Volume that nuclei around a bound stage must leave free, cm^3: a sphere of twice its radius.
    fn excluded_volume_cm3(stage: &Stage) -> f64 {
        4.0 * PI / 3.0 * (2.0 * stage.radius_bohr * BOHR_RADIUS_CM).powi(3)
    }
}

/// State and populations of a layer.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct LayerState {
    /// Thermodynamics, radiation included.
    pub matter: MatterState,
    /// Free electrons, cm^-3.
    pub electrons_per_cm3: f64,
    /// Number densities of the stages, neutral first, cm^-3 (the third is 0 for hydrogen).
    pub stages_per_cm3: [f64; 3],
    /// Electron degeneracy parameter, chemical potential over kT.
    pub degeneracy: f64,
    /// Dissolution exponent of a neutral ground state: its occupation probability is exp(-this).
    pub dissolution: f64,
}

/// Fractions of the nuclei in each stage if the free electrons had density `electrons`.
fn fractions(layer: Layer, nuclei: f64, electrons: f64, temperature_k: f64, previous: &[f64; 3]) -> [f64; 3] {
    let stages = layer.stages();
    let kt = BOLTZMANN_ERG_K * temperature_k;
    let gas = ElectronGas::shared().free_energy(electrons, temperature_k);
    let exchange = exchange_jet(electrons, temperature_k);
    let chemical = gas.v + gas.x + exchange.v + exchange.x;
    let coupling = electron_coupling(electrons, temperature_k);
    let excess = |charge: f64| {
        if charge > 0.0 { ions::liquid_excess(coupling * charge.powf(5.0 / 3.0)) } else { (0.0, 0.0) }
    };
    // Every free electron shares in the Coulomb energy of all ions.
    let shared: f64 = stages
        .iter()
        .zip(previous)
        .map(|(stage, share)| share * nuclei / electrons * excess(stage.charge).1 / 3.0)
        .sum();
    let mut logs = [f64::NEG_INFINITY; 3];
    for (log, stage) in logs.iter_mut().zip(stages) {
        let potential = stage.energy_ev * ELECTRON_VOLT_ERG / kt - stage.statistical_weight.ln()
            + stage.charge * (chemical + shared)
            + excess(stage.charge).0
            + nuclei * Layer::excluded_volume_cm3(stage);
        *log = -potential;
    }
    let top = logs.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    let mut shares = logs.map(|log| (log - top).exp());
    let sum: f64 = shares.iter().sum();
    shares.iter_mut().for_each(|share| *share /= sum);
    shares
}

/// Shares of the stages at equilibrium: one root in the free electron density.
fn equilibrium(layer: Layer, nuclei: f64, temperature_k: f64) -> [f64; 3] {
    let stages = layer.stages();
    let mean_charge = |shares: &[f64; 3]| -> f64 {
        stages.iter().zip(shares).map(|(stage, share)| stage.charge * share).sum()
    };
    let full = layer.charge();
    let mut shares = [0.0; 3];
    shares[stages.len() - 1] = 1.0;
    // Bisection in ln(n_e), from the ionised side: the root of highest ionisation is the stable one
    // where pressure ionisation makes several.
    let (mut low, mut high) = ((1e-14 * nuclei).ln(), (full * nuclei).ln());
    for _ in 0..48 {
        let middle = 0.5 * (low + high);
        let guess = fractions(layer, nuclei, middle.exp(), temperature_k, &shares);
        // The Coulomb term needs the shares it changes: they enter weakly, two passes settle them.
        shares = fractions(layer, nuclei, middle.exp(), temperature_k, &guess);
        if mean_charge(&shares) * nuclei > middle.exp() {
            low = middle;
        } else {
            high = middle;
        }
    }
    shares
}

/// Free energy per nucleus over kT at given shares, without radiation; electrons from the shares.
fn free_energy(layer: Layer, nuclei: f64, shares: &[f64; 3], temperature_k: f64) -> (Jet, f64) {
    let stages = layer.stages();
    let mean_charge: f64 = stages.iter().zip(shares).map(|(s, share)| s.charge * share).sum();
    let electrons = mean_charge * nuclei;
    let mut free = (ElectronGas::shared().free_energy(electrons, temperature_k)
        + exchange_jet(electrons, temperature_k))
        * mean_charge;
    let coupling = electron_coupling(electrons, temperature_k);
    for (stage, &share) in stages.iter().zip(shares) {
        if share < 1e-300 {
            continue;
        }
        let mut one = ideal_ion(nuclei * share, layer.atomic_mass_g(), temperature_k);
        one.v -= stage.statistical_weight.ln();
        let bound = stage.energy_ev * ELECTRON_VOLT_ERG / (BOLTZMANN_ERG_K * temperature_k);
        one = one + Jet::power_law(bound, 0.0, -1.0);
        if stage.charge > 0.0 {
            let gamma = coupling * stage.charge.powf(5.0 / 3.0);
            // No quantum term: in the envelope (T_plasma/T)^2/24 stays below 0.01.
            let zero = Jet::constant(1e-6);
            one = one + ions::liquid_interaction(Jet::power_law(gamma, 1.0 / 3.0, -1.0), zero);
        }
        one = one + Jet::power_law(nuclei * Layer::excluded_volume_cm3(stage), 1.0, 0.0);
        free = free + one * share;
    }
    (free, electrons)
}

/// The state of a layer in ionisation equilibrium.
///
/// # Domain
/// Densities and temperatures whose free electrons lie in the electron table; NaN elsewhere.
pub fn layer_state(layer: Layer, density_g_cm3: f64, temperature_k: f64) -> LayerState {
    // Steps of the central differences in ln rho and ln T: ionisation turns on over 0.1 in ln T.
    const STEP: f64 = 0.01;
    let mass = layer.atomic_mass_g();
    let evaluate = |dx: f64, dy: f64| {
        let nuclei = density_g_cm3 * dx.exp() / mass;
        let t = temperature_k * dy.exp();
        let shares = equilibrium(layer, nuclei, t);
        (free_energy(layer, nuclei, &shares, t), shares)
    };
    let ((mut free, electrons), shares) = evaluate(0.0, 0.0);
    let (east, west) = (evaluate(STEP, 0.0).0.0, evaluate(-STEP, 0.0).0.0);
    let (north, south) = (evaluate(0.0, STEP).0.0, evaluate(0.0, -STEP).0.0);
    free.xx = (east.x - west.x) / (2.0 * STEP);
    free.yy = (north.y - south.y) / (2.0 * STEP);
    free.xy = (north.x - south.x) / (2.0 * STEP);
    let nuclei = density_g_cm3 / mass;
    let gas = ElectronGas::shared().free_energy(electrons, temperature_k);
    let coupling = electron_coupling(electrons, temperature_k) * layer.charge().powf(5.0 / 3.0);
    LayerState {
        matter: MatterState::from_free_energy(free, 1.0 / mass, density_g_cm3, temperature_k, coupling),
        electrons_per_cm3: electrons,
        stages_per_cm3: shares.map(|share| share * nuclei),
        degeneracy: gas.v + gas.x,
        dissolution: nuclei * Layer::excluded_volume_cm3(&layer.stages()[0]),
    }
}
