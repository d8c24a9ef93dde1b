//! `emberline check`: validates a configuration and shows what is in effect.

use std::io::{self, Write};
use std::path::{Path, PathBuf};
use std::process::ExitCode;

use clap::Args;

use crate::service::config::{Config, ConfigError};
use crate::spectrum::readers::describe_layouts;

/// Validate the configuration and print what is in effect.
#[derive(Debug, Args)]
pub struct CheckArgs {
    /// Configuration [default: config/emberline.toml, then /etc/emberline/emberline.toml].
    #[arg(long, value_name = "FILE")]
    pub config: Option<PathBuf>,
    /// Also demand what a daemon needs: folders that exist, and places for reports and ledger.
    #[arg(long)]
    pub for_daemon: bool,
    /// Print the table of file layouts that are read, instead of checking a configuration.
    #[arg(long, conflicts_with_all = ["config", "for_daemon"])]
    pub layouts: bool,
}

/// The configuration could not be checked.
#[derive(Debug, thiserror::Error)]
pub enum CheckError {
    /// It is no good.
    #[error(transparent)]
    Config(#[from] ConfigError),
    /// It could not be shown.
    #[error("cannot print the configuration")]
    Print(#[from] io::Error),
}

/// Prints the effective configuration as TOML.
///
/// # Errors
/// The configuration is refused, or standard output cannot be written.
pub fn run(args: &CheckArgs) -> Result<ExitCode, CheckError> {
    if args.layouts {
        io::stdout().lock().write_all(describe_layouts().as_bytes())?;
        return Ok(ExitCode::SUCCESS);
    }
    let (path, config) = Config::read(args.config.as_deref())?;
    if args.for_daemon {
        config.check_for_daemon()?;
        for folder in &config.inbox.folders {
            if !folder.is_dir() {
                return Err(CheckError::Config(ConfigError::OutOfRange {
                    key: "inbox.folders",
                    found: format!("{} (no folder there)", folder.display()),
                    need: "folders that exist",
                }));
            }
        }
    }
    io::stdout().lock().write_all(render(&path, &config)?.as_bytes())?;
    Ok(ExitCode::SUCCESS)
}

/// The effective configuration as TOML, which parses to the same configuration.
///
/// # Errors
/// A path in it is not UTF-8.
pub fn render(path: &Path, config: &Config) -> io::Result<String> {
    let shown = toml::to_string(config).map_err(io::Error::other)?;
    Ok(format!(
        "# in effect after {} and the environment\n# fingerprint of what can change an answer: {}\n{shown}",
        path.display(),
        config.answer_fingerprint()
    ))
}
