//! Real DA white dwarfs: what the whole program makes of them.

use emberline::fit::{FitSettings, Fitter};
use emberline::spectrum::ReadSettings;

use emberline::grid::magnitude_table::MagnitudeTable;
use emberline::grid::track_table::TrackTable;
use emberline::interior::structure::HydrogenLayer::Thick;
use emberline::star::{ApparentMagnitude, StarModels, describe};

use crate::support::published::{STANDARDS, bundled_grid, read_one};

/// How far a star may be from the literature.
const LARGEST_TEFF: f64 = 0.08;
const LARGEST_LOG_G: f64 = 0.25;

/// Stars that miss this, and why. GD 50 and HZ 4: optical data of Oke (1990), whose two arms join inside
/// H-beta's window with zero points up to 8 A apart (see `tests/data/SOURCES.md`); no width of the
/// line-spread function from 7 to 20 A and no offset per line brings them nearer. WD 1657+343: hotter than
/// 50 000 K, where LTE fits of published NLTE models come out 7 % hot (test `validate_fits_of_published_models`;
/// its own model, of the literature's parameters, gives 56 700 K, 7.87).
const EXCEPTIONS: [&str; 3] = ["GD 50", "HZ 4", "WD 1657+343"];

#[test]
fn validate_standard_stars() {
    let fitter = Fitter::new(bundled_grid(), FitSettings::default());
    println!(
        "{:>12} {:>16} {:>18} {:>8} {:>7} {:>6}  flags",
        "star", "published", "fitted", "dTeff %", "dlog g", "chi2/n"
    );
    let mut missed = Vec::new();
    let stars = STANDARDS.iter().map(|star| {
        let path = format!("tests/data/calspec/{}.fits.gz", star.file);
        (star.name, read_one(&path, &ReadSettings::default()), star.teff_k, star.log_g)
    });
    for (name, spectrum, teff_k, log_g) in stars {
        let fit = fitter.fit(&spectrum).unwrap();
        let chosen = fit.chosen();
        let (dteff, dlog_g) = (chosen.teff_k / teff_k - 1.0, chosen.log_g - log_g);
        let codes: Vec<&str> = fit.flags.iter().map(|flag| flag.code.as_str()).collect();
        println!(
            "{name:>12} {teff_k:>9} {log_g:>6} {:>10.0} {:>7.3} {:>+8.1} {:>+7.3} {:>6.1}  {}",
            chosen.teff_k,
            chosen.log_g,
            100.0 * dteff,
            dlog_g,
            chosen.reduced_chi2(),
            codes.join(" ")
        );
        if !(dteff.abs() < LARGEST_TEFF && dlog_g.abs() < LARGEST_LOG_G) {
            missed.push(name);
        }
    }
    println!("{} of {} within 8 % and 0.25 dex", STANDARDS.len() - missed.len(), STANDARDS.len());
    assert_eq!(missed, EXCEPTIONS, "stars off the literature");
}

/// Spectroscopic distances of the STIS standards, from our own fits and V (Landolt & Uomoto 2007), against Gaia's
/// parallaxes (both from memory): an outside check of log g, of which 0.05 is 4 % of the distance. The
/// published parameters of GD 71 and GD 153 (log g 7.93) put them 5 and 7 % too near, ours 5 and 3 % too far.
#[test]
fn validate_distances_of_standard_stars() {
    let grid = bundled_grid();
    let fitter = Fitter::new(grid, FitSettings::default());
    let tracks =
        TrackTable::read(std::path::Path::new(concat!(env!("CARGO_MANIFEST_DIR"), "/grids/tracks.fits")));
    let tracks = tracks.unwrap();
    let magnitudes = MagnitudeTable::new(grid);
    let models = StarModels { tracks: &tracks, magnitudes: Some(&magnitudes), layer: Thick };
    for (name, file, v, parallax_mas) in [
        ("GD 71", "gd71_stisnic_002", 13.033, 19.56),
        ("GD 153", "gd153_stisnic_002", 13.349, 14.59),
        ("G191-B2B", "g191b2b_stisnic_002", 11.781, 19.0),
    ] {
        let spectrum = read_one(&format!("tests/data/calspec/{file}.fits.gz"), &ReadSettings::default());
        let fit = fitter.fit(&spectrum).unwrap();
        let (teff_k, log_g) = (fit.chosen().teff_k, fit.chosen().log_g);
        let apparent = ApparentMagnitude::new("johnson_v", v, 0.01).unwrap();
        let star = describe(teff_k, log_g, &[[0.0; 2]; 2], None, Some(&apparent), &models).star;
        let (found, published) = (star.distance_pc.value.unwrap(), 1000.0 / parallax_mas);
        println!("{name}: {teff_k:.0} K, {log_g:.3}: {found:.1} pc, parallax {published:.1} pc");
        assert!((found / published - 1.0).abs() < 0.08, "{name}: {found} for {published}");
    }
}
