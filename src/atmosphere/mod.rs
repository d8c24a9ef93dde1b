//! Pure-hydrogen model atmospheres: (Teff, log g) to temperature structure to emergent spectrum.
//!
//! Plane-parallel, hydrostatic, LTE, radiative plus convective (ML2/alpha = 0.8) equilibrium.

mod convection;
mod emergent;
mod extinction;
mod frequency;
mod structure;
mod transfer;

pub use convection::MIXING_LENGTH;
pub use emergent::emergent_flux;
pub use structure::{Atmosphere, Convergence, FLUX_TOLERANCE, NotConverged, compute_atmosphere};
