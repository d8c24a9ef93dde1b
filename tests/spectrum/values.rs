//! Values come out as they went in, and decisions are on record.

use emberline::physics::wavelength::air_to_vacuum_aa;
use emberline::spectrum::{
    BadPixels, Instrument, Medium, Observation, ReadSettings, Resolution, Spectrum, VelocityFrame, read_file,
};
use proptest::prelude::*;

use super::{assuming, lenient, ramp, read_bytes, table_file};
use crate::support::fits_bytes::{Column, FitsBytes, gzip};

fn one(bytes: Vec<u8>, settings: &ReadSettings) -> emberline::spectrum::Observation {
    let mut outcomes = read_bytes(bytes, settings);
    assert_eq!(outcomes.len(), 1);
    outcomes.remove(0).unwrap()
}

fn flag_codes(observation: &emberline::spectrum::Observation) -> Vec<&str> {
    observation.flags.iter().map(|flag| flag.code.as_str()).collect()
}

#[test]
fn a_table_is_read_value_by_value_packed_or_not() {
    let (wave, flux, sigma) = ramp();
    let bytes = table_file(&wave, &flux, &sigma).bytes();
    for bytes in [bytes.clone(), gzip(&bytes)] {
        let observation = one(bytes, &ReadSettings::default());
        assert_eq!(observation.spectrum.wave_vac_aa(), wave);
        assert_eq!(observation.spectrum.flux(), flux);
        assert_eq!(observation.spectrum.sigma(), sigma);
        assert!(observation.spectrum.is_flux_calibrated());
        assert_eq!(observation.spectrum.resolution(), &Resolution::ResolvingPower(1000.0));
        assert_eq!(observation.object.name.as_deref(), Some("Test star"));
        let decided = &observation.source.decided_by;
        assert_eq!(decided.medium.as_deref(), Some("file: VACUUM = T"));
        assert_eq!(decided.wave_unit.as_deref(), Some("file: TUNIT1 = 'Angstrom'"));
        assert_eq!(decided.error_kind.as_deref(), Some("file: column sigma"));
        assert_eq!(decided.resolution.as_deref(), Some("file: SPEC_RES = 1000"));
    }
}

#[test]
fn air_nanometres_and_inverse_variances_are_converted() {
    let (wave, flux, _) = ramp();
    let wave_nm: Vec<f64> = wave.iter().map(|wave| wave / 10.0).collect();
    let mut ivar = vec![1e4; 200];
    ivar[7] = 0.0;
    let bytes =
        FitsBytes::empty_primary(&["VACUUM  =                    F", "SPEC_RES=               1000.0"])
            .and_table(
                &[],
                &[
                    Column::f64("wave", &wave_nm).unit("nm"),
                    Column::f64("flux", &flux).unit("10**-17 erg/(s cm2 nm)"),
                    Column::f64("ivar", &ivar),
                ],
            )
            .bytes();
    let observation = one(bytes, &ReadSettings::default());
    let spectrum = &observation.spectrum;
    for pixel in [0, 100, 199] {
        assert!((spectrum.wave_vac_aa()[pixel] - air_to_vacuum_aa(wave[pixel])).abs() < 1e-9);
        assert!((spectrum.flux()[pixel] / (flux[pixel] * 1e-18) - 1.0).abs() < 1e-12);
        assert!((spectrum.sigma()[pixel] / 1e-20 - 1.0).abs() < 1e-12);
    }
    assert!(!spectrum.is_good()[7]);
    assert_eq!(spectrum.bad_pixels(), BadPixels { masked: 0, flux_unusable: 0, sigma_unusable: 1 });
    assert_eq!(observation.source.medium, Some(Medium::Air));
}

#[test]
fn a_descending_spectrum_is_turned_round_with_everything_it_has() {
    let (mut wave, mut flux, sigma) = ramp();
    let straight = one(table_file(&wave, &flux, &sigma).bytes(), &ReadSettings::default()).spectrum;
    wave.reverse();
    flux.reverse();
    let turned = one(table_file(&wave, &flux, &sigma).bytes(), &ReadSettings::default()).spectrum;
    assert_eq!(turned, straight);
}

#[test]
fn padding_is_cut_off_and_told() {
    let (mut wave, mut flux, mut sigma) = ramp();
    wave.splice(0..0, [0.0; 3]);
    flux.splice(0..0, [0.0; 3]);
    sigma.splice(0..0, [0.0; 3]);
    let observation = one(table_file(&wave, &flux, &sigma).bytes(), &ReadSettings::default());
    assert_eq!(observation.spectrum.wave_vac_aa().len(), 200);
    assert!(flag_codes(&observation).contains(&"spectrum.padding-trimmed"));
}

#[test]
fn a_column_of_widths_that_are_fluxes_is_not_used() {
    let (wave, flux, sigma) = ramp();
    let file = |widths: &[f64]| {
        FitsBytes::empty_primary(&["VACUUM  =                    T"])
            .and_table(
                &[],
                &[
                    Column::f64("wave", &wave).unit("Angstrom"),
                    Column::f64("flux", &flux).unit("FLAM"),
                    Column::f64("err", &sigma),
                    Column::f64("fwhm", widths),
                ],
            )
            .bytes()
    };
    // Believable widths are used; a few holes take their neighbours' values.
    let mut widths = vec![6.0; 200];
    widths[..10].fill(0.0);
    widths[150..].fill(9.0);
    widths[160] = f64::NAN;
    let observation = one(file(&widths), &ReadSettings::default());
    let fwhm_aa = |pixel| observation.spectrum.resolution().fwhm_aa(pixel, 5000.0);
    assert_eq!((fwhm_aa(0), fwhm_aa(149), fwhm_aa(160)), (6.0, 6.0, 9.0));
    assert!(flag_codes(&observation).contains(&"spectrum.resolution-column-implausible"));
    // Fluxes are not widths: the configuration decides, or nobody does.
    let fluxes = vec![3e-13; 200];
    assert_eq!(
        read_bytes(file(&fluxes), &ReadSettings::default())[0].clone().unwrap_err(),
        "spectrum.resolution-unknown"
    );
    let observation = one(file(&fluxes), &lenient());
    assert_eq!(observation.spectrum.resolution(), &Resolution::FwhmAa(5.0));
    assert_eq!(
        observation.source.decided_by.resolution.as_deref(),
        Some("configuration: resolution_fwhm_aa")
    );
}

#[test]
fn a_setting_that_contradicts_the_file_is_told_and_overrules_only_when_asked() {
    let (wave, flux, sigma) = ramp();
    let bytes = table_file(&wave, &flux, &sigma).bytes();
    let mut settings = assuming(|assume| assume.medium = Some(Medium::Air));
    let observation = one(bytes.clone(), &settings);
    assert_eq!(observation.source.medium, Some(Medium::Vacuum));
    assert!(flag_codes(&observation).contains(&"spectrum.setting-differs-from-file"));
    settings.assume.overrule_file = true;
    let observation = one(bytes, &settings);
    assert_eq!(observation.source.medium, Some(Medium::Air));
    assert!(flag_codes(&observation).contains(&"spectrum.setting-differs-from-file"));
}

#[test]
fn an_instrument_has_its_own_assumptions() {
    let (wave, flux, sigma) = ramp();
    let file = |instrument: &str| {
        let card = format!("INSTRUME= '{instrument}'");
        let columns = [Column::f64("wave", &wave), Column::f64("flux", &flux), Column::f64("err", &sigma)];
        FitsBytes::empty_primary(&["TELESCOP= 'Fell'", &card]).and_table(&[], &columns).bytes()
    };
    let mut settings = assuming(|assume| {
        assume.medium = Some(Medium::Vacuum);
        assume.resolving_power = Some(1000.0);
    });
    for (pattern, fwhm_aa) in [("kes-2*", 3.0), ("KES*", 4.0)] {
        settings.instruments.push(Instrument {
            name: pattern.to_owned(),
            keywords: [("INSTRUME".to_owned(), pattern.to_owned())].into(),
            resolution_fwhm_aa: Some(fwhm_aa),
            ..Instrument::default()
        });
    }
    let read = |instrument: &str| one(file(instrument), &settings);
    let used = |observation: &Observation| {
        observation.source.instrument_section.as_ref().map(|section| section.name.clone())
    };
    for (instrument, resolution, section) in [
        ("KES", Resolution::FwhmAa(4.0), Some("KES*")),
        ("Kes-2 blue", Resolution::FwhmAa(3.0), Some("kes-2*")),
        ("other", Resolution::ResolvingPower(1000.0), None),
    ] {
        let observation = read(instrument);
        assert_eq!(*observation.spectrum.resolution(), resolution);
        assert_eq!(used(&observation).as_deref(), section);
    }
    settings.instruments[1].resolving_power = Some(900.0);
    assert!(settings.check().unwrap_err().contains("section \"KES*\""));
}

#[test]
fn a_section_stands_above_the_file_and_a_general_assumption_below_it() {
    let (wave, flux, sigma) = ramp();
    let bytes = table_file(&wave, &flux, &sigma).bytes();
    // The file says vacuum and a resolving power of 1000; its name is in OBJECT.
    let section = Instrument {
        name: "own".to_owned(),
        keywords: [("OBJECT".to_owned(), "test*".to_owned()), ("VACUUM".to_owned(), "T".to_owned())].into(),
        resolving_power: Some(700.0),
        ..Instrument::default()
    };
    let mut settings = assuming(|assume| assume.medium = Some(Medium::Air));
    settings.instruments.push(section);
    let observation = one(bytes.clone(), &settings);
    assert_eq!(*observation.spectrum.resolution(), Resolution::ResolvingPower(700.0));
    assert!(observation.source.decided_by.resolution.as_ref().unwrap().contains("overruling SPEC_RES"));
    // The assumption was not told to overrule, though the section is.
    assert_eq!(observation.source.medium, Some(Medium::Vacuum));
    settings.instruments[0].overrule_file = false;
    let observation = one(bytes, &settings);
    assert_eq!(*observation.spectrum.resolution(), Resolution::ResolvingPower(1000.0));
}

/// GD 71 (CALSPEC, real): the section's mask and factor reach the values, and the record says so.
#[test]
fn masks_and_error_scale_are_applied_to_a_real_spectrum() {
    let path = crate::support::folder::data("calspec/gd71_stisnic_002.fits.gz");
    let read = |settings: &ReadSettings| read_file(&path, settings).remove(0).unwrap();
    let plain = read(&ReadSettings::default());
    assert_eq!(plain.source.instrument_section, None);
    let section = Instrument {
        name: "STIS".to_owned(),
        keywords: [
            ("TARGETID".to_owned(), "gd7*".to_owned()),
            ("DESCRIP".to_owned(), "* with stis *".to_owned()),
            ("AIRMASS".to_owned(), "0".to_owned()),
        ]
        .into(),
        masks_vac_aa: vec![[4850.0, 4875.0], [9000.0, 9100.0]],
        error_scale: Some(2.5),
        ..Instrument::default()
    };
    let settings = ReadSettings { instruments: vec![section], ..ReadSettings::default() };
    let changed = read(&settings);
    let (before, after) = (&plain.spectrum, &changed.spectrum);
    assert_eq!(before.flux(), after.flux());
    let mut masked = 0;
    for (i, wave) in before.wave_vac_aa().iter().enumerate() {
        let is_in = (4850.0..=4875.0).contains(wave) || (9000.0..=9100.0).contains(wave);
        assert_eq!(after.is_good()[i], before.is_good()[i] && !is_in, "at {wave}");
        masked += usize::from(is_in && before.is_good()[i]);
        if before.sigma()[i].is_finite() {
            assert_eq!(after.sigma()[i], 2.5 * before.sigma()[i]);
        }
    }
    assert!(masked > 20, "{masked}");
    let record = changed.source.instrument_section.unwrap();
    assert_eq!((record.name.as_str(), record.masked_pixels, record.error_scale), ("STIS", masked, Some(2.5)));
    assert_eq!(record.masks_vac_aa, [[4850.0, 4875.0], [9000.0, 9100.0]]);
    // One keyword that does not match, and the section is not used.
    let mut other = settings;
    other.instruments[0].keywords.insert("DBTABLE".to_owned(), "OTHER*".to_owned());
    assert_eq!(read(&other), plain);
}

#[test]
fn image_axes_follow_their_marks() {
    let (_, flux, sigma) = ramp();
    let wave_of = |cards: &[&str]| {
        let mut all = vec!["SPEC_RES=               1000.0", "SPECSYS = 'BARYCENT'"];
        all.extend_from_slice(cards);
        let bytes =
            FitsBytes::image(&all, &[200], &flux).and_image(&["EXTNAME = 'ERR'"], &[200], &sigma).bytes();
        one(bytes, &assuming(|assume| assume.medium = Some(Medium::Vacuum)))
    };
    let close =
        |found: f64, expected: f64| assert!((found - expected).abs() < 1e-6, "{found} is not {expected}");

    let linear = wave_of(&[
        "CRVAL1  =               4000.0",
        "CDELT1  =                  5.0",
        "CRPIX1  =                 -9.0",
        "CUNIT1  = 'Angstrom'",
    ]);
    close(linear.spectrum.wave_vac_aa()[0], 4050.0);
    close(linear.spectrum.wave_vac_aa()[199], 4050.0 + 199.0 * 5.0);
    assert_eq!(linear.source.velocity_frame, Some(VelocityFrame::Barycentric));

    // CDELT1 = 1 is a dummy beside a real CD1_1.
    let both = wave_of(&[
        "CRVAL1  =               4000.0",
        "CDELT1  =                  1.0",
        "CD1_1   =                  5.0",
        "CUNIT1  = 'Angstrom'",
    ]);
    close(both.spectrum.wave_vac_aa()[1], 4005.0);

    let marked = wave_of(&[
        "CRVAL1  =                  3.6",
        "CD1_1   =               0.0005",
        "DC-FLAG =                    1",
    ]);
    close(marked.spectrum.wave_vac_aa()[2], 10f64.powf(3.601));

    let unmarked = wave_of(&["CRVAL1  =                  3.6", "CD1_1   =               0.0005"]);
    close(unmarked.spectrum.wave_vac_aa()[2], 10f64.powf(3.601));
    assert!(flag_codes(&unmarked).contains(&"spectrum.unit-inferred"));

    // The standard's own logarithm: Greisen et al. 2006, eq. 5, and metres without CUNIT1.
    let standard = wave_of(&[
        "CRVAL1  =               4.0E-7",
        "CDELT1  =               1.0E-9",
        "CTYPE1  = 'AWAV-LOG'",
    ]);
    close(standard.spectrum.wave_vac_aa()[0], air_to_vacuum_aa(4000.0));
    close(standard.spectrum.wave_vac_aa()[10], air_to_vacuum_aa(4000.0 * (10.0f64 * 10.0 / 4000.0).exp()));
    assert_eq!(standard.source.medium, Some(Medium::Air));
    assert_eq!(standard.source.decided_by.medium.as_deref(), Some("file: CTYPE1 = 'AWAV-LOG'"));
}

#[test]
fn the_sigma_band_of_a_four_band_image_is_used() {
    let (_, flux, sigma) = ramp();
    let bands: Vec<f64> = [flux.clone(), vec![9.0; 200], vec![8.0; 200], sigma.clone()].concat();
    let cards = [
        "CRVAL1  =               4000.0",
        "CDELT1  =                  5.0",
        "DC-FLAG =                    0",
        "WAT1_001= 'wtype=linear label=Wavelength units=angstroms'",
        "CUNIT1  = 'deg'",
        "BANDID1 = 'spectrum - background fit, weights variance, clean yes'",
        "BANDID2 = 'raw - background fit'",
        "BANDID3 = 'background'",
        "BANDID4 = 'sigma - background fit'",
    ];
    let observation = one(FitsBytes::image(&cards, &[200, 1, 4], &bands).bytes(), &lenient());
    assert_eq!(observation.spectrum.flux(), flux);
    assert_eq!(observation.spectrum.sigma(), sigma);
    assert!(flag_codes(&observation).contains(&"spectrum.header-contradicts-itself"));
}

#[test]
fn bad_pixels_are_counted_by_reason_and_weigh_nothing() {
    let (wave, mut flux, mut sigma) = ramp();
    let mut is_good = vec![true; 200];
    is_good[..5].fill(false);
    flux[5..8].fill(f64::NAN);
    sigma[8..10].fill(0.0);
    sigma[9] = f64::NAN;
    // Masked and unusable counts as masked.
    flux[0] = f64::NAN;
    let spectrum = Spectrum::new(wave, flux, sigma, is_good, Resolution::FwhmAa(5.0), true).unwrap();
    assert_eq!(spectrum.bad_pixels(), BadPixels { masked: 5, flux_unusable: 3, sigma_unusable: 2 });
    assert_eq!(spectrum.is_good().iter().filter(|good| **good).count(), 190);
    assert!(spectrum.flux().iter().all(|flux| flux.is_finite()));
    let weights: Vec<f64> = spectrum.sigma().iter().map(|sigma| sigma.powi(-2)).collect();
    assert!(weights[5..10].iter().all(|weight| *weight == 0.0));
}

fn mostly_sane() -> impl Strategy<Value = f64> {
    prop_oneof![8 => 0.1f64..2.0, 1 => prop::num::f64::ANY]
}

proptest! {
    #[test]
    fn every_accepted_spectrum_keeps_its_promises(
        steps in prop::collection::vec(prop_oneof![400 => 0.1f64..5.0, 1 => -0.1f64..0.1], 40..120),
        noise in prop::collection::vec(mostly_sane(), 120),
        errors in prop::collection::vec(mostly_sane(), 120),
    ) {
        let mut at = 4000.0;
        let wave: Vec<f64> = steps.iter().map(|step| { at += step; at }).collect();
        let length = wave.len();
        let may_be_read = length >= emberline::spectrum::FEWEST_PIXELS && steps[1..].iter().all(|step| *step > 0.0);
        let outcome = Spectrum::new(
            wave, noise[..length].to_vec(), errors[..length].to_vec(), vec![true; length],
            Resolution::ResolvingPower(2000.0), false,
        );
        match outcome {
            Ok(spectrum) => {
                prop_assert!(may_be_read);
                prop_assert!(spectrum.flux().iter().all(|flux| flux.is_finite()));
                prop_assert!(spectrum.sigma().iter().all(|sigma| *sigma > 0.0));
                let bad = spectrum.bad_pixels();
                let good = spectrum.is_good().iter().filter(|good| **good).count();
                prop_assert_eq!(good + bad.masked + bad.flux_unusable + bad.sigma_unusable, length);
                prop_assert!(good >= emberline::spectrum::FEWEST_GOOD_PIXELS);
            }
            Err(fault) => prop_assert!(!may_be_read || fault.code().id == "spectrum.too-few-good-pixels", "{}", fault),
        }
    }
}
