//! SDSS up to data release 7: `spSpec-*` files.
//!
//! A primary image of four or five lines (flux, flux minus continuum, error, mask, and since DR6
//! sky), base-10 logarithmic axis. The mask line marks detected lines with bit 30, which is no fault,
//! so the table `andMask` is preferred and bit 30 ignored. `dispersion` of the sixth extension is in
//! pixels; it is zero where the error is. Bare templates without keywords are recognised by the tables
//! of lines that follow.

use super::{Layout, broken, object, sdss_table, table_with};
use crate::spectrum::fits::{FitsFile, Header};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::{ErrorKind, Medium, ObjectRecord, Resolution, VelocityFrame, WaveUnit};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "sdss-spspec",
    title: "SDSS spSpec files up to DR7: image with lines flux, residual, error, mask",
    identified_by: "primary image of 4 or 5 lines with TELESCOP containing SDSS, ARRAY1 = SPECTRUM, or a table with restWave and lineMask",
    rule: "vacuum and heliocentric by the survey; line 2 is sigma; andMask 0 = good; resolution from the dispersion column",
    reader: super::Reader::Fits { identify, read },
};

/// Bit of the mask line that marks a spectral line found in this pixel.
const LINE_FOUND: u64 = 1 << 30;
/// Line of the errors.
const ERROR_LINE: u64 = 2;
/// Line of the mask.
const MASK_LINE: u64 = 3;

fn identify(fits: &FitsFile) -> bool {
    let primary = &fits.hdus()[0];
    let Some(image) = primary.image() else { return false };
    let is_marked = primary.header.text("TELESCOP").is_some_and(|name| name.contains("SDSS"))
        || primary.header.text("ARRAY1") == Some("SPECTRUM")
        || table_with(fits, &["restWave", "lineMask"]).is_some();
    is_marked && image.axes.len() == 2 && (4..=5).contains(&image.lines())
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let hdu = &fits.hdus()[0];
    let pixels = hdu.image().map_or(0, |image| image.length());
    let line = |line: u64| fits.pixels(hdu, line * pixels, pixels);
    let header = &hdu.header;
    let (start, step) = log_axis(header)
        .ok_or_else(|| broken(LAYOUT.name, "found neither COEFF0 and COEFF1 nor CRVAL1 and CD1_1"))?;
    let wave: Vec<f64> = (0..pixels).map(|pixel| 10f64.powf(start + step * pixel as f64)).collect();
    let extension = table_with(fits, &["andMask", "dispersion"])
        .filter(|hdu| hdu.table().is_some_and(|table| table.rows == pixels));
    let (is_good, resolution) = match extension {
        Some(extension) => {
            let widths = fits.column(extension, "dispersion")?;
            let widths =
                wave.iter().zip(widths).map(|(wave, width)| sdss_table::fwhm_aa(*wave, width)).collect();
            (
                fits.column(extension, "andMask")?.iter().map(|mask| *mask == 0.0).collect(),
                Some(Stated::new(Resolution::FwhmPerPixelAa(widths), "column dispersion")),
            )
        }
        None => (line(MASK_LINE)?.iter().map(|mask| *mask as u64 & !LINE_FOUND == 0).collect(), None),
    };
    Ok(vec![RawSpectrum {
        object: object_record(header),
        hdu: 0,
        row: None,
        wave,
        flux: line(0)?,
        errors: Some(line(ERROR_LINE)?),
        is_good: Some(is_good),
        wave_unit: UnitWords::Known(Stated::new(WaveUnit::Angstrom, "layout: log10 of angstroms")),
        flux_unit: UnitWords::of_flux("BUNIT", header.text("BUNIT")),
        error_kind: Some(Stated::new(ErrorKind::Sigma, "layout: line 2 of the image")),
        medium: super::stated_medium(&[header])
            .or_else(|| Some(Stated::new(Medium::Vacuum, "layout: all spectra of the survey are in vacuum"))),
        resolution,
        velocity_frame: Some(Stated::new(
            VelocityFrame::Heliocentric,
            "layout: the survey corrects for the Earth's motion",
        )),
        flags: Vec::new(),
        exposure_of: None,
    }])
}

/// log10 of the first wavelength and step, dex: the survey's own keywords, else the general ones.
pub fn log_axis(header: &Header) -> Option<(f64, f64)> {
    let own = header.real("COEFF0").zip(header.real("COEFF1"));
    own.or_else(|| {
        let step = header.real("CD1_1").or_else(|| header.real("CDELT1"))?;
        Some((header.real("CRVAL1")? + (1.0 - header.real("CRPIX1").unwrap_or(1.0)) * step, step))
    })
}

fn object_record(header: &Header) -> ObjectRecord {
    let mut object = object::from_headers(&[header]);
    // RA and DEC are where the telescope pointed, RAOBJ and DECOBJ where the fibre was.
    object.ra_deg = object::right_ascension_deg(header, "RAOBJ");
    object.dec_deg = object::declination_deg(header, "DECOBJ");
    object.survey_id = object::survey_id(header, &["PLATEID", "MJD", "FIBERID"]);
    if let (Some(plate), Some(mjd), Some(fibre)) =
        (header.integer("PLATEID"), header.integer("MJD"), header.integer("FIBERID"))
    {
        object.name = Some(format!("SDSS {plate}-{mjd}-{fibre}"));
    }
    object
}
