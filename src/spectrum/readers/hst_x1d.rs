//! HST one-dimensional extractions of STIS (`x1d`, `sx1`) and COS (`x1d*`): rows are echelle orders
//! or detector segments, each SCI extension is one exposure.
//!
//! Wavelengths are vacuum by the archive's convention, heliocentric where HELCORR is complete. Errors
//! are sigma. A pixel is bad where a data-quality bit is set that the header lists as serious
//! (SDQFLAGS), or any bit where it lists none. The resolution depends on grating and slit and is not in
//! the file.

use super::arms::{Arm, join};
use super::{Layout, broken, object};
use crate::spectrum::fits::{FitsFile, Hdu};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::{ErrorKind, Medium, VelocityFrame};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "hst-x1d",
    title: "HST STIS and COS one-dimensional extractions (x1d, sx1)",
    identified_by: "TELESCOP = HST and a table with NELEM, WAVELENGTH, FLUX, ERROR, DQ",
    rule: "vacuum by the archive's convention; ERROR is sigma; DQ without serious bits = good; heliocentric if HELCORR is complete; resolution from the configuration",
    reader: super::Reader::Fits { identify, read },
};

const COLUMNS: &[&str] = &["NELEM", "WAVELENGTH", "FLUX", "ERROR", "DQ"];

fn extensions(fits: &FitsFile) -> impl Iterator<Item = &Hdu> {
    fits.hdus().iter().filter(|hdu| hdu.table().is_some_and(|table| table.has_columns(COLUMNS)))
}

fn identify(fits: &FitsFile) -> bool {
    fits.hdus()[0].header.text("TELESCOP") == Some("HST") && extensions(fits).next().is_some()
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let exposures = extensions(fits).count();
    let mut raws = Vec::new();
    for (exposure, hdu) in extensions(fits).enumerate() {
        raws.push(read_exposure(fits, hdu, (exposures > 1).then_some(exposure))?);
    }
    if raws.is_empty() {
        return Err(broken(LAYOUT.name, "found no table of extracted spectra"));
    }
    Ok(raws)
}

fn read_exposure(fits: &FitsFile, hdu: &Hdu, exposure: Option<usize>) -> Result<RawSpectrum, ReadFault> {
    let primary = &fits.hdus()[0].header;
    let headers = [&hdu.header, primary];
    let serious = headers.iter().find_map(|header| header.integer("SDQFLAGS")).filter(|bits| *bits > 0);
    let is_good = |quality: f64| match serious {
        Some(serious) => quality as i64 & serious == 0,
        None => quality == 0.0,
    };
    let rows = hdu.table().map_or(0, |table| table.rows);
    let mut arms = Vec::new();
    for row in 0..rows {
        let cell = |name: &str| fits.cell(hdu, name, row);
        let mut arm = Arm {
            wave: cell("WAVELENGTH")?,
            flux: cell("FLUX")?,
            errors: cell("ERROR")?,
            is_good: cell("DQ")?.iter().map(|quality| is_good(*quality)).collect(),
            widths: Vec::new(),
        };
        // Cells may be longer than the spectrum in them, by the number that NELEM gives.
        let used = fits.integer_cell(hdu, "NELEM", row)?.max(0) as usize;
        let lengths = [arm.wave.len(), arm.flux.len(), arm.errors.len(), arm.is_good.len(), used];
        let used = lengths.into_iter().min().unwrap_or(0);
        arm.wave.truncate(used);
        arm.flux.truncate(used);
        arm.errors.truncate(used);
        arm.is_good.truncate(used);
        arms.push(arm);
    }
    let is_heliocentric = headers.iter().any(|header| header.text("HELCORR") == Some("COMPLETE"));
    let (wave_place, wave_words) = super::column_unit(hdu, "WAVELENGTH");
    let (flux_place, flux_words) = super::column_unit(hdu, "FLUX");
    let mut raw = RawSpectrum {
        object: object::from_headers(&headers),
        hdu: hdu.index,
        row: exposure,
        wave_unit: UnitWords::of_wavelength(&wave_place, wave_words),
        flux_unit: UnitWords::of_flux(&flux_place, flux_words),
        error_kind: Some(Stated::new(ErrorKind::Sigma, "column ERROR")),
        medium: Some(Stated::new(Medium::Vacuum, "layout: the archive gives vacuum wavelengths")),
        velocity_frame: is_heliocentric
            .then(|| Stated::new(VelocityFrame::Heliocentric, "HELCORR = 'COMPLETE'")),
        ..RawSpectrum::default()
    };
    raw.exposure_of = exposure.map(|_| "the target of the file".to_owned());
    raw.object.name = primary.text("TARGNAME").map(str::to_owned).or(raw.object.name);
    join(arms, "", &mut raw);
    Ok(raw)
}
