//! Immutable tables made by the layers above: file format, checksum, lookup, build.

pub mod sealed_fits;
pub mod track_build;
pub mod track_table;
