//! `emberline schema`: the JSON schema of the report.

use std::io::{self, Write};
use std::process::ExitCode;

use super::CommandResult;
use crate::report;

/// Prints the schema.
pub fn run() -> CommandResult {
    writeln!(io::stdout().lock(), "{}", serde_json::to_string_pretty(&report::schema())?)?;
    Ok(ExitCode::SUCCESS)
}
