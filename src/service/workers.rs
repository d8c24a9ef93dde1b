//! The fitting threads: a fixed pool that claims jobs from the ledger, has them analysed, and puts
//! the reports on disk.
//!
//! A panic costs its file, a hang costs its file and a thread: past the time limit the thread is given
//! up (it cannot be killed) and replaced, so many times. A given-up thread that comes back finds that
//! it may no longer write. Threads claim only when they are free, so nothing queues up in memory.

use std::collections::HashMap;
use std::fs;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::path::Path;
use std::sync::atomic::{AtomicBool, Ordering};
use std::sync::{Arc, Mutex};
use std::thread::JoinHandle;
use std::time::{Duration, Instant};

use crate::archive::column;
use crate::archive::ledger::{DocumentRecord, Job, Signature};
use crate::codes::{self, Flag};
use crate::report::{Findings, Provenance, Report};
use crate::service::analyst::{Disposition, Document, Fault};
use crate::service::daemon::Command;
use crate::service::finished;
use crate::service::logging::printable;
use crate::service::output::{self, ReportPlace};
use crate::service::shared::{Settings, Shared, WorkerCounts, lock};
use crate::spectrum::{ObjectRecord, SourceRecord};

/// Longest time that reports may take to get to disk before the disk counts as broken.
const WRITE_LIMIT: Duration = Duration::from_secs(120);

/// What a thread is at.
enum State {
    Idle,
    Analysing {
        job: Job,
        settings: Arc<Settings>,
        since: Instant,
    },
    Writing {
        since: Instant,
    },
    /// Its job was taken from it.
    Abandoned,
    Ended,
}

struct Slot {
    state: Mutex<State>,
    is_surplus: AtomicBool,
    thread: Mutex<Option<JoinHandle<()>>>,
}

/// The pool, looked after by the daemon's supervising thread.
pub struct Pool {
    shared: Arc<Shared>,
    slots: Vec<Arc<Slot>>,
    abandoned: usize,
    made: usize,
}

/// What the supervisor found.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum PoolHealth {
    /// Some thread is free, or at work within its limits.
    Working,
    /// No thread is left: all were given up, and no more are replaced.
    Exhausted,
    /// Reports do not get to disk.
    CannotWrite,
}

impl Pool {
    /// An empty pool.
    pub fn new(shared: Arc<Shared>) -> Pool {
        Pool { shared, slots: Vec::new(), abandoned: 0, made: 0 }
    }

    /// Starts or retires threads until there are `count`; retired ones end after their job.
    ///
    /// # Errors
    /// The system gives no thread.
    pub fn resize(&mut self, count: usize) -> std::io::Result<()> {
        while self.kept().count() < count {
            self.add()?;
        }
        for slot in self.kept().skip(count) {
            slot.is_surplus.store(true, Ordering::Release);
        }
        self.shared.wake_workers();
        Ok(())
    }

    fn kept(&self) -> impl Iterator<Item = &Arc<Slot>> {
        self.slots.iter().filter(|slot| !slot.is_surplus.load(Ordering::Acquire))
    }

    fn add(&mut self) -> std::io::Result<()> {
        let slot = Arc::new(Slot {
            state: Mutex::new(State::Idle),
            is_surplus: AtomicBool::new(false),
            thread: Mutex::default(),
        });
        let (shared, own) = (self.shared.clone(), slot.clone());
        self.made += 1;
        let thread = std::thread::Builder::new()
            .name(format!("fit-{}", self.made))
            .stack_size(8 << 20)
            .spawn(move || work(&shared, &own))?;
        *lock(&slot.thread) = Some(thread);
        self.slots.push(slot);
        Ok(())
    }

    /// Gives up threads that are over the time limit, replaces them while that is allowed, and says
    /// how the pool is.
    ///
    /// # Errors
    /// The ledger cannot be used.
    pub fn supervise(&mut self) -> Result<PoolHealth, Fault> {
        let limits = self.shared.settings().config.workers.clone();
        let limit = Duration::from_secs_f64(limits.time_limit_s);
        let mut overdue = Vec::new();
        let mut health = PoolHealth::Working;
        self.slots.retain(|slot| {
            let mut state = lock(&slot.state);
            match &*state {
                State::Analysing { since, .. } if since.elapsed() > limit => {
                    if let State::Analysing { job, settings, .. } =
                        std::mem::replace(&mut *state, State::Abandoned)
                    {
                        overdue.push((job, settings, slot.is_surplus.load(Ordering::Acquire)));
                    }
                    false
                }
                State::Writing { since } if since.elapsed() > WRITE_LIMIT => {
                    health = PoolHealth::CannotWrite;
                    true
                }
                State::Ended => !slot.is_surplus.load(Ordering::Acquire),
                _ => true,
            }
        });
        for (job, settings, is_surplus) in overdue {
            self.abandoned += 1;
            let fault = Fault::reject(
                &codes::SERVICE_TIME_LIMIT,
                format!("no answer after {} s (workers.time_limit_s)", limits.time_limit_s),
            );
            tracing::error!(path = %printable(&job.path), abandoned = self.abandoned, "thread given up: {fault}");
            conclude_fault(&self.shared, &settings, &job, &fault)?;
            if !is_surplus
                && self.abandoned <= limits.max_abandoned
                && let Err(error) = self.add()
            {
                tracing::error!(%error, "no thread for the one that was given up");
            }
        }
        if self.slots.is_empty() && !self.shared.is_stopping() {
            health = PoolHealth::Exhausted;
        }
        self.shared.set_worker_counts(self.counts());
        Ok(health)
    }

    fn counts(&self) -> WorkerCounts {
        let is_busy =
            |slot: &&Arc<Slot>| matches!(*lock(&slot.state), State::Analysing { .. } | State::Writing { .. });
        WorkerCounts {
            threads: self.kept().count(),
            busy: self.slots.iter().filter(is_busy).count(),
            abandoned: self.abandoned,
        }
    }

    /// Whether every thread has ended (given-up ones do not count).
    pub fn has_ended(&self) -> bool {
        self.slots.iter().all(|slot| matches!(*lock(&slot.state), State::Ended))
    }

    /// Takes the jobs of threads still at work from them and puts them back into the queue.
    ///
    /// # Errors
    /// The ledger cannot be used.
    pub fn give_back_jobs(&mut self) -> Result<usize, Fault> {
        let mut count = 0;
        for slot in self.slots.drain(..) {
            let mut state = lock(&slot.state);
            if let State::Analysing { .. } = &*state
                && let State::Analysing { job, .. } = std::mem::replace(&mut *state, State::Abandoned)
            {
                self.shared.with_ledger(|ledger| ledger.release(&job))?;
                count += 1;
            }
        }
        Ok(count)
    }

    /// Waits for the threads that have ended.
    pub fn join(&mut self) {
        for slot in self.slots.drain(..) {
            if let Some(thread) = lock(&slot.thread).take()
                && thread.join().is_err()
            {
                tracing::error!("a fitting thread died outside of an analysis");
            }
        }
    }
}

fn work(shared: &Arc<Shared>, slot: &Slot) {
    loop {
        let (settings, job) = match shared.next_job(|| !slot.is_surplus.load(Ordering::Acquire)) {
            Ok(Some(next)) => next,
            Ok(None) => break,
            Err(fault) => {
                shared.send(Command::Fatal(fault));
                break;
            }
        };
        *lock(&slot.state) =
            State::Analysing { job: job.clone(), settings: settings.clone(), since: Instant::now() };
        let span =
            tracing::info_span!("object", path = %printable(&job.path), job = job.id, refit = job.is_refit);
        let _entered = span.enter();
        let outcome = analyse(shared, &settings, &job);
        {
            let mut state = lock(&slot.state);
            if matches!(*state, State::Abandoned) {
                tracing::warn!("this thread had been given up; its answer is dropped");
                return;
            }
            *state = State::Writing { since: Instant::now() };
        }
        if let Err(fault) = conclude(shared, &settings, &job, outcome) {
            shared.send(Command::Fatal(fault));
            break;
        }
        *lock(&slot.state) = State::Idle;
    }
    *lock(&slot.state) = State::Ended;
}

/// What an analysis came to.
enum Outcome {
    Documents {
        documents: Vec<Document>,
        answer: Option<String>,
    },
    /// The reload changed nothing that goes into the answer on this file.
    Unchanged {
        documents: Vec<DocumentRecord>,
        answer: String,
    },
    Fault(Fault),
    /// The path no longer holds the content of the job.
    Lost,
}

/// Whether the job's path still holds the job's content.
fn holds(shared: &Shared, job: &Job) -> Result<bool, Fault> {
    match fs::metadata(&job.path) {
        Ok(metadata) => {
            shared.with_ledger(|ledger| ledger.holds(&job.path, &Signature::of(&metadata), &job.blake3))
        }
        Err(_) => Ok(false),
    }
}

fn analyse(shared: &Shared, settings: &Settings, job: &Job) -> Outcome {
    match holds(shared, job) {
        Ok(true) => {}
        Ok(false) => return Outcome::Lost,
        Err(fault) => return Outcome::Fault(fault),
    }
    let answer =
        catch_unwind(AssertUnwindSafe(|| settings.analyst.answer_key(&job.path))).unwrap_or_default();
    if job.is_refit
        && let Some(answer) = &answer
    {
        match shared.with_ledger(|ledger| ledger.documents_of_answer(&job.blake3, answer)) {
            Ok(documents) if documents.is_empty() => {}
            Ok(documents) => return Outcome::Unchanged { documents, answer: answer.clone() },
            Err(fault) => return Outcome::Fault(fault),
        }
    }
    analyse_anew(shared, settings, job, answer)
}

fn analyse_anew(shared: &Shared, settings: &Settings, job: &Job, answer: Option<String>) -> Outcome {
    let started = Instant::now();
    // The analyst is shared and was checked to be unwind safe in the sense that matters: it holds
    // immutable tables, and what a panic leaves half done is dropped with the call.
    let analysed = catch_unwind(AssertUnwindSafe(|| settings.analyst.analyse(&job.path, &job.blake3)));
    tracing::debug!(elapsed_ms = started.elapsed().as_millis() as u64, "analysed");
    // If the file was replaced meanwhile, what was read may be half of each.
    match holds(shared, job) {
        Ok(true) => {}
        Ok(false) => return Outcome::Lost,
        Err(fault) => return Outcome::Fault(fault),
    }
    match analysed {
        Ok(Ok(documents)) => Outcome::Documents { documents, answer },
        Ok(Err(fault)) => Outcome::Fault(fault),
        Err(panic) => {
            let text = panic
                .downcast_ref::<&str>()
                .map(|text| (*text).to_owned())
                .or_else(|| panic.downcast_ref::<String>().cloned())
                .unwrap_or_default();
            Outcome::Fault(Fault::reject(&codes::INTERNAL, format!("panic: {text}")))
        }
    }
}

/// Puts the outcome on disk and into the ledger. An error here is a reason to stop.
fn conclude(shared: &Shared, settings: &Settings, job: &Job, outcome: Outcome) -> Result<(), Fault> {
    match outcome {
        Outcome::Unchanged { documents, answer } => {
            let Some(records) = adopt(shared, settings, job, &documents)? else {
                tracing::warn!("an earlier report is gone, the file is fitted again");
                let anew = analyse_anew(shared, settings, job, Some(answer));
                return conclude(shared, settings, job, anew);
            };
            finish(shared, job, &records, Some(&answer))?;
            retire_if_replaced(shared, settings, job, &records)?;
            tracing::info!(documents = records.len(), "the earlier answer holds");
            shared.note_unchanged();
        }
        Outcome::Documents { documents, answer } => {
            let records = publish(shared, settings, job, &documents)?;
            finish(shared, job, &records, answer.as_deref())?;
            retire_if_replaced(shared, settings, job, &records)?;
            tracing::info!(documents = records.len(), "done");
            finished::move_content(shared, &shared.settings().config, &job.blake3)?;
        }
        Outcome::Lost => {
            // Unless it is just being moved, and the ledger does not know of it yet.
            let _no_move = shared.lock_moves();
            tracing::info!("the file is gone or was replaced; the job is dropped");
            let now_s = shared.now_s();
            shared.with_ledger(|ledger| ledger.lose(job, now_s))?;
            shared.wake_workers();
        }
        Outcome::Fault(fault) => return conclude_fault(shared, settings, job, &fault),
    }
    shared.note_ended();
    Ok(())
}

fn finish(shared: &Shared, job: &Job, records: &[DocumentRecord], answer: Option<&str>) -> Result<(), Fault> {
    let now_s = shared.now_s();
    shared.with_ledger(|ledger| {
        if let Some(answer) = answer {
            ledger.note_answer(job, answer)?;
        }
        ledger.finish(job, records, now_s)
    })
}

fn conclude_fault(shared: &Shared, settings: &Settings, job: &Job, fault: &Fault) -> Result<(), Fault> {
    let told = (fault.code.id, fault.detail.as_str());
    let retry = &settings.config.retry;
    match fault.disposition {
        Disposition::Retry if job.attempts < retry.attempts => {
            let not_before_s = shared.now_s() + retry.delay_s(job.attempts);
            tracing::warn!(
                attempt = job.attempts,
                delay_s = retry.delay_s(job.attempts),
                "will be tried again: {fault}"
            );
            shared.with_ledger(|ledger| ledger.retry(job, told, not_before_s))?;
        }
        Disposition::Retry | Disposition::Reject => {
            tracing::warn!(attempt = job.attempts, "rejected: {fault}");
            let records = publish(shared, settings, job, &[refusal(job, fault)])?;
            let (is_rejected, now_s) = (fault.disposition == Disposition::Reject, shared.now_s());
            shared.with_ledger(|ledger| ledger.give_up(job, is_rejected, &records, told, now_s))?;
            retire_if_replaced(shared, settings, job, &records)?;
            finished::move_content(shared, &shared.settings().config, &job.blake3)?;
            shared.note_ended();
        }
        Disposition::Stop => {
            shared.with_ledger(|ledger| ledger.release(job))?;
            return Err(fault.clone());
        }
    }
    Ok(())
}

/// The report on a file of which nothing else can be said.
fn refusal(job: &Job, fault: &Fault) -> Document {
    let name = job.path.file_stem().unwrap_or_default().to_string_lossy().into_owned();
    let object = ObjectRecord { name: Some(name.clone()), ..ObjectRecord::default() };
    let source = SourceRecord {
        path: job.path.to_string_lossy().into_owned(),
        blake3: Some(job.blake3.clone()),
        ..SourceRecord::default()
    };
    let provenance =
        Provenance { config_fingerprint: Some(job.fingerprint.clone()), ..Provenance::of_this_program() };
    let flags = vec![Flag::new(fault.code, fault.detail.clone())];
    let report = Report::assemble(object, source, Findings { flags, provenance, ..Findings::default() });
    Document {
        object_name: name,
        verdict: "rejected".to_owned(),
        // Serialising texts and nulls cannot fail.
        json: serde_json::to_value(&report).unwrap_or_default().to_string().into_bytes(),
        row: serde_json::Value::Null,
    }
}

/// Writes the reports; what they replace loses its pointer.
fn publish(
    shared: &Shared,
    settings: &Settings,
    job: &Job,
    documents: &[Document],
) -> Result<Vec<DocumentRecord>, Fault> {
    let is_in_force = is_in_force(shared, job)?;
    let reports = &settings.config.output.reports;
    let mut occurrences: HashMap<&str, usize> = HashMap::new();
    let mut records = Vec::with_capacity(documents.len());
    for document in documents {
        let occurrence = occurrences.entry(&document.object_name).or_insert(0);
        let place = ReportPlace::new(&document.object_name, &job.blake3, *occurrence, &job.fingerprint);
        *occurrence += 1;
        output::publish(reports, &place, &document.json, is_in_force)
            .map_err(|error| cannot_write(shared, job, &reports.join(&place.report), &error))?;
        records.push(DocumentRecord {
            object_name: document.object_name.clone(),
            verdict: document.verdict.clone(),
            report: place.report,
            pointer: place.pointer,
            catalogue_row: document.row.to_string(),
        });
    }
    let rows = documents.iter().zip(&records).map(|(document, record)| {
        // Our own report, fresh from its maker; a stand-in's text that is no JSON makes an empty row.
        let report = serde_json::from_slice(&document.json).unwrap_or_default();
        column::row(&report, &record.report, &record.pointer, is_in_force)
    });
    shared.with_catalogue(|catalogue| catalogue.put(&rows.collect::<Vec<_>>()))?;
    if is_in_force {
        retire_superseded(shared, settings, job, &records)?;
    }
    Ok(records)
}

/// Makes the reports of an earlier job with the same answer the reports of this job, if they are still there.
fn adopt(
    shared: &Shared,
    settings: &Settings,
    job: &Job,
    documents: &[DocumentRecord],
) -> Result<Option<Vec<DocumentRecord>>, Fault> {
    let is_in_force = is_in_force(shared, job)?;
    let reports = &settings.config.output.reports;
    let mut occurrences: HashMap<&str, usize> = HashMap::new();
    let mut records = Vec::with_capacity(documents.len());
    for document in documents {
        let occurrence = occurrences.entry(&document.object_name).or_insert(0);
        let place = ReportPlace::new(&document.object_name, &job.blake3, *occurrence, &job.fingerprint);
        *occurrence += 1;
        let is_adopted = output::adopt(reports, &place, &document.report, is_in_force)
            .map_err(|error| cannot_write(shared, job, &reports.join(&place.report), &error))?;
        if !is_adopted {
            return Ok(None);
        }
        records.push(DocumentRecord { report: place.report, pointer: place.pointer, ..document.clone() });
    }
    for record in &records {
        let row = output::catalogue_row(reports, &record.report, &record.pointer, is_in_force)
            .map_err(|error| cannot_write(shared, job, &reports.join(&record.report), &error))?;
        shared.with_catalogue(|catalogue| catalogue.put(&[row]))?;
    }
    if is_in_force {
        retire_superseded(shared, settings, job, &records)?;
    }
    Ok(Some(records))
}

/// What the reports of this job replace loses its pointer.
fn retire_superseded(
    shared: &Shared,
    settings: &Settings,
    job: &Job,
    records: &[DocumentRecord],
) -> Result<(), Fault> {
    let reports = &settings.config.output.reports;
    let superseded = shared.with_ledger(|ledger| ledger.superseded_pointers(&job.blake3))?;
    for pointer in superseded.iter().filter(|old| records.iter().all(|new| new.pointer != **old)) {
        output::retire(reports, pointer)
            .map_err(|error| cannot_write(shared, job, &reports.join(pointer), &error))?;
        shared.with_catalogue(|catalogue| catalogue.retire(pointer))?;
    }
    Ok(())
}

/// An answer is in force when its content still stands somewhere and its configuration still holds.
fn is_in_force(shared: &Shared, job: &Job) -> Result<bool, Fault> {
    Ok(job.fingerprint == shared.settings().fingerprint
        && shared.with_ledger(|ledger| ledger.is_in_force(&job.blake3))?)
}

/// The content was replaced while its reports were written: the replacement could not know of them.
fn retire_if_replaced(
    shared: &Shared,
    settings: &Settings,
    job: &Job,
    records: &[DocumentRecord],
) -> Result<(), Fault> {
    if !shared.with_ledger(|ledger| ledger.is_in_force(&job.blake3))? {
        let reports = &settings.config.output.reports;
        for record in records {
            output::retire(reports, &record.pointer)
                .map_err(|error| cannot_write(shared, job, &reports.join(&record.pointer), &error))?;
            shared.with_catalogue(|catalogue| catalogue.retire(&record.pointer))?;
        }
    }
    Ok(())
}

fn cannot_write(shared: &Shared, job: &Job, path: &Path, error: &std::io::Error) -> Fault {
    // The job did not fail, so it gets its attempt back. If the ledger cannot be written either, the
    // job stays marked as running, which the next start mends.
    if let Err(fault) = shared.with_ledger(|ledger| ledger.release(job)) {
        tracing::error!("{fault}");
    }
    Fault::stop(&codes::SERVICE_OUTPUT, format!("cannot write {}: {error}", path.display()))
}
