//! What reading promises: values from the file, decisions on record, refusals with a stable code.

mod exposures;
mod layouts;
pub mod mutants;
mod provenance;
mod refusals;
mod values;

use emberline::spectrum::fits::FitsFile;
use emberline::spectrum::{Assumptions, Observation, ReadSettings, SourceRecord, read_fits};

use crate::support::fits_bytes::{Column, FitsBytes};

/// Settings that supply whatever a small test file leaves open.
pub fn lenient() -> ReadSettings {
    assuming(|assume| {
        assume.medium = Some(emberline::spectrum::Medium::Vacuum);
        assume.resolution_fwhm_aa = Some(5.0);
        assume.assume_snr = Some(50.0);
    })
}

/// Settings with these assumptions and nothing else.
pub fn assuming(change: impl FnOnce(&mut Assumptions)) -> ReadSettings {
    let mut settings = ReadSettings::default();
    change(&mut settings.assume);
    settings
}

/// Reads bytes as if they were a file.
pub fn read_bytes(bytes: Vec<u8>, settings: &ReadSettings) -> Vec<Result<Observation, &'static str>> {
    let fits = match FitsFile::parse(bytes, settings.largest_bytes()) {
        Ok(fits) => fits,
        Err(fault) => return vec![Err(fault.code().id)],
    };
    match read_fits(&fits, SourceRecord::default(), settings) {
        Ok(outcomes) => {
            outcomes.into_iter().map(|outcome| outcome.map_err(|refusal| refusal.fault.code().id)).collect()
        }
        Err(refusal) => vec![Err(refusal.fault.code().id)],
    }
}

/// A plain spectrum: 200 pixels from 4 000 A, 5 A apart, flux 1 with a dip, errors 0.01.
pub fn ramp() -> (Vec<f64>, Vec<f64>, Vec<f64>) {
    let wave: Vec<f64> = (0..200).map(|pixel| 4000.0 + 5.0 * f64::from(pixel)).collect();
    let flux = wave.iter().map(|wave| 1.0 - 0.5 * (-((wave - 4861.0) / 30.0).powi(2)).exp()).collect();
    let sigma = vec![0.01; wave.len()];
    (wave, flux, sigma)
}

/// A table file of these values that states everything.
pub fn table_file(wave: &[f64], flux: &[f64], sigma: &[f64]) -> FitsBytes {
    FitsBytes::empty_primary(&[
        "OBJECT  = 'Test star'",
        "VACUUM  =                    T",
        "SPEC_RES=               1000.0",
    ])
    .and_table(
        &[],
        &[
            Column::f64("wave", wave).unit("Angstrom"),
            Column::f64("flux", flux).unit("erg/s/cm2/A"),
            Column::f64("sigma", sigma).unit("erg/s/cm2/A"),
        ],
    )
}
