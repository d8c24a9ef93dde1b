//! 2dF and AAOmega as reduced by 2dfdr: one line per fibre, with `VARIANCE` and `FIBRES`.
//!
//! Only fibres of type `P` (programme) are objects. Positions in the table of fibres are in radians.
//! Wavelengths are in air unless `VACUUM = T`; a `WAVELENGTH` image goes before the header's axis and
//! may hold log10. Fluxes are counts.

use super::image::{LineAxis, header_axis, read_lines};
use super::{Layout, broken};
use crate::spectrum::fits::{FitsFile, Hdu};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated};
use crate::spectrum::{Medium, VelocityFrame};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "two-df",
    title: "2dF and AAOmega files reduced by 2dfdr: one line per fibre, with VARIANCE and FIBRES",
    identified_by: "primary image with extensions VARIANCE and FIBRES",
    rule: "air unless VACUUM = T; topocentric unless SPECSYS says otherwise; VARIANCE; only fibres of type P; resolution from the configuration",
    reader: super::Reader::Fits { identify, read },
};

/// log10 of angstroms stays below this, angstroms and nanometres above.
const LARGEST_LOG: f64 = 10.0;

fn fibres(fits: &FitsFile) -> Option<&Hdu> {
    fits.hdu_named("FIBRES").or_else(|| fits.hdu_named("FIBRES_IFU")).filter(|hdu| hdu.table().is_some())
}

fn identify(fits: &FitsFile) -> bool {
    fits.hdus()[0].image().is_some() && fibres(fits).is_some() && fits.hdu_named("VARIANCE").is_some()
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let table = fibres(fits).ok_or_else(|| broken(LAYOUT.name, "found no table FIBRES"))?;
    let primary = &fits.hdus()[0];
    let waves = match fits.hdu_named("WAVELENGTH").and_then(|hdu| Some((hdu, hdu.image()?))) {
        Some((hdu, image)) if image.axes.len() == 1 => Some(fits.pixels(hdu, 0, image.length())?),
        _ => None,
    };
    let mut raws = read_lines(fits, primary, LAYOUT.name, |_, length| {
        let mut axis = header_axis(&primary.header, length)
            .or_else(|| waves.as_ref().map(|_| LineAxis::default()))
            .ok_or_else(|| broken(LAYOUT.name, "found no wavelength axis"))?;
        if let Some(waves) = &waves {
            let is_log = waves.iter().all(|wave| *wave < LARGEST_LOG);
            axis.wave = waves.iter().map(|wave| if is_log { 10f64.powf(*wave) } else { *wave }).collect();
            axis.wave.truncate(length);
        }
        Ok(axis)
    })?;
    for raw in &mut raws {
        let row = raw.row.unwrap_or(0) as u64;
        let angle_deg = |name: &str| {
            let angle = *fits.cell(table, name, row).ok()?.first()?;
            angle.is_finite().then(|| angle.to_degrees())
        };
        raw.object.name = fits.text_cell(table, "NAME", row).ok().filter(|name| !name.is_empty());
        raw.object.survey_id = Some(format!("FIBRE={}", row + 1));
        raw.object.ra_deg = angle_deg("RA");
        raw.object.dec_deg = angle_deg("DEC");
        raw.medium.get_or_insert_with(|| Stated::new(Medium::Air, "layout: air unless VACUUM = T"));
        raw.velocity_frame.get_or_insert_with(|| {
            Stated::new(VelocityFrame::Topocentric, "layout: not corrected unless SPECSYS says so")
        });
    }
    raws.retain(|raw| {
        fits.text_cell(table, "TYPE", raw.row.unwrap_or(0) as u64).is_ok_and(|kind| kind == "P")
    });
    Ok(raws)
}
