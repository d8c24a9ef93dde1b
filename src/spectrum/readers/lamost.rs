//! LAMOST low resolution: images up to data release 7, tables since data release 8.
//!
//! Image: five lines (flux, inverse variance, something else, and-mask, or-mask) on the axis of COEFF0
//! and COEFF1; the third line is the wavelength only since DR2, so it is not read. Table: one row of
//! vectors WAVELENGTH, FLUX, IVAR, ANDMASK (DR8 and later; described in the survey's data model, not
//! yet seen here on a real file). Fluxes are relative. The nominal resolving power 1 800 holds for the
//! slit in use (two thirds of the fibre). Medium resolution: tables COADD_B and COADD_R, joined, of nominal
//! resolving power 7 500.

use super::arms::{Arm, join};
use super::sdss_image::log_axis;
use super::{Layout, broken, object, table_with};
use crate::spectrum::fits::{FitsFile, Hdu, Header};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::units::{FluxScale, FluxUnit};
use crate::spectrum::{ErrorKind, Medium, ObjectRecord, Resolution, VelocityFrame, WaveUnit};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "lamost",
    title: "LAMOST spectra: image of five lines, table with one row of vectors, or medium-resolution arms COADD_B and COADD_R",
    identified_by: "TELESCOP = LAMOST with an image of 5 lines or a table with WAVELENGTH, FLUX, IVAR, or tables COADD_B or COADD_R",
    rule: "vacuum and heliocentric unless the header says otherwise; inverse variance; and-mask 0 = good; nominal resolving power 1 800, or 7 500 for medium resolution",
    reader: super::Reader::Fits { identify, read },
};

/// Nominal resolving power of the low-resolution spectrographs.
const RESOLVING_POWER: f64 = 1800.0;
/// Nominal resolving power of the medium-resolution spectrographs.
const MEDIUM_RESOLVING_POWER: f64 = 7500.0;
/// Tables of the arms of medium-resolution files.
const MEDIUM_ARMS: [&str; 2] = ["COADD_B", "COADD_R"];
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
    is_image || table_with(fits, VECTORS).is_some() || medium_arms(fits).next().is_some()
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let primary = &fits.hdus()[0];
    let is_medium = primary.image().is_none() && medium_arms(fits).next().is_some();
    let raw = match primary.image() {
        Some(_) => read_image(fits)?,
        None if is_medium => read_medium(fits)?,
        None => read_table(fits)?,
    };
    let power = if is_medium { MEDIUM_RESOLVING_POWER } else { RESOLVING_POWER };
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
            Resolution::ResolvingPower(power),
            format!("layout: nominal resolving power {power}"),
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

fn medium_arms(fits: &FitsFile) -> impl Iterator<Item = &Hdu> {
    let arms = MEDIUM_ARMS.iter().filter_map(|name| fits.hdu_named(name));
    arms.filter(|hdu| hdu.table().is_some_and(|table| table.has_columns(&["FLUX", "IVAR"])))
}

fn read_medium(fits: &FitsFile) -> Result<RawSpectrum, ReadFault> {
    let mut parts = Vec::new();
    for hdu in medium_arms(fits) {
        let column = |name: &str| hdu.table().and_then(|table| table.column(name));
        // One row of vectors, or one row per pixel in earlier releases.
        let values = |name: &str| match column(name) {
            Some(column) if column.repeat > 1 => fits.cell(hdu, name, 0),
            Some(_) | None => fits.column(hdu, name),
        };
        let wave = if column("WAVELENGTH").is_some() {
            values("WAVELENGTH")?
        } else {
            values("LOGLAM")?.iter().map(|log| 10f64.powf(*log)).collect()
        };
        let is_good = match column("ANDMASK") {
            Some(_) => values("ANDMASK")?.iter().map(|mask| *mask == 0.0).collect(),
            None => vec![true; wave.len()],
        };
        let (flux, errors) = (values("FLUX")?, values("IVAR")?);
        if [flux.len(), errors.len(), is_good.len()].iter().any(|length| *length != wave.len()) {
            return Err(broken(
                LAYOUT.name,
                format!("found columns of different lengths in HDU {}", hdu.index),
            ));
        }
        parts.push(Arm { wave, flux, errors, is_good, widths: Vec::new() });
    }
    let hdu = medium_arms(fits).next().map_or(0, |hdu| hdu.index);
    let mut raw = RawSpectrum { hdu, ..RawSpectrum::default() };
    join(parts, "", &mut raw);
    Ok(raw)
}

fn object_record(header: &Header) -> ObjectRecord {
    let mut object = object::from_headers(&[header]);
    object.name = header.text("DESIG").map(str::to_owned).or(object.name);
    object.survey_id = object::survey_id(header, &["OBSID", "PLANID", "LMJD", "SPID", "FIBERID"]);
    object
}
