//! `emberline watch`: the daemon.

use std::path::PathBuf;
use std::process::ExitCode;
use std::sync::Arc;
use std::time::SystemTime;

use clap::Args;

use super::progress;
use crate::service::analyst::AnalystFactory;
use crate::service::config::Config;
use crate::service::daemon::{Command, Daemon, Options, StartError};
use crate::service::{logging, signals};

/// Watch folders and fit every spectrum that arrives.
#[derive(Debug, Args)]
pub struct WatchArgs {
    /// Configuration [default: config/emberline.toml, then /etc/emberline/emberline.toml].
    #[arg(long, value_name = "FILE")]
    pub config: Option<PathBuf>,
    /// Do what is there, then stop (exit 3 if some files are left for a later try).
    #[arg(long)]
    pub drain: bool,
}

/// Runs the daemon until it is told to stop.
///
/// # Errors
/// It cannot start.
pub fn run(args: &WatchArgs, analysts: AnalystFactory) -> Result<ExitCode, StartError> {
    run_daemon(args, analysts, false)
}

/// Runs a daemon in this process; `retry_failed` queues rejected and given-up files once more.
pub(super) fn run_daemon(
    args: &WatchArgs,
    analysts: AnalystFactory,
    retry_failed: bool,
) -> Result<ExitCode, StartError> {
    let (_, config) = Config::read(args.config.as_deref())?;
    let log = logging::start(&config.log);
    let place = args.config.clone();
    let options = Options {
        config: Box::new(move || Ok(Config::read(place.as_deref())?.1)),
        analysts,
        clock: Arc::new(SystemTime::now),
        is_drain: args.drain,
        log: Some(log),
    };
    let catching = |source| StartError::System { attempted: "catching signals".to_owned(), source };
    let caught = signals::catch().map_err(catching)?;
    let (daemon, commands) = Daemon::start(options)?;
    if retry_failed {
        // The daemon listens to its commands before it asks itself whether something is left to do.
        let _ = commands.send(Command::Reload { failed: true, reply: None });
    }
    caught.forward(commands).map_err(catching)?;
    let ending = if args.drain {
        progress::run_daemon(daemon, &progress::bar(0, "draining", "files"))
    } else {
        daemon.run()
    };
    Ok(ExitCode::from(ending.exit_code))
}
