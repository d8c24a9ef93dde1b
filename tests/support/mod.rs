//! What several tests share.

pub mod fits_bytes;
pub mod folder;
