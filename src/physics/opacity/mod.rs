//! Opacity of hydrogen gas, one file per source.
//!
//! Everything is linear absorption or scattering, per cm, corrected for stimulated emission where
//! it is true absorption.

pub mod bound_free;
mod continuum;
pub mod free_free;
mod free_free_table;
pub mod h2_plus;
pub mod h_minus;
mod lines;
mod rosseland;
pub mod scattering;

pub use bound_free::LYMAN_LIMIT_HZ;
pub use continuum::Continuum;
pub use lines::{ALL_LINES, HighestLevels, LineOpacity, SERIES_COUNT};
pub use rosseland::rosseland_mean;
