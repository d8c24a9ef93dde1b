//! SDSS `spPlate-*`: all fibres of a plate, one line each, in parallel images: flux, inverse variance,
//! and-mask, or-mask, dispersion, then the table of fibres. Written from the survey's description; not
//! yet seen here on a real file.

use super::sdss_image::log_axis;
use super::{Layout, broken, object, sdss_table};
use crate::spectrum::fits::{FitsFile, Hdu};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::{ErrorKind, Medium, ObjectRecord, Resolution, VelocityFrame, WaveUnit};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "sdss-spplate",
    title: "SDSS spPlate files: one line per fibre",
    identified_by: "primary image of more than 5 lines with TELESCOP containing SDSS and COEFF0",
    rule: "vacuum and heliocentric by the survey; ivar; and-mask 0 = good; resolution from the dispersion image; sky fibres left out",
    reader: super::Reader::Fits { identify, read },
};

/// Order of the units in the file.
const IVAR: usize = 1;
const AND_MASK: usize = 2;
const DISPERSION: usize = 4;
const FIBRES: usize = 5;
/// More lines than any file of a single object has.
const LINES_OF_ONE_OBJECT: u64 = 5;

fn identify(fits: &FitsFile) -> bool {
    let primary = &fits.hdus()[0];
    let is_sdss = primary.header.text("TELESCOP").is_some_and(|name| name.contains("SDSS"));
    is_sdss
        && primary.header.has("COEFF0")
        && primary.image().is_some_and(|image| image.lines() > LINES_OF_ONE_OBJECT)
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let primary = &fits.hdus()[0];
    let image = primary.image().ok_or_else(|| broken(LAYOUT.name, "found no image"))?;
    let unit = |index: usize, what: &str| {
        fits.hdus()
            .get(index)
            .filter(|hdu| hdu.image().is_some_and(|other| other.axes == image.axes))
            .ok_or_else(|| broken(LAYOUT.name, format!("found no {what} of the same shape in HDU {index}")))
    };
    let (ivar, mask) = (unit(IVAR, "inverse variances")?, unit(AND_MASK, "mask")?);
    let dispersion = unit(DISPERSION, "dispersions")?;
    let (start, step) =
        log_axis(&primary.header).ok_or_else(|| broken(LAYOUT.name, "found no COEFF0 and COEFF1"))?;
    let pixels = image.length();
    let wave: Vec<f64> = (0..pixels).map(|pixel| 10f64.powf(start + step * pixel as f64)).collect();
    let fibres =
        fits.hdus().get(FIBRES).filter(|hdu| hdu.table().is_some_and(|table| table.rows == image.lines()));
    let mut raws = Vec::new();
    for row in 0..image.lines() {
        let kind = fibres.and_then(|hdu| fits.text_cell(hdu, "OBJTYPE", row).ok());
        if kind.as_deref() == Some("SKY") {
            continue;
        }
        let line = |hdu: &Hdu| fits.pixels(hdu, row * pixels, pixels);
        let widths = line(dispersion)?;
        let widths = wave.iter().zip(widths).map(|(wave, width)| sdss_table::fwhm_aa(*wave, width)).collect();
        raws.push(RawSpectrum {
            object: object_record(fits, fibres, row),
            hdu: 0,
            row: Some(row as usize),
            wave: wave.clone(),
            flux: line(primary)?,
            errors: Some(line(ivar)?),
            is_good: Some(line(mask)?.iter().map(|mask| *mask == 0.0).collect()),
            wave_unit: UnitWords::Known(Stated::new(WaveUnit::Angstrom, "layout: log10 of angstroms")),
            flux_unit: UnitWords::of_flux("BUNIT", primary.header.text("BUNIT")),
            error_kind: Some(Stated::new(ErrorKind::InverseVariance, "layout: HDU 1")),
            medium: Some(Stated::new(Medium::Vacuum, "layout: all spectra of the survey are in vacuum")),
            resolution: Some(Stated::new(Resolution::FwhmPerPixelAa(widths), "layout: HDU 4")),
            velocity_frame: Some(Stated::new(
                VelocityFrame::Heliocentric,
                "layout: the survey corrects for the Earth's motion",
            )),
            flags: Vec::new(),
            exposure_of: None,
        });
    }
    Ok(raws)
}

fn object_record(fits: &FitsFile, fibres: Option<&Hdu>, row: u64) -> ObjectRecord {
    let header = &fits.hdus()[0].header;
    let real =
        |name: &str| fits.cell(fibres?, name, row).ok()?.first().copied().filter(|value| value.is_finite());
    let fibre = fibres.and_then(|hdu| fits.integer_cell(hdu, "FIBERID", row).ok()).unwrap_or(row as i64 + 1);
    let mut object = object::from_headers(&[header]);
    object.ra_deg = real("RA");
    object.dec_deg = real("DEC");
    if let (Some(plate), Some(mjd)) = (header.integer("PLATEID"), header.integer("MJD")) {
        object.name = Some(format!("SDSS {plate}-{mjd}-{fibre}"));
        object.survey_id = Some(format!("PLATE={plate} MJD={mjd} FIBERID={fibre}"));
    }
    object
}
