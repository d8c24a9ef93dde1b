//! What the configuration (or the command line) says about files that do not speak for themselves.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::axis::{Medium, VelocityFrame};
use super::exposures::Exposures;
use super::fits::Header;
use super::instrument::Instrument;
use super::resolution::Resolution;
use super::units::{FluxScale, WaveUnit};

/// What a column of errors holds.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
pub enum ErrorKind {
    /// One standard deviation.
    Sigma,
    /// Its square.
    Variance,
    /// One over its square; zero where the pixel is bad.
    InverseVariance,
}

/// What is taken for granted about files that do not state it. Where a file states something else the
/// file wins, unless `overrule_file` is set; the report tells either way.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields, default)]
pub struct Assumptions {
    /// Air or vacuum.
    pub medium: Option<Medium>,
    /// Unit of the wavelengths.
    pub wave_unit: Option<WaveUnit>,
    /// Calibrated or relative fluxes.
    pub flux_scale: Option<FluxScale>,
    /// What the errors are.
    pub error_kind: Option<ErrorKind>,
    /// Signal-to-noise ratio per pixel, for files without errors.
    pub assume_snr: Option<f64>,
    /// FWHM of the instrument, A.
    pub resolution_fwhm_aa: Option<f64>,
    /// Resolving power lambda / FWHM of the instrument.
    pub resolving_power: Option<f64>,
    /// Observer to whom the wavelengths refer.
    pub velocity_frame: Option<VelocityFrame>,
    /// Use these values even where a file states something else.
    pub overrule_file: bool,
}

impl Assumptions {
    /// The resolution with the key that gives it.
    fn resolution(&self) -> Option<(&'static str, Resolution)> {
        let constant = self.resolution_fwhm_aa.map(|fwhm| ("resolution_fwhm_aa", Resolution::FwhmAa(fwhm)));
        let power = self.resolving_power.map(|power| ("resolving_power", Resolution::ResolvingPower(power)));
        constant.or(power)
    }

    fn check(&self) -> Result<(), String> {
        if self.resolution_fwhm_aa.is_some() && self.resolving_power.is_some() {
            return Err("found both resolution_fwhm_aa and resolving_power, need one of them".to_owned());
        }
        for (key, value) in [
            ("resolution_fwhm_aa", self.resolution_fwhm_aa),
            ("resolving_power", self.resolving_power),
            ("assume_snr", self.assume_snr),
        ] {
            if let Some(value) = value
                && !(value.is_finite() && value > 0.0)
            {
                return Err(format!("found {key} = {value}, need a number above 0"));
            }
        }
        Ok(())
    }
}

/// A setting that was looked up: the key, the value, and whether it stands above the file.
#[derive(Debug, Clone, PartialEq)]
pub struct Setting<T> {
    /// Name of the key.
    pub key: &'static str,
    /// Its value.
    pub value: T,
    /// Whether it holds even where the file states something else.
    pub overrules_file: bool,
}

/// What is taken for granted about one spectrum: the section of its instrument goes before the general
/// assumptions, key by key, and each stands above the file only if it says so itself.
#[derive(Debug)]
pub struct Layers<'s> {
    /// The section that matches, if one does.
    pub instrument: Option<&'s Instrument>,
    layers: Vec<Assumptions>,
}

impl Layers<'_> {
    /// The first value of a key.
    pub fn get<T>(&self, key: &'static str, value: impl Fn(&Assumptions) -> Option<T>) -> Option<Setting<T>> {
        self.layers.iter().find_map(|layer| {
            Some(Setting { key, value: value(layer)?, overrules_file: layer.overrule_file })
        })
    }

    /// The first resolution, of either kind.
    pub fn resolution(&self) -> Option<Setting<Resolution>> {
        self.layers.iter().find_map(|layer| {
            let (key, value) = layer.resolution()?;
            Some(Setting { key, value, overrules_file: layer.overrule_file })
        })
    }
}

/// How files are read.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields, default)]
pub struct ReadSettings {
    /// For files of every instrument.
    pub assume: Assumptions,
    /// What is known of single instruments, in order of precedence.
    pub instruments: Vec<Instrument>,
    /// What is done with several exposures of one object in one file.
    pub exposures: Exposures,
    /// Only this row, fibre or aperture, from 0.
    pub row: Option<usize>,
    /// Largest file, packed or unpacked, MB.
    pub largest_file_mb: u64,
}

impl Default for ReadSettings {
    fn default() -> Self {
        ReadSettings {
            assume: Assumptions::default(),
            instruments: Vec::new(),
            exposures: Exposures::default(),
            row: None,
            // A coadd of 500 multi-object spectra takes 60 MB.
            largest_file_mb: 256,
        }
    }
}

impl ReadSettings {
    /// The limit in bytes.
    pub fn largest_bytes(&self) -> u64 {
        self.largest_file_mb.saturating_mul(1_000_000)
    }

    /// What is taken for granted about a spectrum with these headers, its own before the general one.
    pub fn layers(&self, headers: &[&Header]) -> Layers<'_> {
        let instrument = self.instruments.iter().find(|instrument| instrument.is_match(headers));
        let layers = instrument.map(Instrument::assumptions).into_iter().chain([self.assume.clone()]);
        Layers { instrument, layers: layers.collect() }
    }

    /// Refuses values that cannot be meant.
    ///
    /// # Errors
    /// What was found and what is needed, naming the key.
    pub fn check(&self) -> Result<(), String> {
        self.assume.check()?;
        for instrument in &self.instruments {
            instrument.check().map_err(|fault| fault.to_string())?;
        }
        if self.largest_file_mb == 0 {
            return Err("found largest_file_mb = 0, need at least 1".to_owned());
        }
        Ok(())
    }
}
