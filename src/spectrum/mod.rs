//! Observed data, made safe: a [`Spectrum`] can only be made from values that the fit may trust.

mod axis;
pub mod readers;
mod resolution;

pub use axis::Medium;
pub use resolution::Resolution;
