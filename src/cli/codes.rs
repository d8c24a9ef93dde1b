//! `emberline codes`: the table of fault and flag codes.

use std::io::{self, Write};
use std::process::ExitCode;

use clap::Args;

use super::{CommandResult, EXIT_WRONG_USE};
use crate::codes::{self, Effect};

/// Arguments of `codes`.
#[derive(Debug, Args)]
pub struct CodesArguments {
    /// Show this code only.
    code: Option<String>,
}

/// Prints one code or all of them.
pub fn run(arguments: &CodesArguments) -> CommandResult {
    let mut out = io::stdout().lock();
    let shown: Vec<_> = match &arguments.code {
        None => codes::TABLE.to_vec(),
        Some(id) => codes::find(id).into_iter().collect(),
    };
    if shown.is_empty() {
        let id = arguments.code.as_deref().unwrap_or_default();
        writeln!(io::stderr(), "emberline: no code is called {id} (list them with: emberline codes)")?;
        return Ok(ExitCode::from(EXIT_WRONG_USE));
    }
    for code in shown {
        writeln!(out, "{}  [{}]", code.id, effect_word(code.effect))?;
        writeln!(out, "    meaning: {}", code.meaning)?;
        writeln!(out, "    remedy:  {}", code.remedy)?;
    }
    Ok(ExitCode::SUCCESS)
}

fn effect_word(effect: Effect) -> &'static str {
    match effect {
        Effect::Note => "note",
        Effect::Review => "review",
        Effect::Reject => "rejected",
    }
}
