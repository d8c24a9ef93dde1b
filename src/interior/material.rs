//! Tables of hydrogen and helium for the envelope: everything its equations need, on a grid of
//! density and temperature.
//!
//! In: layer, ln density, ln temperature. Out: [`Material`]. Built once per process (a few seconds on
//! two cores) from [`super::layer`], [`super::opacity`] and [`super::conduction`]; fully ionised matter is
//! taken directly from [`super::matter`]. Bilinear in the logarithms (`ndarray-interp`); outside the
//! table the lookup refuses, and so it does near unstable densities of cold hydrogen (below about 2e4 K at 0.3 - 1 g/cm3),
//! which only the coolest and most massive stars would reach.

use std::sync::OnceLock;

use ndarray::{Array1, Array3};
use ndarray_interp::interp2d::{Bilinear, Interp2D, Interp2DOwned};
use rayon::prelude::*;

use super::conduction::conductive_opacity_cm2_g;
use super::layer::{Layer, LayerState, layer_state};
use super::matter::{Composition, MatterState, matter_state};
use super::opacity::rosseland_of_state_cm2_g;

const COLUMNS: usize = 7;
/// log10 density: low, step, count.
const LOG_DENSITY: (f64, f64, usize) = (-13.0, 0.1, 206);
/// log10 temperature: low, step, count.
const LOG_TEMPERATURE: (f64, f64, usize) = (3.3, 0.04, 141);
/// Hotter than this, or denser than the next, both layers are fully ionised to 1e-3.
const IONISED_TEMPERATURE_K: f64 = 5e6;
const IONISED_DENSITY_G_CM3: f64 = 3e3;

/// Local properties of a layer.
#[derive(Debug, Clone, Copy)]
pub struct Material {
    /// ln of the pressure, dyn/cm2, radiation included.
    pub ln_pressure: f64,
    /// ln of the total (radiative and conductive) opacity, cm2/g.
    pub ln_opacity: f64,
    /// Adiabatic gradient.
    pub adiabatic_gradient: f64,
    /// Heat capacity at constant pressure, erg/g/K.
    pub heat_capacity_p_erg_g_k: f64,
    /// d ln P / d ln rho.
    pub chi_density: f64,
    /// d ln P / d ln T.
    pub chi_temperature: f64,
    /// Entropy, erg/g/K.
    pub entropy_erg_g_k: f64,
}

/// The table of one layer.
pub struct MaterialTable {
    columns: Interp2DOwned<f64, ndarray::Ix3, Bilinear>,
}

fn axis((low, step, count): (f64, f64, usize)) -> Array1<f64> {
    (0..count).map(|i| (low + step * i as f64) * std::f64::consts::LN_10).collect()
}

fn composition(layer: Layer) -> Composition {
    match layer {
        Layer::Hydrogen => Composition::hydrogen(),
        Layer::Helium => Composition::helium(),
    }
}

/// One node: state by the fuller or the simpler equation of state, opacities by both carriers.
fn node(layer: Layer, mixture: &Composition, density_g_cm3: f64, temperature_k: f64) -> [f64; COLUMNS] {
    let ionised = temperature_k > IONISED_TEMPERATURE_K || density_g_cm3 > IONISED_DENSITY_G_CM3;
    let state = if ionised {
        let matter: MatterState = matter_state(mixture, density_g_cm3, temperature_k);
        LayerState::fully_ionised(layer, matter, mixture.electron_density_per_cm3(density_g_cm3))
    } else {
        layer_state(layer, density_g_cm3, temperature_k)
    };
    let radiative = rosseland_of_state_cm2_g(layer, &state);
    let electrons = state.electrons_per_cm3;
    let conductive = conductive_opacity_cm2_g(
        layer.charge(),
        layer.atomic_mass_g() / crate::physics::constants::ATOMIC_MASS_UNIT_G,
        electrons,
        temperature_k,
        density_g_cm3,
    );
    let opacity = 1.0 / (1.0 / radiative + 1.0 / conductive);
    let m = state.matter;
    // Where neutral hydrogen or helium would turn metallic at once (cold and dense), the free energy has no stable
    // state of this density: such nodes are no part of the table.
    let is_stable = m.chi_density > 0.05 && m.chi_temperature > 0.0 && m.heat_capacity_v_erg_g_k > 0.0;
    if !is_stable {
        return [f64::NAN; COLUMNS];
    }
    [
        m.pressure_cgs.ln(),
        opacity.ln(),
        m.adiabatic_gradient,
        m.heat_capacity_p_erg_g_k,
        m.chi_density,
        m.chi_temperature,
        m.entropy_erg_g_k,
    ]
}

impl MaterialTable {
    fn build(layer: Layer) -> Option<Self> {
        let mixture = composition(layer);
        let (densities, temperatures) = (axis(LOG_DENSITY), axis(LOG_TEMPERATURE));
        let rows: Vec<[f64; COLUMNS]> = densities
            .as_slice()?
            .par_iter()
            .flat_map_iter(|ln_density| {
                let mixture = &mixture;
                temperatures.iter().map(move |ln_t| node(layer, mixture, ln_density.exp(), ln_t.exp()))
            })
            .collect();
        let flat: Vec<f64> = rows.into_iter().flatten().collect();
        let data = Array3::from_shape_vec((densities.len(), temperatures.len(), COLUMNS), flat).ok()?;
        let columns = Interp2D::builder(data).x(densities).y(temperatures).build().ok()?;
        Some(MaterialTable { columns })
    }

    /// The table of a layer, computed at its first use.
    pub fn shared(layer: Layer) -> Option<&'static MaterialTable> {
        static HYDROGEN: OnceLock<Option<MaterialTable>> = OnceLock::new();
        static HELIUM: OnceLock<Option<MaterialTable>> = OnceLock::new();
        let slot = match layer {
            Layer::Hydrogen => &HYDROGEN,
            Layer::Helium => &HELIUM,
        };
        slot.get_or_init(|| MaterialTable::build(layer)).as_ref()
    }

    /// Properties at a density and temperature, `None` outside the table or where they are undefined.
    pub fn at(&self, ln_density: f64, ln_temperature: f64) -> Option<Material> {
        let mut row = Array1::<f64>::zeros(COLUMNS);
        self.columns.interp_into(ln_density, ln_temperature, row.view_mut()).ok()?;
        if row.iter().any(|value| !value.is_finite()) {
            return None;
        }
        Some(Material {
            ln_pressure: row[0],
            ln_opacity: row[1],
            adiabatic_gradient: row[2],
            heat_capacity_p_erg_g_k: row[3],
            chi_density: row[4],
            chi_temperature: row[5],
            entropy_erg_g_k: row[6],
        })
    }

    /// ln density and properties at a pressure and temperature, by Newton from a guess.
    pub fn at_pressure(&self, ln_pressure: f64, ln_temperature: f64, guess: f64) -> Option<(f64, Material)> {
        let mut ln_density = guess;
        let mut material = self.at(ln_density, ln_temperature)?;
        for _ in 0..40 {
            let step = (ln_pressure - material.ln_pressure) / material.chi_density.max(0.05);
            if step.abs() < 1e-7 {
                return Some((ln_density, material));
            }
            ln_density += step.clamp(-1.0, 1.0);
            material = self.at(ln_density, ln_temperature)?;
        }
        None
    }
}
