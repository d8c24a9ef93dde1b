//! DESI `coadd-*` and `spectra-*` files: one row per target (and per exposure in `spectra-*`).
//!
//! Extensions are found by name, since their order varies: FIBERMAP and, for each arm B, R, Z,
//! `_WAVELENGTH _FLUX _IVAR` and perhaps `_MASK _RESOLUTION`. Only rows with OBJTYPE `TGT` and a
//! positive TARGETID are stars or galaxies; the others are sky and stuck positioners. The resolution
//! extension holds, for every wavelength, the response of the pixels from +5 to -5 around it; its
//! second moment gives a Gaussian width.

use super::arms::{Arm, join};
use super::{Layout, broken, object};
use crate::codes::{self, Flag};
use crate::spectrum::fits::{FitsFile, Hdu};
use crate::spectrum::read::ReadFault;
use crate::spectrum::resolution::FWHM_PER_SIGMA;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::{ErrorKind, Medium, ObjectRecord, VelocityFrame};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "desi",
    title: "DESI coadd and spectra files: FIBERMAP and the arms B, R, Z, one row per target",
    identified_by: "extensions X_WAVELENGTH and X_FLUX for an arm X of B, R, Z",
    rule: "vacuum and barycentric by the survey; ivar; mask 0 = good; resolution from the second moment of the resolution extension; arms joined in the middle of their overlap",
    reader: super::Reader::Fits { identify, read },
};

const ARMS: [&str; 3] = ["B", "R", "Z"];

/// The extensions of one arm.
struct ArmHdus<'a> {
    wave: Vec<f64>,
    flux: &'a Hdu,
    ivar: &'a Hdu,
    mask: Option<&'a Hdu>,
    /// There is a mask, but not one that can be read (a compressed image).
    is_mask_unread: bool,
    resolution: Option<&'a Hdu>,
}

fn identify(fits: &FitsFile) -> bool {
    ARMS.iter().any(|arm| {
        fits.hdu_named(&format!("{arm}_WAVELENGTH")).is_some()
            && fits.hdu_named(&format!("{arm}_FLUX")).is_some()
    })
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let map = fits.hdu_named("FIBERMAP").ok_or_else(|| broken(LAYOUT.name, "found no FIBERMAP, need one"))?;
    let rows = map.table().map_or(0, |table| table.rows);
    let mut arms = Vec::new();
    for arm in ARMS {
        if let Some(arm) = find_arm(fits, arm, rows)? {
            arms.push(arm);
        }
    }
    let mut raws = Vec::new();
    for row in 0..rows {
        if is_target(fits, map, row) {
            raws.push(read_row(fits, map, &arms, row)?);
        }
    }
    if raws.is_empty() {
        return Err(broken(LAYOUT.name, format!("found no target among {rows} rows")));
    }
    Ok(raws)
}

fn find_arm<'a>(fits: &'a FitsFile, arm: &str, rows: u64) -> Result<Option<ArmHdus<'a>>, ReadFault> {
    let named = |what: &str| fits.hdu_named(&format!("{arm}_{what}"));
    let (Some(wave), Some(flux)) = (named("WAVELENGTH"), named("FLUX")) else { return Ok(None) };
    let Some(ivar) = named("IVAR") else {
        return Err(broken(LAYOUT.name, format!("found no {arm}_IVAR, need one")));
    };
    let pixels = wave.image().map_or(0, |image| image.pixels());
    for hdu in [flux, ivar] {
        let found = hdu.image().map(|image| image.axes.as_slice()).unwrap_or_default();
        if found != [pixels, rows] {
            let detail = format!("found {arm} data of {found:?}, need {:?}", [pixels, rows]);
            return Err(broken(LAYOUT.name, detail));
        }
    }
    let mask = named("MASK").filter(|hdu| hdu.image().is_some_and(|image| image.axes == [pixels, rows]));
    let resolution = named("RESOLUTION").filter(|hdu| {
        hdu.image()
            .is_some_and(|image| image.axes.len() == 3 && image.axes[0] == pixels && image.axes[2] == rows)
    });
    let is_mask_unread = mask.is_none() && named("MASK").is_some();
    Ok(Some(ArmHdus { wave: fits.pixels(wave, 0, pixels)?, flux, ivar, mask, is_mask_unread, resolution }))
}

fn is_target(fits: &FitsFile, map: &Hdu, row: u64) -> bool {
    let is_positive = fits.integer_cell(map, "TARGETID", row).is_ok_and(|id| id > 0);
    // Files derived from the survey's may lack OBJTYPE.
    let kind = fits.text_cell(map, "OBJTYPE", row);
    is_positive && kind.map_or(true, |kind| kind == "TGT")
}

fn read_row(fits: &FitsFile, map: &Hdu, arms: &[ArmHdus<'_>], row: u64) -> Result<RawSpectrum, ReadFault> {
    let mut parts = Vec::new();
    for arm in arms {
        let pixels = arm.wave.len() as u64;
        let line = |hdu: &Hdu| fits.pixels(hdu, row * pixels, pixels);
        let is_good = match arm.mask {
            Some(mask) => line(mask)?.iter().map(|mask| *mask == 0.0).collect(),
            None => vec![true; arm.wave.len()],
        };
        parts.push(Arm {
            widths: arm
                .resolution
                .map(|hdu| widths(fits, hdu, &arm.wave, row))
                .transpose()?
                .unwrap_or_default(),
            wave: arm.wave.clone(),
            flux: line(arm.flux)?,
            errors: line(arm.ivar)?,
            is_good,
        });
    }
    let header = arms.first().map(|arm| &arm.flux.header);
    let mut raw = RawSpectrum {
        object: object_record(fits, map, row),
        hdu: arms.first().map_or(0, |arm| arm.flux.index),
        row: Some(row as usize),
        wave_unit: UnitWords::of_wavelength("BUNIT", Some(wave_words(fits).unwrap_or("Angstrom"))),
        flux_unit: UnitWords::of_flux("BUNIT", header.and_then(|header| header.text("BUNIT"))),
        error_kind: Some(Stated::new(ErrorKind::InverseVariance, "extension IVAR")),
        medium: Some(Stated::new(Medium::Vacuum, "layout: all spectra of the survey are in vacuum")),
        velocity_frame: Some(Stated::new(
            VelocityFrame::Barycentric,
            "layout: the survey corrects for the Earth's motion",
        )),
        ..RawSpectrum::default()
    };
    raw.exposure_of = raw.object.name.clone();
    join(parts, "extension RESOLUTION", &mut raw);
    if arms.iter().any(|arm| arm.is_mask_unread) {
        let detail = "masks are compressed images; inverse variances of zero still mark bad pixels";
        raw.flags.push(Flag::new(&codes::MASK_NOT_READ, detail));
    }
    let status = ["COADD_FIBERSTATUS", "FIBERSTATUS"]
        .iter()
        .find_map(|name| fits.integer_cell(map, name, row).ok().map(|status| (name, status)));
    if let Some((name, status)) = status.filter(|(_, status)| *status != 0) {
        raw.flags.push(Flag::new(&codes::FIBRE_WARNING, format!("{name} = {status}")));
    }
    Ok(raw)
}

fn wave_words(fits: &FitsFile) -> Option<&str> {
    ARMS.iter().find_map(|arm| fits.hdu_named(&format!("{arm}_WAVELENGTH"))?.header.text("BUNIT"))
}

/// FWHM of each pixel, A: the second moment of the response around it.
fn widths(fits: &FitsFile, hdu: &Hdu, wave: &[f64], row: u64) -> Result<Vec<f64>, ReadFault> {
    let pixels = wave.len();
    let diagonals = hdu.image().map_or(0, |image| image.lines()) as usize;
    let count = (diagonals * pixels) as u64;
    let response = fits.pixels(hdu, row * count, count)?;
    let width = |pixel: usize| {
        let (mut sum, mut first, mut second) = (0.0, 0.0, 0.0);
        for diagonal in 0..diagonals {
            let weight = response[diagonal * pixels + pixel];
            let offset = diagonal as f64;
            sum += weight;
            first += weight * offset;
            second += weight * offset * offset;
        }
        let mean = first / sum;
        let step_aa = if pixel == 0 {
            wave.get(1).map_or(f64::NAN, |next| next - wave[0])
        } else {
            wave[pixel] - wave[pixel - 1]
        };
        // Not a number where there is no response; settling fills such holes from their neighbours.
        FWHM_PER_SIGMA * (second / sum - mean * mean).sqrt() * step_aa
    };
    Ok((0..pixels).map(width).collect())
}

fn object_record(fits: &FitsFile, map: &Hdu, row: u64) -> ObjectRecord {
    let real =
        |name: &str| fits.cell(map, name, row).ok()?.first().copied().filter(|value| value.is_finite());
    let integer = |name: &str| fits.integer_cell(map, name, row).ok();
    let mut object = object::from_headers(&[&fits.hdus()[0].header]);
    object.ra_deg = real("TARGET_RA");
    object.dec_deg = real("TARGET_DEC");
    object.position_epoch_yr = real("REF_EPOCH").filter(|year| *year > 1850.0);
    let primary = &fits.hdus()[0].header;
    object.program = object::survey_id(primary, &["SURVEY", "PROGRAM"]).or(object.program);
    object.exposure_s = real("COADD_EXPTIME").or_else(|| real("EXPTIME")).filter(|exposure| *exposure > 0.0);
    object.observed_at = real("MEAN_MJD").or_else(|| real("MJD")).map(|mjd| format!("MJD {mjd}"));
    if let Some(id) = integer("TARGETID") {
        object.name = Some(format!("DESI {id}"));
        let numbers = ["TILEID", "FIBER", "NIGHT", "EXPID"];
        let numbers = numbers.map(|name| integer(name).map(|value| format!("{name}={value}")));
        let parts = [Some(format!("TARGETID={id}")), object::join(&numbers, " ")];
        object.survey_id = object::join(&parts, " ");
    }
    object
}
