//! The layouts: recognition, and the committed real files against what an independent library reads.

use std::collections::{BTreeMap, BTreeSet};

use emberline::physics::wavelength::air_to_vacuum_aa;
use emberline::spectrum::readers::LAYOUTS;
use emberline::spectrum::{Medium, ReadSettings, Resolution, Spectrum, read_file};

use super::assuming;
use crate::support::folder;

/// The eleven DA standards, with values that astropy 8 reads (command in tests/data/SOURCES.md): pixels, and wavelength,
/// flux, error and width at one row.
const STANDARDS: &[(&str, &str, usize, usize, [f64; 4])] = &[
    (
        "g191b2b_stisnic_002",
        "G191B2B",
        3698,
        2113,
        [4700.08154296875, 1.2620999623007279e-13, 2.3441999451243305e-16, 5.49560546875],
    ),
    (
        "g93_48_004",
        "G93-48",
        5110,
        2858,
        [4700.31591796875, 4.9768457584253856e-14, 2.4416285533060518e-17, 7.0],
    ),
    (
        "gd153_stisnic_002",
        "GD153",
        4088,
        2525,
        [4700.0615234375, 2.957999988071995e-14, 7.044900077256104e-17, 5.49462890625],
    ),
    ("gd50_004", "GD50", 5112, 2860, [4700.31591796875, 1.5422537040315175e-14, 4.1163107936484524e-17, 7.0]),
    (
        "gd71_stisnic_002",
        "GD71",
        4105,
        2526,
        [4701.07470703125, 3.929799872017317e-14, 7.527100052260216e-17, 5.49560546875],
    ),
    (
        "grw_70d5824_stisnic_002",
        "GRW+70D5824",
        3993,
        2412,
        [4701.36767578125, 4.8532999044311256e-14, 3.634000042616707e-16, 5.4951171875],
    ),
    ("hz2_005", "HZ2", 5108, 2856, [4700.31591796875, 1.805322147471148e-14, 1.3172729493920798e-16, 7.0]),
    (
        "hz43_stis_001",
        "HZ43",
        3016,
        1863,
        [4701.25, 4.5124013304132654e-14, 8.251828853469284e-16, 4.39990234375],
    ),
    (
        "hz4_stis_002",
        "HZ4",
        4312,
        2951,
        [4700.31591796875, 9.830035887386547e-15, 2.806313327877695e-16, 7.0],
    ),
    (
        "wd1057_719_stisnic_002",
        "WD1057+719",
        3199,
        2414,
        [4701.0224609375, 8.22140004187212e-15, 4.216399978639614e-17, 5.4951171875],
    ),
    (
        "wd1657_343_stisnic_002",
        "WD1657+343",
        3574,
        2414,
        [4700.595703125, 1.7166999912877749e-15, 1.5043000740770955e-17, 5.4951171875],
    ),
];

#[test]
fn layout_names_are_unique_and_plain() {
    for (index, layout) in LAYOUTS.iter().enumerate() {
        assert!(layout.name.chars().all(|c| c.is_ascii_lowercase() || c.is_ascii_digit() || c == '-'));
        assert!(LAYOUTS[..index].iter().all(|other| other.name != layout.name), "{}", layout.name);
        assert!(!layout.title.is_empty() && !layout.rule.is_empty());
    }
}

#[test]
fn the_standards_read_as_astropy_reads_them() {
    assert_eq!(STANDARDS.len(), 11);
    for (file, name, pixels, pixel, [wave, flux, error, width]) in STANDARDS {
        let mut outcomes =
            read_file(&folder::data(&format!("calspec/{file}.fits.gz")), &ReadSettings::default());
        let observation = outcomes.remove(0).unwrap();
        let spectrum = &observation.spectrum;
        assert_eq!(observation.object.name.as_deref(), Some(*name));
        assert_eq!(observation.source.layout.as_deref(), Some("calspec"));
        assert_eq!(observation.source.medium, Some(Medium::Vacuum));
        assert_eq!(spectrum.wave_vac_aa().len(), *pixels, "{file}");
        assert_eq!(spectrum.wave_vac_aa()[*pixel], *wave, "{file}");
        assert_eq!(spectrum.flux()[*pixel], *flux, "{file}");
        assert_eq!(spectrum.sigma()[*pixel], *error, "{file}");
        assert_eq!(spectrum.resolution().fwhm_aa(*pixel, *wave), *width, "{file}");
        // At least nine tenths of the Balmer region must be usable.
        let balmer = |wave: &f64| (3750.0..5000.0).contains(wave);
        let region: Vec<usize> =
            (0..*pixels).filter(|pixel| balmer(&spectrum.wave_vac_aa()[*pixel])).collect();
        let good = region.iter().filter(|pixel| spectrum.is_good()[**pixel]).count();
        assert!(good as f64 > 0.9 * region.len() as f64, "{file}: {good} of {}", region.len());
    }
}

#[test]
fn published_models_read_in_their_own_medium() {
    let settings = assuming(|assume| {
        assume.assume_snr = Some(1000.0);
        assume.resolution_fwhm_aa = Some(1.0);
    });
    let mut read = 0;
    for entry in std::fs::read_dir(folder::data("models")).unwrap() {
        let path = entry.unwrap().path();
        let observation = read_file(&path, &settings).remove(0).unwrap();
        let is_air = path.to_string_lossy().contains("_air");
        let expected = if is_air { Medium::Air } else { Medium::Vacuum };
        assert_eq!(observation.source.medium, Some(expected), "{}", path.display());
        assert_eq!(observation.spectrum.resolution(), &Resolution::FwhmAa(1.0));
        assert_eq!(observation.spectrum.bad_pixels(), Default::default());
        read += 1;
    }
    assert_eq!(read, 12);
}

/// What astropy read from one spectrum of `tests/data/layouts`, by `tests/data/make_layouts.py`.
#[derive(Debug, serde::Deserialize)]
struct Expected {
    layout: String,
    row: Option<usize>,
    name: String,
    medium: Medium,
    wave_aa: Vec<f64>,
    flux: Vec<Option<f64>>,
    sigma: Vec<Option<f64>>,
    fwhm_aa: Option<Vec<f64>>,
}

/// Both sides compute in doubles from the same stored values; the order of operations differs.
const ARITHMETIC: f64 = 1e-12;
/// Values that astropy keeps in single precision until the last step.
const SINGLE: f64 = 3e-7;

fn assert_close(found: f64, expected: f64, tolerance: f64, what: &str) {
    assert!(
        (found - expected).abs() <= tolerance * expected.abs(),
        "{what}: {found}, astropy reads {expected}"
    );
}

#[test]
fn every_layout_reads_as_astropy_reads_it() {
    let text = std::fs::read_to_string(folder::data("layouts/expected.json")).unwrap();
    let files: BTreeMap<String, Vec<Expected>> = serde_json::from_str(&text).unwrap();
    let settings = assuming(|assume| assume.resolution_fwhm_aa = Some(5.0));
    let mut seen: BTreeSet<String> = BTreeSet::new();
    for (file, stars) in &files {
        let mut settings = settings.clone();
        settings.assume.medium = (file == "iraf_multispec").then_some(Medium::Vacuum);
        let ending = match file.as_str() {
            "votable" => "xml",
            "text_blanks" | "text_commas" => "ecsv",
            _ => "fits",
        };
        let outcomes = read_file(&folder::data(&format!("layouts/{file}.{ending}.gz")), &settings);
        assert_eq!(outcomes.len(), stars.len(), "{file}");
        for (outcome, expected) in outcomes.into_iter().zip(stars) {
            let observation = outcome.unwrap_or_else(|refusal| panic!("{file}: {}", refusal.fault));
            let what = format!("{file} {:?}", expected.row);
            assert_eq!(observation.source.layout.as_deref(), Some(expected.layout.as_str()), "{what}");
            assert_eq!(observation.source.row, expected.row, "{what}");
            assert_eq!(observation.object.name.as_deref(), Some(expected.name.as_str()), "{what}");
            assert_eq!(observation.source.medium, Some(expected.medium), "{what}");
            compare(&observation.spectrum, expected, &what);
            seen.insert(expected.layout.clone());
        }
    }
    // Every layout of the table is covered here, or by the real files above.
    for layout in LAYOUTS {
        assert!(seen.contains(layout.name) || layout.name == "calspec", "{} is not tested", layout.name);
    }
}

fn compare(spectrum: &Spectrum, expected: &Expected, what: &str) {
    let pixels = expected.wave_aa.len();
    assert_eq!(spectrum.wave_vac_aa().len(), pixels, "{what}");
    for pixel in 0..pixels {
        let what = format!("{what} pixel {pixel}");
        let wave_aa = match expected.medium {
            Medium::Vacuum => expected.wave_aa[pixel],
            Medium::Air => air_to_vacuum_aa(expected.wave_aa[pixel]),
        };
        assert_close(spectrum.wave_vac_aa()[pixel], wave_aa, ARITHMETIC, &what);
        assert_eq!(spectrum.is_good()[pixel], expected.flux[pixel].is_some(), "{what}");
        if let (Some(flux), Some(sigma)) = (expected.flux[pixel], expected.sigma[pixel]) {
            assert_close(spectrum.flux()[pixel], flux, SINGLE, &what);
            assert_close(spectrum.sigma()[pixel], sigma, SINGLE, &what);
        }
        let fwhm_aa = expected.fwhm_aa.as_ref().map_or(5.0, |fwhm_aa| fwhm_aa[pixel]);
        // An instrument of known resolving power has it in the file's wavelengths and in vacuum alike.
        if !matches!(spectrum.resolution(), Resolution::ResolvingPower(_)) || expected.fwhm_aa.is_some() {
            assert_close(spectrum.resolution().fwhm_aa(pixel, wave_aa), fwhm_aa, 1e-9, &what);
        }
    }
}

/// Files of real surveys that may not be committed: `EMBERLINE_SAMPLES=FOLDER cargo test -- --ignored real_samples`.
/// Each must be recognised as what it is, and read, or be refused for the right reason.
#[test]
#[ignore = "seconds, needs a folder of survey files; run: EMBERLINE_SAMPLES=FOLDER cargo test -- --ignored real_samples"]
fn real_samples_read_or_are_refused_for_the_right_reason() {
    let folder =
        std::env::var("EMBERLINE_SAMPLES").expect("EMBERLINE_SAMPLES names a folder of survey files");
    let layouts = [
        ("BINTABLE2col", "table"),
        ("BOSSspeclite", "sdss-spec"),
        ("DESI__coadd", "desi"),
        ("ESO-SDP", "eso-sdp"),
        ("ESO-UVESpipe", "image"),
        ("HST-STIS", "hst-x1d"),
        ("IRAF-4band", "image"),
        ("IRAF-badcard", "image"),
        ("IRAF-linear", "image"),
        ("IRAF-loglinear", "image"),
        ("IRAF-multispec", "iraf-multispec"),
        ("LAMOST", "lamost"),
        ("SDSSspSpec", "sdss-spspec"),
        ("SDSSspecfull", "sdss-spec"),
        ("SDSSspeclite", "sdss-spec"),
    ];
    let silent = ReadSettings::default();
    let told = assuming(|assume| {
        assume.medium = Some(Medium::Air);
        assume.resolution_fwhm_aa = Some(3.0);
        assume.assume_snr = Some(30.0);
    });
    let mut counts: BTreeMap<&str, usize> = BTreeMap::new();
    for entry in std::fs::read_dir(folder).unwrap() {
        let path = entry.unwrap().path();
        let name = path.file_name().unwrap().to_string_lossy().into_owned();
        let Some((start, layout)) = layouts.iter().find(|(start, _)| name.starts_with(start)) else {
            continue;
        };
        let outcomes = read_file(&path, &told);
        let read = outcomes.iter().filter(|outcome| outcome.is_ok()).count();
        *counts.entry(start).or_default() += 1;
        for outcome in &outcomes {
            let found = match outcome {
                Ok(observation) => &observation.source.layout,
                Err(refusal) => &refusal.source.layout,
            };
            assert_eq!(found.as_deref(), Some(*layout), "{name}");
        }
        // One order of one echelle file has a dispersion that leads below zero.
        let expected = if name.contains("legendre") { outcomes.len() - 1 } else { outcomes.len() };
        assert_eq!(read, expected, "{name}");
        // Without settings, what the file leaves open is refused, never assumed.
        let states_all = ["BOSS", "DESI", "ESO-SDP", "LAMOST", "SDSSspec", "SDSSspSpec__"]
            .iter()
            .any(|s| name.starts_with(s));
        for outcome in read_file(&path, &silent) {
            match outcome {
                Ok(_) => assert!(states_all, "{name} was read without settings"),
                Err(refusal) => {
                    assert!(!states_all, "{name}: {}", refusal.fault);
                    let code = refusal.fault.code().id;
                    let is_open = ["medium-unknown", "errors-missing", "resolution-unknown"]
                        .iter()
                        .any(|words| code == format!("spectrum.{words}"));
                    assert!(is_open, "{name}: {code}");
                }
            }
        }
    }
    println!("{counts:?}");
    assert_eq!(counts.len(), layouts.len(), "{counts:?}");
}
