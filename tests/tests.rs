//! The one integration binary.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::print_stdout, missing_docs)]

// Layers look downward; tables agree.
mod architecture;
// Truth from outside: each number with its source.
mod reference;
// The daemon: crashes, full disks, signals, reloads.
mod service;
// Stand-ins, sites, waiting.
mod support;
