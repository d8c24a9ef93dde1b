//! One fit, from the coarse scan to the chosen solution, on the bundled grid.

use std::path::Path;
use std::sync::OnceLock;

use emberline::fit::{FitSettings, Fitter};
use emberline::grid::FluxGrid;
use emberline::rehearsal::{Sighting, observe};

fn grid() -> &'static FluxGrid {
    static GRID: OnceLock<FluxGrid> = OnceLock::new();
    GRID.get_or_init(|| FluxGrid::read(&grid_path()).unwrap())
}

fn grid_path() -> std::path::PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("grids/flux.fits")
}

#[divan::bench(sample_count = 20)]
fn open_grid() -> FluxGrid {
    FluxGrid::read(&grid_path()).unwrap()
}

#[divan::bench(sample_count = 50)]
fn one_fit(bencher: divan::Bencher) {
    let fitter = Fitter::new(grid(), FitSettings::default());
    let night: Vec<Sighting> = (0..16).map(|number| observe(grid(), 1, number).unwrap()).collect();
    let mut next = 0;
    bencher.bench_local(|| {
        next += 1;
        fitter.fit(&night[next % night.len()].spectrum).unwrap()
    });
}

#[divan::bench]
fn interpolate_one_spectrum(bencher: divan::Bencher) {
    let grid = grid();
    let stencil = grid.stencil(17_300.0, 8.1).unwrap();
    let count = grid.wave_vac_aa.len();
    let mut outputs = [vec![0.0; count], vec![0.0; count], vec![0.0; count]];
    bencher.bench_local(|| {
        let [flux, per_kelvin, per_log_g] = &mut outputs;
        grid.interpolate_with_slopes(&stencil, 0..count, flux, per_kelvin, per_log_g);
    });
}
