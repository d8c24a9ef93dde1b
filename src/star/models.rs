//! What a star is described with: the tables, and a magnitude where one is known.

use std::str::FromStr;

use crate::grid::magnitude_table::{MagnitudeTable, Magnitudes};
use crate::grid::passband::BANDS;
use crate::grid::track_table::TrackTable;
use crate::interior::structure::HydrogenLayer;

/// The tables behind [`super::describe()`].
#[derive(Clone, Copy)]
pub struct StarModels<'t> {
    /// Mass, radius and age.
    pub tracks: &'t TrackTable,
    /// Magnitudes; without them the magnitudes and the distance are `null`.
    pub magnitudes: Option<&'t MagnitudeTable>,
    /// Thickness of the hydrogen layer.
    pub layer: HydrogenLayer,
}

/// A measured magnitude.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ApparentMagnitude {
    /// Index in [`BANDS`].
    band: usize,
    magnitude: f64,
    error: f64,
}

/// A magnitude that cannot be understood.
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
#[error(
    "cannot use the magnitude `{found}`: need BAND=VALUE or BAND=VALUE:ERROR, BAND one of {}",
    BANDS.join(", ")
)]
pub struct NotAMagnitude {
    found: String,
}

impl ApparentMagnitude {
    /// A magnitude in a band of [`BANDS`] with its standard deviation; `None` for an unknown band, or numbers
    /// that are not finite.
    pub fn new(band: &str, magnitude: f64, error: f64) -> Option<Self> {
        let band = BANDS.iter().position(|name| *name == band)?;
        (magnitude.is_finite() && error.is_finite() && error >= 0.0).then_some(ApparentMagnitude {
            band,
            magnitude,
            error,
        })
    }

    /// Distance, pc, of a star with given magnitudes at 10 pc, without extinction.
    pub(super) fn distance_pc(&self, absolute: &Magnitudes) -> f64 {
        10f64.powf(0.2 * (self.magnitude - absolute[self.band]) + 1.0)
    }

    /// The magnitude moved by so many standard deviations.
    pub(super) fn moved(&self, sigmas: f64) -> Self {
        ApparentMagnitude { magnitude: self.magnitude + sigmas * self.error, ..*self }
    }
}

impl FromStr for ApparentMagnitude {
    type Err = NotAMagnitude;

    fn from_str(text: &str) -> Result<Self, NotAMagnitude> {
        let parse = || {
            let (band, numbers) = text.split_once('=')?;
            let (magnitude, error) = numbers.split_once(':').unwrap_or((numbers, "0"));
            ApparentMagnitude::new(band.trim(), magnitude.trim().parse().ok()?, error.trim().parse().ok()?)
        };
        parse().ok_or_else(|| NotAMagnitude { found: text.to_owned() })
    }
}
