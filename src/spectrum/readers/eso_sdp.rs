//! The ESO science data product (Phase 3) one-dimensional spectrum, also 4MOST: a table with one row
//! whose cells hold the whole spectrum.
//!
//! Columns are found by their role (`TUTYPn`), since names vary; a prefix `eso:` marks alternatives to
//! the default flux. The medium is told by `TUCDn`: `em.wl` is vacuum, `em.wl;obs.atmos` is air.
//!
//! # Reference
//! ESO Science Data Products Standard, issue 5, section on spectroscopic data products.

use super::{Layout, broken, object};
use crate::spectrum::fits::{FitsFile, Hdu};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::units::{FluxScale, FluxUnit};
use crate::spectrum::{ErrorKind, Medium};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "eso-sdp",
    title: "ESO science data product spectra (Phase 3): one row of vectors, columns by TUTYP",
    identified_by: "PRODCATG = SCIENCE.SPECTRUM..., or an extension with VOCLASS = SPECTRUM...",
    rule: "unit from TUNIT; em.wl is vacuum, em.wl;obs.atmos is air; StatError is sigma; QUAL 0 = good; SPEC_RES; SPECSYS",
    reader: super::Reader::Fits { identify, read },
};

fn identify(fits: &FitsFile) -> bool {
    let primary = &fits.hdus()[0].header;
    primary.text("PRODCATG").is_some_and(|category| category.starts_with("SCIENCE.SPECTRUM"))
        || fits
            .hdus()
            .iter()
            .any(|hdu| hdu.header.text("VOCLASS").is_some_and(|class| class.starts_with("SPECTRUM")))
}

/// What one column is for.
struct Role {
    name: String,
    position: usize,
    role: String,
}

impl Role {
    /// Lower case, with the separators that some files write as commas.
    fn is(&self, ending: &str) -> bool {
        self.role.ends_with(ending) && !self.role.starts_with("eso:") && !self.role.starts_with("continuum:")
    }
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let hdu = fits
        .hdus()
        .iter()
        .find(|hdu| hdu.table().is_some_and(|table| table.rows == 1))
        .ok_or_else(|| broken(LAYOUT.name, "found no table of one row"))?;
    let roles = roles(hdu);
    let find = |ending: &str, names: &[&str]| {
        roles.iter().find(|role| role.is(ending)).or_else(|| {
            names.iter().find_map(|name| roles.iter().find(|role| role.name.eq_ignore_ascii_case(name)))
        })
    };
    let need = |role: Option<&Role>, what: &str| {
        role.map(|role| (role.name.clone(), role.position))
            .ok_or_else(|| broken(LAYOUT.name, format!("found no column of {what}")))
    };
    let (wave_name, wave_position) = need(find("spectralaxis.value", &["WAVE"]), "wavelengths")?;
    let (flux_name, flux_position) = need(find("fluxaxis.value", &["FLUX"]), "fluxes")?;
    let errors = find("fluxaxis.accuracy.staterror", &["ERR", "ERR_FLUX"]).map(|role| role.name.clone());
    let quality = find("fluxaxis.accuracy.qualitystatus", &["QUAL"]).map(|role| role.name.clone());
    let primary = &fits.hdus()[0].header;
    let headers = [primary, &hdu.header];
    let quality = quality.map(|name| fits.cell(hdu, &name, 0)).transpose()?;
    let wave_words = hdu.header.text(&format!("TUNIT{wave_position}"));
    Ok(vec![RawSpectrum {
        object: object::from_headers(&headers),
        hdu: hdu.index,
        row: None,
        wave: fits.cell(hdu, &wave_name, 0)?,
        flux: fits.cell(hdu, &flux_name, 0)?,
        errors: errors.as_ref().map(|name| fits.cell(hdu, name, 0)).transpose()?,
        is_good: quality.map(|quality| quality.iter().map(|value| *value == 0.0).collect()),
        wave_unit: UnitWords::of_wavelength(&format!("TUNIT{wave_position}"), wave_words),
        flux_unit: flux_unit(fits, hdu, flux_position),
        error_kind: errors.map(|name| Stated::new(ErrorKind::Sigma, format!("column {name}"))),
        medium: medium(hdu, wave_position),
        resolution: super::stated_power(&headers),
        velocity_frame: super::stated_frame(&headers),
        flags: Vec::new(),
        exposure_of: None,
    }])
}

fn roles(hdu: &Hdu) -> Vec<Role> {
    let columns = hdu.table().map(|table| table.columns.as_slice()).unwrap_or_default();
    let role = |position: usize| {
        let words = hdu.header.text(&format!("TUTYP{position}")).unwrap_or_default();
        words.to_ascii_lowercase().replace(',', ".")
    };
    columns
        .iter()
        .map(|column| Role {
            name: column.name.clone(),
            position: column.position,
            role: role(column.position),
        })
        .collect()
}

/// Uncalibrated products carry counts, whatever the unit says.
fn flux_unit(fits: &FitsFile, hdu: &Hdu, position: usize) -> UnitWords<FluxUnit> {
    let calibration = fits.hdus()[0].header.text("FLUXCAL");
    if calibration == Some("UNCALIBRATED") {
        let relative = FluxUnit { scale: FluxScale::Relative, factor: 1.0 };
        return UnitWords::Known(Stated::new(relative, "FLUXCAL = 'UNCALIBRATED'"));
    }
    UnitWords::of_flux(&format!("TUNIT{position}"), hdu.header.text(&format!("TUNIT{position}")))
}

fn medium(hdu: &Hdu, position: usize) -> Option<Stated<Medium>> {
    let key = format!("TUCD{position}");
    let words = hdu.header.text(&key)?;
    let medium = match words.to_ascii_lowercase().as_str() {
        "em.wl" => Medium::Vacuum,
        "em.wl;obs.atmos" => Medium::Air,
        _ => return None,
    };
    Some(Stated::new(medium, format!("{key} = '{words}'")))
}
