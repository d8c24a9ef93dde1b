//! What the configuration (or the command line) says about files that do not speak for themselves.

use std::collections::BTreeMap;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::axis::{Medium, VelocityFrame};
use super::exposures::Exposures;
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
    /// These values where given, else those of `general`.
    fn or(&self, general: &Assumptions) -> Assumptions {
        // A resolution of one kind replaces one of the other kind.
        let resolution =
            if self.resolution_fwhm_aa.is_some() || self.resolving_power.is_some() { self } else { general };
        Assumptions {
            medium: self.medium.or(general.medium),
            wave_unit: self.wave_unit.or(general.wave_unit),
            flux_scale: self.flux_scale.or(general.flux_scale),
            error_kind: self.error_kind.or(general.error_kind),
            assume_snr: self.assume_snr.or(general.assume_snr),
            resolution_fwhm_aa: resolution.resolution_fwhm_aa,
            resolving_power: resolution.resolving_power,
            velocity_frame: self.velocity_frame.or(general.velocity_frame),
            overrule_file: self.overrule_file || general.overrule_file,
        }
    }

    fn check(&self, table: &str) -> Result<(), String> {
        if self.resolution_fwhm_aa.is_some() && self.resolving_power.is_some() {
            return Err(format!(
                "found both resolution_fwhm_aa and resolving_power in {table}, need one of them"
            ));
        }
        for (key, value) in [
            ("resolution_fwhm_aa", self.resolution_fwhm_aa),
            ("resolving_power", self.resolving_power),
            ("assume_snr", self.assume_snr),
        ] {
            if let Some(value) = value
                && !(value.is_finite() && value > 0.0)
            {
                return Err(format!("found {key} = {value} in {table}, need a number above 0"));
            }
        }
        Ok(())
    }
}

/// How files are read.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields, default)]
pub struct ReadSettings {
    /// For files of every instrument.
    pub assume: Assumptions,
    /// For files whose telescope and instrument keywords (`TELESCOP INSTRUME`) contain this name, letter
    /// case aside; goes before `assume`. Of several that fit, the longest name is used.
    pub instruments: BTreeMap<String, Assumptions>,
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
            instruments: BTreeMap::new(),
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

    /// What is taken for granted about a file of this instrument.
    pub fn assumptions(&self, instrument: Option<&str>) -> Assumptions {
        let words = instrument.unwrap_or_default().to_ascii_lowercase();
        let fits = |name: &&String| !name.is_empty() && words.contains(&name.to_ascii_lowercase());
        match self.instruments.keys().filter(fits).max_by_key(|name| name.len()) {
            Some(name) => self.instruments[name].or(&self.assume),
            None => self.assume.clone(),
        }
    }

    /// Refuses values that cannot be meant.
    ///
    /// # Errors
    /// What was found and what is needed, naming the key.
    pub fn check(&self) -> Result<(), String> {
        self.assume.check("assume")?;
        for (name, assume) in &self.instruments {
            assume.check(&format!("instruments.{name}"))?;
        }
        if self.largest_file_mb == 0 {
            return Err("found largest_file_mb = 0, need at least 1".to_owned());
        }
        Ok(())
    }
}
