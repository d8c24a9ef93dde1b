//! Laws of nature, in cgs units unless a name says otherwise.

pub mod constants;
pub mod hydrogen;
pub mod molecule;
pub mod occupation;
pub mod opacity;
pub mod planck;
pub mod stark;
pub mod state;
pub mod wavelength;
