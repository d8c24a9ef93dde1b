//! The command line: one file per command.

use std::process::ExitCode;

/// `emberline watch`.
pub mod watch;

/// `emberline refit`.
pub mod refit;

/// `emberline status`.
pub mod status;

/// `emberline check`.
pub mod check;

/// `emberline compare`.
pub mod compare;

/// Parses the arguments, runs the command, returns the exit code.
pub fn run() -> ExitCode {
    ExitCode::from(2)
}
