//! The core of a star: its material, its mass grid, and isothermal cores as starting models.
//!
//! In: kind of core, stellar mass, central density, temperature. Out: shells up to the base of the helium
//! layer. Variables r^2 and ln rho over z = m^(2/3), regular at the centre; Runge-Kutta. Cores with
//! heat flow come from [`super::evolution`].

use std::f64::consts::PI;
use std::sync::OnceLock;

use ndarray::{Array1, Array2};
use ndarray_interp::interp2d::{Bilinear, Interp2D, Interp2DOwned};
use rayon::prelude::*;

use super::cold::Gravity;
use super::conduction::conductive_opacity_cm2_g;
use super::envelope::HELIUM_FRACTION;
use super::matter::{Composition, MatterState, matter_state};
use super::neutrinos::neutrino_loss_erg_g_s;
use super::opacity::ionised_rosseland_cm2_g;
use crate::physics::constants::GRAVITATION_CGS;

/// Cores below this mass are helium: the core mass at helium ignition (0.45 - 0.47 Msun), common practice.
pub const HELIUM_CORE_BELOW_MSUN: f64 = 0.45;

/// Nodes of the core: first in m^(2/3), then in the logarithm of the mass outside.
const INNER_NODES: usize = 60;
const OUTER_NODES: usize = 60;
/// Mass fraction where the second part begins.
const INNER_SHARE: f64 = 0.8;
/// log10 density and temperature of the opacity table: low, step, count.
const LOG_DENSITY: (f64, f64, usize) = (1.0, 0.1, 100);
const LOG_TEMPERATURE: (f64, f64, usize) = (5.0, 0.05, 81);

/// Material of the core.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Core {
    /// Helium.
    Helium,
    /// Carbon and oxygen, half each by mass.
    CarbonOxygen,
    /// Oxygen and neon.
    OxygenNeon,
}

impl Core {
    /// The core that single-star evolution gives a mass, as the table assumes.
    pub fn of_mass(mass_msun: f64) -> Self {
        if mass_msun < HELIUM_CORE_BELOW_MSUN { Core::Helium } else { Core::CarbonOxygen }
    }

    /// Its composition.
    pub fn composition(self) -> Composition {
        match self {
            Core::Helium => Composition::helium(),
            Core::CarbonOxygen => Composition::carbon_oxygen(),
            Core::OxygenNeon => Composition::oxygen_neon(),
        }
    }
}

/// Composition, opacity table and averages of a kind of core.
pub struct CoreMaterial {
    /// What it is made of.
    pub composition: Composition,
    mean_charge2_per_mass: f64,
    ln_opacity: Interp2DOwned<f64, ndarray::Ix2, Bilinear>,
}

fn axis((low, step, count): (f64, f64, usize)) -> Array1<f64> {
    (0..count).map(|i| (low + step * i as f64) * std::f64::consts::LN_10).collect()
}

impl CoreMaterial {
    fn build(core: Core) -> Option<Self> {
        let composition = core.composition();
        let mean = |f: &dyn Fn(f64) -> f64| -> f64 {
            composition.species().iter().map(|s| s.number_fraction * f(s.charge)).sum()
        };
        let (charge, charge2) = (mean(&|z| z), mean(&|z| z * z));
        let mean_mass_u = composition.mass_per_electron_u() * charge;
        let opacity = |rho: f64, t: f64| {
            let electrons = composition.electron_density_per_cm3(rho);
            // One effective ion with the mixture's collision rate sum(Z^2 n) at its electron density.
            let effective = charge2 / charge;
            let effective_mass_u = composition.mass_per_electron_u() * effective;
            let conductive = conductive_opacity_cm2_g(effective, effective_mass_u, electrons, t, rho);
            let ions: Vec<(f64, f64)> = composition
                .species()
                .iter()
                .map(|s| (s.charge, s.number_fraction * electrons / charge))
                .collect();
            let radiative = ionised_rosseland_cm2_g(&ions, electrons, rho, t);
            -(1.0 / radiative + 1.0 / conductive).ln()
        };
        let (densities, temperatures) = (axis(LOG_DENSITY), axis(LOG_TEMPERATURE));
        let values: Vec<f64> = densities
            .as_slice()?
            .par_iter()
            .flat_map_iter(|d| temperatures.iter().map(|t| opacity(d.exp(), t.exp())).collect::<Vec<_>>())
            .collect();
        let data = Array2::from_shape_vec((densities.len(), temperatures.len()), values).ok()?;
        let ln_opacity = Interp2D::builder(data).x(densities).y(temperatures).build().ok()?;
        Some(CoreMaterial { mean_charge2_per_mass: charge2 / mean_mass_u, composition, ln_opacity })
    }

    /// The material of a kind of core, tabulated at its first use.
    pub fn shared(core: Core) -> Option<&'static CoreMaterial> {
        static TABLES: [OnceLock<Option<CoreMaterial>>; 3] =
            [OnceLock::new(), OnceLock::new(), OnceLock::new()];
        TABLES[core as usize].get_or_init(|| CoreMaterial::build(core)).as_ref()
    }

    /// ln of the opacity, cm2/g; `None` outside the table.
    pub fn ln_opacity(&self, ln_density: f64, ln_temperature: f64) -> Option<f64> {
        self.ln_opacity.interp_scalar(ln_density, ln_temperature).ok()
    }

    /// Neutrino losses, erg/g/s.
    pub fn neutrinos_erg_g_s(&self, density_g_cm3: f64, temperature_k: f64) -> f64 {
        neutrino_loss_erg_g_s(
            self.composition.mass_per_electron_u(),
            self.mean_charge2_per_mass,
            density_g_cm3,
            temperature_k,
        )
    }
}

/// One shell of the core.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Shell {
    /// Enclosed mass, g.
    pub mass_g: f64,
    /// Radius, cm.
    pub radius_cm: f64,
    /// Energy flowing outward through it, erg/s.
    pub luminosity_erg_s: f64,
    /// Thermodynamic state.
    pub matter: MatterState,
}

/// Mass fractions of the core nodes; the first is a ball so small that it is uniform.
pub fn core_nodes() -> Vec<f64> {
    let split = INNER_SHARE.powf(2.0 / 3.0);
    let node = |i: usize| (split * i as f64 / INNER_NODES as f64).powf(1.5);
    let mut nodes: Vec<f64> = vec![0.01 * node(1)];
    nodes.extend((1..=INNER_NODES).map(node));
    let (first, last) = ((1.0 - INNER_SHARE).ln(), HELIUM_FRACTION.ln());
    nodes.extend(
        (1..=OUTER_NODES).map(|i| 1.0 - (first + (last - first) * i as f64 / OUTER_NODES as f64).exp()),
    );
    nodes
}

/// Integrates an isothermal core outward; `None` where it has no hydrostatic solution.
pub fn isothermal_core(
    mass_g: f64,
    ln_central_density: f64,
    temperature_k: f64,
    composition: &Composition,
    gravity: Gravity,
) -> Option<Vec<Shell>> {
    let slope = |z: f64, r2: f64, ln_density: f64| -> Option<(f64, f64)> {
        let rho = ln_density.exp();
        let state = matter_state(composition, rho, temperature_k);
        let (r, m) = (r2.max(0.0).sqrt(), z.powf(1.5));
        let dr2 = 3.0 * z.sqrt() / (4.0 * PI * r * rho);
        let dp = -1.5 * GRAVITATION_CGS * z * z / (4.0 * PI * r2 * r2)
            * gravity.factor(state.pressure_cgs, rho, state.energy_erg_g, r, m);
        let d = dp / (state.pressure_cgs * state.chi_density);
        (dr2.is_finite() && d.is_finite() && state.chi_density > 0.0).then_some((dr2, d))
    };
    let nodes = core_nodes();
    let central = matter_state(composition, ln_central_density.exp(), temperature_k);
    let mut z = (nodes[0] * mass_g).powf(2.0 / 3.0);
    let mut r2 = (3.0 * nodes[0] * mass_g / (4.0 * PI * central.density_g_cm3)).powf(2.0 / 3.0);
    let mut ln_density = ln_central_density
        - 2.0 * PI / 3.0 * GRAVITATION_CGS * central.density_g_cm3.powi(2) * r2
            / (central.pressure_cgs * central.chi_density);
    let shell = |mass_g: f64, r2: f64, ln_density: f64| Shell {
        mass_g,
        radius_cm: r2.sqrt(),
        luminosity_erg_s: 0.0,
        matter: matter_state(composition, ln_density.exp(), temperature_k),
    };
    let mut shells = vec![shell(nodes[0] * mass_g, r2, ln_density)];
    for node in &nodes[1..] {
        let h = (node * mass_g).powf(2.0 / 3.0) - z;
        let k1 = slope(z, r2, ln_density)?;
        let k2 = slope(z + 0.5 * h, r2 + 0.5 * h * k1.0, ln_density + 0.5 * h * k1.1)?;
        let k3 = slope(z + 0.5 * h, r2 + 0.5 * h * k2.0, ln_density + 0.5 * h * k2.1)?;
        let k4 = slope(z + h, r2 + h * k3.0, ln_density + h * k3.1)?;
        r2 += h / 6.0 * (k1.0 + 2.0 * k2.0 + 2.0 * k3.0 + k4.0);
        ln_density += h / 6.0 * (k1.1 + 2.0 * k2.1 + 2.0 * k3.1 + k4.1);
        z += h;
        shells.push(shell(node * mass_g, r2, ln_density));
    }
    Some(shells)
}
