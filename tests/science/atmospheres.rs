//! Invariants of computed atmospheres, and of the bundled grid.

use emberline::atmosphere::{FLUX_TOLERANCE, compute_atmosphere};
use emberline::fit::{FitSettings, Fitter};
use emberline::physics::constants::STEFAN_BOLTZMANN_CGS;
use emberline::physics::stark::ProfileTable;

use crate::support::published::{bundled_grid, root};

/// Flux constant at every depth and right at the surface, for radiative, half and fully convective stars.
#[test]
fn verify_flux_is_constant() {
    let profiles = ProfileTable::read(&root().join("grids/stark_profiles.bin")).unwrap();
    for (teff_k, log_g, is_convective) in [(7000.0, 8.0, true), (12_000.0, 8.0, true), (30_000.0, 7.5, false)]
    {
        let model = compute_atmosphere(teff_k, log_g, &profiles).unwrap();
        let convergence = model.convergence;
        println!("{teff_k} K, log g {log_g}: {convergence:?}");
        assert!(
            convergence.flux_error_max < FLUX_TOLERANCE && convergence.flux_error_surface < FLUX_TOLERANCE
        );
        assert_eq!(convergence.convective_fraction_max > 0.5, is_convective);
        assert!(
            model.rosseland_depth[0] < 1e-6 && model.rosseland_depth[model.rosseland_depth.len() - 1] > 50.0
        );
        assert!(model.states.windows(2).all(|pair| pair[1].pressure_cgs > pair[0].pressure_cgs));
    }
}

/// Every node of the bundled grid is converged, and its energy distribution, integrated on wavelengths of
/// its own, gives sigma Teff^4 (Stefan-Boltzmann) where 900 A - 3 micrometres hold nearly all of it. The
/// coarse sampling of lines and the missing infrared leave 1.5 %.
#[test]
fn verify_bundled_grid_keeps_the_flux() {
    let grid = bundled_grid();
    assert!(grid.teff_k.len() >= 40 && grid.log_g.len() >= 13);
    for node in &grid.nodes {
        assert!(node.flux_error_max < FLUX_TOLERANCE && node.flux_error_surface < FLUX_TOLERANCE, "{node:?}");
        if !(10_000.0..=20_000.0).contains(&node.teff_k) {
            continue;
        }
        let flux = grid.interpolate_sed(&grid.stencil(node.teff_k, node.log_g).unwrap());
        let waves = &grid.sed_wave_vac_aa;
        let total: f64 =
            (1..waves.len()).map(|i| 0.5 * (flux[i] + flux[i - 1]) * (waves[i] - waves[i - 1])).sum();
        let exact = STEFAN_BOLTZMANN_CGS * node.teff_k.powi(4);
        assert!(
            (total / exact - 1.0).abs() < 0.015,
            "{} K, log g {}: {}",
            node.teff_k,
            node.log_g,
            total / exact
        );
    }
}

/// Balmer lines are strongest near 13 000 K at log g 8 and peak at higher temperatures for higher
/// gravities (common practice).
#[test]
fn validate_ridge_of_line_strength() {
    let fitter = Fitter::new(bundled_grid(), FitSettings::default());
    let ridge: Vec<f64> = [7.0, 7.5, 8.0, 8.5, 9.0].iter().map(|log_g| fitter.ridge_k(*log_g)).collect();
    println!("ridge at log g 7, 7.5, 8, 8.5, 9: {ridge:.0?} K");
    assert!((12_000.0..14_500.0).contains(&ridge[2]), "{ridge:?}");
    assert!(ridge.windows(2).all(|pair| pair[1] > pair[0]), "{ridge:?}");
}
