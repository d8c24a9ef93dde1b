//! Benchmarks: `cargo bench`.
#![allow(missing_docs, clippy::unwrap_used)]

mod atmospheres;
mod fitting;
mod reading;

use std::path::Path;

use emberline::grid::FluxGrid;
use emberline::grid::magnitude_table::MagnitudeTable;
use emberline::grid::track_table::TrackTable;
use emberline::interior::structure::HydrogenLayer;
use emberline::star::{StarModels, describe};

fn main() {
    divan::main();
}

fn tracks() -> TrackTable {
    TrackTable::read(&Path::new(env!("CARGO_MANIFEST_DIR")).join("grids/tracks.fits")).unwrap()
}

fn flux_grid() -> FluxGrid {
    FluxGrid::read(&Path::new(env!("CARGO_MANIFEST_DIR")).join("grids/flux.fits")).unwrap()
}

/// Magnitudes of all nodes, once per process.
#[divan::bench(sample_count = 10)]
fn magnitudes_of_the_grid(bencher: divan::Bencher) {
    let grid = flux_grid();
    bencher.bench(|| MagnitudeTable::new(&grid));
}

/// (Teff, log g) to mass, radius and age.
#[divan::bench]
fn track_lookup(bencher: divan::Bencher) {
    let tracks = tracks();
    bencher.bench(|| tracks.at(divan::black_box(14_321.0), divan::black_box(8.03), HydrogenLayer::Thick));
}

/// The whole star block with its intervals.
#[divan::bench]
fn star_block(bencher: divan::Bencher) {
    let tracks = tracks();
    let magnitudes = MagnitudeTable::new(&flux_grid());
    let models = StarModels { tracks: &tracks, magnitudes: Some(&magnitudes), layer: HydrogenLayer::Thick };
    let covariance = [[3e4, 2.0], [2.0, 2e-3]];
    bencher.bench(|| describe(divan::black_box(14_321.0), 8.03, &covariance, Some(40.0), None, &models));
}
