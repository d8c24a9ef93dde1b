//! The command line of Emberline; everything it does lives in the library.

use std::process::ExitCode;

fn main() -> ExitCode {
    emberline::cli::run()
}
