//! The values that are reported of a star; names and units are the report's keys.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use crate::codes::Flag;

/// A derived value with its 68 % interval; `null` where it could not be had, with a flag that says why.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct StarValue {
    /// Value at the fitted parameters.
    pub value: Option<f64>,
    /// From the median down to the 16th percentile.
    pub err_minus: Option<f64>,
    /// From the median up to the 84th percentile.
    pub err_plus: Option<f64>,
}

/// What follows for the star.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Star {
    /// Mass, solar masses.
    pub mass_msun: StarValue,
    /// Radius, nominal solar radii.
    pub radius_rsun: StarValue,
    /// Luminosity, nominal solar luminosities.
    pub luminosity_lsun: StarValue,
    /// Gravitational redshift of the surface, km/s.
    pub gravitational_redshift_km_s: StarValue,
    /// Time since the star began to cool, Gyr.
    pub cooling_age_gyr: StarValue,
    /// Mass on the main sequence, solar masses.
    pub progenitor_mass_msun: StarValue,
    /// Mean density, g/cm3.
    pub mean_density_g_cm3: StarValue,
}

/// A star with the flags raised on the way.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct StarReport {
    /// The values.
    pub star: Star,
    /// What to know about them.
    pub flags: Vec<Flag>,
}
