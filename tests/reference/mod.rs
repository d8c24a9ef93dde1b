//! Truth from outside: each number with its source beside it.

mod constants;
mod wavelength;
