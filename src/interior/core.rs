//! The core of a star: composition, and its structure outward from the centre.
//!
//! In: mass, central density and temperature, the star's luminosities. Out: shells up to the base of
//! the helium layer. Heat flows by conduction (with photons) along L(m), which rises in proportion to the mass
//! (every gram gives up about the same heat) less the neutrinos emitted inside m. The gradient
//! matters: below the envelope the temperature still rises by 20 % at 10 000 K and 0.6 Msun, more in hotter
//! stars. Variables r^2, ln rho, ln T over z = m^(2/3), regular at the centre; Runge-Kutta.

use std::f64::consts::PI;
use std::sync::OnceLock;

use ndarray::{Array1, Array2};
use ndarray_interp::interp2d::{Bilinear, Interp2D, Interp2DOwned};
use rayon::prelude::*;

use super::cold::Gravity;
use super::conduction::conductive_opacity_cm2_g;
use super::matter::{Composition, MatterState, matter_state};
use super::neutrinos::neutrino_loss_erg_g_s;
use super::opacity::ionised_rosseland_cm2_g;
use super::structure::HELIUM_FRACTION;
use crate::physics::constants::{GRAVITATION_CGS, STEFAN_BOLTZMANN_CGS};

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

    /// Neutrino losses, erg/g/s.
    fn neutrinos_erg_g_s(&self, density_g_cm3: f64, temperature_k: f64) -> f64 {
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
    /// Thermodynamic state.
    pub matter: MatterState,
}

/// What a core is computed for.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct CoreInput {
    /// Mass of the whole star, g.
    pub mass_g: f64,
    /// ln of the central density, g/cm3.
    pub ln_central_density: f64,
    /// ln of the central temperature, K.
    pub ln_central_temperature: f64,
    /// Photon luminosity of the star, erg/s.
    pub luminosity_erg_s: f64,
    /// Neutrino luminosity of the core, erg/s, as assumed for the flow of heat.
    pub neutrino_luminosity_erg_s: f64,
    /// Law of gravity.
    pub gravity: Gravity,
}

/// A core integrated to the base of the helium layer.
#[derive(Debug, Clone)]
pub struct CoreSolution {
    /// From the centre outward, the same mass fractions in every model.
    pub shells: Vec<Shell>,
    /// Outer radius, cm.
    pub radius_cm: f64,
    /// Neutrino luminosity found, erg/s.
    pub neutrino_luminosity_erg_s: f64,
}

/// Mass fractions of the core nodes.
fn core_nodes() -> Vec<f64> {
    let split = INNER_SHARE.powf(2.0 / 3.0);
    let mut nodes: Vec<f64> =
        (0..=INNER_NODES).map(|i| (split * i as f64 / INNER_NODES as f64).powf(1.5)).collect();
    let (first, last) = ((1.0 - INNER_SHARE).ln(), HELIUM_FRACTION.ln());
    nodes.extend(
        (1..=OUTER_NODES).map(|i| 1.0 - (first + (last - first) * i as f64 / OUTER_NODES as f64).exp()),
    );
    nodes
}

/// State of the integration: r^2, ln rho, ln T, neutrino luminosity inside.
#[derive(Clone, Copy)]
struct Vector([f64; 4]);

impl Vector {
    fn plus(&self, d: &Vector, h: f64) -> Vector {
        Vector(std::array::from_fn(|i| self.0[i] + h * d.0[i]))
    }
}

/// Integrates a core outward; `None` outside the tables or where it has no hydrostatic solution.
pub fn integrate_core(input: &CoreInput, material: &CoreMaterial) -> Option<CoreSolution> {
    let total = (input.luminosity_erg_s + input.neutrino_luminosity_erg_s) / input.mass_g;
    let slope = |z: f64, at: &Vector| -> Option<Vector> {
        let Vector([r2, ln_density, ln_temperature, neutrinos]) = *at;
        let (rho, t) = (ln_density.exp(), ln_temperature.exp());
        let state = matter_state(&material.composition, rho, t);
        let (r, m) = (r2.max(0.0).sqrt(), z.powf(1.5));
        let dm = 1.5 * z.sqrt();
        let opacity = material.ln_opacity.interp_scalar(ln_density, ln_temperature).ok()?.exp();
        let heat = total - neutrinos / m;
        let gradient = 3.0 * opacity * state.pressure_cgs * heat
            / (64.0 * PI * STEFAN_BOLTZMANN_CGS * GRAVITATION_CGS * t.powi(4));
        let dln_p = -GRAVITATION_CGS * m * dm / (4.0 * PI * r2 * r2) / state.pressure_cgs
            * input.gravity.factor(state.pressure_cgs, rho, r, m);
        let dln_t = gradient * dln_p;
        let derivative = [
            2.0 * dm / (4.0 * PI * r * rho),
            (dln_p - state.chi_temperature * dln_t) / state.chi_density,
            dln_t,
            dm * material.neutrinos_erg_g_s(rho, t),
        ];
        (derivative.iter().all(|d| d.is_finite()) && state.chi_density > 0.0).then_some(Vector(derivative))
    };
    let nodes = core_nodes();
    let (rho, t) = (input.ln_central_density.exp(), input.ln_central_temperature.exp());
    let central = matter_state(&material.composition, rho, t);
    let mut shells = vec![Shell { mass_g: 0.0, matter: central }];
    // Uniform ball up to a thousandth of the first node.
    let first_mass = nodes[1] * 1e-3 * input.mass_g;
    let mut z = first_mass.powf(2.0 / 3.0);
    let r2 = (3.0 * first_mass / (4.0 * PI * rho)).powf(2.0 / 3.0);
    let drop = 2.0 * PI / 3.0 * GRAVITATION_CGS * rho * rho * r2 / (central.pressure_cgs * central.chi_density);
    let mut at = Vector([
        r2,
        input.ln_central_density - drop,
        input.ln_central_temperature,
        first_mass * material.neutrinos_erg_g_s(rho, t),
    ]);
    for node in &nodes[1..] {
        let mass_g = node * input.mass_g;
        let h = mass_g.powf(2.0 / 3.0) - z;
        let k1 = slope(z, &at)?;
        let k2 = slope(z + 0.5 * h, &at.plus(&k1, 0.5 * h))?;
        let k3 = slope(z + 0.5 * h, &at.plus(&k2, 0.5 * h))?;
        let k4 = slope(z + h, &at.plus(&k3, h))?;
        at = at.plus(&k1, h / 6.0).plus(&k2, h / 3.0).plus(&k3, h / 3.0).plus(&k4, h / 6.0);
        z += h;
        let matter = matter_state(&material.composition, at.0[1].exp(), at.0[2].exp());
        shells.push(Shell { mass_g, matter });
    }
    Some(CoreSolution { shells, radius_cm: at.0[0].sqrt(), neutrino_luminosity_erg_s: at.0[3] })
}
