//! The committed track table and the star block against published values.

use std::path::Path;
use std::sync::LazyLock;
use std::time::Instant;

use emberline::cli::tracks::check_table;
use emberline::cli::tracks_figure::mass_radius_svg;
use emberline::grid::track_table::{OutsideTracks, TrackTable, TrackTableError};
use emberline::interior::cooling::cooling_track;
use emberline::interior::core::Core;
use emberline::interior::structure::HydrogenLayer::{self, Thick, Thin};
use emberline::star::three_d::correct_3d;
use emberline::star::{Star, StarModels, StarReport, StarValue};

static TRACKS: LazyLock<TrackTable> = LazyLock::new(|| TrackTable::read(&table_path()).unwrap());

fn table_path() -> std::path::PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("grids/tracks.fits")
}

/// The star without magnitudes.
fn describe(
    teff_k: f64,
    log_g: f64,
    covariance: &[[f64; 2]; 2],
    radial_velocity_km_s: Option<f64>,
    tracks: &TrackTable,
) -> StarReport {
    let models = StarModels { tracks, magnitudes: None, layer: Thick };
    emberline::star::describe(teff_k, log_g, covariance, radial_velocity_km_s, None, &models)
}

const NO_ERRORS: [[f64; 2]; 2] = [[0.0; 2]; 2];

/// Published evolutionary sequences at log g 8, thick hydrogen (Fontaine et al. 2001; Bedard et al. 2020):
/// Teff, mass, age in Gyr. From memory, as physics.md has them.
const PUBLISHED: [(f64, f64, f64); 4] =
    [(10_000.0, 0.594, 0.62), (15_000.0, 0.606, 0.20), (20_000.0, 0.618, 0.060), (30_000.0, 0.644, 0.009)];

/// Mass within 0.01 Msun and age within 15 per cent of the published sequences.
#[test]
fn validate_published_masses() {
    println!(
        "{:>7} {:>8} {:>9} {:>8}   {:>8} {:>9} {:>7}",
        "Teff", "mass", "published", "diff", "age Gyr", "published", "diff %"
    );
    for (teff_k, mass, age) in PUBLISHED {
        let ours = TRACKS.at(teff_k, 8.0, Thick).unwrap();
        let (dm, da) = (ours.mass_msun - mass, 100.0 * (ours.age_gyr / age - 1.0));
        println!(
            "{teff_k:>7.0} {:>8.4} {mass:>9.3} {dm:>+8.4}   {:>8.4} {age:>9.3} {da:>+7.1}",
            ours.mass_msun, ours.age_gyr
        );
        assert!(dm.abs() < 0.01, "{teff_k}: {dm}");
        assert!(da.abs() < 15.0, "{teff_k}: {da}");
    }
    // Cooler: common practice from the same sequences, less surely remembered, hence printed only.
    for (teff_k, age) in [(8000.0, 1.1), (7000.0, 1.5), (6000.0, 2.1)] {
        let ours = TRACKS.at(teff_k, 8.0, Thick).unwrap();
        println!("{teff_k:>7.0} {:>8.4}  (age {:.3} Gyr, remembered {age})", ours.mass_msun, ours.age_gyr);
    }
}

/// Stars with masses from orbits and radii from flux and parallax: radius within 1.5 per cent.
///
/// Bond, Bergeron & Bedard 2017 (ApJ 848, 16) and Bond et al. 2017 (ApJ 840, 70); from memory.
#[test]
fn validate_dynamical_radii() {
    for (name, mass, teff_k, radius, radius_err, layer) in [
        ("40 Eri B, thin", 0.573, 17_200.0, 0.013_08, 0.000_20, Thin),
        ("40 Eri B, thick", 0.573, 17_200.0, 0.013_08, 0.000_20, Thick),
        ("Sirius B, thick", 1.018, 25_369.0, 0.008_10, 0.000_05, Thick),
    ] {
        let ours = TRACKS.at_mass(mass, teff_k, layer).unwrap();
        let difference = 100.0 * (ours.radius_rsun / radius - 1.0);
        println!(
            "{name}: {:.5} Rsun, observed {radius:.5} +- {radius_err:.5}, {difference:+.2} %",
            ours.radius_rsun
        );
        // A thick layer on 40 Eri B is what the published analysis rules out (its radius fits thin layers).
        if name != "40 Eri B, thick" {
            assert!(difference.abs() < 1.5, "{name}: {difference}");
        }
    }
    // From the gravity of orbit and radius (8.629) back to the mass; the spectroscopic 8.591 disagrees with them
    // by itself (it means 0.93 Msun at the observed radius), hence printed only.
    let dynamical = TRACKS.at(25_369.0, 8.629, Thick).unwrap().mass_msun;
    let spectroscopic = TRACKS.at(25_369.0, 8.591, Thick).unwrap().mass_msun;
    println!(
        "Sirius B: {dynamical:.4} Msun from log g 8.629, {spectroscopic:.4} from 8.591 (orbit 1.018 +- 0.011)"
    );
    assert!((dynamical - 1.018).abs() < 0.011);
}

/// Common practice: the Sun's mass in the Earth's size, a teaspoon (5 mL) of about ten tonnes.
#[test]
fn validate_common_practice() {
    let report = describe(12_000.0, 8.63, &NO_ERRORS, None, &TRACKS);
    let star = report.star;
    let (mass, radius) = (star.mass_msun.value.unwrap(), star.radius_rsun.value.unwrap());
    let earths = radius * 695_700.0 / 6371.0;
    let density = star.mean_density_g_cm3.value.unwrap();
    println!(
        "{mass:.3} Msun, {earths:.2} Earth radii, {density:.2e} g/cm3: a teaspoon weighs {:.1} t",
        5.0 * density / 1e6
    );
    assert!((0.9..1.1).contains(&mass) && (0.8..1.0).contains(&earths));
    assert!((1e6..4e6).contains(&density));
    // 0.6 Msun: mean density 4e5 g/cm3, redshift about 30 km/s (common practice), 0.6 of 12 000 K^4 in luminosity.
    let star = describe(12_000.0, 8.0, &NO_ERRORS, None, &TRACKS).star;
    assert!((25.0..33.0).contains(&star.gravitational_redshift_km_s.value.unwrap()));
    let expected = star.radius_rsun.value.unwrap().powi(2) * (12_000.0f64 / 5772.0).powi(4);
    assert!((star.luminosity_lsun.value.unwrap() / expected - 1.0).abs() < 1e-3);
    // Redshift: z = 0.635 (M/R) km/s in solar units, to first order.
    let first_order = 0.6365 * star.mass_msun.value.unwrap() / star.radius_rsun.value.unwrap();
    assert!((star.gravitational_redshift_km_s.value.unwrap() / first_order - 1.0).abs() < 1e-3);
}

/// The committed table passes its own check, and damage is noticed.
#[test]
fn verif_committed_table_is_sound() {
    assert_eq!(check_table(&TRACKS), Vec::<String>::new());
    let mut bytes = std::fs::read(table_path()).unwrap();
    let folder = tempfile::tempdir().unwrap();
    let copy = folder.path().join("tracks.fits");
    for position in [100, 3000, bytes.len() / 2, bytes.len() - 1] {
        bytes[position] ^= 1;
        std::fs::write(&copy, &bytes).unwrap();
        let fault = TrackTable::read(&copy).err().unwrap();
        assert!(matches!(fault, TrackTableError::File(_)), "{position}: {fault}");
        bytes[position] ^= 1;
    }
    std::fs::write(&copy, &bytes[..bytes.len() - 2880]).unwrap();
    assert!(TrackTable::read(&copy).is_err());
    std::fs::write(&copy, b"").unwrap();
    assert!(TrackTable::read(&copy).is_err());
    assert!(TrackTable::read(folder.path()).is_err());
    // Written again it is the same file.
    let again = folder.path().join("again.fits");
    assert_eq!(TRACKS.write(&again).unwrap(), TRACKS.checksum());
    assert_eq!(std::fs::read(&again).unwrap(), bytes);
}

/// A lookup returns to the gravity it was asked for, at nodes and between.
#[test]
fn verif_lookup_inverts() {
    for layer in [Thick, Thin] {
        for teff_k in [4500.0, 7123.0, 12_345.0, 29_999.0, 64_000.0] {
            for log_g in [7.6, 7.93, 8.0, 8.51, 9.2] {
                let point = TRACKS.at(teff_k, log_g, layer).unwrap();
                let gm = 6.674_30e-8 * point.mass_msun * 1.327_124_4e26 / 6.674_30e-8;
                let back = (gm / (point.radius_rsun * 6.957e10).powi(2)).log10();
                assert!((back - log_g).abs() < 1e-6, "{layer:?} {teff_k} {log_g}: {back}");
                let there = TRACKS.at_mass(point.mass_msun, teff_k, layer).unwrap();
                assert_eq!(there, point);
            }
        }
    }
}

/// Interpolation between nodes against tracks computed there.
#[test]
#[ignore = "half a minute; run: cargo test -- --ignored verif_track_interpolation"]
fn verif_track_interpolation() {
    for mass in [0.32, 0.62, 1.0, 1.28] {
        let track = cooling_track(mass, 4000.0, Thick, Core::of_mass(mass)).unwrap();
        let (mut worst_mass, mut worst_age) = (0.0f64, 0.0f64);
        for (model, age_s) in track.models.iter().zip(&track.age_s) {
            if !(4000.0..80_000.0).contains(&model.teff_k) {
                continue;
            }
            let Ok(found) = TRACKS.at(model.teff_k, model.log_g(), Thick) else { continue };
            worst_mass = worst_mass.max((found.mass_msun - mass).abs());
            if model.teff_k < 40_000.0 {
                let age_gyr = age_s / 3.155_76e16;
                worst_age = worst_age.max((found.age_gyr / age_gyr - 1.0).abs());
            }
        }
        println!("{mass}: worst mass {worst_mass:.5} Msun, age {:.2} % below 40 000 K", 100.0 * worst_age);
        assert!(worst_mass < 0.002 && worst_age < 0.02, "{mass}");
    }
}

/// Outside the tracks there is a flag and no number.
#[test]
fn verif_bad_input_gives_null_and_flag() {
    let cases = [
        (f64::NAN, 8.0, "star.outside-tracks"),
        (12_000.0, f64::NAN, "star.outside-tracks"),
        (f64::INFINITY, 8.0, "star.outside-tracks"),
        (-12_000.0, 8.0, "star.outside-tracks"),
        (0.0, 8.0, "star.outside-tracks"),
        (3000.0, 8.0, "star.outside-tracks"),
        (90_000.0, 8.0, "star.outside-tracks"),
        (12_000.0, 4.0, "star.outside-tracks"),
        (12_000.0, -8.0, "star.outside-tracks"),
        (12_000.0, 9.9, "star.above-stable-mass"),
    ];
    for (teff_k, log_g, code) in cases {
        let report = describe(teff_k, log_g, &[[1e4, 0.0], [0.0, 1e-3]], Some(20.0), &TRACKS);
        assert_eq!(report.star, Star::default(), "{teff_k} {log_g}");
        let codes: Vec<&str> = report.flags.iter().map(|flag| flag.code.as_str()).collect();
        assert_eq!(codes, [code], "{teff_k} {log_g}");
        assert!(emberline::codes::find(code).is_some());
    }
    assert!(matches!(TRACKS.at(12_000.0, 9.9, Thick), Err(OutsideTracks::TooHigh { .. })));
    // A covariance that is none: values stay, errors go.
    for covariance in [[[f64::NAN, 0.0], [0.0, 1e-3]], [[-1.0, 0.0], [0.0, 1e-3]], [[1e4, 9.0], [9.0, 1e-4]]]
    {
        let report = describe(12_000.0, 8.0, &covariance, None, &TRACKS);
        assert!(report.star.mass_msun.value.is_some() && report.star.mass_msun.err_plus.is_none());
        assert!(report.flags.iter().any(|flag| flag.code == "star.covariance-unusable"), "{covariance:?}");
    }
}

/// Flags of unusual stars.
#[test]
fn verif_flags() {
    let codes = |teff_k: f64, log_g: f64, velocity: Option<f64>| -> Vec<String> {
        let report = describe(teff_k, log_g, &[[1e4, 0.0], [0.0, 1e-4]], velocity, &TRACKS);
        report.flags.into_iter().map(|flag| flag.code).collect()
    };
    assert!(codes(20_000.0, 8.0, Some(40.0)).is_empty());
    assert_eq!(codes(20_000.0, 8.0, Some(700.0)), ["star.velocity-implausible"]);
    assert!(codes(12_000.0, 7.0, None).contains(&"star.below-single-star-mass".to_owned()));
    assert!(codes(12_000.0, 7.0, None).contains(&"star.outside-initial-final-relation".to_owned()));
    assert!(codes(12_000.0, 9.0, None).contains(&"star.core-composition-ambiguous".to_owned()));
    assert!(codes(12_000.0, 7.68, None).contains(&"star.core-composition-ambiguous".to_owned()));
}

/// Small errors: the interval is that of linear propagation, correlation included; large ones are asymmetric.
#[test]
fn verif_star_errors_linear_limit() {
    let (teff_k, log_g) = (15_000.0, 8.1);
    let (st, sg) = (60.0, 0.01);
    let mass = |t: f64, g: f64| TRACKS.at(t, g, Thick).unwrap();
    // Derivatives over the width of the error, as the table is piecewise linear.
    let slope = |f: &dyn Fn(f64, f64) -> f64| {
        let by_t = (f(teff_k + st, log_g) - f(teff_k - st, log_g)) / (2.0 * st);
        let by_g = (f(teff_k, log_g + sg) - f(teff_k, log_g - sg)) / (2.0 * sg);
        (by_t, by_g)
    };
    for correlation in [0.0, 0.8, -0.8, 1.0] {
        let mixed = correlation * st * sg;
        let covariance = [[st * st, mixed], [mixed, sg * sg]];
        let star = describe(teff_k, log_g, &covariance, None, &TRACKS).star;
        for (value, (by_t, by_g)) in [
            (&star.mass_msun, slope(&|t, g| mass(t, g).mass_msun)),
            (&star.radius_rsun, slope(&|t, g| mass(t, g).radius_rsun)),
            (&star.cooling_age_gyr, slope(&|t, g| mass(t, g).age_gyr)),
        ] {
            let expected = (by_t * by_t * st * st + 2.0 * by_t * by_g * mixed + by_g * by_g * sg * sg).sqrt();
            for found in [value.err_minus.unwrap(), value.err_plus.unwrap()] {
                assert!((found / expected - 1.0).abs() < 0.06, "{correlation}: {found} {expected}");
            }
        }
    }
    let wide = describe(teff_k, log_g, &[[1e6, 0.0], [0.0, 0.04]], None, &TRACKS).star.cooling_age_gyr;
    println!("wide errors: age {wide:?}");
    assert!(wide.err_plus.unwrap() > 1.2 * wide.err_minus.unwrap());
    let none = describe(teff_k, log_g, &NO_ERRORS, None, &TRACKS).star.mass_msun;
    assert_eq!((none.err_minus, none.err_plus), (Some(0.0), Some(0.0)));
    // At the edge of the tracks part of the ellipse is missing, and it is said.
    let edge = describe(79_000.0, 8.0, &[[4e6, 0.0], [0.0, 1e-3]], None, &TRACKS);
    assert!(edge.flags.iter().any(|flag| flag.code == "star.errors-truncated"));
}

/// Progenitor: Cummings et al. 2018 at the ends of its pieces.
#[test]
fn validate_progenitor_in_report() {
    let star = describe(20_000.0, 8.0, &[[1e4, 0.0], [0.0, 1e-4]], None, &TRACKS).star;
    let (mass, initial) = (star.mass_msun.value.unwrap(), star.progenitor_mass_msun.value.unwrap());
    println!("{mass:.3} Msun came from {initial:.2} Msun");
    assert!((0.080 * initial + 0.489 - mass).abs() < 1e-9);
    assert_ne!(star.progenitor_mass_msun, StarValue::default());
    // Near the lower end of the relation the error ellipse is cut: value without errors, and it is said.
    let report = describe(12_000.0, 7.95, &[[1e4, 0.0], [0.0, 4e-3]], None, &TRACKS);
    let progenitor = report.star.progenitor_mass_msun;
    assert!(progenitor.value.is_some() && progenitor.err_minus.is_none(), "{progenitor:?}");
    assert!(report.flags.iter().any(|flag| flag.code == "star.outside-initial-final-relation"));
}

/// The published properties of the 3-D corrections (Tremblay et al. 2013): nothing above 14 000 K, log g lower by 0.1 -
/// 0.3 dex between 7 500 and 11 000 K.
#[test]
fn validate_three_d_corrections() {
    for i in 0..=35 {
        let teff_k = 7500.0 + 100.0 * f64::from(i);
        let (_, dlog_g) = correct_3d(teff_k, 8.0).unwrap();
        assert!((-0.3..=-0.1).contains(&dlog_g), "{teff_k}: {dlog_g}");
    }
    for teff_k in [14_100.0, 14_900.0, 15_100.0, 30_000.0] {
        let (dteff_k, dlog_g) = correct_3d(teff_k, 8.0).unwrap();
        assert!(dteff_k.abs() < 5.0 && dlog_g.abs() < 0.002, "{teff_k}");
    }
    for (teff_k, log_g) in
        [(5500.0, 8.0), (10_000.0, 6.5), (10_000.0, 9.3), (f64::NAN, 8.0), (10_000.0, f64::NAN)]
    {
        assert_eq!(correct_3d(teff_k, log_g), None, "{teff_k} {log_g}");
    }
    assert_eq!(correct_3d(40_000.0, 6.0), Some((0.0, 0.0)));
}

/// Lookup in less than 20 microseconds: the best of many batches, which other work on the machine does not reach.
#[test]
fn verif_lookup_speed() {
    let (batches, count) = (100, 200);
    let mut best_us = f64::INFINITY;
    for batch in 0..batches {
        let start = Instant::now();
        for i in 0..count {
            let x = f64::from(i * batches + batch) / f64::from(count * batches);
            let point = TRACKS.at(6000.0 + 40_000.0 * x, 7.6 + 1.4 * x, HydrogenLayer::Thick);
            std::hint::black_box(point).unwrap();
        }
        best_us = best_us.min(start.elapsed().as_secs_f64() * 1e6 / f64::from(count));
    }
    println!("a lookup takes {best_us:.2} us");
    assert!(best_us < 20.0, "{best_us}");
}

/// The figure holds every curve and both stars, and nothing that is no number.
#[test]
fn verif_figure_is_whole() {
    let figure = mass_radius_svg(&TRACKS).unwrap();
    let curves: Vec<usize> = figure
        .split("<polyline points=\"")
        .skip(1)
        .map(|rest| rest.split('"').next().unwrap().split(' ').count())
        .collect();
    assert_eq!(curves.len(), 6, "limit, cold, four temperatures");
    assert!(curves.iter().all(|points| *points > 20), "{curves:?}");
    assert!(figure.contains("40 Eri B") && figure.contains("Sirius B"));
    assert!(!figure.contains("NaN") && !figure.contains("inf,"));
}

/// The command answers, and refuses a table that is not there.
#[test]
fn verif_tracks_command() {
    #[derive(clap::Parser)]
    struct Line {
        #[command(flatten)]
        tracks: emberline::cli::tracks::TracksArgs,
    }
    let run = |words: &[&str]| {
        let table = table_path();
        let words = ["tracks"].iter().chain(words).copied().chain(["--tracks", table.to_str().unwrap()]);
        let line = <Line as clap::Parser>::try_parse_from(words).unwrap();
        format!("{:?}", emberline::cli::tracks::run(&line.tracks).unwrap())
    };
    let good = format!("{:?}", std::process::ExitCode::SUCCESS);
    assert_eq!(
        run(&["at", "--teff-k", "12000", "--log-g", "8", "--teff-err-k", "150", "--log-g-err", "0.04"]),
        good
    );
    assert_eq!(run(&["at", "--teff-k", "-5", "--log-g", "8", "--layer", "thin"]), good);
    assert_eq!(run(&["info"]), good);
    assert_eq!(run(&["check"]), good);
    assert_eq!(run(&["plot"]), good);
    let line = <Line as clap::Parser>::try_parse_from(["tracks", "info", "--tracks", "/nowhere/tracks.fits"])
        .unwrap();
    let fault = emberline::cli::tracks::run(&line.tracks).unwrap_err();
    assert_eq!(fault.to_string(), "cannot use the track table");
}

/// Known pulsators lie in the strip, G 29-38 (11 910 K, 8.17) and GD 154 (11 000 K, 8.1); EG 274 and LTT 3218
/// do not (common practice).
#[test]
fn validate_instability_strip() {
    for (teff_k, log_g, expected) in
        [(11_910.0, 8.17, true), (11_000.0, 8.1, true), (26_000.0, 8.0, false), (9_300.0, 8.0, false)]
    {
        let flags = describe(teff_k, log_g, &NO_ERRORS, None, &TRACKS).flags;
        let found = flags.iter().any(|flag| flag.code == "star.instability-strip");
        assert_eq!(found, expected, "{teff_k} K, {log_g}");
    }
}
