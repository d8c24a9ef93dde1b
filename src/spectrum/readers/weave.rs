//! WEAVE L1 single and stacked exposures: one arm (BLUE or RED) per file, one line per fibre.
//!
//! `X_DATA` holds sky-subtracted counts, `X_SENSFUNC` the factor to erg/s/cm2/A, `X_IVAR` the inverse
//! variance of the counts, `FIBTABLE` the targets. Fibres with TARGUSE other than `T` are sky or unused. The
//! medium is taken from the axis or the header; where neither tells it is left open. Written from the
//! survey's description; not yet seen here on a real file.

use super::arms::{Arm, join};
use super::image::header_axis;
use super::{Layout, broken, object};
use crate::spectrum::ErrorKind;
use crate::spectrum::fits::{FitsFile, Hdu};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::units::{FluxScale, FluxUnit};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "weave",
    title: "WEAVE L1 single and stack files: one arm, one line per fibre",
    identified_by: "FIBTABLE and extensions X_DATA and X_IVAR for an arm X of BLUE, RED",
    rule: "axis from the header of X_DATA; medium from CTYPE1, VACUUM or AIRORVAC; calibrated where X_SENSFUNC is there; inverse variance; only fibres of TARGUSE T; resolution from the configuration",
    reader: super::Reader::Fits { identify, read },
};

const ARMS: [&str; 2] = ["BLUE", "RED"];
const COUNTS: FluxUnit = FluxUnit { scale: FluxScale::Relative, factor: 1.0 };
const CALIBRATED: FluxUnit = FluxUnit { scale: FluxScale::Calibrated, factor: 1.0 };

struct ArmHdus<'a> {
    data: &'a Hdu,
    ivar: &'a Hdu,
    sensitivity: Option<&'a Hdu>,
}

fn arm<'a>(fits: &'a FitsFile, name: &str) -> Option<ArmHdus<'a>> {
    let data = fits.hdu_named(&format!("{name}_DATA"))?;
    let same = |what: &str| {
        fits.hdu_named(&format!("{name}_{what}"))
            .filter(|hdu| hdu.image().zip(data.image()).is_some_and(|(one, other)| one.axes == other.axes))
    };
    Some(ArmHdus { data, ivar: same("IVAR")?, sensitivity: same("SENSFUNC") })
}

fn identify(fits: &FitsFile) -> bool {
    fits.hdu_named("FIBTABLE").is_some() && ARMS.iter().any(|name| arm(fits, name).is_some())
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let table = fits
        .hdu_named("FIBTABLE")
        .filter(|hdu| hdu.table().is_some())
        .ok_or_else(|| broken(LAYOUT.name, "found no table FIBTABLE"))?;
    let arms: Vec<ArmHdus<'_>> = ARMS.iter().filter_map(|name| arm(fits, name)).collect();
    let rows = table.table().map_or(0, |table| table.rows);
    for arm in &arms {
        let lines = arm.data.image().map_or(0, |image| image.lines());
        if lines != rows {
            return Err(broken(LAYOUT.name, format!("found {lines} lines for {rows} fibres")));
        }
    }
    let mut raws = Vec::new();
    for row in 0..rows {
        if fits.text_cell(table, "TARGUSE", row).is_ok_and(|kind| kind == "T") {
            raws.push(read_row(fits, table, &arms, row)?);
        }
    }
    if raws.is_empty() {
        return Err(broken(LAYOUT.name, format!("found no target among {rows} fibres")));
    }
    Ok(raws)
}

fn read_row(fits: &FitsFile, table: &Hdu, arms: &[ArmHdus<'_>], row: u64) -> Result<RawSpectrum, ReadFault> {
    let first = arms.first().ok_or_else(|| broken(LAYOUT.name, "found no arm"))?;
    let primary = &fits.hdus()[0].header;
    let is_calibrated = arms.iter().all(|arm| arm.sensitivity.is_some());
    let mut raw = RawSpectrum { hdu: first.data.index, row: Some(row as usize), ..RawSpectrum::default() };
    let mut parts = Vec::new();
    for arm in arms {
        let pixels = arm.data.image().map_or(0, |image| image.length());
        let line = |hdu: &Hdu| fits.pixels(hdu, row * pixels, pixels);
        let axis = header_axis(&arm.data.header, pixels as usize)
            .ok_or_else(|| broken(LAYOUT.name, "found no wavelength axis"))?;
        let (mut flux, mut ivar) = (line(arm.data)?, line(arm.ivar)?);
        if let Some(sensitivity) = arm.sensitivity.filter(|_| is_calibrated) {
            for (pixel, factor) in line(sensitivity)?.into_iter().enumerate() {
                flux[pixel] *= factor;
                ivar[pixel] /= factor * factor;
            }
        }
        let is_good = vec![true; axis.wave.len()];
        parts.push(Arm { wave: axis.wave, flux, errors: ivar, is_good, widths: Vec::new() });
        raw.wave_unit = axis.wave_unit;
        raw.medium = axis.medium.or_else(|| super::stated_medium(&[&arm.data.header, primary]));
        raw.flags.extend(axis.flags);
    }
    raw.velocity_frame = super::stated_frame(&[&first.data.header, primary]);
    raw.error_kind = Some(Stated::new(ErrorKind::InverseVariance, "extension IVAR"));
    let (unit, by) = if is_calibrated {
        (CALIBRATED, "layout: counts times SENSFUNC, in erg/s/cm2/A")
    } else {
        (COUNTS, "layout: counts")
    };
    raw.flux_unit = UnitWords::Known(Stated::new(unit, by));
    raw.object = object::from_headers(&[primary, &first.data.header]);
    let real =
        |name: &str| fits.cell(table, name, row).ok()?.first().copied().filter(|value| value.is_finite());
    let text = |name: &str| fits.text_cell(table, name, row).ok().filter(|text| !text.is_empty());
    raw.object.name = text("CNAME").or_else(|| text("TARGNAME"));
    raw.object.ra_deg = real("FIBRERA").or_else(|| real("TARGRA"));
    raw.object.dec_deg = real("FIBREDEC").or_else(|| real("TARGDEC"));
    let fibre = fits.integer_cell(table, "FIBREID", row).ok().map(|fibre| format!("FIBREID={fibre}"));
    let parts_of_id =
        [object::survey_id(primary, &["OBID"]), text("TARGID").map(|id| format!("TARGID={id}")), fibre];
    raw.object.survey_id = object::join(&parts_of_id, " ");
    join(parts, "", &mut raw);
    Ok(raw)
}
