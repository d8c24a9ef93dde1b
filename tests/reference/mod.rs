//! Truth from outside: each number with its source beside it.

mod constants;
mod hydrogen;
mod interior;
mod least_squares;
mod magnitudes;
mod molecule;
mod opacity;
mod planck;
mod star;
mod stark;
mod stark_tables;
mod state;
mod wavelength;
