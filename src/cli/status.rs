//! `emberline status`: asks the running daemon how it is.

use std::fmt::Write as _;
use std::io::{self, Write as _};
use std::path::PathBuf;
use std::process::ExitCode;

use clap::Args;

use crate::codes;
use crate::service::config::{Config, ConfigError};
use crate::service::control::{self, Answer, Question};
use crate::service::shared::Status;

/// Ask the running daemon how it is.
#[derive(Debug, Args)]
pub struct StatusArgs {
    /// Configuration of the daemon [default: config/emberline.toml, then /etc/emberline/emberline.toml].
    #[arg(long, value_name = "FILE")]
    pub config: Option<PathBuf>,
    /// Print JSON.
    #[arg(long)]
    pub json: bool,
}

/// A running daemon could not be asked.
#[derive(Debug, thiserror::Error)]
pub enum AskError {
    /// The configuration is no good.
    #[error(transparent)]
    Config(#[from] ConfigError),
    /// Nobody answers.
    #[error("cannot ask a daemon at {}: none answers (start it with `emberline watch`)", socket.display())]
    NoDaemon {
        /// Where it was looked for.
        socket: PathBuf,
        /// Why not.
        source: io::Error,
    },
    /// The daemon refused.
    #[error("the daemon refused: {0}")]
    Refused(String),
    /// The answer could not be printed.
    #[error("cannot print")]
    Print(#[from] io::Error),
}

/// Asks one question.
pub(super) fn ask(config: &Config, question: Question) -> Result<Answer, AskError> {
    let socket = config.socket_path();
    match control::ask(&socket, question) {
        Ok(Answer::Refused(refusal)) => Err(AskError::Refused(refusal)),
        Ok(answer) => Ok(answer),
        Err(source) => Err(AskError::NoDaemon { socket, source }),
    }
}

pub(super) fn ask_status(config: &Config) -> Result<Status, AskError> {
    match ask(config, Question::Status)? {
        Answer::Status(status) => Ok(*status),
        other => Err(AskError::Refused(format!("unexpected answer {other:?}"))),
    }
}

/// Prints the status.
///
/// # Errors
/// No daemon answers, or standard output cannot be written.
pub fn run(args: &StatusArgs) -> Result<ExitCode, AskError> {
    let (_, config) = Config::read(args.config.as_deref())?;
    let status = ask_status(&config)?;
    let text = if args.json {
        serde_json::to_string(&status).map_err(io::Error::from)? + "\n"
    } else {
        render(&status)
    };
    io::stdout().lock().write_all(text.as_bytes())?;
    Ok(ExitCode::SUCCESS)
}

/// The status as lines for people.
pub fn render(status: &Status) -> String {
    let mut text = String::new();
    let jobs = &status.jobs;
    // Writing to a String cannot fail.
    let _ = writeln!(
        text,
        "emberline {} (process {}), {} for {:.0} s, configuration {:.16}",
        status.version, status.pid, status.phase, status.uptime_s, status.fingerprint
    );
    let _ = writeln!(
        text,
        "jobs      {} new, {} to refit ({} of them for another try), {} in work",
        jobs.queued_new, jobs.queued_refit, jobs.waiting_for_retry, jobs.running
    );
    let _ = writeln!(
        text,
        "ended     {} done, {} rejected, {} given up, {} gone; {} since the start ({} kept their answer)",
        jobs.done,
        jobs.rejected,
        jobs.failed,
        jobs.gone,
        status.ended_since_start,
        status.unchanged_since_start
    );
    let workers = status.workers;
    let _ = writeln!(
        text,
        "threads   {} of {} at work, {} given up",
        workers.busy, workers.threads, workers.abandoned
    );
    for folder in &status.inbox.folders {
        let _ = writeln!(text, "folder    {} ({})", folder.path, folder.mode);
    }
    let _ = writeln!(
        text,
        "inbox     {} not yet whole, {} full scans, events lost {} times",
        status.inbox.not_yet_whole, status.inbox.full_scans, status.inbox.lost_events
    );
    for (reason, count) in &status.inbox.left_alone {
        let _ = writeln!(text, "left      {count} {reason}");
    }
    if !status.last_reload.is_empty() {
        let _ = writeln!(text, "reload    {}", status.last_reload);
    }
    for (code, count) in &status.faults {
        let remedy = codes::find(code).map_or("", |code| code.remedy);
        let _ = writeln!(text, "fault     {count} {code}: {remedy}");
    }
    for trouble in &status.last_troubles {
        let _ = writeln!(text, "{:<9} {}: {}: {}", trouble.state, trouble.path, trouble.code, trouble.detail);
    }
    text
}
