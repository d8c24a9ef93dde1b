//! Several exposures of one object in one file: apart, or combined.

use emberline::spectrum::{Exposures, Observation, ReadSettings};

use super::{lenient, ramp, read_bytes};
use crate::support::fits_bytes::{Column, FitsBytes};

/// A file of two exposures as of a spectrograph in orbit; the second is twice as bright, has errors three times as
/// large, a bad pixel, and wavelengths shifted by `shift_aa`.
fn two_exposures(shift_aa: f64) -> Vec<u8> {
    let (wave, flux, sigma) = ramp();
    let table = |file: FitsBytes, wave: &[f64], flux: &[f64], sigma: &[f64], bad: Option<usize>| {
        let mut quality = vec![0; wave.len()];
        bad.into_iter().for_each(|pixel| quality[pixel] = 512);
        let cell = |column: Column| column.per_cell(wave.len());
        file.and_table(
            &["EXPTIME = 600.0"],
            &[
                Column::i32("NELEM", &[wave.len() as i32]),
                cell(Column::f64("WAVELENGTH", wave).unit("Angstroms")),
                cell(Column::f64("FLUX", flux).unit("erg/s/cm**2/Angstrom")),
                cell(Column::f64("ERROR", sigma)),
                cell(Column::i32("DQ", &quality)),
            ],
        )
    };
    let primary = FitsBytes::empty_primary(&["TELESCOP= 'HST     '", "TARGNAME= 'KF J0100+00'"]);
    let times =
        |values: &[f64], factor: f64| -> Vec<f64> { values.iter().map(|value| factor * value).collect() };
    let shifted: Vec<f64> = wave.iter().map(|wave| wave + shift_aa).collect();
    let file = table(primary, &wave, &flux, &sigma, None);
    table(file, &shifted, &times(&flux, 2.0), &times(&sigma, 3.0), Some(11)).bytes()
}

fn read(shift_aa: f64, exposures: Exposures) -> Vec<Observation> {
    let settings = ReadSettings { exposures, ..lenient() };
    read_bytes(two_exposures(shift_aa), &settings).into_iter().map(|outcome| outcome.unwrap()).collect()
}

fn codes(observation: &Observation) -> Vec<&str> {
    observation.flags.iter().map(|flag| flag.code.as_str()).collect()
}

#[test]
fn exposures_are_apart_unless_configured() {
    assert_eq!(ReadSettings::default().exposures, Exposures::Apart);
    let found = read(0.0, Exposures::Apart);
    assert_eq!(found.len(), 2);
    assert_eq!((found[0].source.row, found[1].source.row), (Some(0), Some(1)));
    assert!(found.iter().all(|one| !codes(one).iter().any(|code| code.contains("exposures"))));
}

#[test]
fn combined_exposures_are_the_weighted_mean() {
    let found = read(0.0, Exposures::Combine);
    assert_eq!(found.len(), 1);
    let (_, flux, sigma) = ramp();
    let spectrum = &found[0].spectrum;
    // Scaled to the first, which has the better ratio, the second has errors of 1.5 times the first's.
    let weights = [sigma[0].powi(-2), (1.5 * sigma[0]).powi(-2)];
    for (pixel, flux) in flux.iter().enumerate() {
        let expected = if pixel == 11 { weights[0] } else { weights[0] + weights[1] };
        assert!((spectrum.flux()[pixel] - flux).abs() < 1e-12 * flux.abs(), "{pixel}");
        assert!((spectrum.sigma()[pixel] * expected.sqrt() - 1.0).abs() < 1e-12, "{pixel}");
        assert!(spectrum.is_good()[pixel]);
    }
    assert_eq!(found[0].object.exposure_s, Some(1200.0));
    assert!(codes(&found[0]).contains(&"spectrum.exposures-combined"));
}

#[test]
fn exposures_with_other_wavelengths_are_never_averaged() {
    // Pixels are 5 A wide: 0.1 A is the same axis, 1 A is not.
    assert_eq!(read(0.1, Exposures::Combine).len(), 1);
    let found = read(1.0, Exposures::Combine);
    assert_eq!(found.len(), 2);
    assert!(found.iter().all(|one| codes(one).contains(&"spectrum.exposures-apart")));
}
