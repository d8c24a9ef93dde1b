//! Magnitudes of the grid's nodes, and their interpolation.
//!
//! Where the fine spectra reach they are used, elsewhere the energy distributions. Interstellar
//! extinction is not included.

use ndarray::Array3;
use rayon::prelude::*;

use super::FluxGrid;
use super::flux_grid::Stencil;
use super::passband::{BANDS, passbands};
use crate::physics::constants::{PARSEC_CM, SOLAR_RADIUS_CM};

/// One magnitude per band, in the order of [`BANDS`].
pub type Magnitudes = [f64; BANDS.len()];

/// Magnitudes of stars of one solar radius at 10 pc.
#[derive(Debug, Clone)]
pub struct MagnitudeTable {
    teff_k: Vec<f64>,
    log_g: Vec<f64>,
    /// Axes Teff, log g, band.
    magnitudes: Array3<f64>,
}

impl MagnitudeTable {
    /// Integrates every node of a grid through every band.
    pub fn new(grid: &FluxGrid) -> Self {
        let fine = &grid.wave_vac_aa;
        let sed = &grid.sed_wave_vac_aa;
        let (first, last) = (fine[0], fine[fine.len() - 1]);
        // The energy distribution bluer than, and redder than, the fine spectrum.
        let (bluer, redder) =
            (sed.partition_point(|wave| *wave < first), sed.partition_point(|wave| *wave <= last));
        let wave_aa: Vec<f64> = [&sed[..bluer], fine, &sed[redder..]].concat();
        let weights = passbands().each_ref().map(|passband| passband.weights(&wave_aa));
        let dilution_mag = 5.0 * (10.0 * PARSEC_CM / SOLAR_RADIUS_CM).log10();
        let nodes: Vec<(usize, usize)> =
            (0..grid.teff_k.len()).flat_map(|i| (0..grid.log_g.len()).map(move |j| (i, j))).collect();
        let values: Vec<f64> = nodes
            .into_par_iter()
            .flat_map_iter(|(i, j)| {
                let sed = grid.ln_sed.slice(ndarray::s![i, j, ..]);
                let fine = grid.ln_flux.slice(ndarray::s![i, j, ..]);
                let flux: Vec<f64> = sed
                    .iter()
                    .take(bluer)
                    .chain(fine)
                    .chain(sed.iter().skip(redder))
                    .map(|ln_flux| f64::from(*ln_flux).exp())
                    .collect();
                weights.each_ref().map(|weights| {
                    let photons: f64 = weights.iter().zip(&flux).map(|(weight, flux)| weight * flux).sum();
                    dilution_mag - 2.5 * photons.log10()
                })
            })
            .collect();
        let mut magnitudes = Array3::zeros((grid.teff_k.len(), grid.log_g.len(), BANDS.len()));
        magnitudes.iter_mut().zip(values).for_each(|(target, value)| *target = value);
        MagnitudeTable { teff_k: grid.teff_k.clone(), log_g: grid.log_g.clone(), magnitudes }
    }

    /// Magnitudes at 10 pc of a star of a radius (solar radii); `None` outside the grid.
    pub fn at(&self, teff_k: f64, log_g: f64, radius_rsun: f64) -> Option<Magnitudes> {
        let stencil = Stencil::new(&self.teff_k, &self.log_g, teff_k, log_g)?;
        let mut magnitudes = [-5.0 * radius_rsun.log10(); BANDS.len()];
        for (i, j, weight, ..) in stencil.terms() {
            let node = self.magnitudes.slice(ndarray::s![i, j, ..]);
            magnitudes.iter_mut().zip(node).for_each(|(sum, value)| *sum += weight * value);
        }
        Some(magnitudes)
    }
}
