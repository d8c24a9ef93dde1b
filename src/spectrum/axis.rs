//! The wavelength axis as files give it.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// The medium in which a file gives its wavelengths.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
pub enum Medium {
    /// Vacuum wavelengths.
    Vacuum,
    /// Wavelengths in standard air.
    Air,
}
