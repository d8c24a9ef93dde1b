//! What the configuration can change about a fit.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::errors::{EXTERNAL_LOG_G, EXTERNAL_TEFF};
use super::objective::LARGEST_VELOCITY_KM_S;
use super::outliers::OUTLIER_SIGMA;
use super::windows::{WINDOWS, Window};

/// Tilt of the flux calibration and of unknown reddening between H-beta and H8 together, one standard
/// deviation of the natural logarithm (E(B-V) = 0.05 reddens that range by 5 %; common practice).
const TILT_SIGMA: f64 = 0.08;

/// Settings of the fit. Field documentation for users: `config/emberline.toml`.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default, deny_unknown_fields)]
pub struct FitSettings {
    /// Lines to fit, by name (`H-alpha`, `H-beta`, ... `H8`, `H9`).
    #[serde(with = "names")]
    #[schemars(with = "Vec<String>")]
    pub lines: Vec<Window>,
    /// Fewest lines that a spectrum must cover to be fitted at all.
    pub fewest_windows: usize,
    /// Pixels nearer to the centre of their line than this are not used, A; 0 uses all.
    pub core_mask_half_width_aa: f64,
    /// Fastest radial velocity that is tried, km/s.
    pub largest_velocity_km_s: f64,
    /// Pixels that miss the model by this many standard deviations may be set aside.
    pub outlier_sigma: f64,
    /// How far the slope of a calibrated continuum is trusted: natural logarithm, one standard deviation.
    pub tilt_sigma: f64,
    /// External relative error of Teff.
    pub external_teff_relative: f64,
    /// External error of log g, dex.
    pub external_log_g: f64,
}

impl Default for FitSettings {
    fn default() -> Self {
        FitSettings {
            lines: WINDOWS.into_iter().filter(|window| window.is_default).collect(),
            fewest_windows: 2,
            core_mask_half_width_aa: 0.0,
            largest_velocity_km_s: LARGEST_VELOCITY_KM_S,
            outlier_sigma: OUTLIER_SIGMA,
            tilt_sigma: TILT_SIGMA,
            external_teff_relative: EXTERNAL_TEFF,
            external_log_g: EXTERNAL_LOG_G,
        }
    }
}

mod names {
    use super::{WINDOWS, Window};
    use serde::de::Error;
    use serde::{Deserialize, Deserializer, Serialize, Serializer};

    pub fn serialize<S: Serializer>(windows: &[Window], serializer: S) -> Result<S::Ok, S::Error> {
        windows.iter().map(|window| window.name).collect::<Vec<_>>().serialize(serializer)
    }

    pub fn deserialize<'de, D: Deserializer<'de>>(deserializer: D) -> Result<Vec<Window>, D::Error> {
        let known = || WINDOWS.map(|window| window.name).join(", ");
        Vec::<String>::deserialize(deserializer)?
            .iter()
            .map(|name| {
                WINDOWS.into_iter().find(|window| window.name == name).ok_or_else(|| {
                    D::Error::custom(format!("cannot fit the line {name}: known are {}", known()))
                })
            })
            .collect()
    }
}
