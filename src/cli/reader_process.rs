//! The hidden command that the daemon starts its readers with.

use std::process::ExitCode;

use super::CommandResult;
use crate::service::reader_process;

/// Reads files until the daemon hangs up.
pub fn run() -> CommandResult {
    reader_process::run()?;
    Ok(ExitCode::SUCCESS)
}
