//! Immutable tables made by the layers above: file format, checksum, lookup, build.

pub mod axis;
pub mod build;
mod flux_file;
mod flux_grid;
pub mod magnitude_table;
pub mod passband;
pub mod place;
pub mod profile_table;
pub mod sealed_fits;
pub mod track_build;
pub mod track_table;

pub use flux_file::{FORMAT_VERSION, GridFault};
pub use flux_grid::{FluxGrid, GridHeader, LeftOut, NodeRecord, OutsideGrid, Stencil};
