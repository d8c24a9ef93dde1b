//! Laws of nature, in cgs units unless a name says otherwise.

pub mod constants;
pub mod wavelength;
