//! The CALSPEC table of flux standards: one row per pixel.
//!
//! `WAVELENGTH FLUX` and, for observed stars, `STATERROR SYSERROR FWHM` and sometimes `DATAQUAL`
//! (1 = good). `SYSERROR` is a 1 % broadband term that moves the continuum, not the lines, so it is
//! not added to the errors. Model files have `WAVELENGTH FLUX` only. The medium is taken from the
//! sentence in the file's own history; wavelengths refer to the telescope in orbit, where the
//! correction for the Earth's motion was made by the archive's pipeline for STIS; the files do not say.
//!
//! # Reference
//! Bohlin, Gordon & Tremblay 2014, PASP 126, 711.

use super::{Layout, object, table_with};
use crate::spectrum::fits::{FitsFile, Header};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::{ErrorKind, Medium, Resolution};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "calspec",
    title: "CALSPEC flux standards: table with WAVELENGTH, FLUX, STATERROR, FWHM",
    identified_by: "DBTABLE = CRSPECTRUM, or a table with WAVELENGTH, FLUX, STATERROR, SYSERROR, FWHM",
    rule: "medium from the history lines; errors are sigma; DATAQUAL 1 = good; resolution from FWHM where plausible",
    reader: super::Reader::Fits { identify, read },
};

fn identify(fits: &FitsFile) -> bool {
    let is_announced = fits.hdus()[0].header.text("DBTABLE") == Some("CRSPECTRUM");
    let is_observed = table_with(fits, &["WAVELENGTH", "FLUX", "STATERROR", "SYSERROR", "FWHM"]).is_some();
    is_observed || is_announced && table_with(fits, &["WAVELENGTH", "FLUX"]).is_some()
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let hdu = table_with(fits, &["WAVELENGTH", "FLUX"])
        .ok_or_else(|| super::broken(LAYOUT.name, "found no table with WAVELENGTH and FLUX"))?;
    let has = |name: &str| hdu.table().is_some_and(|table| table.column(name).is_some());
    let optional = |name: &str| has(name).then(|| fits.column(hdu, name)).transpose();
    let primary = &fits.hdus()[0].header;
    let mut object = object::from_headers(&[primary, &hdu.header]);
    object.name = primary.text("TARGETID").map(str::to_owned).or(object.name);
    let (wave_place, wave_words) = super::column_unit(hdu, "WAVELENGTH");
    let (flux_place, flux_words) = super::column_unit(hdu, "FLUX");
    Ok(vec![RawSpectrum {
        object,
        hdu: hdu.index,
        row: None,
        wave: fits.column(hdu, "WAVELENGTH")?,
        flux: fits.column(hdu, "FLUX")?,
        errors: optional("STATERROR")?,
        is_good: optional("DATAQUAL")?.map(|quality| quality.iter().map(|value| *value == 1.0).collect()),
        wave_unit: UnitWords::of_wavelength(&wave_place, wave_words),
        flux_unit: UnitWords::of_flux(&flux_place, flux_words),
        error_kind: has("STATERROR").then(|| Stated::new(ErrorKind::Sigma, "column STATERROR")),
        medium: medium(primary),
        resolution: optional("FWHM")?
            .map(|widths| Stated::new(Resolution::FwhmPerPixelAa(widths), "column FWHM")),
        velocity_frame: None,
        flags: Vec::new(),
        exposure_of: None,
    }])
}

/// The history of these files has a sentence about the medium.
fn medium(primary: &Header) -> Option<Stated<Medium>> {
    let line =
        primary.comments().iter().find(|line| line.to_ascii_lowercase().contains("all wavelengths are"))?;
    let words = line.to_ascii_lowercase();
    let medium = match (words.contains("vacuum"), words.contains(" air")) {
        (true, false) => Medium::Vacuum,
        (false, true) => Medium::Air,
        _ => return None,
    };
    Some(Stated::new(medium, format!("history '{line}'")))
}
