//! The command line: one file per command.

pub mod tracks;
pub mod tracks_figure;

use std::process::ExitCode;

/// Parses the arguments, runs the command, returns the exit code.
pub fn run() -> ExitCode {
    ExitCode::from(2)
}
