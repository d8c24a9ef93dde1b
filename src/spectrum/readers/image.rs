//! The one-dimensional image: fluxes on a linear or logarithmic wavelength axis told by the header.
//!
//! The primary image, or an extension named FLUX, SCI, DATA or SPECTRUM. Lines of a two-dimensional
//! image are apertures; a third axis holds bands (spectrum, raw, background, sigma) named by `BANDIDn`.
//! Errors come from the sigma band or from an extension of the same shape named for what it holds.
//!
//! The axis is, with p counted from 1 and D = CD1_1 or CDELT1:
//! linear CRVAL1 + (p - CRPIX1) D; base 10 (`DC-FLAG = 1`) 10 to that power; `CTYPE1 = xxxx-LOG`
//! CRVAL1 exp((p - CRPIX1) D / CRVAL1). A logarithmic axis without any of these marks is recognised by
//! its range and flagged.
//!
//! # Reference
//! Greisen et al. 2006, A&A 446, 747 (spectral coordinates in FITS), eq. 5.

use super::{Layout, object};
use crate::codes::{self, Flag};
use crate::spectrum::fits::{FitsFile, Hdu, Header, Image};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};
use crate::spectrum::{ErrorKind, Medium, VelocityFrame, WaveUnit};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "image",
    title: "image with a linear or logarithmic wavelength axis, also with apertures and bands",
    identified_by: "an image with CRVAL1 and CD1_1 or CDELT1 whose first axis is no celestial coordinate",
    rule: "axis from CRVAL1, CD1_1 or CDELT1, DC-FLAG, CTYPE1; medium from CTYPE1 (WAVE, AWAV), VACUUM or AIRORVAC; errors from a sigma band or extension",
    reader: super::Reader::Fits { identify, read },
};

/// Most lines of an image: the fibres of the largest multi-object spectrographs; a raw frame has more.
const MOST_LINES: u64 = 1000;
/// Extensions that may hold the fluxes when the primary unit is empty.
const FLUX_NAMES: &[&str] = &["FLUX", "SCI", "DATA", "SPECTRUM"];
/// Extensions that may hold the errors.
const ERROR_NAMES: &[(&str, ErrorKind)] = &[
    ("ERRS", ErrorKind::Sigma),
    ("ERR", ErrorKind::Sigma),
    ("ERROR", ErrorKind::Sigma),
    ("SIGMA", ErrorKind::Sigma),
    ("STDDEV", ErrorKind::Sigma),
    ("NOISE", ErrorKind::Sigma),
    ("STAT", ErrorKind::Variance),
    ("VAR", ErrorKind::Variance),
    ("VARIANCE", ErrorKind::Variance),
    ("IVAR", ErrorKind::InverseVariance),
];
/// Extensions that may hold a mask, 0 = good.
const MASK_NAMES: &[&str] = &["MASK", "DQ", "QUAL"];

/// The unit of the fluxes: the primary image, else a named extension. A named extension of one line
/// goes before a primary image of many, which is then the frame that it was extracted from.
fn flux_hdu(fits: &FitsFile) -> Option<&Hdu> {
    let primary = &fits.hdus()[0];
    let named = FLUX_NAMES.iter().find_map(|name| fits.hdu_named(name)).filter(|hdu| hdu.image().is_some());
    match (primary.image(), named) {
        (Some(frame), Some(named))
            if frame.lines() > 1 && named.image().is_some_and(|image| image.lines() == 1) =>
        {
            Some(named)
        }
        (Some(_), _) => Some(primary),
        (None, named) => named,
    }
}

fn identify(fits: &FitsFile) -> bool {
    flux_hdu(fits).is_some_and(|hdu| {
        let has_axis = hdu.header.real("CRVAL1").is_some() && step(&hdu.header).is_some();
        let is_sky = hdu.header.text("CTYPE1").is_some_and(|words| {
            ["RA--", "DEC-", "GLON", "GLAT", "ELON", "ELAT"]
                .iter()
                .any(|sky| words.to_ascii_uppercase().starts_with(sky))
        });
        has_axis && !is_sky && hdu.image().is_some_and(|image| image.axes.len() <= 3)
    })
}

fn step(header: &Header) -> Option<f64> {
    [header.real("CD1_1"), header.real("CDELT1")].into_iter().flatten().find(|step| *step != 0.0)
}

fn read(fits: &FitsFile) -> Result<Vec<RawSpectrum>, ReadFault> {
    let hdu = flux_hdu(fits).ok_or_else(|| super::broken(LAYOUT.name, "found no image"))?;
    read_lines(fits, hdu, LAYOUT.name, |_, length| {
        header_axis(&hdu.header, length).ok_or_else(|| super::broken(LAYOUT.name, "found no wavelength axis"))
    })
}

/// The axis that a header tells for lines of this length, if it tells one.
pub fn header_axis(header: &Header, length: usize) -> Option<LineAxis> {
    let axis = Axis::of(header)?;
    Some(LineAxis {
        wave: axis.wavelengths(length),
        wave_unit: axis.unit,
        medium: axis.medium,
        flags: axis.flags,
    })
}

/// The wavelengths of one line of an image.
#[derive(Debug, Clone, Default)]
pub struct LineAxis {
    /// One per pixel; may be shorter than the line.
    pub wave: Vec<f64>,
    /// Their unit.
    pub wave_unit: UnitWords<WaveUnit>,
    /// Their medium, if the axis tells.
    pub medium: Option<Stated<Medium>>,
    /// What the axis has to tell.
    pub flags: Vec<Flag>,
}

/// Reads every line (aperture) of an image whose axis is given by `axis(line, length)`.
pub fn read_lines(
    fits: &FitsFile,
    hdu: &Hdu,
    layout: &'static str,
    axis: impl Fn(usize, usize) -> Result<LineAxis, ReadFault>,
) -> Result<Vec<RawSpectrum>, ReadFault> {
    let image = hdu.image().ok_or_else(|| super::broken(layout, "found no image"))?;
    if image.lines() > MOST_LINES {
        let detail = format!(
            "found {} lines, need at most {MOST_LINES} (not reduced to one dimension?)",
            image.lines()
        );
        return Err(super::broken(layout, detail));
    }
    let bands = Bands::of(&hdu.header, image).map_err(|detail| super::broken(layout, detail))?;
    let primary = &fits.hdus()[0].header;
    let headers = [&hdu.header, primary];
    let error_hdu =
        ERROR_NAMES.iter().find_map(|(name, kind)| same_shape(fits, hdu, name).map(|hdu| (hdu, *kind)));
    let mask_hdu = MASK_NAMES.iter().find_map(|name| same_shape(fits, hdu, name));
    let mut raws = Vec::new();
    for line in 0..image.lines() {
        let LineAxis { wave, wave_unit, medium, flags } = axis(line as usize, image.length() as usize)?;
        let pixels = wave.len() as u64;
        let at = |band: u64| (band * image.lines() + line) * image.length();
        let (errors, error_kind) = match (bands.sigma, &error_hdu) {
            (Some(band), _) => (
                Some(fits.pixels(hdu, at(band), pixels)?),
                Some(Stated::new(ErrorKind::Sigma, format!("BANDID{} says sigma", band + 1))),
            ),
            (None, Some((error_hdu, kind))) => {
                let name = error_hdu.header.text("EXTNAME").unwrap_or_default();
                let errors = fits.pixels(error_hdu, at(bands.spectrum), pixels)?;
                (Some(errors), Some(Stated::new(*kind, format!("extension {name}"))))
            }
            (None, None) => (None, None),
        };
        let is_good = match mask_hdu {
            Some(mask) => {
                let mask = fits.pixels(mask, at(bands.spectrum), pixels)?;
                Some(mask.iter().map(|value| *value == 0.0).collect())
            }
            None => None,
        };
        raws.push(RawSpectrum {
            object: object::from_headers(&headers),
            hdu: hdu.index,
            row: (image.lines() > 1).then_some(line as usize),
            wave,
            flux: fits.pixels(hdu, at(bands.spectrum), pixels)?,
            errors,
            is_good,
            wave_unit,
            flux_unit: UnitWords::of_flux("BUNIT", headers.iter().find_map(|header| header.text("BUNIT"))),
            error_kind,
            medium: medium.or_else(|| super::stated_medium(&headers)).or_else(|| eso_medium(primary)),
            resolution: super::stated_power(&headers),
            velocity_frame: super::stated_frame(&headers).or_else(|| eso_frame(primary)),
            flags,
            exposure_of: None,
        });
    }
    Ok(raws)
}

/// Pipeline products of these ESO instruments are in air.
const ESO_AIR: &[&str] = &["UVES", "FORS1", "FORS2", "HARPS"];

fn eso_medium(primary: &Header) -> Option<Stated<Medium>> {
    let instrument = eso_instrument(primary)?;
    ESO_AIR.contains(&instrument).then(|| Stated::new(Medium::Air, format!("pipeline of {instrument}")))
}

/// HARPS spectra are corrected for the Earth's motion; UVES and FORS pipeline products are not.
fn eso_frame(primary: &Header) -> Option<Stated<VelocityFrame>> {
    let instrument = eso_instrument(primary)?;
    if primary.has("ESO DRS BERV") {
        return Some(Stated::new(VelocityFrame::Barycentric, "ESO DRS BERV is applied by the pipeline"));
    }
    ["UVES", "FORS1", "FORS2"]
        .contains(&instrument)
        .then(|| Stated::new(VelocityFrame::Topocentric, format!("pipeline of {instrument}")))
}

fn eso_instrument(primary: &Header) -> Option<&str> {
    primary.text("ORIGIN").filter(|origin| origin.starts_with("ESO"))?;
    primary.text("INSTRUME")
}

fn same_shape<'a>(fits: &'a FitsFile, hdu: &Hdu, name: &str) -> Option<&'a Hdu> {
    let axes = &hdu.image()?.axes;
    fits.hdus()
        .iter()
        .find(|other| other.is_named(name) && other.image().is_some_and(|image| image.axes == *axes))
}

/// Which bands of the third axis hold what.
struct Bands {
    spectrum: u64,
    sigma: Option<u64>,
}

impl Bands {
    fn of(header: &Header, image: &Image) -> Result<Self, String> {
        let bands = image.axes.get(2).copied().unwrap_or(1);
        let starts = |band: u64, word: &str| {
            header
                .text(&format!("BANDID{}", band + 1))
                .is_some_and(|words| words.to_ascii_lowercase().starts_with(word))
        };
        let find = |word: &str| (0..bands).find(|band| starts(*band, word));
        let spectrum = match find("spectrum") {
            Some(band) => band,
            None if bands == 1 && !starts(0, "background") && !starts(0, "sigma") => 0,
            None => return Err(format!("found {bands} bands of which no BANDID starts with 'spectrum'")),
        };
        Ok(Bands { spectrum, sigma: find("sigma") })
    }
}

/// The wavelength axis of an image.
struct Axis {
    first: f64,
    reference_pixel: f64,
    step: f64,
    form: Form,
    unit: UnitWords<WaveUnit>,
    medium: Option<Stated<Medium>>,
    flags: Vec<Flag>,
}

#[derive(Clone, Copy, PartialEq)]
enum Form {
    Linear,
    /// The header gives log10 of the wavelength.
    Base10,
    /// The header gives the natural logarithm of the wavelength.
    Natural,
    /// Equal steps of ln(wavelength), given at the reference wavelength.
    StandardLog,
}

impl Axis {
    fn of(header: &Header) -> Option<Self> {
        let (first, step) = (header.real("CRVAL1")?, step(header)?);
        let kind = header.text("CTYPE1").unwrap_or_default().to_ascii_uppercase();
        let mut flags = Vec::new();
        let form = form(header, &kind, first, step, &mut flags);
        let reference_pixel = header.real("CRPIX1").unwrap_or(1.0);
        let medium = match kind.split('-').next() {
            Some("AWAV") => Some(Stated::new(Medium::Air, format!("CTYPE1 = '{kind}'"))),
            Some("WAVE") => Some(Stated::new(Medium::Vacuum, format!("CTYPE1 = '{kind}'"))),
            _ => None,
        };
        let mut axis = Axis { first, reference_pixel, step, form, unit: UnitWords::Absent, medium, flags };
        axis.unit = axis.find_unit(header, &kind);
        Some(axis)
    }

    fn wavelengths(&self, length: usize) -> Vec<f64> {
        (0..length)
            .map(|pixel| {
                let steps = (pixel as f64 + 1.0 - self.reference_pixel) * self.step;
                match self.form {
                    Form::Linear => self.first + steps,
                    Form::Base10 => 10f64.powf(self.first + steps),
                    Form::Natural => (self.first + steps).exp(),
                    Form::StandardLog => self.first * (steps / self.first).exp(),
                }
            })
            .collect()
    }

    /// Two places may name the unit, and each is wrong in some files; where they differ, the one
    /// that makes the axis cover Balmer lines is used and the report says so.
    fn find_unit(&mut self, header: &Header, kind: &str) -> UnitWords<WaveUnit> {
        const NOT_WAVELENGTHS: &[&str] = &["VRAD", "VOPT", "VELO", "ZOPT", "FREQ", "ENER", "WAVN", "BETA"];
        if NOT_WAVELENGTHS.iter().any(|other| kind.starts_with(other)) {
            return UnitWords::NotUnderstood(format!("CTYPE1 = '{kind}'"));
        }
        let from_wat = iraf_unit(header);
        let wat = UnitWords::of_wavelength("WAT1_001 units", from_wat.as_deref());
        let cunit = UnitWords::of_wavelength("CUNIT1", header.text("CUNIT1"));
        match (wat, cunit) {
            (UnitWords::Known(wat), UnitWords::Known(cunit)) if wat.value != cunit.value => {
                let reference = self.wavelengths(1).first().copied().unwrap_or(self.first);
                let chosen = match WaveUnit::infer(reference, reference * 1.5) {
                    Some(unit) if unit == cunit.value => cunit.clone(),
                    _ => wat.clone(),
                };
                let detail = format!("{} but {}; used {:?}", wat.by, cunit.by, chosen.value);
                self.flags.push(Flag::new(&codes::HEADER_CONTRADICTS_ITSELF, detail));
                UnitWords::Known(chosen)
            }
            (UnitWords::Known(wat), UnitWords::NotUnderstood(cunit)) => {
                let detail = format!("{} but {cunit}; used {:?}", wat.by, wat.value);
                self.flags.push(Flag::new(&codes::HEADER_CONTRADICTS_ITSELF, detail));
                UnitWords::Known(wat)
            }
            (UnitWords::Known(wat), _) => UnitWords::Known(wat),
            (_, UnitWords::Known(cunit)) => UnitWords::Known(cunit),
            (_, UnitWords::NotUnderstood(words)) | (UnitWords::NotUnderstood(words), _) => {
                UnitWords::NotUnderstood(words)
            }
            (UnitWords::Absent, UnitWords::Absent) => unit_of_kind(kind),
        }
    }
}

/// Without CUNIT1, the standard's own axis types are in metres; some pipelines put a unit in CTYPE1.
fn unit_of_kind(kind: &str) -> UnitWords<WaveUnit> {
    if kind.starts_with("WAVE-") || kind == "WAVE" || kind.starts_with("AWAV") {
        return UnitWords::Known(Stated::new(
            WaveUnit::M,
            format!("CTYPE1 = '{kind}' without CUNIT1 (standard: m)"),
        ));
    }
    let word = kind.trim_start_matches("WAVELENGTH").trim_start_matches("LAMBDA").trim();
    match WaveUnit::parse(word) {
        Some(unit) => UnitWords::Known(Stated::new(unit, format!("CTYPE1 = '{kind}'"))),
        None => UnitWords::Absent,
    }
}

fn form(header: &Header, kind: &str, first: f64, step: f64, flags: &mut Vec<Flag>) -> Form {
    if kind.ends_with("-LOG") && (kind.starts_with("WAVE") || kind.starts_with("AWAV")) {
        return Form::StandardLog;
    }
    let is_marked = header.integer("DC-FLAG") == Some(1) || kind.contains("LOG");
    // No instrument has an axis that starts at 2.5 to 4.5 angstroms (nor micrometres, with such a
    // step), so these are logarithms: base 10 from 316 to 31 600 A, natural from 2 700 to 22 000 A.
    let (looks_base_10, looks_natural) = if step.abs() < 1e-2 {
        ((2.5..4.5).contains(&first), (7.9..10.0).contains(&first))
    } else {
        (false, false)
    };
    if is_marked && looks_natural {
        return Form::Natural;
    }
    if is_marked {
        return Form::Base10;
    }
    if header.integer("DC-FLAG") == Some(0) || !(looks_base_10 || looks_natural) {
        return Form::Linear;
    }
    let form = if looks_base_10 { Form::Base10 } else { Form::Natural };
    let words = if looks_base_10 { "log10" } else { "the natural logarithm" };
    let detail = format!("CRVAL1 = {first} with a step of {step} was read as {words} of the wavelength");
    flags.push(Flag::new(&codes::UNIT_INFERRED, detail));
    form
}

/// `units=` of the axis in the WAT1 keywords.
pub fn iraf_unit(header: &Header) -> Option<String> {
    let words = header.text("WAT1_001")?;
    let after = words.split("units=").nth(1)?;
    Some(after.split_whitespace().next()?.trim_matches('"').to_owned())
}
