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

/// The observer to whom the wavelengths of a file refer.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
pub enum VelocityFrame {
    /// The telescope: the Earth's motion is still in the velocity.
    Topocentric,
    /// The Sun.
    Heliocentric,
    /// The barycentre of the solar system.
    Barycentric,
    /// The file does not say.
    Unknown,
}
