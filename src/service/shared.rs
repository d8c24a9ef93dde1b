//! What the parts of the daemon share: settings that a reload swaps, the ledger, the clock, and the
//! state that `status` tells.
//!
//! Locks are taken one at a time and never across an analysis. The ledger's lock is also what waiting
//! workers sleep on, so a job queued under it cannot be missed.

use std::collections::BTreeMap;
use std::path::Path;
use std::sync::atomic::{AtomicBool, AtomicU64, Ordering};
use std::sync::mpsc::Sender;
use std::sync::{Arc, Condvar, Mutex, MutexGuard, PoisonError, RwLock};
use std::time::{Duration, Instant, SystemTime, UNIX_EPOCH};

use serde::{Deserialize, Serialize};

use crate::archive::catalogue::{Catalogue, CatalogueError};
use crate::archive::ledger::{Job, JobCounts, Ledger, LedgerError, Recorded, Signature, Trouble};
use crate::codes;
use crate::report::error_chain;
use crate::service::analyst::{Analyst, Fault};
use crate::service::config::Config;
use crate::service::daemon::Command;
use crate::service::logging::printable;

/// Tells the time of day; tests bring their own.
pub type Clock = Arc<dyn Fn() -> SystemTime + Send + Sync>;

/// One configuration in force, with the analyst made for it.
pub struct Settings {
    /// The configuration.
    pub config: Config,
    /// The science under that configuration.
    pub analyst: Arc<dyn Analyst>,
    /// The analyst's fingerprint.
    pub fingerprint: String,
}

/// What `emberline status` tells.
#[derive(Debug, Clone, Serialize, Deserialize)]
pub struct Status {
    /// Version of the program.
    pub version: String,
    /// Process number of the daemon.
    pub pid: u32,
    /// Seconds since the start.
    pub uptime_s: f64,
    /// `starting`, `watching` or `stopping`.
    pub phase: String,
    /// Fingerprint in force.
    pub fingerprint: String,
    /// What became of the last reload, empty when there was none.
    pub last_reload: String,
    /// Jobs under the fingerprint in force.
    pub jobs: JobCounts,
    /// Rejected and given-up jobs by code.
    pub faults: BTreeMap<String, u64>,
    /// Jobs ended since the start.
    pub ended_since_start: u64,
    /// Of those, re-fits that were not needed: the earlier answer holds.
    pub unchanged_since_start: u64,
    /// The fitting threads.
    pub workers: WorkerCounts,
    /// The watched folders.
    pub inbox: InboxStatus,
    /// The last jobs that went wrong.
    pub last_troubles: Vec<Trouble>,
}

/// Numbers of fitting threads.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize)]
pub struct WorkerCounts {
    /// In the pool.
    pub threads: usize,
    /// Of those, at work.
    pub busy: usize,
    /// Given up since the start.
    pub abandoned: usize,
}

/// State of the inbox.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
pub struct InboxStatus {
    /// Each watched folder, how it is watched and how it is.
    pub folders: Vec<FolderStatus>,
    /// Files that are there but not yet known to be whole.
    pub not_yet_whole: usize,
    /// Files left alone, by reason, each once since the last full scan.
    pub left_alone: BTreeMap<String, u64>,
    /// Full scans finished.
    pub full_scans: u64,
    /// Times that events were lost, each followed by a full scan.
    pub lost_events: u64,
    /// Whether a full scan is done and nothing is under way.
    pub is_settled: bool,
}

/// State of a watched folder.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct FolderStatus {
    /// Its path.
    pub path: String,
    /// `events`, `polling` or `missing`.
    pub mode: String,
}

/// The shared state.
pub struct Shared {
    settings: RwLock<Arc<Settings>>,
    ledger: Mutex<Ledger>,
    catalogue: Mutex<Catalogue>,
    /// Told whenever a job may have become claimable, and at the stop.
    work: Condvar,
    clock: Clock,
    started: Instant,
    is_stopping: AtomicBool,
    ended_since_start: AtomicU64,
    unchanged_since_start: AtomicU64,
    last_arrival: AtomicU64,
    inbox_beat_ms: AtomicU64,
    commands: Sender<Command>,
    moves: Mutex<()>,
    inbox: Mutex<InboxStatus>,
    workers: Mutex<WorkerCounts>,
    last_reload: Mutex<String>,
}

/// A lock whose holder panicked still guards usable data here: every critical section leaves its data
/// whole at each step, and the ledger rolls back by itself.
pub(super) fn lock<T>(mutex: &Mutex<T>) -> MutexGuard<'_, T> {
    mutex.lock().unwrap_or_else(PoisonError::into_inner)
}

impl Shared {
    /// Gathers the parts.
    ///
    /// # Errors
    /// The ledger cannot be read.
    pub fn new(
        settings: Settings,
        ledger: Ledger,
        catalogue: Catalogue,
        clock: Clock,
        commands: Sender<Command>,
    ) -> Result<Shared, LedgerError> {
        Ok(Shared {
            last_arrival: AtomicU64::new(ledger.last_arrival()?),
            settings: RwLock::new(Arc::new(settings)),
            ledger: Mutex::new(ledger),
            catalogue: Mutex::new(catalogue),
            work: Condvar::new(),
            clock,
            started: Instant::now(),
            is_stopping: AtomicBool::new(false),
            ended_since_start: AtomicU64::new(0),
            unchanged_since_start: AtomicU64::new(0),
            inbox_beat_ms: AtomicU64::new(0),
            commands,
            moves: Mutex::default(),
            inbox: Mutex::default(),
            workers: Mutex::default(),
            last_reload: Mutex::default(),
        })
    }

    /// The next number in the order of arrival.
    pub fn next_arrival(&self) -> u64 {
        self.last_arrival.fetch_add(1, Ordering::Relaxed) + 1
    }

    /// The settings in force.
    pub fn settings(&self) -> Arc<Settings> {
        self.settings.read().unwrap_or_else(PoisonError::into_inner).clone()
    }

    /// Puts other settings in force, between jobs.
    pub fn replace_settings(&self, settings: Settings) {
        *self.settings.write().unwrap_or_else(PoisonError::into_inner) = Arc::new(settings);
        self.work.notify_all();
    }

    /// Seconds since 1970.
    pub fn now_s(&self) -> f64 {
        (self.clock)().duration_since(UNIX_EPOCH).map_or(0.0, |since| since.as_secs_f64())
    }

    /// Time since the start, immune to the clock.
    pub fn uptime(&self) -> Duration {
        self.started.elapsed()
    }

    /// Works on the ledger; a failure of it is a reason to stop.
    ///
    /// # Errors
    /// The ledger cannot be used.
    pub fn with_ledger<T>(
        &self,
        action: impl FnOnce(&mut Ledger) -> Result<T, LedgerError>,
    ) -> Result<T, Fault> {
        action(&mut lock(&self.ledger)).map_err(ledger_fault)
    }

    /// Works on the catalogue; a failure of it is a reason to stop.
    ///
    /// # Errors
    /// The catalogue cannot be used.
    pub fn with_catalogue<T>(
        &self,
        action: impl FnOnce(&mut Catalogue) -> Result<T, CatalogueError>,
    ) -> Result<T, Fault> {
        let fault = |error: CatalogueError| Fault::stop(&codes::SERVICE_CATALOGUE, error_chain(&error));
        action(&mut lock(&self.catalogue)).map_err(fault)
    }

    /// Whether the file is recorded and has its job.
    ///
    /// # Errors
    /// The ledger cannot be used.
    pub fn is_known(&self, path: &Path, signature: &Signature) -> Result<bool, Fault> {
        let fingerprint = self.settings().fingerprint.clone();
        self.with_ledger(|ledger| ledger.is_known(path, signature, &fingerprint))
    }

    /// Records a whole file and wakes a worker if that made a job.
    ///
    /// # Errors
    /// The ledger cannot be used.
    pub fn record_file(
        &self,
        path: &Path,
        signature: &Signature,
        blake3: &str,
        arrival: u64,
    ) -> Result<(), Fault> {
        let now_s = self.now_s();
        // The fingerprint is read under the ledger's lock, where a reload also queues what is stale:
        // a file is either recorded before and found stale, or recorded under the new one.
        let recorded = self.with_ledger(|ledger| {
            let fingerprint = self.settings().fingerprint.clone();
            ledger.record_file(path, signature, blake3, &fingerprint, arrival, now_s)
        })?;
        if recorded == Recorded::Queued {
            tracing::debug!(path = %printable(path), blake3, "queued");
            self.work.notify_one();
        }
        Ok(())
    }

    /// Waits for a job. `None` means that it is time to end: the daemon stops, or `may_go_on` says no.
    ///
    /// # Errors
    /// The ledger cannot be used.
    pub fn next_job(&self, may_go_on: impl Fn() -> bool) -> Result<Option<(Arc<Settings>, Job)>, Fault> {
        /// Longest sleep: a clock that is set, or a pool that shrinks, is noticed after this.
        const NAP: Duration = Duration::from_secs(1);
        let mut ledger = lock(&self.ledger);
        loop {
            if self.is_stopping() || !may_go_on() {
                return Ok(None);
            }
            let settings = self.settings();
            let (now_s, max_delay_s) = (self.now_s(), settings.config.retry.max_delay_s);
            let claimed = ledger.claim(&settings.fingerprint, now_s, max_delay_s).map_err(ledger_fault)?;
            if let Some(job) = claimed {
                return Ok(Some((settings, job)));
            }
            let due_in_s =
                ledger.next_due_in_s(&settings.fingerprint, now_s, max_delay_s).map_err(ledger_fault)?;
            let nap = due_in_s.map_or(NAP, |s| Duration::from_secs_f64(s.clamp(0.001, NAP.as_secs_f64())));
            ledger = self.work.wait_timeout(ledger, nap).unwrap_or_else(PoisonError::into_inner).0;
        }
    }

    /// Wakes all workers, so that they look at the queue or at the stop.
    pub fn wake_workers(&self) {
        // Under the lock: a worker between its look and its sleep must not miss this.
        let _ledger = lock(&self.ledger);
        self.work.notify_all();
    }

    /// No further job is begun.
    pub fn stop(&self) {
        self.is_stopping.store(true, Ordering::Release);
        self.wake_workers();
    }

    /// Whether the stop has begun.
    pub fn is_stopping(&self) -> bool {
        self.is_stopping.load(Ordering::Acquire)
    }

    /// Asks the daemon for something.
    pub fn send(&self, command: Command) {
        // A daemon that no longer listens has ended, and so has the need.
        let _ = self.commands.send(command);
    }

    /// Notes the end of a job.
    pub fn note_ended(&self) {
        self.ended_since_start.fetch_add(1, Ordering::Relaxed);
    }

    /// Notes that a re-fit was not needed.
    pub fn note_unchanged(&self) {
        self.unchanged_since_start.fetch_add(1, Ordering::Relaxed);
    }

    /// The intake lives.
    pub fn beat_inbox(&self) {
        self.inbox_beat_ms.store(self.uptime().as_millis() as u64, Ordering::Relaxed);
    }

    /// Time since the intake last said that it lives.
    pub fn inbox_silence(&self) -> Duration {
        self.uptime().saturating_sub(Duration::from_millis(self.inbox_beat_ms.load(Ordering::Relaxed)))
    }

    /// Held while originals are moved. Never taken with the ledger's lock held.
    pub fn lock_moves(&self) -> MutexGuard<'_, ()> {
        lock(&self.moves)
    }

    /// Changes the inbox's state.
    pub fn update_inbox(&self, update: impl FnOnce(&mut InboxStatus)) {
        update(&mut lock(&self.inbox));
    }

    /// The inbox's state.
    pub fn inbox_status(&self) -> InboxStatus {
        lock(&self.inbox).clone()
    }

    /// Notes the numbers of threads.
    pub fn set_worker_counts(&self, counts: WorkerCounts) {
        *lock(&self.workers) = counts;
    }

    /// Notes what became of a reload.
    pub fn note_reload(&self, text: String) {
        *lock(&self.last_reload) = text;
    }

    /// Everything that `status` tells.
    ///
    /// # Errors
    /// The ledger cannot be used.
    pub fn status(&self) -> Result<Status, Fault> {
        /// As many as fit on a screen beside the rest.
        const TROUBLES_TOLD: u32 = 10;
        let fingerprint = self.settings().fingerprint.clone();
        let (jobs, faults, last_troubles) = self.with_ledger(|ledger| {
            Ok((
                ledger.counts(&fingerprint)?,
                ledger.counts_by_code(&fingerprint)?,
                ledger.last_troubles(&fingerprint, TROUBLES_TOLD)?,
            ))
        })?;
        let inbox = self.inbox_status();
        let phase = match (self.is_stopping(), inbox.full_scans) {
            (true, _) => "stopping",
            (false, 0) => "starting",
            (false, _) => "watching",
        };
        Ok(Status {
            version: env!("CARGO_PKG_VERSION").to_owned(),
            pid: std::process::id(),
            uptime_s: self.uptime().as_secs_f64(),
            phase: phase.to_owned(),
            fingerprint,
            last_reload: lock(&self.last_reload).clone(),
            jobs,
            faults,
            ended_since_start: self.ended_since_start.load(Ordering::Relaxed),
            unchanged_since_start: self.unchanged_since_start.load(Ordering::Relaxed),
            workers: *lock(&self.workers),
            inbox,
            last_troubles,
        })
    }
}

fn ledger_fault(error: LedgerError) -> Fault {
    Fault::stop(&codes::SERVICE_LEDGER, error_chain(&error))
}
