//! `emberline refit`: takes over a changed configuration and fits again what it makes stale.

use std::path::PathBuf;
use std::process::ExitCode;
use std::time::Duration;

use clap::Args;

use super::progress;
use super::status::{AskError, ask, ask_status};
use super::watch::{WatchArgs, run_daemon};
use crate::service::analyst::AnalystFactory;
use crate::service::config::Config;
use crate::service::control::{Answer, Question};
use crate::service::daemon::StartError;

/// Time between two looks at the daemon's progress.
const LOOK_PERIOD: Duration = Duration::from_millis(250);

/// Have the configuration read again and everything fitted again that it makes stale.
#[derive(Debug, Args)]
pub struct RefitArgs {
    /// Configuration of the daemon [default: config/emberline.toml, then /etc/emberline/emberline.toml].
    #[arg(long, value_name = "FILE")]
    pub config: Option<PathBuf>,
    /// Also try rejected and given-up files once more.
    #[arg(long)]
    pub failed: bool,
    /// Return when the work is queued, do not wait for it.
    #[arg(long)]
    pub no_wait: bool,
}

/// The refit could not be asked for or done.
#[derive(Debug, thiserror::Error)]
pub enum RefitError {
    /// The running daemon could not be asked.
    #[error(transparent)]
    Ask(#[from] AskError),
    /// No daemon runs, and one could not be started here.
    #[error(transparent)]
    Start(#[from] StartError),
}

/// Asks the running daemon, and shows its progress. Without one the work is done in this process, which
/// at its start finds what is stale anyway.
///
/// # Errors
/// The daemon refuses the configuration or stops answering, or none runs and none can be started.
pub fn run(args: &RefitArgs, analysts: AnalystFactory) -> Result<ExitCode, RefitError> {
    let (_, config) = Config::read(args.config.as_deref()).map_err(AskError::Config)?;
    let report = match ask(&config, Question::Refit { failed: args.failed }) {
        Ok(Answer::Refit(report)) => report,
        Ok(other) => return Err(AskError::Refused(format!("unexpected answer {other:?}")).into()),
        Err(AskError::NoDaemon { .. }) => {
            let watch = WatchArgs { config: args.config.clone(), drain: true };
            return Ok(run_daemon(&watch, analysts, args.failed)?);
        }
        Err(error) => return Err(error.into()),
    };
    let bar = progress::bar(report.queued as u64, "refitting", "files");
    bar.set_message(format!("refit {:.8} -> {:.8}", report.fingerprint_before, report.fingerprint));
    if !args.no_wait {
        loop {
            let jobs = ask_status(&config)?.jobs;
            let left = jobs.queued_new + jobs.queued_refit + jobs.running;
            // New files join the queue meanwhile and go first, so the total may grow.
            bar.set_length(bar.length().unwrap_or(0).max(left));
            bar.set_position(bar.length().unwrap_or(0) - left);
            // What waits for another try may wait for an hour.
            if left <= jobs.waiting_for_retry && jobs.running == 0 {
                break;
            }
            std::thread::sleep(LOOK_PERIOD);
        }
    }
    bar.finish();
    Ok(ExitCode::SUCCESS)
}
