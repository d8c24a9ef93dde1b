//! The command line: one file per command.
//!
//! Results go to stdout, everything else to stderr. Exit codes: 0 all done, 2 wrong use or
//! configuration, 3 some input failed (its report says why).

mod analyst;
mod catalogue;
pub mod check;
mod codes;
pub mod compare;
pub mod fit;
mod grid;
mod progress;
mod reader_process;
pub mod refit;
mod rehearse;
mod schema;
pub mod status;
mod tables;
pub mod tracks;
pub mod tracks_figure;
pub mod watch;

use std::error::Error;
use std::io::{self, IsTerminal, Write};
use std::process::ExitCode;

use clap::{Parser, Subcommand};

pub use tables::Tables;

use crate::report::error_chain;

/// Exit code for wrong use or configuration.
pub const EXIT_WRONG_USE: u8 = 2;
/// Exit code when some input failed; its report says why.
pub const EXIT_INPUT_FAILED: u8 = 3;

/// Fits spectra of DA white dwarfs: temperature, gravity, velocity, mass, radius, age.
#[derive(Debug, Parser)]
#[command(name = "emberline", version, arg_required_else_help = true)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
}

#[derive(Debug, Subcommand)]
enum Command {
    /// Fit spectra and print one JSON report per object.
    Fit(fit::FitArguments),
    /// Fit an invented night of the Kestrel Fell survey and compare with its truth.
    Rehearse(rehearse::RehearseArguments),
    /// Build, verify or describe the grid of model spectra.
    Grid(grid::GridArguments),
    /// Build, verify, describe, read or draw the evolutionary tracks.
    Tracks(tracks::TracksArgs),
    /// Watch folders and fit every spectrum that arrives.
    Watch(watch::WatchArgs),
    /// Have a running daemon take over its configuration and fit again what that makes stale.
    Refit(refit::RefitArgs),
    /// Ask a running daemon how it is.
    Status(status::StatusArgs),
    /// Check a configuration and show what is in effect.
    Check(check::CheckArgs),
    /// Compare the reports of two runs.
    Compare(compare::CompareArgs),
    /// Export the catalogue of results, or fill it from reports.
    Catalogue(catalogue::CatalogueArgs),
    /// List the stable codes of faults and flags with their meaning and remedy.
    Codes(codes::CodesArguments),
    /// Print the JSON schema of the report.
    Schema,
    /// Read files for a running daemon; started by it alone.
    #[command(name = crate::service::reader_process::COMMAND, hide = true)]
    ReaderProcess,
}

/// What a command ends with when it could not do its work.
pub type CommandResult = Result<ExitCode, Box<dyn Error>>;

/// Parses the arguments, runs the command, returns the exit code.
pub fn run() -> ExitCode {
    let arguments = match Arguments::try_parse() {
        Ok(arguments) => arguments,
        Err(refusal) => return print_refusal(&refusal),
    };
    // The daemon's log follows its configuration.
    if !matches!(arguments.command, Command::Watch(_) | Command::Refit(_)) {
        start_log();
    }
    let outcome = match arguments.command {
        Command::Fit(arguments) => fit::run(&arguments),
        Command::Rehearse(arguments) => rehearse::run(&arguments),
        Command::Grid(arguments) => grid::run(&arguments),
        Command::Tracks(arguments) => tracks::run(&arguments).map_err(Into::into),
        Command::Watch(arguments) => watch::run(&arguments, analyst::factory()).map_err(Into::into),
        Command::Refit(arguments) => refit::run(&arguments, analyst::factory()).map_err(Into::into),
        Command::Status(arguments) => status::run(&arguments).map_err(Into::into),
        Command::Check(arguments) => check::run(&arguments).map_err(Into::into),
        Command::Compare(arguments) => compare::run(&arguments).map_err(Into::into),
        Command::Catalogue(arguments) => catalogue::run(&arguments),
        Command::Codes(arguments) => codes::run(&arguments),
        Command::Schema => schema::run(),
        Command::ReaderProcess => reader_process::run(),
    };
    match outcome {
        Ok(exit) => exit,
        Err(fault) if is_broken_pipe(fault.as_ref()) => ExitCode::SUCCESS,
        Err(fault) => {
            // The last words: if stderr is gone as well, the exit code remains.
            let _ = writeln!(io::stderr(), "emberline: {}", error_chain(fault.as_ref()));
            ExitCode::from(EXIT_WRONG_USE)
        }
    }
}

fn print_refusal(refusal: &clap::Error) -> ExitCode {
    let _ = refusal.print();
    if refusal.use_stderr() { ExitCode::from(EXIT_WRONG_USE) } else { ExitCode::SUCCESS }
}

/// Logs to stderr; `EMBERLINE_LOG` sets what is shown (default: warnings).
fn start_log() {
    use tracing_subscriber::EnvFilter;
    let filter = EnvFilter::try_from_env("EMBERLINE_LOG").unwrap_or_else(|_| EnvFilter::new("warn"));
    // A second start (tests calling `run` twice) keeps the first logger.
    let log = tracing_subscriber::fmt().with_env_filter(filter).with_writer(io::stderr);
    let _ = log.with_ansi(io::stderr().is_terminal()).try_init();
}

/// Whether the reader of our stdout went away (`emberline codes | head`): not a failure.
fn is_broken_pipe(fault: &(dyn Error + 'static)) -> bool {
    fault.downcast_ref::<io::Error>().is_some_and(|error| error.kind() == io::ErrorKind::BrokenPipe)
}
