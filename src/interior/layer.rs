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
use crate::physics::constants::{ATOMIC_MASS_UNIT_G, BOHR_RADIUS_CM, BOLTZMANN_ERG_K, ELECTRON_VOLT_ERG};

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
}

/// Share of a bound stage's energy that it has lost where the volumes of neighbours fill space.
///
/// A tenth makes cold hydrogen ionise near 1 g/cm3, where atoms touch (0.3 - 1 g/cm3 in the
/// literature, e.g. Saumon, Chabrier & van Horn 1995, ApJS 99, 713), and helium near 20 g/cm3.
const OVERLAP_ENERGY: f64 = 0.1;

/// Free energy over kT that a bound stage costs among other nuclei.
///
/// First the excluded volume, a sphere of twice the radius (entropy, dilute), then the rise of the
/// bound electrons' energy by overlap (dense; without it cold matter would stay neutral at any density,
/// because free electrons are degenerate and excluded volume only counts as kT).
fn crowding(stage: &Stage, nuclei: f64, temperature_k: f64) -> Jet {
    let volume = 4.0 * PI / 3.0 * (2.0 * stage.radius_bohr * BOHR_RADIUS_CM).powi(3);
    let filling = Jet::power_law(nuclei * volume, 1.0, 0.0);
    let bound = -stage.energy_ev * ELECTRON_VOLT_ERG / (BOLTZMANN_ERG_K * temperature_k);
    filling + filling * filling * Jet::power_law(OVERLAP_ENERGY * bound, 0.0, -1.0)
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
}

impl LayerState {
    /// State of a layer known to be fully ionised, from the simpler equation of state.
    pub fn fully_ionised(layer: Layer, matter: MatterState, electrons_per_cm3: f64) -> Self {
        let gas = ElectronGas::shared().free_energy(electrons_per_cm3, matter.temperature_k);
        let mut stages_per_cm3 = [0.0; 3];
        stages_per_cm3[layer.stages().len() - 1] = electrons_per_cm3 / layer.charge();
        LayerState { matter, electrons_per_cm3, stages_per_cm3, degeneracy: gas.v + gas.x }
    }
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
    // Every free electron shares in the Coulomb energy of all ions; `previous` weighs their charges.
    let (energy, charge) =
        stages.iter().zip(previous).fold((0.0, 1e-300), |(energy, charge), (stage, share)| {
            (energy + share * excess(stage.charge).1 / 3.0, charge + share * stage.charge)
        });
    let shared = energy / charge;
    let mut logs = [f64::NEG_INFINITY; 3];
    for (log, stage) in logs.iter_mut().zip(stages) {
        let potential = stage.energy_ev * ELECTRON_VOLT_ERG / kt - stage.statistical_weight.ln()
            + stage.charge * (chemical + shared)
            + excess(stage.charge).0
            + crowding(stage, nuclei, temperature_k).v;
        *log = -potential;
    }
    let top = logs.iter().copied().fold(f64::NEG_INFINITY, f64::max);
    let mut shares = logs.map(|log| (log - top).exp());
    let sum: f64 = shares.iter().sum();
    shares.iter_mut().for_each(|share| *share /= sum);
    shares
}

/// Shares of the stages at equilibrium: a root in the free electron density; where pressure
/// ionisation makes several, that of lowest free energy.
fn equilibrium(layer: Layer, nuclei: f64, temperature_k: f64) -> [f64; 3] {
    const SCAN: usize = 12;
    let stages = layer.stages();
    let at = |ln_electrons: f64| {
        let electrons = ln_electrons.exp();
        // The Coulomb term needs the shares it changes: they enter weakly, two passes settle them.
        let mut shares = [0.0; 3];
        shares[stages.len() - 1] = 1.0;
        for _ in 0..2 {
            shares = fractions(layer, nuclei, electrons, temperature_k, &shares);
        }
        let charge: f64 = stages.iter().zip(&shares).map(|(stage, share)| stage.charge * share).sum();
        ((charge.max(1e-300) * nuclei).ln() - ln_electrons, shares)
    };
    let (low, high) = ((1e-13 * nuclei).max(2.0).ln(), (layer.charge() * nuclei).ln() + 1e-9);
    // Scan points crowd towards full ionisation, where several roots can be.
    let point = |i: usize| high - (high - low) * (1.0 - i as f64 / SCAN as f64).powi(3);
    let mut best: Option<(f64, [f64; 3])> = None;
    let mut left = (point(0), at(point(0)));
    for i in 1..=SCAN {
        let right = (point(i), at(point(i)));
        if left.1.0 > 0.0 && right.1.0 <= 0.0 {
            let shares = root(&at, (left.0, left.1.0), (right.0, right.1.0));
            let free = free_energy(layer, nuclei, &shares, temperature_k).0.v;
            if best.is_none_or(|(lowest, _)| free < lowest) {
                best = Some((free, shares));
            }
        }
        left = right;
    }
    // No root within the range: as good as neutral.
    best.map_or_else(|| at(low).1, |(_, shares)| shares)
}

/// Illinois variant of the rule of false position: bracketed and superlinear.
fn root(at: &impl Fn(f64) -> (f64, [f64; 3]), mut left: (f64, f64), mut right: (f64, f64)) -> [f64; 3] {
    let mut shares = [0.0; 3];
    let mut side = 0;
    for _ in 0..60 {
        let x = (left.0 * right.1 - right.0 * left.1) / (right.1 - left.1);
        let (value, now) = at(x);
        shares = now;
        if value.abs() < 1e-11 || (right.0 - left.0).abs() < 1e-12 {
            break;
        }
        if value > 0.0 {
            left = (x, value);
            if side == 1 {
                right.1 *= 0.5;
            }
            side = 1;
        } else {
            right = (x, value);
            if side == -1 {
                left.1 *= 0.5;
            }
            side = -1;
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
        one = one + crowding(stage, nuclei, temperature_k);
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
    }
}
