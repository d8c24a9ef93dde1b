//! Passbands, magnitudes and distances against published values.

use std::path::Path;

use emberline::grid::magnitude_table::MagnitudeTable;
use emberline::grid::passband::{BANDS, passbands};
use emberline::grid::track_table::TrackTable;
use emberline::interior::structure::HydrogenLayer::Thick;
use emberline::spectrum::{ReadSettings, read_file};
use emberline::star::{ApparentMagnitude, StarModels, describe};

use crate::support::published::bundled_grid;

fn band(name: &str) -> usize {
    BANDS.iter().position(|band| *band == name).unwrap()
}

/// A source of constant F_nu = 3.631e-20 erg s^-1 cm^-2 Hz^-1 has AB magnitude 0 in every band, by definition.
#[test]
fn verify_ab_magnitudes_by_definition() {
    const LIGHT_SPEED_AA_S: f64 = 2.997_924_58e18;
    let waves: Vec<f64> = (0..2000).map(|i| 2000.0 + 5.0 * f64::from(i)).collect();
    let flux: Vec<f64> = waves.iter().map(|wave| 3.631e-20 * LIGHT_SPEED_AA_S / wave.powi(2)).collect();
    for (name, passband) in BANDS.iter().zip(passbands()) {
        let found = passband.magnitude(&waves, &flux) - passband.offset_mag;
        assert!(found.abs() < 1e-3, "{name}: {found}");
    }
}

/// V of flux standards from their CALSPEC spectra against V from the telescope (Landolt & Uomoto 2007,
/// AJ 133, 768; from memory).
#[test]
fn validate_v_of_standard_stars() {
    for (file, published) in
        [("gd71_stisnic_002", 13.033), ("gd153_stisnic_002", 13.349), ("g191b2b_stisnic_002", 11.781)]
    {
        let path = Path::new(env!("CARGO_MANIFEST_DIR")).join(format!("tests/data/calspec/{file}.fits.gz"));
        let observation = read_file(&path, &ReadSettings::default()).remove(0).unwrap();
        let spectrum = &observation.spectrum;
        let found = passbands()[band("johnson_v")].magnitude(spectrum.wave_vac_aa(), spectrum.flux());
        println!("{file}: V {found:.3}, published {published}");
        assert!((found - published).abs() < 0.015, "{file}: {found}");
    }
}

/// V of two white dwarfs of known radius, temperature and parallax: 40 Eri B (V 9.52, 199.6 mas) and Sirius B (V
/// 8.44, 378.9 mas), Bond, Bergeron & Bedard 2017 and Bond et al. 2017; from memory. The radii are known to
/// 1.5 % and 0.6 %, the temperatures to 1 %: together 0.05 mag.
#[test]
fn validate_magnitudes_of_resolved_stars() {
    let table = MagnitudeTable::new(bundled_grid());
    for (name, teff_k, log_g, radius_rsun, parallax_arcsec, published) in [
        ("40 Eri B", 17_200.0, 7.96, 0.013_08, 0.1996, 9.52),
        ("Sirius B", 25_369.0, 8.591, 0.008_10, 0.3789, 8.44),
    ] {
        let absolute = table.at(teff_k, log_g, radius_rsun).unwrap()[band("johnson_v")];
        let found = absolute - 5.0 * f64::log10(10.0 * parallax_arcsec);
        println!("{name}: V {found:.3}, published {published}");
        assert!((found - published).abs() < 0.08, "{name}: {found}");
    }
}

/// Distances of three flux standards from published parameters (Gianninas, Bergeron & Ruiz 2011) and V, against
/// Gaia parallaxes of 19.56, 14.59 and 19.0 mas (from memory). The spectroscopic log g is known to 0.05, which is
/// 4 % of the distance.
#[test]
fn validate_spectroscopic_distances() {
    let tracks = TrackTable::read(&Path::new(env!("CARGO_MANIFEST_DIR")).join("grids/tracks.fits")).unwrap();
    let magnitudes = MagnitudeTable::new(bundled_grid());
    let models = StarModels { tracks: &tracks, magnitudes: Some(&magnitudes), layer: Thick };
    for (name, teff_k, log_g, v, parallax_mas) in [
        ("GD 71", 33_590.0, 7.93, 13.033, 19.56),
        ("GD 153", 40_320.0, 7.93, 13.349, 14.59),
        ("G191-B2B", 60_920.0, 7.55, 11.781, 19.0),
    ] {
        let apparent = ApparentMagnitude::new("johnson_v", v, 0.01).unwrap();
        let covariance = [[(0.012_f64 * teff_k).powi(2), 0.0], [0.0, 0.038_f64.powi(2)]];
        let star = describe(teff_k, log_g, &covariance, None, Some(&apparent), &models).star;
        let (found, published) = (star.distance_pc.value.unwrap(), 1000.0 / parallax_mas);
        println!("{name}: {found:.1} pc, parallax {published:.1} pc, {:?}", star.distance_pc);
        assert!((found / published - 1.0).abs() < 0.08, "{name}: {found} for {published}");
        assert!(star.distance_pc.err_plus.unwrap() > 0.01 * found);
    }
}

#[test]
fn verify_magnitude_arguments() {
    assert!("gaia_g=15.32:0.02".parse::<ApparentMagnitude>().is_ok());
    for wrong in ["gaia_g", "gaia_q=15", "gaia_g=nan", "gaia_g=15:-1", ""] {
        let fault = wrong.parse::<ApparentMagnitude>().unwrap_err().to_string();
        assert!(fault.contains("johnson_v"), "{fault}");
    }
}

/// Outside the grid of model spectra the magnitudes are null, with a flag, and the rest stays.
#[test]
fn verify_no_magnitudes_outside_the_grid() {
    let tracks = TrackTable::read(&Path::new(env!("CARGO_MANIFEST_DIR")).join("grids/tracks.fits")).unwrap();
    let magnitudes = MagnitudeTable::new(bundled_grid());
    let models = StarModels { tracks: &tracks, magnitudes: Some(&magnitudes), layer: Thick };
    let report = describe(5000.0, 8.0, &[[0.0; 2]; 2], None, None, &models);
    assert!(report.star.mass_msun.value.is_some());
    assert!(report.star.absolute_magnitude.gaia_g.value.is_none());
    assert!(report.flags.iter().any(|flag| flag.code == "star.no-magnitudes"));
}
