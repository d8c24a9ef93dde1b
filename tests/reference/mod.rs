//! Truth from outside: each number with its source beside it.

mod molecule;
mod opacity;
mod planck;
mod state;
