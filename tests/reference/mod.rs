//! Truth from outside: each number with its source beside it.

mod constants;
mod gas;
mod hydrogen;
mod interior;
mod least_squares;
mod star;
mod stark;
mod stark_tables;
mod wavelength;
