//! What the configuration (or the command line) says about files that do not speak for themselves.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::axis::{Medium, VelocityFrame};
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

/// How files are read. A value given here is used for files that do not state it. Where a file
/// states something else the file wins, unless `overrule_file` is set; the report tells either way.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields, default)]
pub struct ReadSettings {
    /// Air or vacuum.
    pub medium: Option<Medium>,
    /// Unit of the wavelengths.
    pub wave_unit: Option<WaveUnit>,
    /// Calibrated or relative fluxes.
    pub flux_scale: Option<FluxScale>,
    /// What the errors are.
    pub error_kind: Option<ErrorKind>,
    /// Signal-to-noise ratio per pixel to assume for files without errors.
    pub assume_snr: Option<f64>,
    /// FWHM of the instrument, A.
    pub resolution_fwhm_aa: Option<f64>,
    /// Resolving power lambda / FWHM of the instrument.
    pub resolving_power: Option<f64>,
    /// Observer to whom the wavelengths refer.
    pub velocity_frame: Option<VelocityFrame>,
    /// Use the values above even where a file states something else.
    pub overrule_file: bool,
    /// Only this row, fibre or aperture, from 0.
    pub row: Option<usize>,
    /// Largest file, packed or unpacked, MB.
    pub largest_file_mb: u64,
}

impl Default for ReadSettings {
    fn default() -> Self {
        ReadSettings {
            medium: None,
            wave_unit: None,
            flux_scale: None,
            error_kind: None,
            assume_snr: None,
            resolution_fwhm_aa: None,
            resolving_power: None,
            velocity_frame: None,
            overrule_file: false,
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

    /// Refuses values that cannot be meant.
    ///
    /// # Errors
    /// What was found and what is needed, naming the key.
    pub fn check(&self) -> Result<(), String> {
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
        if self.largest_file_mb == 0 {
            return Err("found largest_file_mb = 0, need at least 1".to_owned());
        }
        Ok(())
    }
}
