//! One model atmosphere, and its spectrum, on one core.

use std::path::Path;
use std::sync::OnceLock;

use emberline::atmosphere::{Atmosphere, compute_atmosphere, emergent_flux};
use emberline::grid::axis::balmer_axis;
use emberline::physics::stark::ProfileTable;

fn profiles() -> &'static ProfileTable {
    static TABLE: OnceLock<ProfileTable> = OnceLock::new();
    TABLE.get_or_init(|| {
        ProfileTable::read(&Path::new(env!("CARGO_MANIFEST_DIR")).join("grids/stark_profiles.bin")).unwrap()
    })
}

#[divan::bench(args = [8000.0, 12_000.0, 30_000.0], sample_count = 3)]
fn one_atmosphere(teff_k: f64) -> Atmosphere {
    compute_atmosphere(teff_k, 8.0, profiles()).unwrap()
}

#[divan::bench(sample_count = 3)]
fn one_spectrum(bencher: divan::Bencher) {
    let atmosphere = compute_atmosphere(20_000.0, 8.0, profiles()).unwrap();
    bencher.bench_local(|| emergent_flux(&atmosphere, &balmer_axis(), profiles()));
}
