//! SDSS-V `mwmStar` and `mwmVisit`: tables whose rows are stacks or visits of one star, by spectrograph and site.
//!
//! Extensions 1 and 2 hold the optical spectra from the two sites, 3 and 4 the infrared ones, which have no
//! Balmer lines and are not read. Wavelengths are in vacuum, told by a column `wavelength` or by CRVAL
//! and CDELT in dex. By the survey's description they were shifted to the star's rest frame by `v_rad`; they
//! are shifted back here and every such spectrum is flagged, because this has not been seen on a real file.

use super::{Layout, broken, object};
use crate::codes::{self, Flag};
use crate::physics::constants::LIGHT_SPEED_KM_S;
use crate::spectrum::fits::{FitsFile, Hdu};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::units::{FluxScale, FluxUnit};
use crate::spectrum::{ErrorKind, Medium, VelocityFrame, WaveUnit};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "sdss-mwm",
    title: "SDSS-V mwmStar and mwmVisit files: one row per stack or visit",
    identified_by: "V_ASTRA in the primary header and a table with vectors flux and ivar",
    rule: "vacuum by the survey; only optical extensions; ivar; pixel_flags 0 = good; shifted back from the star's rest frame by v_rad; resolution from the configuration",
    reader: super::Reader::Fits { identify, read },
};

/// Extensions with spectra from the optical spectrographs.
const OPTICAL: [usize; 2] = [1, 2];
/// No star of the Galaxy is faster: larger values are fill values.
const FASTEST_KM_S: f64 = 3000.0;

fn tables(fits: &FitsFile) -> impl Iterator<Item = &Hdu> {
    fits.hdus().iter().filter(|hdu| {
        let is_infrared = hdu.header.text("EXTNAME").is_some_and(|name| name.contains("APOGEE"));
        let is_spectrum = hdu.table().is_some_and(|table| {
            table.has_columns(&["flux", "ivar"]) && table.column("flux").is_some_and(|flux| flux.repeat > 1)
        });
        OPTICAL.contains(&hdu.index) && is_spectrum && !is_infrared
    })
}

fn identify(fits: &FitsFile) -> bool {
    fits.hdus()[0].header.has("V_ASTRA") && tables(fits).next().is_some()
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let mut raws = Vec::new();
    for hdu in tables(fits) {
        for row in 0..hdu.table().map_or(0, |table| table.rows) {
            raws.push(read_row(fits, hdu, row)?);
        }
    }
    if raws.is_empty() {
        return Err(broken(LAYOUT.name, "found no row in the optical extensions"));
    }
    if raws.len() == 1 {
        raws[0].exposure_of = None;
    }
    Ok(raws)
}

fn read_row(fits: &FitsFile, hdu: &Hdu, row: u64) -> Result<RawSpectrum, ReadFault> {
    let has = |name: &str| hdu.table().is_some_and(|table| table.column(name).is_some());
    let cell = |name: &str| fits.cell(hdu, name, row);
    let real = |name: &str| cell(name).ok()?.first().copied().filter(|value| value.is_finite());
    let flux = cell("flux")?;
    let mut wave = if has("wavelength") { cell("wavelength")? } else { log_axis(hdu, flux.len())? };
    let velocity_km_s = real("v_rad").filter(|velocity| velocity.abs() < FASTEST_KM_S);
    let detail = match velocity_km_s {
        Some(velocity_km_s) => {
            wave.iter_mut().for_each(|wave| *wave *= 1.0 + velocity_km_s / LIGHT_SPEED_KM_S);
            format!("shifted back by v_rad = {velocity_km_s} km/s")
        }
        None => {
            "not shifted back: found no v_rad, so the fitted velocity is relative to the survey's".to_owned()
        }
    };
    let is_good = if has("pixel_flags") {
        Some(cell("pixel_flags")?.iter().map(|flags| *flags == 0.0).collect())
    } else {
        None
    };
    let primary = &fits.hdus()[0].header;
    let star = primary.integer("SDSS_ID").or_else(|| fits.integer_cell(hdu, "sdss_id", row).ok());
    let mut record = object::from_headers(&[primary, &hdu.header]);
    record.name = star.map(|star| format!("SDSS {star}")).or(record.name);
    let mjd = real("mjd").or_else(|| real("min_mjd"));
    record.observed_at = mjd.map(|mjd| format!("MJD {mjd}")).or(record.observed_at);
    record.exposure_s = real("exptime").or_else(|| real("t_exp")).filter(|exposure| *exposure > 0.0);
    record.survey_id = star.map(|star| format!("SDSS_ID={star}"));
    Ok(RawSpectrum {
        exposure_of: record.name.clone(),
        object: record,
        hdu: hdu.index,
        row: Some(row as usize),
        wave,
        flux,
        errors: Some(cell("ivar")?),
        is_good,
        wave_unit: UnitWords::Known(Stated::new(WaveUnit::Angstrom, "layout: angstroms")),
        flux_unit: UnitWords::Known(Stated::new(
            FluxUnit { scale: FluxScale::Calibrated, factor: 1e-17 },
            "layout: 1e-17 erg/s/cm2/A",
        )),
        error_kind: Some(Stated::new(ErrorKind::InverseVariance, "column ivar")),
        medium: Some(Stated::new(Medium::Vacuum, "layout: all spectra of the survey are in vacuum")),
        resolution: None,
        velocity_frame: Some(Stated::new(
            VelocityFrame::Barycentric,
            "layout: the survey corrects for the Earth's motion",
        )),
        flags: vec![Flag::new(&codes::REST_FRAME, detail)],
    })
}

/// The axis of older versions: base-10 logarithm, from the header of the extension.
fn log_axis(hdu: &Hdu, pixels: usize) -> Result<Vec<f64>, ReadFault> {
    let header = &hdu.header;
    let (first, step) = header
        .real("CRVAL")
        .or_else(|| header.real("CRVAL1"))
        .zip(header.real("CDELT").or_else(|| header.real("CDELT1")))
        .ok_or_else(|| broken(LAYOUT.name, "found neither a column wavelength nor CRVAL and CDELT"))?;
    Ok((0..pixels).map(|pixel| 10f64.powf(first + step * pixel as f64)).collect())
}
