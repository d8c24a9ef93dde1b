//! From a spectrum to effective temperature, gravity and velocity.
//!
//! Windows around the Balmer lines; model seen through the instrument; normalisation as part of the
//! fit; coarse scan, refinement of every minimum, choice between hot and cold; errors; screening.

mod errors;
mod fitter;
mod foreign_lines;
pub mod line_spread;
mod objective;
mod outliers;
mod profile;
mod screening;
mod settings;
mod solution;
mod windows;

pub use fitter::{Fitter, equivalent_width_aa};
pub use foreign_lines::{FOREIGN_LINES, ForeignLine, ForeignStrength};
pub use objective::Seen;
pub use settings::FitSettings;
pub use solution::{Branch, Fit, FitFault, LineResult, Solution};
pub use windows::{WINDOWS, Window};
