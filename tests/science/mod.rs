//! Invariants and recovery: what goes in must come out, with honest errors.

mod atmospheres;
mod grid_file;
mod models;
mod not_da;
mod recovery;
mod settings;
mod standards;
