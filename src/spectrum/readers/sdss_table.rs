//! SDSS since data release 8, BOSS, eBOSS and SDSS-V: `spec-*` files, lite and full.
//!
//! The first table with `flux loglam ivar` is the coadd; single exposures of a full file come later
//! and are not read, because the coadd holds them already. A pixel is bad where `and_mask` is set (bad
//! in every exposure); `or_mask` is set nearly everywhere and is not used. `wdisp` is the dispersion
//! in pixels of 1e-4 dex. The header's RA and DEC are those of the telescope, up to 3 degrees off; the
//! fibre's are PLUG_RA and PLUG_DEC.

use super::{Layout, object, table_with};
use crate::spectrum::fits::{FitsFile, Hdu};
use crate::spectrum::read::ReadFault;
use crate::spectrum::resolution::FWHM_PER_SIGMA;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::units::{FluxScale, FluxUnit};
use crate::spectrum::{ErrorKind, Medium, ObjectRecord, Resolution, VelocityFrame, WaveUnit};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "sdss-spec",
    title: "SDSS, BOSS, eBOSS and SDSS-V spec files, lite and full: coadd table with flux, loglam, ivar",
    identified_by: "a table with columns flux, loglam, ivar, one row per pixel",
    rule: "vacuum and heliocentric by the survey; ivar; and_mask 0 = good; resolution from wdisp",
    reader: super::Reader::Fits { identify, read },
};

const COLUMNS: &[&str] = &["flux", "loglam", "ivar"];
/// Step of the common wavelength axis, dex.
pub const STEP_DEX: f64 = 1e-4;

fn identify(fits: &FitsFile) -> bool {
    table_with(fits, COLUMNS).and_then(|hdu| hdu.table()?.column("flux")).is_some_and(|flux| flux.repeat == 1)
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let hdu = table_with(fits, COLUMNS)
        .ok_or_else(|| super::broken(LAYOUT.name, "found no table with flux, loglam and ivar"))?;
    let has = |name: &str| hdu.table().is_some_and(|table| table.column(name).is_some());
    let primary = &fits.hdus()[0].header;
    let wave: Vec<f64> = fits.column(hdu, "loglam")?.iter().map(|log| 10f64.powf(*log)).collect();
    let resolution = if has("wdisp") {
        let widths = fits.column(hdu, "wdisp")?;
        let widths = wave.iter().zip(widths).map(|(wave, pixels)| fwhm_aa(*wave, pixels)).collect();
        Some(Stated::new(Resolution::FwhmPerPixelAa(widths), "column wdisp"))
    } else {
        None
    };
    let is_good = if has("and_mask") {
        Some(fits.column(hdu, "and_mask")?.iter().map(|mask| *mask == 0.0).collect())
    } else {
        None
    };
    let flux_unit = match primary.text("BUNIT").or_else(|| hdu.header.text("BUNIT")) {
        Some(words) => UnitWords::of_flux("BUNIT", Some(words)),
        None => UnitWords::Known(Stated::new(
            FluxUnit { scale: FluxScale::Calibrated, factor: 1e-17 },
            "layout: 1e-17 erg/cm2/s/A",
        )),
    };
    Ok(vec![RawSpectrum {
        object: object_record(fits, hdu),
        hdu: hdu.index,
        row: None,
        flux: fits.column(hdu, "flux")?,
        errors: Some(fits.column(hdu, "ivar")?),
        is_good,
        wave_unit: UnitWords::Known(Stated::new(WaveUnit::Angstrom, "layout: loglam is log10 of angstroms")),
        flux_unit,
        error_kind: Some(Stated::new(ErrorKind::InverseVariance, "column ivar")),
        medium: super::stated_medium(&[primary])
            .or_else(|| Some(Stated::new(Medium::Vacuum, "layout: all spectra of the survey are in vacuum"))),
        resolution,
        velocity_frame: Some(Stated::new(
            VelocityFrame::Heliocentric,
            "layout: the survey corrects for the Earth's motion",
        )),
        wave,
        flags: Vec::new(),
        exposure_of: None,
    }])
}

/// FWHM in angstroms of a dispersion in pixels of the common axis.
pub fn fwhm_aa(wave_aa: f64, dispersion_pixels: f64) -> f64 {
    FWHM_PER_SIGMA * dispersion_pixels * STEP_DEX * std::f64::consts::LN_10 * wave_aa
}

fn object_record(fits: &FitsFile, coadd: &Hdu) -> ObjectRecord {
    let primary = &fits.hdus()[0].header;
    // The row of the survey's catalogue for this object, right behind the coadd.
    let catalogue = fits.hdus().get(coadd.index + 1);
    let integer = |name: &str| fits.integer_cell(catalogue?, name, 0).ok();
    let real =
        |name: &str| fits.cell(catalogue?, name, 0).ok()?.first().copied().filter(|value| value.is_finite());
    let mut object = object::from_headers(&[primary]);
    object.ra_deg =
        object::right_ascension_deg(primary, "PLUG_RA").or_else(|| real("PLUG_RA")).or_else(|| real("RACAT"));
    object.dec_deg =
        object::declination_deg(primary, "PLUG_DEC").or_else(|| real("PLUG_DEC")).or_else(|| real("DECCAT"));
    let plate = primary.integer("PLATEID").or_else(|| integer("PLATE")).or_else(|| integer("FIELD"));
    let mjd = integer("MJD").or_else(|| primary.integer("MJD"));
    let fibre = primary.integer("FIBERID").or_else(|| integer("FIBERID")).or_else(|| integer("CATALOGID"));
    if let (Some(plate), Some(mjd), Some(fibre)) = (plate, mjd, fibre) {
        object.name = Some(format!("SDSS {plate}-{mjd}-{fibre}"));
        object.survey_id = Some(format!("PLATE={plate} MJD={mjd} FIBERID={fibre}"));
    }
    object.program = object.program.or_else(|| {
        let text = |name: &str| fits.text_cell(catalogue?, name, 0).ok().filter(|text| !text.is_empty());
        text("SURVEY").or_else(|| text("PROGRAMNAME"))
    });
    object
}
