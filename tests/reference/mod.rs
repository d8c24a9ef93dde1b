mod hydrogen;
mod stark;
mod stark_tables;
//! Truth from outside: each number with its source beside it.

mod constants;
mod wavelength;
mod interior;
mod star;
