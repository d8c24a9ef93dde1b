//! The grid file: written and read back, and refused when it is not what it should be.

use std::fs;

use emberline::atmosphere::{compute_atmosphere, emergent_flux};
use emberline::grid::{FluxGrid, GridFault};
use emberline::physics::stark::ProfileTable;

use crate::support::published::{bundled_grid, root};
use crate::support::toy_grid::toy_grid;

#[test]
fn verify_grid_survives_the_file() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("flux[1].fits");
    let grid = toy_grid();
    grid.write(&path).unwrap();
    let back = FluxGrid::read(&path).unwrap();
    assert_eq!(back.teff_k, grid.teff_k);
    assert_eq!(back.wave_vac_aa, grid.wave_vac_aa);
    assert_eq!(back.ln_flux, grid.ln_flux);
    assert_eq!(back.ln_sed, grid.ln_sed);
    assert_eq!(back.nodes, grid.nodes);
    assert_eq!(back.header, grid.header);
}

#[test]
fn verify_damaged_grids_are_refused_by_name() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("flux.fits");
    toy_grid().write(&path).unwrap();
    let whole = fs::read(&path).unwrap();
    let refuse = |bytes: &[u8]| {
        fs::write(&path, bytes).unwrap();
        let fault = FluxGrid::read(&path).unwrap_err();
        assert!(fault.to_string().contains("flux.fits"), "{fault}");
        fault
    };
    assert!(matches!(refuse(&whole[..whole.len() / 2]), GridFault::Damaged { .. }));
    assert!(matches!(refuse(b"no FITS at all"), GridFault::Damaged { .. }));
    assert!(matches!(refuse(b""), GridFault::Damaged { .. }));
    let mut flipped = whole.clone();
    let middle = whole.len() * 3 / 4;
    flipped[middle] ^= 1;
    let fault = refuse(&flipped);
    assert!(fault.to_string().contains("checksum"), "{fault}");
    let mut other = whole.clone();
    let card = whole.windows(7).position(|window| window == b"PHYSVER").unwrap();
    let digit = (card + 10..card + 40).rev().find(|i| other[*i].is_ascii_digit()).unwrap();
    other[digit] = b'9';
    let fault = refuse(&other);
    assert!(matches!(fault, GridFault::OtherVersion { what: "physics", .. }), "{fault}");
    fs::remove_file(&path).unwrap();
    assert!(matches!(FluxGrid::read(&path).unwrap_err(), GridFault::Io { .. }));
    assert!(matches!(FluxGrid::read(folder.path()).unwrap_err(), GridFault::Damaged { .. }));
}

#[test]
fn verify_nothing_is_extrapolated() {
    let grid = toy_grid();
    for (teff_k, log_g) in [(6999.0, 8.0), (60_001.0, 8.0), (10_000.0, 6.4), (10_000.0, 9.6), (f64::NAN, 8.0)]
    {
        assert!(grid.stencil(teff_k, log_g).is_err(), "{teff_k} {log_g}");
    }
    assert!(grid.stencil(7000.0, 6.5).is_ok() && grid.stencil(60_000.0, 9.5).is_ok());
}

/// The bundled grid is what this code computes: two of its nodes, made anew, to 2e-4 in the flux. (On one
/// machine they are the same to the bit; libraries of mathematics differ between machines.)
#[test]
fn verify_bundled_grid_belongs_to_this_code() {
    let grid = bundled_grid();
    let profiles = ProfileTable::read(&root().join("grids/stark_profiles.bin")).unwrap();
    for (teff_k, log_g) in [(9000.0, 8.0), (30_000.0, 7.5)] {
        let i = grid.teff_k.iter().position(|node| *node == teff_k).unwrap();
        let j = grid.log_g.iter().position(|node| *node == log_g).unwrap();
        let atmosphere = compute_atmosphere(teff_k, log_g, &profiles).unwrap();
        let flux = emergent_flux(&atmosphere, &grid.wave_vac_aa, &profiles);
        let kept = grid.ln_flux.slice(ndarray::s![i, j, ..]);
        let worst = flux
            .iter()
            .zip(kept)
            .fold(0.0_f64, |worst, (flux, kept)| worst.max((flux.ln() - f64::from(*kept)).abs()));
        println!("{teff_k} K, log g {log_g}: {worst:.1e}");
        assert!(worst < 2e-4, "{teff_k} K, log g {log_g}: {worst}");
    }
}
