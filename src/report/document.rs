//! The document's types. Every key is written, in this order; what could not be had is `null`.

use std::collections::BTreeMap;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use crate::codes::Flag;
use crate::spectrum::{ObjectRecord, SourceRecord};
use crate::star::Star;

/// Version of the document; grows when a key changes its meaning or goes away.
pub const SCHEMA_VERSION: u32 = 1;

/// What the program found out about one object.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Report {
    /// Version of this document.
    pub schema_version: u32,
    /// Whose light it is, as the file says.
    pub object: ObjectRecord,
    /// Where the spectrum came from and how its ambiguities were settled.
    pub source: SourceRecord,
    /// Whether the result may be used.
    pub verdict: Verdict,
    /// Why the verdict is what it is, and what else is worth knowing.
    pub flags: Vec<Flag>,
    /// The chosen solution.
    pub parameters: Parameters,
    /// Every distinct solution, the chosen one first.
    pub solutions: Vec<SolutionRow>,
    /// Each Balmer line of the chosen solution.
    pub lines: Vec<LineRow>,
    /// What follows for the star.
    pub star: Star,
    /// What made this report.
    pub provenance: Provenance,
    /// Time spent, milliseconds, by step.
    pub timing_ms: BTreeMap<String, f64>,
}

/// Whether a result may be used.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
pub enum Verdict {
    /// Use it.
    Accepted,
    /// A person should look first.
    Review,
    /// There is no usable result.
    Rejected,
}

/// The three fitted parameters.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Parameters {
    /// Effective temperature, K.
    pub teff_k: Parameter,
    /// Logarithm of the surface gravity in cm s^-2.
    pub log_g: Parameter,
    /// Radial velocity, km/s, positive receding; in the frame named under `source`.
    pub radial_velocity_km_s: Parameter,
}

/// One fitted value with its errors listed apart, each one standard deviation.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Parameter {
    /// Best value.
    pub value: Option<f64>,
    /// From the noise of this spectrum.
    pub err_stat: Option<f64>,
    /// What repeated observations of the same stars scatter beyond their noise.
    pub err_external: Option<f64>,
    /// Both, added in quadrature.
    pub err_total: Option<f64>,
}

/// One minimum of chi-square.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct SolutionRow {
    /// `hot` or `cold`, for the side of the Balmer maximum.
    pub branch: String,
    /// Whether `parameters` are of this solution.
    pub is_chosen: bool,
    /// Effective temperature of one-dimensional models, K.
    pub teff_k: Option<f64>,
    /// Surface gravity of one-dimensional models.
    pub log_g: Option<f64>,
    /// Radial velocity, km/s.
    pub radial_velocity_km_s: Option<f64>,
    /// Effective temperature after the three-dimensional correction, K.
    pub teff_3d_k: Option<f64>,
    /// Surface gravity after the three-dimensional correction.
    pub log_g_3d: Option<f64>,
    /// Covariance of (teff_k, log_g, radial_velocity_km_s), in their units.
    pub covariance: Option<[[f64; 3]; 3]>,
    /// Chi-square at the minimum.
    pub chi2: Option<f64>,
    /// Degrees of freedom.
    pub dof: u64,
    /// Probability of this solution among all of them.
    pub probability: Option<f64>,
}

/// One Balmer line of the chosen solution.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct LineRow {
    /// `H-beta`, `H-gamma`, ... `H8`, `H9`.
    pub line: String,
    /// Rest wavelength in vacuum, A.
    pub rest_wave_vac_aa: f64,
    /// Pixels used in the line's window.
    pub pixels: u64,
    /// Pixels of the window that are masked or were set aside.
    pub bad_pixels: u64,
    /// Chi-square of the window.
    pub chi2: Option<f64>,
    /// Root mean square of (data - model) / model over the used pixels.
    pub rms_residual: Option<f64>,
    /// Equivalent width, A.
    pub equivalent_width_aa: Option<f64>,
}

/// What made a report.
#[derive(Debug, Clone, Default, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Provenance {
    /// Name of the program.
    pub software: String,
    /// Its version.
    pub version: String,
    /// Fingerprint of everything in the configuration that can change the answer.
    pub config_fingerprint: Option<String>,
    /// Name of the grid of model spectra.
    pub grid: Option<String>,
    /// BLAKE3 of the grid file.
    pub grid_blake3: Option<String>,
    /// Name of the table of evolutionary tracks.
    pub tracks: Option<String>,
    /// When, UTC, RFC 3339.
    pub fitted_at: Option<String>,
}

impl Provenance {
    /// Name and version of this program; the rest is filled by those who know it.
    pub fn of_this_program() -> Self {
        Provenance {
            software: env!("CARGO_PKG_NAME").to_owned(),
            version: env!("CARGO_PKG_VERSION").to_owned(),
            ..Provenance::default()
        }
    }
}
