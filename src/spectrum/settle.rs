//! From what a file states to a `Spectrum`: one place where everything that files leave open is
//! settled, by the file, else by the configuration, else not at all (a refusal that names the key).
//!
//! Readers only state; nothing here knows of layouts. Every decision is written down in
//! `Decisions`, and every departure from the file's own words is a flag.

use super::axis::{Medium, VelocityFrame};
use super::instrument::InstrumentRecord;
use super::observation::{Decisions, ObjectRecord, Observation, Refusal, SourceRecord};
use super::read::ReadFault;
use super::resolution::Resolution;
use super::settings::{ErrorKind, Layers, Setting};
use super::units::{FluxScale, FluxUnit, WaveUnit};
use super::{LARGEST_VALUE, Spectrum, SpectrumFault};
use crate::codes::{self, Flag};
use crate::physics::wavelength::air_to_vacuum_aa;

/// Narrowest believable FWHM in pixels: an instrument samples its own profile.
const NARROWEST_FWHM_PIXELS: f64 = 0.3;
/// Widest believable FWHM as a fraction of the wavelength (R = 50).
const WIDEST_FWHM: f64 = 0.02;
/// Smallest share of believable widths for a column of widths to be used.
const FEWEST_BELIEVABLE_WIDTHS: f64 = 0.5;
/// Errors made from an assumed signal-to-noise ratio do not fall below this share of the median flux
/// over that ratio: in a line core the sky and the detector remain.
const SMALLEST_ASSUMED_ERROR: f64 = 0.1;

/// A value and where in the file it stands.
#[derive(Debug, Clone, PartialEq)]
pub struct Stated<T> {
    /// The value.
    pub value: T,
    /// Where it was found, e.g. `TUNIT1 = 'nm'`.
    pub by: String,
}

impl<T> Stated<T> {
    /// Who said so, for the record: the file's own words, or the rule of its layout.
    fn origin(&self) -> String {
        if self.by.starts_with("layout") { self.by.clone() } else { format!("file: {}", self.by) }
    }

    /// States a value.
    pub fn new(value: T, by: impl Into<String>) -> Self {
        Stated { value, by: by.into() }
    }
}

/// What a file says about a unit.
#[derive(Debug, Clone, PartialEq, Default)]
pub enum UnitWords<T> {
    /// Nothing.
    #[default]
    Absent,
    /// Something that is understood.
    Known(Stated<T>),
    /// Something that is not.
    NotUnderstood(String),
}

impl UnitWords<WaveUnit> {
    /// Reads the words of a wavelength unit found at `place`.
    pub fn of_wavelength(place: &str, words: Option<&str>) -> Self {
        Self::read(place, words, WaveUnit::parse)
    }
}

impl UnitWords<FluxUnit> {
    /// Reads the words of a flux unit found at `place`.
    pub fn of_flux(place: &str, words: Option<&str>) -> Self {
        Self::read(place, words, FluxUnit::parse)
    }
}

impl<T> UnitWords<T> {
    fn read(place: &str, words: Option<&str>, parse: impl Fn(&str) -> Option<T>) -> Self {
        match words.map(str::trim).filter(|words| !words.is_empty()) {
            None => UnitWords::Absent,
            Some(words) => match parse(words) {
                Some(value) => UnitWords::Known(Stated::new(value, format!("{place} = '{words}'"))),
                None => UnitWords::NotUnderstood(format!("{place} = '{words}'")),
            },
        }
    }
}

/// One spectrum as the file gives it, in file order and file units.
#[derive(Debug, Clone, Default)]
pub struct RawSpectrum {
    /// Whose light it is.
    pub object: ObjectRecord,
    /// HDU of the fluxes.
    pub hdu: usize,
    /// Row, fibre, order or aperture.
    pub row: Option<usize>,
    /// Wavelength of each pixel.
    pub wave: Vec<f64>,
    /// Flux of each pixel.
    pub flux: Vec<f64>,
    /// Error of each pixel, of the kind below.
    pub errors: Option<Vec<f64>>,
    /// Whether each pixel is good by the file's mask; none if the file has no mask.
    pub is_good: Option<Vec<bool>>,
    /// Unit of the wavelengths.
    pub wave_unit: UnitWords<WaveUnit>,
    /// Unit of the fluxes.
    pub flux_unit: UnitWords<FluxUnit>,
    /// What the errors are.
    pub error_kind: Option<Stated<ErrorKind>>,
    /// Air or vacuum.
    pub medium: Option<Stated<Medium>>,
    /// Resolution; widths in angstroms, one per pixel where they vary.
    pub resolution: Option<Stated<Resolution>>,
    /// Velocity frame.
    pub velocity_frame: Option<Stated<VelocityFrame>>,
    /// What the reader has to tell.
    pub flags: Vec<Flag>,
    /// Where the file holds several exposures of one object: the same words for each of them.
    pub exposure_of: Option<String>,
}

/// Settles everything about one spectrum. `source` holds path, hash and layout already.
pub fn settle(
    raw: RawSpectrum,
    mut source: SourceRecord,
    assume: &Layers<'_>,
) -> Result<Observation, Box<Refusal>> {
    source.hdu = Some(raw.hdu);
    source.row = raw.row;
    let object = raw.object.clone();
    let mut flags = raw.flags.clone();
    match settle_values(raw, &mut source, &mut flags, assume) {
        Ok(spectrum) => Ok(Observation { spectrum, object, source, flags }),
        Err(fault) => Err(Box::new(Refusal { object, source, fault })),
    }
}

fn settle_values(
    mut raw: RawSpectrum,
    source: &mut SourceRecord,
    flags: &mut Vec<Flag>,
    assume: &Layers<'_>,
) -> Result<Spectrum, ReadFault> {
    check_lengths(&raw)?;
    trim_padding(&mut raw, flags);
    if raw.wave.first() > raw.wave.last() {
        reverse(&mut raw);
    }
    let mut decided = Decisions::default();

    let wave_unit = wave_unit(&raw, flags, &mut decided, assume)?;
    let medium = settle_one(raw.medium.take(), assume.get("medium", |a| a.medium), flags)
        .ok_or(ReadFault::MediumUnknown)?;
    source.medium = Some(medium.value);
    decided.medium = Some(medium.by);
    let to_vacuum_aa = |wave: f64| {
        let wave_aa = wave * wave_unit.in_aa();
        match medium.value {
            Medium::Vacuum => wave_aa,
            Medium::Air => air_to_vacuum_aa(wave_aa),
        }
    };
    let wave_vac_aa: Vec<f64> = raw.wave.iter().map(|wave| to_vacuum_aa(*wave)).collect();

    let flux_unit = flux_unit(&raw, flags, &mut decided, assume)?;
    let flux: Vec<f64> = raw.flux.iter().map(|flux| scale(*flux, flux_unit.factor)).collect();
    let has_errors = raw.errors.is_some();
    let mut sigma = sigma(&mut raw, &flux, flux_unit.factor, flags, &mut decided, assume)?;

    let resolution = resolution(raw.resolution.take(), &wave_vac_aa, flags, &mut decided, assume)?;
    let frame =
        settle_one(raw.velocity_frame.take(), assume.get("velocity_frame", |a| a.velocity_frame), flags)
            .unwrap_or_else(|| {
                flags.push(Flag::new(&codes::FRAME_UNKNOWN, "nothing in the file or the configuration"));
                Stated::new(VelocityFrame::Unknown, "not stated")
            });
    source.velocity_frame = Some(frame.value);
    decided.velocity_frame = Some(frame.by);
    source.decided_by = decided;

    let pixels = wave_vac_aa.len();
    source.pixels = Some(pixels);
    source.wave_min_vac_aa = wave_vac_aa.first().copied().filter(|wave| wave.is_finite());
    source.wave_max_vac_aa = wave_vac_aa.last().copied().filter(|wave| wave.is_finite());
    source.fwhm_median_aa = median_fwhm_aa(&resolution, &wave_vac_aa);
    let is_flux_calibrated = flux_unit.scale == FluxScale::Calibrated;
    source.is_flux_calibrated = Some(is_flux_calibrated);
    let mut is_good = raw.is_good.unwrap_or_else(|| vec![true; pixels]);
    if let Some(instrument) = assume.instrument {
        let error_scale = instrument.error_scale.filter(|_| has_errors);
        sigma.iter_mut().for_each(|sigma| *sigma *= error_scale.unwrap_or(1.0));
        source.instrument_section = Some(InstrumentRecord {
            name: instrument.name.clone(),
            masks_vac_aa: instrument.masks_vac_aa.clone(),
            masked_pixels: mask(&mut is_good, &wave_vac_aa, |wave| instrument.is_masked(wave)),
            error_scale,
        });
    }
    Ok(Spectrum::new(wave_vac_aa, flux, sigma, is_good, resolution, is_flux_calibrated)?)
}

/// Marks pixels bad by their wavelength; returns how many were good before.
fn mask(is_good: &mut [bool], wave_vac_aa: &[f64], is_masked: impl Fn(f64) -> bool) -> usize {
    let mut count = 0;
    for (is_good, _) in is_good.iter_mut().zip(wave_vac_aa).filter(|(_, wave)| is_masked(**wave)) {
        count += usize::from(*is_good);
        *is_good = false;
    }
    count
}

fn check_lengths(raw: &RawSpectrum) -> Result<(), ReadFault> {
    let expected = raw.wave.len();
    let widths = match &raw.resolution {
        Some(Stated { value: Resolution::FwhmPerPixelAa(widths), .. }) => Some(widths.len()),
        _ => None,
    };
    for (name, found) in [
        ("flux", Some(raw.flux.len())),
        ("error", raw.errors.as_ref().map(Vec::len)),
        ("mask", raw.is_good.as_ref().map(Vec::len)),
        ("width", widths),
    ] {
        if let Some(found) = found
            && found != expected
        {
            return Err(SpectrumFault::UnequalLengths { name, found, expected }.into());
        }
    }
    Ok(())
}

/// Cuts pixels that hold neither a wavelength nor a flux off both ends: tables are often longer than
/// the spectrum in them. Inside, such pixels are left for [`Spectrum::new`] to refuse.
fn trim_padding(raw: &mut RawSpectrum, flags: &mut Vec<Flag>) {
    let is_padding = |pixel: &usize| {
        let (wave, flux) = (raw.wave[*pixel], raw.flux[*pixel]);
        !(wave.is_finite() && wave > 0.0 || flux.is_finite() && flux != 0.0)
    };
    let pixels = raw.wave.len();
    let front = (0..pixels).take_while(is_padding).count();
    let back = (front..pixels).rev().take_while(is_padding).count();
    if front + back == 0 {
        return;
    }
    flags.push(Flag::new(&codes::PADDING_TRIMMED, format!("{front} at the start, {back} at the end")));
    each_list(raw, |list| {
        list.truncate(pixels - back);
        list.drain(..front);
    });
    if let Some(is_good) = &mut raw.is_good {
        is_good.truncate(pixels - back);
        is_good.drain(..front);
    }
}

fn reverse(raw: &mut RawSpectrum) {
    each_list(raw, |list| list.reverse());
    if let Some(is_good) = &mut raw.is_good {
        is_good.reverse();
    }
}

/// Applies the same change to every list of numbers that has one entry per pixel.
fn each_list(raw: &mut RawSpectrum, change: impl Fn(&mut Vec<f64>)) {
    change(&mut raw.wave);
    change(&mut raw.flux);
    if let Some(errors) = &mut raw.errors {
        change(errors);
    }
    if let Some(Stated { value: Resolution::FwhmPerPixelAa(widths), .. }) = &mut raw.resolution {
        change(widths);
    }
}

/// The file's word, else the configuration's; a difference between them becomes a flag.
fn settle_one<T: PartialEq + std::fmt::Debug>(
    stated: Option<Stated<T>>,
    setting: Option<Setting<T>>,
    flags: &mut Vec<Flag>,
) -> Option<Stated<T>> {
    match (stated, setting) {
        (None, None) => None,
        (None, Some(Setting { key, value, .. })) => Some(Stated::new(value, format!("configuration: {key}"))),
        (Some(stated), Some(setting)) if stated.value != setting.value => {
            let Setting { key, value, overrules_file } = setting;
            let used = if overrules_file { "configuration" } else { "file" };
            let detail = format!(
                "{key}: the file says {:?} ({}), the configuration {value:?}; used the {used}",
                stated.value, stated.by
            );
            flags.push(Flag::new(&codes::SETTING_DIFFERS_FROM_FILE, detail));
            Some(if overrules_file {
                Stated::new(value, format!("configuration: {key}, overruling {}", stated.by))
            } else {
                let by = stated.origin();
                Stated::new(stated.value, by)
            })
        }
        (Some(stated), _) => {
            let by = stated.origin();
            Some(Stated::new(stated.value, by))
        }
    }
}

fn wave_unit(
    raw: &RawSpectrum,
    flags: &mut Vec<Flag>,
    decided: &mut Decisions,
    assume: &Layers<'_>,
) -> Result<WaveUnit, ReadFault> {
    let (stated, not_understood) = match &raw.wave_unit {
        UnitWords::Known(stated) => (Some(stated.clone()), None),
        UnitWords::NotUnderstood(words) => (None, Some(words.clone())),
        UnitWords::Absent => (None, None),
    };
    if let Some(unit) = settle_one(stated, assume.get("wave_unit", |a| a.wave_unit), flags) {
        decided.wave_unit = Some(unit.by);
        return Ok(unit.value);
    }
    if let Some(found) = not_understood {
        return Err(ReadFault::WaveUnitUnknown { found: Some(found) });
    }
    let ends = raw.wave.first().copied().zip(raw.wave.last().copied());
    let Some((unit, (first, last))) = ends.and_then(|(a, b)| Some((WaveUnit::infer(a, b)?, (a, b)))) else {
        return Err(ReadFault::WaveUnitUnknown { found: None });
    };
    let detail = format!("{first} to {last} covers Balmer lines only in {unit:?}");
    flags.push(Flag::new(&codes::UNIT_INFERRED, detail.clone()));
    decided.wave_unit = Some(format!("inferred: {detail}"));
    Ok(unit)
}

fn flux_unit(
    raw: &RawSpectrum,
    flags: &mut Vec<Flag>,
    decided: &mut Decisions,
    assume: &Layers<'_>,
) -> Result<FluxUnit, ReadFault> {
    let factor = match &raw.flux_unit {
        UnitWords::Known(stated) => stated.value.factor,
        UnitWords::NotUnderstood(_) | UnitWords::Absent => 1.0,
    };
    let stated = match &raw.flux_unit {
        UnitWords::Known(stated) => Some(Stated::new(stated.value.scale, stated.by.clone())),
        UnitWords::NotUnderstood(_) | UnitWords::Absent => None,
    };
    let scale = match settle_one(stated, assume.get("flux_scale", |a| a.flux_scale), flags) {
        Some(scale) => scale,
        None => match &raw.flux_unit {
            UnitWords::NotUnderstood(found) => {
                return Err(ReadFault::FluxUnitUnknown { found: found.clone() });
            }
            // The careful choice: a relative scale claims nothing about the continuum.
            UnitWords::Absent | UnitWords::Known(_) => {
                Stated::new(FluxScale::Relative, "not stated, so only the shape of lines is used")
            }
        },
    };
    decided.flux_scale = Some(scale.by);
    Ok(FluxUnit { scale: scale.value, factor })
}

/// Fill values stay fill values under any factor.
fn scale(value: f64, factor: f64) -> f64 {
    if value.abs() < LARGEST_VALUE { value * factor } else { f64::NAN }
}

fn sigma(
    raw: &mut RawSpectrum,
    flux: &[f64],
    factor: f64,
    flags: &mut Vec<Flag>,
    decided: &mut Decisions,
    assume: &Layers<'_>,
) -> Result<Vec<f64>, ReadFault> {
    let Some(errors) = raw.errors.take() else {
        let snr = assume.get("assume_snr", |a| a.assume_snr).ok_or(ReadFault::ErrorsMissing)?.value;
        let detail = format!("signal-to-noise ratio {snr} per pixel");
        decided.error_kind = Some(format!("configuration: assume_snr = {snr}"));
        flags.push(Flag::new(&codes::ERRORS_ASSUMED, detail));
        let smallest = SMALLEST_ASSUMED_ERROR * median(flux.iter().map(|value| value.abs()));
        return Ok(flux.iter().map(|value| value.abs().max(smallest) / snr).collect());
    };
    let kind = settle_one(raw.error_kind.take(), assume.get("error_kind", |a| a.error_kind), flags)
        .ok_or(ReadFault::ErrorKindUnknown)?;
    decided.error_kind = Some(kind.by);
    // Zero, negative and fill values come out as NaN or zero, which Spectrum::new counts as bad.
    let one = |error: f64| match kind.value {
        ErrorKind::Sigma => scale(error, factor),
        ErrorKind::Variance => scale(error, factor * factor).sqrt(),
        ErrorKind::InverseVariance if error > 0.0 => factor / error.sqrt(),
        ErrorKind::InverseVariance => f64::NAN,
    };
    Ok(errors.into_iter().map(one).collect())
}

fn resolution(
    stated: Option<Stated<Resolution>>,
    wave_vac_aa: &[f64],
    flags: &mut Vec<Flag>,
    decided: &mut Decisions,
    assume: &Layers<'_>,
) -> Result<Resolution, ReadFault> {
    let stated = stated.and_then(|stated| believable(stated, wave_vac_aa, flags));
    // A setting for files without a resolution is the ordinary case, so a difference from the file's
    // own widths is not worth a flag; only overruling is.
    let chosen = match (stated, assume.resolution()) {
        (Some(stated), Some(Setting { key, value, overrules_file: true })) => {
            let detail = format!("{key}: used the configuration instead of {}", stated.by);
            flags.push(Flag::new(&codes::SETTING_DIFFERS_FROM_FILE, detail));
            Stated::new(value, format!("configuration: {key}, overruling {}", stated.by))
        }
        (Some(stated), _) => {
            let by = stated.origin();
            Stated::new(stated.value, by)
        }
        (None, Some(Setting { key, value, .. })) => Stated::new(value, format!("configuration: {key}")),
        (None, None) => return Err(ReadFault::ResolutionUnknown),
    };
    decided.resolution = Some(chosen.by);
    Ok(chosen.value)
}

/// Checks a column of widths pixel by pixel: some files hold fluxes or zeros there. Single
/// unbelievable widths take the nearest believable one; a column of mostly such is not used.
fn believable(
    stated: Stated<Resolution>,
    wave_vac_aa: &[f64],
    flags: &mut Vec<Flag>,
) -> Option<Stated<Resolution>> {
    let Resolution::FwhmPerPixelAa(widths) = &stated.value else { return Some(stated) };
    let is_believable = |pixel: usize| {
        let wave = wave_vac_aa[pixel];
        let step = match pixel {
            0 => wave_vac_aa.get(1).map_or(0.0, |next| next - wave),
            _ => wave - wave_vac_aa[pixel - 1],
        };
        let width = widths[pixel];
        width > NARROWEST_FWHM_PIXELS * step.abs() && width > 0.0 && width < WIDEST_FWHM * wave
    };
    let good: Vec<usize> = (0..widths.len()).filter(|pixel| is_believable(*pixel)).collect();
    let bad = widths.len() - good.len();
    if bad == 0 {
        return Some(stated);
    }
    let is_used = good.len() as f64 >= FEWEST_BELIEVABLE_WIDTHS * widths.len() as f64;
    let detail = format!(
        "{bad} of {} widths ({}) are not between {NARROWEST_FWHM_PIXELS} pixels and {WIDEST_FWHM} of the wavelength; {}",
        widths.len(),
        stated.by,
        if is_used { "those took the nearest believable width" } else { "the column was not used" }
    );
    flags.push(Flag::new(&codes::RESOLUTION_COLUMN_IMPLAUSIBLE, detail));
    if !is_used {
        return None;
    }
    let mut filled = Vec::with_capacity(widths.len());
    let mut at = 0;
    for pixel in 0..widths.len() {
        while at + 1 < good.len() && good[at + 1].abs_diff(pixel) < good[at].abs_diff(pixel) {
            at += 1;
        }
        filled.push(widths[good[at]]);
    }
    Some(Stated::new(Resolution::FwhmPerPixelAa(filled), stated.by))
}

fn median_fwhm_aa(resolution: &Resolution, wave_vac_aa: &[f64]) -> Option<f64> {
    let per_pixel = match resolution {
        Resolution::FwhmPerPixelAa(widths) if widths.len() != wave_vac_aa.len() => return None,
        _ => wave_vac_aa.iter().enumerate().map(|(pixel, wave)| resolution.fwhm_aa(pixel, *wave)),
    };
    Some(median(per_pixel)).filter(|median| *median > 0.0)
}

/// Median of the finite values, 0 if there are none.
fn median(values: impl Iterator<Item = f64>) -> f64 {
    let mut finite: Vec<f64> = values.filter(|value| value.is_finite()).collect();
    let middle = finite.len() / 2;
    if finite.is_empty() {
        return 0.0;
    }
    *finite.select_nth_unstable_by(middle, f64::total_cmp).1
}
