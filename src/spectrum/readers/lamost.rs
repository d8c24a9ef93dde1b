//! LAMOST low resolution: images up to data release 7, tables since data release 8.
//!
//! Image: five lines (flux, inverse variance, something else, and-mask, or-mask) on the axis of COEFF0
//! and COEFF1; the third line is the wavelength only since DR2, so it is not read. Table: one row of
//! vectors WAVELENGTH, FLUX, IVAR, ANDMASK (DR8 and later; described in the survey's data model, not
//! yet seen here on a real file). Fluxes are relative. The nominal resolving power 1 800 holds for the
//! slit in use (two thirds of the fibre).

use super::sdss_image::log_axis;
use super::{Layout, broken, object, table_with};
use crate::spectrum::fits::{FitsFile, Header};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::units::{FluxScale, FluxUnit};
use crate::spectrum::{ErrorKind, Medium, ObjectRecord, Resolution, VelocityFrame, WaveUnit};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "lamost",
    title: "LAMOST low-resolution spectra: image of five lines, or table with one row of vectors",
    rule: "vacuum and heliocentric unless the header says otherwise; inverse variance; and-mask 0 = good; nominal resolving power 1 800",
    identify,
    read,
};

/// Nominal resolving power of the low-resolution spectrographs.
const RESOLVING_POWER: f64 = 1800.0;
/// Line of the inverse variances.
const IVAR_LINE: u64 = 1;
/// Line of the and-mask.
const MASK_LINE: u64 = 3;
const VECTORS: &[&str] = &["WAVELENGTH", "FLUX", "IVAR"];

fn identify(fits: &FitsFile) -> bool {
    let primary = &fits.hdus()[0];
    if primary.header.text("TELESCOP") != Some("LAMOST") {
        return false;
    }
    let is_image = primary.image().is_some_and(|image| image.axes.len() == 2 && image.lines() == 5);
    is_image || table_with(fits, VECTORS).is_some()
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let primary = &fits.hdus()[0];
    let raw = if primary.image().is_some() { read_image(fits)? } else { read_table(fits)? };
    let header = &primary.header;
    let frame = match header.logical("HELIO") {
        Some(false) => Some(Stated::new(VelocityFrame::Topocentric, "HELIO = F")),
        Some(true) => Some(Stated::new(VelocityFrame::Heliocentric, "HELIO = T")),
        None => None,
    };
    Ok(vec![RawSpectrum {
        object: object_record(header),
        wave_unit: UnitWords::Known(Stated::new(WaveUnit::Angstrom, "layout: angstroms")),
        flux_unit: UnitWords::Known(Stated::new(
            FluxUnit { scale: FluxScale::Relative, factor: 1.0 },
            "layout: relative fluxes",
        )),
        error_kind: Some(Stated::new(
            ErrorKind::InverseVariance,
            "layout: line 1 of the image or column IVAR",
        )),
        medium: super::stated_medium(&[header])
            .or_else(|| Some(Stated::new(Medium::Vacuum, "layout: all spectra of the survey are in vacuum"))),
        resolution: Some(Stated::new(
            Resolution::ResolvingPower(RESOLVING_POWER),
            format!("layout: nominal resolving power {RESOLVING_POWER}"),
        )),
        velocity_frame: frame,
        ..raw
    }])
}

fn read_image(fits: &FitsFile) -> Result<RawSpectrum, ReadFault> {
    let hdu = &fits.hdus()[0];
    let pixels = hdu.image().map_or(0, |image| image.length());
    let line = |line: u64| fits.pixels(hdu, line * pixels, pixels);
    let (start, step) =
        log_axis(&hdu.header).ok_or_else(|| broken(LAYOUT.name, "found no COEFF0 and COEFF1"))?;
    Ok(RawSpectrum {
        hdu: 0,
        wave: (0..pixels).map(|pixel| 10f64.powf(start + step * pixel as f64)).collect(),
        flux: line(0)?,
        errors: Some(line(IVAR_LINE)?),
        is_good: Some(line(MASK_LINE)?.iter().map(|mask| *mask == 0.0).collect()),
        ..RawSpectrum::default()
    })
}

fn read_table(fits: &FitsFile) -> Result<RawSpectrum, ReadFault> {
    let hdu = table_with(fits, VECTORS)
        .ok_or_else(|| broken(LAYOUT.name, "found no table with WAVELENGTH, FLUX and IVAR"))?;
    let has_mask = hdu.table().is_some_and(|table| table.column("ANDMASK").is_some());
    let mask = has_mask.then(|| fits.cell(hdu, "ANDMASK", 0)).transpose()?;
    Ok(RawSpectrum {
        hdu: hdu.index,
        wave: fits.cell(hdu, "WAVELENGTH", 0)?,
        flux: fits.cell(hdu, "FLUX", 0)?,
        errors: Some(fits.cell(hdu, "IVAR", 0)?),
        is_good: mask.map(|mask| mask.iter().map(|value| *value == 0.0).collect()),
        ..RawSpectrum::default()
    })
}

fn object_record(header: &Header) -> ObjectRecord {
    let mut object = object::from_headers(&[header]);
    object.name = header.text("DESIG").map(str::to_owned).or(object.name);
    object.survey_id = object::survey_id(header, &["OBSID", "PLANID", "LMJD", "SPID", "FIBERID"]);
    object
}
