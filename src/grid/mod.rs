//! Immutable tables made by the layers above.

pub mod profile_table;
