//! A grid of made-up spectra with the traits that matter to a fit: lines that peak near 13 000 K
//! and widen with gravity, on a Planck continuum. Smooth and instant, with known truth.

use emberline::grid::axis::{balmer_axis, sed_axis};
use emberline::grid::{FluxGrid, GridHeader, NodeRecord};
use emberline::physics::hydrogen::Line;
use emberline::physics::planck::planck_per_hz;
use ndarray::Array3;

/// The toy grid; every call makes the same.
pub fn toy_grid() -> FluxGrid {
    let teff_k: Vec<f64> =
        (0..26).map(|i| 7000.0 * (60_000.0_f64 / 7000.0).powf(f64::from(i) / 25.0)).collect();
    let log_g: Vec<f64> = (0..11).map(|i| 6.5 + 0.3 * f64::from(i)).collect();
    let (wave_vac_aa, sed_wave_vac_aa) = (balmer_axis(), sed_axis());
    let fill = |waves: &[f64]| {
        Array3::from_shape_fn((teff_k.len(), log_g.len(), waves.len()), |(i, j, k)| {
            toy_flux(teff_k[i], log_g[j], waves[k]).ln() as f32
        })
    };
    let (ln_flux, ln_sed) = (fill(&wave_vac_aa), fill(&sed_wave_vac_aa));
    let nodes = teff_k
        .iter()
        .flat_map(|teff_k| log_g.iter().map(move |log_g| (*teff_k, *log_g)))
        .map(|(teff_k, log_g)| NodeRecord {
            teff_k,
            log_g,
            iterations: 1,
            flux_error_max: 0.0,
            flux_error_surface: 0.0,
            temperature_change: 0.0,
            convective_flux_max_fraction: 0.0,
        })
        .collect();
    let header =
        GridHeader::now(vec![("COMPOS".to_owned(), "made up".to_owned())], "2026-01-01T00:00:00".to_owned());
    let mut grid = FluxGrid { teff_k, log_g, wave_vac_aa, ln_flux, sed_wave_vac_aa, ln_sed, nodes, header };
    grid.header.blake3 = grid.compute_blake3();
    grid
}

/// Flux per A of the made-up star.
pub fn toy_flux(teff_k: f64, log_g: f64, wave_vac_aa: f64) -> f64 {
    let strength = (-0.5 * ((teff_k / 13_000.0).ln() / 0.75).powi(2)).exp();
    let lines: f64 = (3..=11)
        .map(|upper| {
            let centre = Line { lower: 2, upper }.wave_vac_aa();
            let level = f64::from(upper);
            let width =
                18.0 * strength.powf(0.4) * 10f64.powf(0.28 * (log_g - 8.0)) * (5.0 / level).powf(0.8);
            let x = (wave_vac_aa - centre) / width;
            let dissolved = (-0.35 * (level - 4.0).max(0.0) * 10f64.powf(0.3 * (log_g - 8.0))).exp();
            0.75 * strength.powf(0.6) * dissolved / (1.0 + x.abs().powf(2.2))
        })
        .sum();
    let hz = 2.997_924_58e18 / wave_vac_aa;
    planck_per_hz(hz, teff_k) / (wave_vac_aa * wave_vac_aa) * (-lines).exp() * 1e20
}
