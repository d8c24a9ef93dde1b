//! What several tests share.

pub mod fits_bytes;
pub mod folder;
pub mod published;
pub mod toy_grid;
