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
    /// Magnitudes at 10 pc, without interstellar extinction.
    pub absolute_magnitude: AbsoluteMagnitudes,
    /// Distance at which the star has the given magnitude, pc, without interstellar extinction; `null`
    /// where no magnitude is given.
    pub distance_pc: StarValue,
}

/// Magnitudes at 10 pc: Gaia DR3 and Johnson in their own (Vega) systems, SDSS in AB.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct AbsoluteMagnitudes {
    /// Gaia DR3 G.
    pub gaia_g: StarValue,
    /// Gaia DR3 BP.
    pub gaia_bp: StarValue,
    /// Gaia DR3 RP.
    pub gaia_rp: StarValue,
    /// SDSS u.
    pub sdss_u: StarValue,
    /// SDSS g.
    pub sdss_g: StarValue,
    /// SDSS r.
    pub sdss_r: StarValue,
    /// SDSS i.
    pub sdss_i: StarValue,
    /// SDSS z.
    pub sdss_z: StarValue,
    /// Johnson V.
    pub johnson_v: StarValue,
}

/// A star with the flags raised on the way.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct StarReport {
    /// The values.
    pub star: Star,
    /// What to know about them.
    pub flags: Vec<Flag>,
}
