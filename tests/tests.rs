//! The one integration binary.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::print_stdout, missing_docs)]

// Layers look downward; tables agree.
mod architecture;
// Truth from outside: each number with its source.
mod reference;
// Invariants and recovery of the fit; published models and standard stars.
mod science;
// Exit codes, messages, output of the program itself.
mod cli;
// Reading: values, decisions, refusals, mutated files.
mod spectrum;
// Mutated inputs for every reader and the configuration.
mod fuzz;
// The daemon: crashes, full disks, signals, reloads.
mod service;
// The report document.
mod report;
// Rows, exports, loading.
mod catalogue;
// FITS byte writer, folders.
mod support;
