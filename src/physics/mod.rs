//! Laws of nature, in cgs units unless a name says otherwise.

pub mod constants;
pub mod hydrogen;
pub mod stark;
pub mod wavelength;
