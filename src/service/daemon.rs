//! Starting, supervising, reloading and stopping the daemon.
//!
//! [`Daemon::start`] makes everything ready and [`Daemon::run`] supervises until it is told to stop,
//! so that the caller owns the stop. The supervising loop is also what feeds systemd's watchdog:
//! pings stop when the loop hangs, when no fitting thread is left, and when the inbox is silent.

use std::io;
use std::path::Path;
use std::sync::Arc;
use std::sync::mpsc::{Receiver, RecvTimeoutError, Sender, channel};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};

use sd_notify::NotifyState;
use serde::{Deserialize, Serialize};

use crate::archive::catalogue::{Catalogue, CatalogueError};
use crate::archive::ledger::{Ledger, LedgerError};
use crate::codes;
use crate::service::analyst::{AnalystFactory, Fault};
use crate::service::config::{Config, ConfigError, seconds};
use crate::service::control;
use crate::service::file_system::is_on_network;
use crate::service::finished;
use crate::service::inbox::Inbox;
use crate::service::logging::LogHandle;
use crate::service::output::{self, ReportPlace};
use crate::service::shared::{Clock, Settings, Shared};
use crate::service::workers::{Pool, PoolHealth};

/// Time between two looks of the supervisor.
const TICK: Duration = Duration::from_millis(50);

/// Time between two lines of status to systemd.
const STATUS_PERIOD: Duration = Duration::from_secs(5);

/// So long may the inbox be silent: one read on a slow network folder may take minutes.
const INBOX_PATIENCE: Duration = Duration::from_secs(600);

/// Exit code after everything was done.
pub const EXIT_DONE: u8 = 0;
/// Exit code after giving up.
pub const EXIT_GAVE_UP: u8 = 1;
/// Exit code after a drain that left files to be tried again later.
pub const EXIT_LEFT_OVER: u8 = 3;

/// What the daemon can be told.
#[derive(Debug)]
pub enum Command {
    /// Finish what is in work, within the deadline, and end. Said twice: end now.
    Drain,
    /// Read the configuration again and queue what it makes stale.
    Reload {
        /// Whether rejected and given-up files are tried once more.
        failed: bool,
        /// Who wants to know what came of it.
        reply: Option<Sender<Result<ReloadReport, String>>>,
    },
    /// Some part found that going on is pointless.
    Fatal(Fault),
}

/// What a reload did.
#[derive(Debug, Clone, PartialEq, Eq, Serialize, Deserialize)]
pub struct ReloadReport {
    /// Fingerprint in force before.
    pub fingerprint_before: String,
    /// Fingerprint in force now.
    pub fingerprint: String,
    /// Jobs that became necessary.
    pub queued: usize,
}

/// The daemon could not start.
#[derive(Debug, thiserror::Error)]
pub enum StartError {
    /// The configuration is no good.
    #[error(transparent)]
    Config(#[from] ConfigError),
    /// The ledger cannot be used.
    #[error(transparent)]
    Ledger(#[from] LedgerError),
    /// The catalogue cannot be used.
    #[error(transparent)]
    Catalogue(#[from] CatalogueError),
    /// The science cannot be used, or something else makes going on pointless.
    #[error("cannot start")]
    Fault(#[from] Fault),
    /// The system refused something.
    #[error("cannot start: {attempted}")]
    System {
        /// What was attempted.
        attempted: String,
        /// Why it failed.
        source: io::Error,
    },
}

/// How the daemon ended.
#[derive(Debug)]
pub struct Ending {
    /// Exit code of the process.
    pub exit_code: u8,
    /// Why, when it gave up.
    pub fault: Option<Fault>,
}

/// Where the configuration comes from, at the start and at each reload.
pub type ConfigSource = Box<dyn Fn() -> Result<Config, ConfigError> + Send>;

/// How a daemon is run.
pub struct Options {
    /// Reads the configuration.
    pub config: ConfigSource,
    /// Makes the science for it.
    pub analysts: AnalystFactory,
    /// The time of day.
    pub clock: Clock,
    /// Stop when everything that is there is done.
    pub is_drain: bool,
    /// Changes the level of the log.
    pub log: Option<LogHandle>,
}

/// A started daemon.
pub struct Daemon {
    shared: Arc<Shared>,
    options: Options,
    commands: Receiver<Command>,
    pool: Pool,
    inbox: JoinHandle<()>,
}

impl Daemon {
    /// Makes everything ready and begins to work; returns the daemon and the way to tell it things.
    ///
    /// # Errors
    /// The configuration, ledger, science, output or socket cannot be used.
    pub fn start(options: Options) -> Result<(Daemon, Sender<Command>), StartError> {
        let config = (options.config)()?;
        config.check_for_daemon()?;
        let system = |attempted: String| move |source| StartError::System { attempted, source };
        let reports = config.output.reports.clone();
        output::check_writable(&reports).map_err(system(format!("writing to {}", reports.display())))?;
        if let Some(folder) = config.output.ledger.parent() {
            std::fs::create_dir_all(folder).map_err(system(format!("making {}", folder.display())))?;
            if is_on_network(folder) {
                tracing::warn!(
                    folder = %folder.display(),
                    "the ledger is on a network file system, where SQLite may lose it (put output.ledger on a local one)"
                );
            }
        }
        let mut ledger = Ledger::open(&config.output.ledger)?;
        let analyst = (options.analysts)(&config)?;
        let fingerprint = analyst.fingerprint();

        let (sender, commands) = channel();
        let now_s =
            (options.clock)().duration_since(std::time::UNIX_EPOCH).map_or(0.0, |since| since.as_secs_f64());
        let max_interruptions = config.retry.interruptions;
        let (resumed, given_up) = ledger.recover(max_interruptions, codes::SERVICE_INTERRUPTED.id, now_s)?;
        finished::resume(&mut ledger)?;
        let stale = ledger.queue_stale(&fingerprint, now_s)?;
        let mut catalogue = Catalogue::open(&config.catalogue_path())?;
        mend_pointers(&ledger, &mut catalogue, &reports, &fingerprint)?;
        tracing::info!(resumed, given_up, stale, fingerprint, "ledger opened");

        let socket = config.socket_path();
        let threads = config.workers.thread_count();
        let shared = Arc::new(Shared::new(
            Settings { config, analyst, fingerprint },
            ledger,
            catalogue,
            options.clock.clone(),
            sender.clone(),
        )?);
        control::serve(&socket, shared.clone())
            .map_err(system(format!("opening the socket {}", socket.display())))?;
        let mut pool = Pool::new(shared.clone());
        pool.resize(threads).map_err(system("starting fitting threads".to_owned()))?;
        let inbox = spawn_inbox(shared.clone()).map_err(system("starting the inbox".to_owned()))?;
        Ok((Daemon { shared, options, commands, pool, inbox }, sender))
    }

    /// The shared state, for tests and status pages.
    pub fn shared(&self) -> Arc<Shared> {
        self.shared.clone()
    }

    /// Supervises until the end.
    pub fn run(mut self) -> Ending {
        notify_systemd(&[NotifyState::Ready]);
        tracing::info!("watching");
        let mut fault = None;
        let mut has_left_over = false;
        let mut stop_by: Option<Instant> = None;
        let mut unwell_since: Option<Instant> = None;
        let watchdog_period = sd_notify::watchdog_enabled().map(|period| period / 3);
        let mut next_ping = Instant::now();
        let mut next_status = Instant::now();
        loop {
            match self.commands.recv_timeout(TICK) {
                Ok(Command::Drain) if stop_by.is_some() => stop_by = Some(Instant::now()),
                Ok(Command::Drain) => stop_by = Some(self.begin_stop()),
                Ok(Command::Fatal(found)) => {
                    tracing::error!("cannot go on: {found}");
                    fault.get_or_insert(found);
                    stop_by.get_or_insert_with(|| self.begin_stop());
                }
                Ok(Command::Reload { failed, reply }) => {
                    let outcome = match stop_by {
                        None => self.reload(failed),
                        Some(_) => Err("the daemon is stopping".to_owned()),
                    };
                    if let Some(reply) = reply {
                        // Whoever asked may have gone.
                        let _ = reply.send(outcome);
                    }
                }
                Err(RecvTimeoutError::Timeout | RecvTimeoutError::Disconnected) => {}
            }
            let is_well = match self.pool.supervise() {
                Ok(PoolHealth::Working) => self.shared.inbox_silence() < INBOX_PATIENCE,
                Ok(PoolHealth::Exhausted) => false,
                Ok(PoolHealth::CannotWrite) => {
                    self.shared.send(Command::Fatal(Fault::stop(
                        &codes::SERVICE_OUTPUT,
                        "a report has not got to disk for minutes",
                    )));
                    false
                }
                Err(found) => {
                    self.shared.send(Command::Fatal(found));
                    true
                }
            };
            if is_well {
                unwell_since = None;
            }
            match (stop_by, is_well) {
                (Some(_), _) if self.pool.has_ended() && self.inbox.is_finished() => {
                    self.pool.join();
                    break;
                }
                (Some(deadline), _) if Instant::now() >= deadline => {
                    let given_back = self.pool.give_back_jobs().unwrap_or(0);
                    tracing::error!(given_back, "the deadline has passed, giving up");
                    return self.end(Ending { exit_code: EXIT_GAVE_UP, fault });
                }
                (None, false) => {
                    // systemd's watchdog acts first where there is one; elsewhere this does.
                    let since = *unwell_since.get_or_insert_with(Instant::now);
                    if since.elapsed() > seconds(self.shared.settings().config.service.drain_deadline_s) {
                        let detail = "every fitting thread was given up, or the inbox hangs";
                        self.shared.send(Command::Fatal(Fault::stop(&codes::SERVICE_NO_WORKERS, detail)));
                    }
                }
                _ => {}
            }
            if let Some(period) = watchdog_period
                && is_well
                && Instant::now() >= next_ping
            {
                next_ping = Instant::now() + period;
                notify_systemd(&[NotifyState::Watchdog]);
            }
            if Instant::now() >= next_status {
                next_status = Instant::now() + STATUS_PERIOD;
                self.tell_systemd();
            }
            if self.options.is_drain && stop_by.is_none() {
                match self.left_to_do() {
                    Ok(LeftToDo::Something) => {}
                    Ok(LeftToDo::OnlyLater) => {
                        has_left_over = true;
                        stop_by = Some(self.begin_stop());
                    }
                    Ok(LeftToDo::Nothing) => stop_by = Some(self.begin_stop()),
                    Err(found) => self.shared.send(Command::Fatal(found)),
                }
            }
        }
        let exit_code = match (&fault, has_left_over) {
            (Some(_), _) => EXIT_GAVE_UP,
            (None, true) => EXIT_LEFT_OVER,
            (None, false) => EXIT_DONE,
        };
        self.end(Ending { exit_code, fault })
    }

    fn end(&self, ending: Ending) -> Ending {
        // A socket without a daemon would make `status` wait instead of saying that none runs.
        let _ = std::fs::remove_file(self.shared.settings().config.socket_path());
        tracing::info!(exit_code = ending.exit_code, "stopped");
        ending
    }

    fn begin_stop(&self) -> Instant {
        notify_systemd(&[NotifyState::Stopping]);
        tracing::info!("stopping: no further job is begun");
        self.shared.stop();
        Instant::now() + seconds(self.shared.settings().config.service.drain_deadline_s)
    }

    fn reload(&mut self, failed: bool) -> Result<ReloadReport, String> {
        let mut states = vec![NotifyState::Reloading];
        states.extend(NotifyState::monotonic_usec_now());
        notify_systemd(&states);
        let outcome = self.try_reload(failed);
        match &outcome {
            Ok(report) => {
                tracing::info!(queued = report.queued, fingerprint = report.fingerprint, "reloaded");
                self.shared.note_reload(format!("taken over, {} queued", report.queued));
            }
            Err(refusal) => {
                tracing::error!("reload refused, the old configuration keeps running: {refusal}");
                self.shared.note_reload(format!("refused: {refusal}"));
            }
        }
        notify_systemd(&[NotifyState::Ready]);
        outcome
    }

    fn try_reload(&mut self, failed: bool) -> Result<ReloadReport, String> {
        let config = (self.options.config)().map_err(|error| chain(&error))?;
        config.check_for_daemon().map_err(|error| chain(&error))?;
        let before = self.shared.settings();
        check_needs_no_restart(&before.config, &config)?;
        let analyst = (self.options.analysts)(&config).map_err(|fault| fault.to_string())?;
        let fingerprint = analyst.fingerprint();
        if let Some(log) = &self.options.log {
            log.set_level(&config.log.level);
        }
        let threads = config.workers.thread_count();
        let reports = config.output.reports.clone();
        let now_s = self.shared.now_s();
        let shared = self.shared.clone();
        let queued = shared
            .with_ledger(|ledger| {
                shared.replace_settings(Settings { config, analyst, fingerprint: fingerprint.clone() });
                let mut queued = ledger.queue_stale(&fingerprint, now_s)?;
                if failed {
                    queued += ledger.queue_failed(&fingerprint)?;
                }
                Ok(queued)
            })
            .map_err(|fault| fault.to_string())?;
        if fingerprint != before.fingerprint {
            shared
                .with_ledger(|ledger| {
                    Ok(shared.with_catalogue(|catalogue| {
                        Ok(mend_pointers(ledger, catalogue, &reports, &fingerprint))
                    }))
                })
                .and_then(|outcome| outcome)
                .map_err(|fault| fault.to_string())?
                .map_err(|error| chain(&error))?;
        }
        // Also wakes the workers.
        self.pool.resize(threads).map_err(|error| error.to_string())?;
        Ok(ReloadReport { fingerprint_before: before.fingerprint.clone(), fingerprint, queued })
    }

    fn tell_systemd(&self) {
        if let Ok(status) = self.shared.status() {
            let jobs = status.jobs;
            let line = format!(
                "{} new and {} to refit waiting, {} in work, {} done, {} rejected, {} given up",
                jobs.queued_new, jobs.queued_refit, jobs.running, jobs.done, jobs.rejected, jobs.failed
            );
            notify_systemd(&[NotifyState::Status(&line)]);
        }
    }

    fn left_to_do(&self) -> Result<LeftToDo, Fault> {
        // The inbox first: what it records after this look was not there at its scan.
        if !self.shared.inbox_status().is_settled {
            return Ok(LeftToDo::Something);
        }
        let settings = self.shared.settings();
        let (now_s, max_delay_s) = (self.shared.now_s(), settings.config.retry.max_delay_s);
        self.shared.with_ledger(|ledger| {
            if ledger.counts(&settings.fingerprint)?.running > 0 {
                return Ok(LeftToDo::Something);
            }
            Ok(match ledger.next_due_in_s(&settings.fingerprint, now_s, max_delay_s)? {
                None => LeftToDo::Nothing,
                Some(due_in_s) if due_in_s > 0.0 => LeftToDo::OnlyLater,
                Some(_) => LeftToDo::Something,
            })
        })
    }
}

enum LeftToDo {
    Something,
    OnlyLater,
    Nothing,
}

fn spawn_inbox(shared: Arc<Shared>) -> io::Result<JoinHandle<()>> {
    std::thread::Builder::new().name("inbox".to_owned()).spawn(move || {
        let outcome =
            std::panic::catch_unwind(std::panic::AssertUnwindSafe(|| Inbox::new(shared.clone()).run()));
        let fault = match outcome {
            Ok(Ok(())) => return,
            Ok(Err(fault)) => fault,
            Err(_) => Fault::stop(&codes::INTERNAL, "the inbox broke one of its own invariants"),
        };
        shared.send(Command::Fatal(fault));
    })
}

fn check_needs_no_restart(before: &Config, after: &Config) -> Result<(), String> {
    let same = [
        ("output.reports", before.output.reports == after.output.reports),
        ("output.ledger", before.output.ledger == after.output.ledger),
        ("output.catalogue", before.output.catalogue == after.output.catalogue),
        ("service.socket", before.service.socket == after.service.socket),
        ("log.destination", before.log.destination == after.log.destination),
        ("log.format", before.log.format == after.log.format),
    ];
    match same.iter().find(|(_, is_same)| !is_same) {
        None => Ok(()),
        Some((key, _)) => Err(format!("cannot take over `{key}` while running (restart the daemon)")),
    }
}

/// Makes every pointer lead to the report that is in force under this fingerprint, and the catalogue agree: rows
/// that a crash or a lost catalogue left out are put in from the reports.
fn mend_pointers(
    ledger: &Ledger,
    catalogue: &mut Catalogue,
    reports: &Path,
    fingerprint: &str,
) -> Result<(), StartError> {
    let system = |source| StartError::System { attempted: "setting pointers to reports".to_owned(), source };
    for (report, pointer) in ledger.reports_in_force(fingerprint)? {
        if catalogue.standing(&report)? != Some(true)
            && let Ok(row) = output::catalogue_row(reports, &report, &pointer, true)
        {
            // A report that is gone from the disk is the next scan's business.
            catalogue.put(&[row])?;
        }
        output::point(reports, &ReportPlace { report, pointer }).map_err(system)?;
    }
    for pointer in ledger.foreign_pointers(fingerprint)? {
        output::retire(reports, &pointer).map_err(system)?;
        catalogue.retire(&pointer)?;
    }
    Ok(())
}

/// An error and its causes in one line.
pub fn chain(error: &dyn std::error::Error) -> String {
    let mut text = error.to_string();
    let mut source = error.source();
    while let Some(cause) = source {
        text.push_str(": ");
        text.push_str(cause.to_string().trim_end());
        source = cause.source();
    }
    text
}

fn notify_systemd(states: &[NotifyState<'_>]) {
    if let Err(error) = sd_notify::notify(states) {
        tracing::debug!(%error, "cannot tell systemd");
    }
}
