//! The generic binary table: a column of wavelengths, one of fluxes, perhaps errors and a mask.
//!
//! Columns are found by name. A table has one row per pixel, or one row per object with the whole
//! spectrum in each cell. A column of errors counts as sigma, variance or inverse variance by its name;
//! a mask counts as 0 = good unless its name says good.

use super::{Layout, object};
use crate::spectrum::fits::{Column, FitsFile, Hdu, Table};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::{ErrorKind, Medium, Resolution, WaveUnit};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "table",
    title: "binary table with a column of wavelengths and one of fluxes",
    identified_by: "a table with a column of wavelengths and one of fluxes, by name",
    rule: "units from TUNIT; medium from VACUUM, AIRORVAC or the column's name; kind of error from the column's name",
    reader: super::Reader::Fits { identify, read },
};

/// Names of such columns, in lower case.
pub const WAVE_NAMES: &[&str] = &[
    "wavelength",
    "wave",
    "lambda",
    "lam",
    "wl",
    "loglam",
    "wave_vac",
    "wave_air",
    "lambda_vac",
    "lambda_air",
    "wavelength_vac",
    "wavelength_air",
    "awav",
];
/// Names of such columns, in lower case.
pub const FLUX_NAMES: &[&str] = &["flux", "flam", "f_lambda", "flux_lambda", "spec", "spectrum", "counts"];
const SIGMA_NAMES: &[&str] = &[
    "err",
    "error",
    "sigma",
    "unc",
    "uncertainty",
    "stdev",
    "std",
    "noise",
    "flux_err",
    "flux_error",
    "err_flux",
    "error_flux",
    "e_flux",
    "flux_unc",
    "flux_sigma",
    "fluxerr",
];
const VARIANCE_NAMES: &[&str] = &["var", "variance", "flux_var"];
const IVAR_NAMES: &[&str] = &["ivar", "invvar", "inverse_variance", "flux_ivar"];
const WEIGHT_NAMES: &[&str] = &["weight", "weights", "wgt"];
/// Names of masks whose 0 is good.
pub const BAD_NAMES: &[&str] = &["mask", "dq", "qual", "quality", "flags", "and_mask"];
/// Names of masks whose 1 is good.
pub const GOOD_NAMES: &[&str] = &["good", "is_good", "goodpix"];

/// The columns of one table that make a spectrum.
struct Columns<'a> {
    wave: &'a Column,
    flux: &'a Column,
}

fn columns(table: &Table) -> Option<Columns<'_>> {
    let wave = named(table, WAVE_NAMES)?;
    let flux = named(table, FLUX_NAMES)?;
    (wave.repeat == flux.repeat && wave.is_numeric() && flux.is_numeric()).then_some(Columns { wave, flux })
}

fn named<'a>(table: &'a Table, names: &[&str]) -> Option<&'a Column> {
    names.iter().find_map(|name| table.column(name))
}

fn find(fits: &FitsFile) -> Option<(&Hdu, &Table, Columns<'_>)> {
    fits.hdus().iter().find_map(|hdu| {
        let table = hdu.table()?;
        Some((hdu, table, columns(table)?))
    })
}

fn identify(fits: &FitsFile) -> bool {
    find(fits).is_some()
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let (hdu, table, columns) =
        find(fits).ok_or_else(|| super::broken(LAYOUT.name, "found no columns of wavelength and flux"))?;
    if columns.wave.repeat <= 1 {
        return Ok(vec![read_one(fits, hdu, table, &columns, None)?]);
    }
    (0..table.rows).map(|row| read_one(fits, hdu, table, &columns, Some(row))).collect()
}

/// One spectrum: the whole columns, or the cells of one row.
fn read_one(
    fits: &FitsFile,
    hdu: &Hdu,
    table: &Table,
    columns: &Columns<'_>,
    row: Option<u64>,
) -> Result<RawSpectrum, ReadFault> {
    let values = |column: &Column| match row {
        None => fits.column(hdu, &column.name),
        Some(row) => fits.cell(hdu, &column.name, row),
    };
    let is_log = columns.wave.name.eq_ignore_ascii_case("loglam");
    let mut wave = values(columns.wave)?;
    if is_log {
        wave.iter_mut().for_each(|wave| *wave = 10f64.powf(*wave));
    }
    let primary = &fits.hdus()[0].header;
    let headers = [&hdu.header, primary];
    let errors = error_column(table);
    let mask = named(table, GOOD_NAMES)
        .map(|column| (column, true))
        .or_else(|| named(table, BAD_NAMES).map(|column| (column, false)))
        .filter(|(column, _)| {
            (column.is_numeric() || column.is_logical()) && column.repeat == columns.flux.repeat
        });
    let is_good = match mask {
        Some((column, good_is_one)) => {
            let good_value = if good_is_one { 1.0 } else { 0.0 };
            Some(values(column)?.iter().map(|value| *value == good_value).collect())
        }
        None => None,
    };
    let (wave_place, wave_words) = super::column_unit(hdu, &columns.wave.name);
    let wave_unit = if is_log && wave_words.is_none_or(|words| WaveUnit::parse(words).is_none()) {
        UnitWords::Known(Stated::new(
            WaveUnit::Angstrom,
            format!("column {} holds log10 of angstroms", columns.wave.name),
        ))
    } else {
        UnitWords::of_wavelength(&wave_place, wave_words)
    };
    let (flux_place, flux_words) = super::column_unit(hdu, &columns.flux.name);
    let flux_unit = match flux_words {
        Some(_) => UnitWords::of_flux(&flux_place, flux_words),
        None => UnitWords::of_flux("BUNIT", headers.iter().find_map(|header| header.text("BUNIT"))),
    };
    let resolution = match table.column("fwhm").filter(|column| column.repeat == columns.flux.repeat) {
        Some(column) => Some(Stated::new(
            Resolution::FwhmPerPixelAa(values(column)?),
            format!("column {}, taken to be in angstroms", column.name),
        )),
        None => super::stated_power(&headers),
    };
    Ok(RawSpectrum {
        object: object::from_headers(&[primary, &hdu.header]),
        hdu: hdu.index,
        row: row.filter(|_| table.rows > 1).map(|row| row as usize),
        wave,
        flux: values(columns.flux)?,
        errors: errors.as_ref().map(|(column, _)| values(column)).transpose()?,
        is_good,
        wave_unit,
        flux_unit,
        error_kind: errors
            .and_then(|(column, kind)| Some(Stated::new(kind?, format!("column {}", column.name)))),
        medium: medium_of_name(&columns.wave.name).or_else(|| super::stated_medium(&headers)),
        resolution,
        velocity_frame: super::stated_frame(&headers),
        flags: Vec::new(),
        exposure_of: None,
    })
}

/// Names of columns of errors, in lower case, and what the names say they are; weights say nothing.
pub const ERROR_KINDS: [(&[&str], Option<ErrorKind>); 4] = [
    (SIGMA_NAMES, Some(ErrorKind::Sigma)),
    (IVAR_NAMES, Some(ErrorKind::InverseVariance)),
    (VARIANCE_NAMES, Some(ErrorKind::Variance)),
    (WEIGHT_NAMES, None),
];

/// The column of errors and what its name says they are.
fn error_column(table: &Table) -> Option<(&Column, Option<ErrorKind>)> {
    ERROR_KINDS.into_iter().find_map(|(names, kind)| {
        named(table, names).filter(|column| column.is_numeric()).map(|column| (column, kind))
    })
}

/// The medium that the name of a column of wavelengths tells.
pub fn medium_of_name(name: &str) -> Option<Stated<Medium>> {
    let medium = match name.to_ascii_lowercase() {
        name if name.ends_with("_vac") => Medium::Vacuum,
        name if name.ends_with("_air") || name == "awav" => Medium::Air,
        _ => return None,
    };
    Some(Stated::new(medium, format!("column name {name}")))
}
