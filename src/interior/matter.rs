//! Fully ionised matter: pressure, energy, entropy and their derivatives at a density and
//! temperature.
//!
//! In: a [`Composition`], density (g/cm3), temperature (K). Out: a [`MatterState`]. One Helmholtz
//! free energy adds electrons ([`ElectronGas`]) with their exchange energy, ions (linear mixing of
//! one-component plasmas, liquid or solid by the mean coupling parameter) and radiation; everything
//! else is a derivative of it. Linear mixing with the ideal entropy of mixing in both phases: no
//! phase separation.
//! Domain: that of the electron table; fully ionised matter only. Tests: `validate_equation_of_state_limits`,
//! `verif_thermodynamic_identities`.

use std::f64::consts::PI;

use super::electrons::{ELECTRON_REST_TEMPERATURE_K, ElectronGas, relativity_parameter};
use super::ions::{self, MELTING_GAMMA};
use super::jet::Jet;
use crate::physics::constants::{
    ATOMIC_MASS_UNIT_G, BOLTZMANN_ERG_K, ELEMENTARY_CHARGE_ESU, PLANCK_ERG_S, RADIATION_DENSITY_CGS,
};

/// One kind of ion in a mixture.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Species {
    /// Nuclear charge number.
    pub charge: f64,
    /// Mass of the neutral atom, u.
    pub mass_u: f64,
    /// Share of the nuclei.
    pub number_fraction: f64,
}

/// A mixture of fully ionised species.
#[derive(Debug, Clone, PartialEq)]
pub struct Composition {
    species: Vec<Species>,
    mean_mass_u: f64,
    mean_charge: f64,
}

/// Atomic masses, u (IUPAC / CODATA 2018; from memory to the digits that matter here, 1e-4).
const HYDROGEN_U: f64 = 1.007_825;
const HELIUM_U: f64 = 4.002_602;
const CARBON_U: f64 = 12.0;
const OXYGEN_U: f64 = 15.994_915;
const NEON_U: f64 = 19.992_440;

impl Composition {
    /// A mixture from (charge, atomic mass in u, mass fraction); the fractions sum to one.
    fn from_mass_fractions(parts: &[(f64, f64, f64)]) -> Self {
        let nuclei: f64 = parts.iter().map(|(_, mass_u, share)| share / mass_u).sum();
        let species: Vec<Species> = parts
            .iter()
            .map(|&(charge, mass_u, share)| Species {
                charge,
                mass_u,
                number_fraction: share / mass_u / nuclei,
            })
            .collect();
        let mean_charge = species.iter().map(|s| s.charge * s.number_fraction).sum();
        Composition { species, mean_mass_u: 1.0 / nuclei, mean_charge }
    }

    /// Pure hydrogen.
    pub fn hydrogen() -> Self {
        Self::from_mass_fractions(&[(1.0, HYDROGEN_U, 1.0)])
    }

    /// Pure helium.
    pub fn helium() -> Self {
        Self::from_mass_fractions(&[(2.0, HELIUM_U, 1.0)])
    }

    /// Pure carbon.
    pub fn carbon() -> Self {
        Self::from_mass_fractions(&[(6.0, CARBON_U, 1.0)])
    }

    /// Carbon and oxygen, half each by mass.
    pub fn carbon_oxygen() -> Self {
        Self::from_mass_fractions(&[(6.0, CARBON_U, 0.5), (8.0, OXYGEN_U, 0.5)])
    }

    /// Oxygen and neon, 70 and 30 per cent by mass (what carbon burning leaves, in round numbers).
    pub fn oxygen_neon() -> Self {
        Self::from_mass_fractions(&[(8.0, OXYGEN_U, 0.7), (10.0, NEON_U, 0.3)])
    }

    /// The species, in order of charge.
    pub fn species(&self) -> &[Species] {
        &self.species
    }

    /// Mean mass per nucleus, g.
    pub fn mean_mass_g(&self) -> f64 {
        self.mean_mass_u * ATOMIC_MASS_UNIT_G
    }

    /// Mass per electron, u.
    pub fn mass_per_electron_u(&self) -> f64 {
        self.mean_mass_u / self.mean_charge
    }

    /// Electron density at a mass density, cm^-3.
    pub fn electron_density_per_cm3(&self, density_g_cm3: f64) -> f64 {
        density_g_cm3 / (self.mass_per_electron_u() * ATOMIC_MASS_UNIT_G)
    }

    /// Number fraction average of charge^(5/3).
    pub fn mean_charge_5_3(&self) -> f64 {
        self.species.iter().map(|s| s.number_fraction * s.charge.powf(5.0 / 3.0)).sum()
    }
}

/// Coupling of the electrons: e^2 / (a_e k T), a_e the radius of the sphere per electron.
pub fn electron_coupling(electron_density_per_cm3: f64, temperature_k: f64) -> f64 {
    ELEMENTARY_CHARGE_ESU.powi(2) * (4.0 * PI * electron_density_per_cm3 / 3.0).cbrt()
        / (BOLTZMANN_ERG_K * temperature_k)
}

/// Thermodynamic state of matter with radiation.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct MatterState {
    /// Density, g/cm3.
    pub density_g_cm3: f64,
    /// Temperature, K.
    pub temperature_k: f64,
    /// Total pressure, dyn/cm2.
    pub pressure_cgs: f64,
    /// Internal energy, erg/g, zero for cold matter at infinite dilution.
    pub energy_erg_g: f64,
    /// Entropy, erg/g/K.
    pub entropy_erg_g_k: f64,
    /// d ln P / d ln rho at constant T.
    pub chi_density: f64,
    /// d ln P / d ln T at constant density.
    pub chi_temperature: f64,
    /// Heat capacity at constant volume, erg/g/K.
    pub heat_capacity_v_erg_g_k: f64,
    /// Heat capacity at constant pressure, erg/g/K.
    pub heat_capacity_p_erg_g_k: f64,
    /// Adiabatic gradient d ln T / d ln P.
    pub adiabatic_gradient: f64,
    /// Mean ion coupling parameter; solid above [`MELTING_GAMMA`].
    pub coupling: f64,
}

impl MatterState {
    /// State from the free energy per nucleus over kT (without radiation) and the nuclei per gram.
    pub fn from_free_energy(
        free: Jet,
        nuclei_per_g: f64,
        density_g_cm3: f64,
        temperature_k: f64,
        coupling: f64,
    ) -> Self {
        let nuclei = nuclei_per_g * density_g_cm3;
        let radiation = -RADIATION_DENSITY_CGS * temperature_k.powi(3) / (3.0 * nuclei * BOLTZMANN_ERG_K);
        let f = free + Jet::power_law(radiation, -1.0, 3.0);
        let kt = BOLTZMANN_ERG_K * temperature_k;
        let chi_density = 1.0 + f.xx / f.x;
        let chi_temperature = 1.0 + f.xy / f.x;
        let cv = BOLTZMANN_ERG_K * nuclei_per_g * (-f.y - f.yy);
        let pressure_cgs = nuclei * kt * f.x;
        let gruneisen = pressure_cgs * chi_temperature / (density_g_cm3 * temperature_k * cv);
        let cp = cv * (1.0 + gruneisen * chi_temperature / chi_density);
        MatterState {
            density_g_cm3,
            temperature_k,
            pressure_cgs,
            energy_erg_g: -nuclei_per_g * kt * f.y,
            entropy_erg_g_k: -nuclei_per_g * BOLTZMANN_ERG_K * (f.v + f.y),
            chi_density,
            chi_temperature,
            heat_capacity_v_erg_g_k: cv,
            heat_capacity_p_erg_g_k: cp,
            adiabatic_gradient: gruneisen / (chi_density + gruneisen * chi_temperature),
            coupling,
        }
    }

    /// True above the melting line.
    pub fn is_solid(&self) -> bool {
        self.coupling > MELTING_GAMMA
    }
}

/// Classical ideal gas of nuclei of one mass: free energy per nucleus over kT at density n.
pub fn ideal_ion(density_per_cm3: f64, mass_g: f64, temperature_k: f64) -> Jet {
    let wave2 = PLANCK_ERG_S * PLANCK_ERG_S / (2.0 * PI * mass_g * BOLTZMANN_ERG_K * temperature_k);
    Jet::linear((density_per_cm3 * wave2 * wave2.sqrt()).ln() - 1.0, 1.0, -1.5)
}

/// Exchange free energy per electron over kT, with derivatives in ln n_e and ln T.
pub fn exchange_jet(electron_density_per_cm3: f64, temperature_k: f64) -> Jet {
    let x = relativity_parameter(electron_density_per_cm3);
    let inverse_theta = ELECTRON_REST_TEMPERATURE_K / temperature_k;
    // Non-relativistic Fermi energy: the fading factor is 1 wherever relativity matters.
    ions::exchange(
        Jet::power_law(x, 1.0 / 3.0, 0.0),
        Jet::power_law(2.0 / (x * x * inverse_theta), -2.0 / 3.0, 1.0),
        Jet::power_law(inverse_theta, 0.0, -1.0),
    )
}

/// Phase of the ions.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Phase {
    Liquid,
    Solid,
}

/// Free energy per nucleus over kT in one phase, without radiation.
fn free_energy(composition: &Composition, density_g_cm3: f64, temperature_k: f64, phase: Phase) -> Jet {
    let electrons = composition.electron_density_per_cm3(density_g_cm3);
    let coupling_e = electron_coupling(electrons, temperature_k);
    let plasma_k = PLANCK_ERG_S / (2.0 * PI * BOLTZMANN_ERG_K)
        * (4.0 * PI * ELEMENTARY_CHARGE_ESU.powi(2) * electrons / ATOMIC_MASS_UNIT_G).sqrt();

    let mut free = (ElectronGas::shared().free_energy(electrons, temperature_k)
        + exchange_jet(electrons, temperature_k))
        * composition.mean_charge;
    for s in &composition.species {
        let gamma = Jet::power_law(coupling_e * s.charge.powf(5.0 / 3.0), 1.0 / 3.0, -1.0);
        let eta = Jet::power_law(plasma_k * (s.charge / s.mass_u).sqrt() / temperature_k, 0.5, -1.0);
        let one = match phase {
            Phase::Solid => ions::solid(gamma, eta),
            Phase::Liquid => {
                ideal_ion(electrons / s.charge, s.mass_u * ATOMIC_MASS_UNIT_G, temperature_k)
                    + ions::liquid_interaction(gamma, eta)
            }
        };
        let mixing = (s.number_fraction * s.charge / composition.mean_charge).ln();
        free = free + (one + mixing) * s.number_fraction;
    }
    free
}

/// The state of fully ionised matter, liquid up to [`MELTING_GAMMA`] and solid above.
///
/// # Domain
/// Outside the electron table every value is NaN.
pub fn matter_state(composition: &Composition, density_g_cm3: f64, temperature_k: f64) -> MatterState {
    let electrons = composition.electron_density_per_cm3(density_g_cm3);
    let coupling = electron_coupling(electrons, temperature_k) * composition.mean_charge_5_3();
    let phase = if coupling > MELTING_GAMMA { Phase::Solid } else { Phase::Liquid };
    state_in_phase(composition, density_g_cm3, temperature_k, coupling, phase)
}

fn state_in_phase(
    composition: &Composition,
    density_g_cm3: f64,
    temperature_k: f64,
    coupling: f64,
    phase: Phase,
) -> MatterState {
    let free = free_energy(composition, density_g_cm3, temperature_k, phase);
    let nuclei_per_g = 1.0 / composition.mean_mass_g();
    MatterState::from_free_energy(free, nuclei_per_g, density_g_cm3, temperature_k, coupling)
}

/// Half-width, relative to [`MELTING_GAMMA`], over which [`freezing_state`] passes from liquid to solid.
const FREEZING_WIDTH: f64 = 0.03;

/// Share that is solid at a coupling parameter, rising smoothly across [`MELTING_GAMMA`].
pub fn solid_share(coupling: f64) -> f64 {
    let t = ((coupling / MELTING_GAMMA - 1.0) / (2.0 * FREEZING_WIDTH) + 0.5).clamp(0.0, 1.0);
    t * t * (3.0 - 2.0 * t)
}

/// Like [`matter_state`], but melting over a small range of coupling, so that a shell of a star gives
/// up its latent heat gradually and an iteration can follow it. Pressure, energy, entropy and opacity-free
/// derivatives are weighted means of the phases.
pub fn freezing_state(composition: &Composition, density_g_cm3: f64, temperature_k: f64) -> MatterState {
    let electrons = composition.electron_density_per_cm3(density_g_cm3);
    let coupling = electron_coupling(electrons, temperature_k) * composition.mean_charge_5_3();
    let share = solid_share(coupling);
    let at = |phase| state_in_phase(composition, density_g_cm3, temperature_k, coupling, phase);
    if share == 0.0 {
        return at(Phase::Liquid);
    }
    let solid = at(Phase::Solid);
    if share == 1.0 {
        return solid;
    }
    let liquid = at(Phase::Liquid);
    let mean = |a: f64, b: f64| (1.0 - share) * a + share * b;
    MatterState {
        pressure_cgs: mean(liquid.pressure_cgs, solid.pressure_cgs),
        energy_erg_g: mean(liquid.energy_erg_g, solid.energy_erg_g),
        entropy_erg_g_k: mean(liquid.entropy_erg_g_k, solid.entropy_erg_g_k),
        ..solid
    }
}

/// Density at which matter has the given pressure and temperature, by Newton from a guess.
///
/// Returns `None` if the pressure cannot be met (below that of radiation, outside the table).
pub fn density_at_pressure(
    composition: &Composition,
    pressure_cgs: f64,
    temperature_k: f64,
    guess_g_cm3: f64,
) -> Option<MatterState> {
    let mut ln_density = guess_g_cm3.ln();
    for _ in 0..60 {
        let state = matter_state(composition, ln_density.exp(), temperature_k);
        let step = (pressure_cgs / state.pressure_cgs).ln() / state.chi_density;
        if !step.is_finite() {
            return None;
        }
        if step.abs() < 1e-9 {
            return Some(state);
        }
        ln_density += step.clamp(-2.0, 2.0);
    }
    None
}
