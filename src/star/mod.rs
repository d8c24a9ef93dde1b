//! What fitted parameters mean for the star: mass, radius, luminosity, redshift, age, progenitor.
//!
//! In: Teff (K), log g, their covariance, optionally the radial velocity (km/s) and a magnitude, and the
//! tables. Out: [`StarReport`]: values with 68 % intervals, and flags. See [`describe()`].

mod describe;
mod models;
pub mod progenitor;
pub mod three_d;
mod values;

pub use describe::describe;
pub use models::{ApparentMagnitude, NotAMagnitude, StarModels};
pub use values::{AbsoluteMagnitudes, Star, StarReport, StarValue};
