//! PypeIt: `Coadd1D` (one spectrum, extension of class OneSpec) and `spec1d` (one table per object and
//! detector, class SpecObj).
//!
//! Wavelengths are in vacuum and, unless the header says otherwise, heliocentric; masks are 1 = good,
//! the reverse of everybody else's. Fluxes are in 1e-17 erg/s/cm2/A where they were calibrated, else
//! counts. Written from the pipeline's description; not yet seen here on a real file.

use super::{Layout, broken, object};
use crate::spectrum::fits::{FitsFile, Hdu, Table};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::units::{FluxScale, FluxUnit};
use crate::spectrum::{ErrorKind, Medium, Resolution, VelocityFrame, WaveUnit};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "pypeit",
    title: "PypeIt Coadd1D and spec1d files",
    identified_by: "a table of DMODCLS = OneSpec or SpecObj",
    rule: "vacuum by the pipeline; ivar; mask 1 = good; resolution from OPT_FWHM where present; calibrated where fluxed",
    reader: super::Reader::Fits { identify, read },
};

/// Unit of calibrated fluxes.
const CALIBRATED: FluxUnit = FluxUnit { scale: FluxScale::Calibrated, factor: 1e-17 };
const COUNTS: FluxUnit = FluxUnit { scale: FluxScale::Relative, factor: 1.0 };

/// Names of the columns of one way to extract, best first.
struct Columns {
    wave: &'static str,
    flux: &'static str,
    ivar: &'static str,
    mask: &'static str,
    unit: FluxUnit,
}

const EXTRACTIONS: &[Columns] = &[
    Columns { wave: "OPT_WAVE", flux: "OPT_FLAM", ivar: "OPT_FLAM_IVAR", mask: "OPT_MASK", unit: CALIBRATED },
    Columns { wave: "OPT_WAVE", flux: "OPT_COUNTS", ivar: "OPT_COUNTS_IVAR", mask: "OPT_MASK", unit: COUNTS },
    Columns { wave: "BOX_WAVE", flux: "BOX_FLAM", ivar: "BOX_FLAM_IVAR", mask: "BOX_MASK", unit: CALIBRATED },
    Columns { wave: "BOX_WAVE", flux: "BOX_COUNTS", ivar: "BOX_COUNTS_IVAR", mask: "BOX_MASK", unit: COUNTS },
];

fn class(hdu: &Hdu) -> Option<&str> {
    hdu.header.text("DMODCLS")
}

fn identify(fits: &FitsFile) -> bool {
    fits.hdus().iter().any(|hdu| hdu.table().is_some() && matches!(class(hdu), Some("OneSpec" | "SpecObj")))
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let mut raws = Vec::new();
    for hdu in fits.hdus() {
        let Some(table) = hdu.table() else { continue };
        match class(hdu) {
            Some("OneSpec") => raws.push(read_coadd(fits, hdu)?),
            Some("SpecObj") => raws.push(read_object(fits, hdu, table, raws.len())?),
            Some(_) | None => {}
        }
    }
    Ok(raws)
}

fn read_coadd(fits: &FitsFile, hdu: &Hdu) -> Result<RawSpectrum, ReadFault> {
    let is_fluxed = hdu.header.logical("FLUXED").or_else(|| fits.hdus()[0].header.logical("FLUXED"));
    let unit = if is_fluxed == Some(false) { COUNTS } else { CALIBRATED };
    let columns = Columns { wave: "wave", flux: "flux", ivar: "ivar", mask: "mask", unit };
    read_columns(fits, hdu, &columns)
}

fn read_object(fits: &FitsFile, hdu: &Hdu, table: &Table, row: usize) -> Result<RawSpectrum, ReadFault> {
    let columns = EXTRACTIONS
        .iter()
        .find(|columns| table.has_columns(&[columns.wave, columns.flux, columns.ivar, columns.mask]))
        .ok_or_else(|| broken(LAYOUT.name, format!("found no extracted spectrum in HDU {}", hdu.index)))?;
    let mut raw = read_columns(fits, hdu, columns)?;
    raw.row = Some(row);
    raw.object.survey_id = hdu.header.text("EXTNAME").map(str::to_owned);
    Ok(raw)
}

fn read_columns(fits: &FitsFile, hdu: &Hdu, columns: &Columns) -> Result<RawSpectrum, ReadFault> {
    let primary = &fits.hdus()[0].header;
    let headers = [&hdu.header, primary];
    let has_widths = hdu.table().is_some_and(|table| table.column("OPT_FWHM").is_some());
    let widths = has_widths.then(|| fits.column(hdu, "OPT_FWHM")).transpose()?;
    let frame = headers.iter().find_map(|header| header.text("VEL_TYPE").or(header.text("REFFRAME")));
    let frame = match frame.map(str::to_ascii_lowercase).as_deref() {
        Some("heliocentric") => Some(VelocityFrame::Heliocentric),
        Some("barycentric") => Some(VelocityFrame::Barycentric),
        Some("observed" | "none") => Some(VelocityFrame::Topocentric),
        _ => None,
    };
    let is_calibrated = columns.unit.scale == FluxScale::Calibrated;
    let flux_by = if is_calibrated { "layout: calibrated, in 1e-17 erg/s/cm2/A" } else { "layout: counts" };
    Ok(RawSpectrum {
        object: object::from_headers(&[primary, &hdu.header]),
        hdu: hdu.index,
        row: None,
        wave: fits.column(hdu, columns.wave)?,
        flux: fits.column(hdu, columns.flux)?,
        errors: Some(fits.column(hdu, columns.ivar)?),
        is_good: Some(fits.column(hdu, columns.mask)?.iter().map(|mask| *mask == 1.0).collect()),
        wave_unit: UnitWords::Known(Stated::new(WaveUnit::Angstrom, "layout: angstroms")),
        flux_unit: UnitWords::Known(Stated::new(columns.unit, flux_by)),
        error_kind: Some(Stated::new(ErrorKind::InverseVariance, format!("column {}", columns.ivar))),
        medium: Some(Stated::new(Medium::Vacuum, "layout: the pipeline gives vacuum wavelengths")),
        resolution: widths.map(|widths| Stated::new(Resolution::FwhmPerPixelAa(widths), "column OPT_FWHM")),
        velocity_frame: frame.map(|frame| Stated::new(frame, "VEL_TYPE or REFFRAME")),
        flags: Vec::new(),
        exposure_of: None,
    })
}
