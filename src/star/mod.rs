//! What fitted parameters mean for the star: mass, radius, luminosity, redshift, age, progenitor.
//!
//! In: Teff (K), log g, their covariance, optionally the radial velocity (km/s), and the track
//! table. Out: [`StarReport`]: values with 68 % intervals, and flags. See [`describe()`].

mod describe;
pub mod progenitor;
pub mod three_d;
mod values;

pub use describe::{describe, describe_in_layer};
pub use values::{Star, StarReport, StarValue};
