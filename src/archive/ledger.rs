//! The ledger: which files were seen, which jobs they make, what became of each.
//!
//! A job is the content of a file (BLAKE3) under a fingerprint of everything that can change the
//! answer; the same content under two names is one job. The queue of the daemon is this table: workers
//! claim the newest job of the most urgent kind, so memory stays flat and a restart resumes.
//! Times are seconds since 1970 and only informative, except `not_before_s`, which a clock
//! that was set back cannot push out of reach (test `a_clock_set_back_delays_no_retry`).
//! Measured: see `tests/service/kill.rs` and `flood.rs`.

use std::ffi::OsStr;
use std::fs::{File, Metadata};
use std::os::unix::ffi::OsStrExt;
use std::os::unix::fs::MetadataExt;
use std::path::{Path, PathBuf};

use rusqlite::{Connection, OptionalExtension, Row, params};

use super::{ledger_moves, ledger_schema};

/// The ledger could not be used. There is no going on without it.
#[derive(Debug, thiserror::Error)]
pub enum LedgerError {
    /// Another process works with it.
    #[error("cannot use the ledger {}: another emberline works with it (stop that one first)", path.display())]
    InUse {
        /// The database.
        path: PathBuf,
    },
    /// The lock file beside it cannot be had.
    #[error("cannot lock the ledger {} (its folder must exist and be writable)", path.display())]
    Lock {
        /// The database.
        path: PathBuf,
        /// Why.
        source: std::io::Error,
    },
    /// Made by a newer program.
    #[error(
        "cannot use the ledger: its schema has version {found}, this program knows up to {known} (update it)"
    )]
    TooNew {
        /// Version in the file.
        found: u32,
        /// Newest known version.
        known: u32,
    },
    /// SQLite refused.
    #[error("cannot read or write the ledger")]
    Database(#[from] rusqlite::Error),
}

pub(super) type Result<T> = std::result::Result<T, LedgerError>;

/// What tells that a file at a path changed, without reading it.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Signature {
    /// Bytes.
    pub size: u64,
    /// Time of the last write, ns since 1970.
    pub modified_ns: i64,
    /// Time of the last change of the inode, which no tool can set: catches a kept `modified_ns`.
    pub changed_ns: i64,
    /// A renamed-in file has another one.
    pub inode: u64,
}

impl Signature {
    /// Of a file's metadata.
    pub fn of(metadata: &Metadata) -> Signature {
        let ns = |s: i64, ns: i64| s.saturating_mul(1_000_000_000).saturating_add(ns);
        Signature {
            size: metadata.len(),
            modified_ns: ns(metadata.mtime(), metadata.mtime_nsec()),
            changed_ns: ns(metadata.ctime(), metadata.ctime_nsec()),
            inode: metadata.ino(),
        }
    }
}

/// How urgent a job is; the smaller number goes first.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord)]
pub enum Priority {
    /// Content that has no answer yet.
    New = 0,
    /// Content that has an answer under another fingerprint.
    Refit = 1,
}

/// A claimed job.
#[derive(Debug, Clone, PartialEq)]
pub struct Job {
    /// Order of arrival.
    pub id: i64,
    /// Hash of the content, hex.
    pub blake3: String,
    /// Fingerprint of what can change the answer.
    pub fingerprint: String,
    /// A path at which the content stood.
    pub path: PathBuf,
    /// New or refit.
    pub is_refit: bool,
    /// Attempts, this one included.
    pub attempts: u32,
}

/// A report that was written.
#[derive(Debug, Clone, PartialEq)]
pub struct DocumentRecord {
    /// Name as the file gives it.
    pub object_name: String,
    /// Verdict of the report.
    pub verdict: String,
    /// The report, relative to the folder of reports.
    pub report: String,
    /// The pointer to the report in force, relative to the folder of reports.
    pub pointer: String,
    /// Row for the catalogue, JSON.
    pub catalogue_row: String,
}

/// Numbers of jobs.
#[derive(Debug, Clone, Default, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
pub struct JobCounts {
    /// Waiting, never answered.
    pub queued_new: u64,
    /// Waiting, answered under another fingerprint.
    pub queued_refit: u64,
    /// Of those waiting, how many failed before.
    pub waiting_for_retry: u64,
    /// In work.
    pub running: u64,
    /// Reports on disk.
    pub done: u64,
    /// Never will work.
    pub rejected: u64,
    /// Given up after all attempts.
    pub failed: u64,
    /// File no longer there.
    pub gone: u64,
}

/// One line of what went wrong last.
#[derive(Debug, Clone, PartialEq, serde::Serialize, serde::Deserialize)]
pub struct Trouble {
    /// Path of the file.
    pub path: String,
    /// State of the job.
    pub state: String,
    /// Code of the fault.
    pub code: String,
    /// Detail of the fault.
    pub detail: String,
}

/// What recording a file did.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Recorded {
    /// A job was queued.
    Queued,
    /// The content has a job already.
    Known,
}

/// The open ledger; holds the lock that keeps a second daemon out.
#[derive(Debug)]
pub struct Ledger {
    pub(super) connection: Connection,
    _lock: File,
}

impl Ledger {
    /// Opens or makes the ledger at `path` and takes its lock.
    ///
    /// # Errors
    /// It is in use, made by a newer program, or cannot be written.
    pub fn open(path: &Path) -> Result<Ledger> {
        let lock = ledger_schema::take_lock(path)?;
        Ok(Ledger { connection: ledger_schema::open(path)?, _lock: lock })
    }

    /// Puts jobs that were in work when the daemon died back into the queue; those that were so too
    /// often are given up. Returns the numbers of both.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn recover(&mut self, max_interruptions: u32, code: &str, now_s: f64) -> Result<(usize, usize)> {
        let transaction = self.connection.transaction()?;
        let given_up = transaction.execute(
            "UPDATE jobs SET state = 'failed', interruptions = interruptions + 1, finished_at_s = ?2,
                    last_code = ?3, last_detail = 'the daemon died during this job ' || (interruptions + 1) || ' times'
             WHERE state = 'running' AND interruptions + 1 >= ?1",
            params![max_interruptions, now_s, code],
        )?;
        let queued = transaction.execute(
            "UPDATE jobs SET state = 'queued', interruptions = interruptions + 1, attempts = attempts - 1
             WHERE state = 'running'",
            [],
        )?;
        transaction.commit()?;
        Ok((queued, given_up))
    }

    /// The highest arrival number given so far; numbers go on from there after a restart.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn last_arrival(&self) -> Result<u64> {
        let last: Option<i64> =
            self.connection.query_row("SELECT max(arrival) FROM jobs", [], |row| row.get(0))?;
        Ok(last.unwrap_or(0) as u64)
    }

    /// Whether the file at `path` is recorded with this signature and its job under `fingerprint` exists.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn is_known(&self, path: &Path, signature: &Signature, fingerprint: &str) -> Result<bool> {
        let known = self
            .connection
            .prepare_cached(
                "SELECT 1 FROM files JOIN jobs USING (blake3)
                 WHERE files.path = ?1 AND size = ?2 AND modified_ns = ?3 AND changed_ns = ?4 AND inode = ?5
                   AND fingerprint = ?6 AND state <> 'gone'",
            )?
            .exists(params![
                path.as_os_str().as_bytes(),
                signature.size as i64,
                signature.modified_ns,
                signature.changed_ns,
                signature.inode as i64,
                fingerprint
            ])?;
        Ok(known)
    }

    /// Records that `path` holds the content `blake3`, and queues a job for it unless it has one.
    /// `arrival` is the order in which files were noticed; see [`Ledger::last_arrival`].
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn record_file(
        &mut self,
        path: &Path,
        signature: &Signature,
        blake3: &str,
        fingerprint: &str,
        arrival: u64,
        now_s: f64,
    ) -> Result<Recorded> {
        let path = path.as_os_str().as_bytes();
        let transaction = self.connection.transaction()?;
        let before: Option<String> = transaction
            .query_row("SELECT blake3 FROM files WHERE path = ?1", [path], |row| row.get(0))
            .optional()?;
        let replaces_moved = ledger_moves::replace_moved(&transaction, path, blake3)?;
        let replaces_present = before.as_deref().is_some_and(|before| before != blake3);
        let is_replacement = replaces_present || replaces_moved;
        if replaces_present {
            transaction.execute("INSERT OR IGNORE INTO replaced VALUES (?1, ?2)", params![path, before])?;
        }
        if is_replacement {
            transaction
                .execute("DELETE FROM replaced WHERE path = ?1 AND blake3 = ?2", params![path, blake3])?;
        }
        transaction.execute(
            "INSERT OR REPLACE INTO files VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7)",
            params![
                path,
                signature.size as i64,
                signature.modified_ns,
                signature.changed_ns,
                signature.inode as i64,
                blake3,
                now_s
            ],
        )?;
        let state: Option<String> = transaction
            .query_row(
                "SELECT state FROM jobs WHERE blake3 = ?1 AND fingerprint = ?2",
                [blake3, fingerprint],
                |row| row.get(0),
            )
            .optional()?;
        let recorded = match state.as_deref() {
            None => {
                transaction.execute(
                    "INSERT INTO jobs (blake3, fingerprint, path, state, priority, arrival, created_at_s)
                     VALUES (?1, ?2, ?3, 'queued',
                             EXISTS (SELECT 1 FROM jobs WHERE blake3 = ?1 AND state IN ('done', 'rejected', 'failed')),
                             ?4, ?5)",
                    params![blake3, fingerprint, path, arrival as i64, now_s],
                )?;
                Recorded::Queued
            }
            Some("queued" | "running") => {
                // The path may have moved; the job in the queue follows it.
                transaction.execute(
                    "UPDATE jobs SET path = ?3 WHERE blake3 = ?1 AND fingerprint = ?2",
                    params![blake3, fingerprint, path],
                )?;
                Recorded::Known
            }
            // Content that came back in place of another must win its `current` pointer back.
            Some(state) if state == "gone" || is_replacement => {
                transaction.execute(
                    "UPDATE jobs SET state = 'queued', path = ?3, arrival = ?4, attempts = 0, not_before_s = 0
                     WHERE blake3 = ?1 AND fingerprint = ?2",
                    params![blake3, fingerprint, path, arrival as i64],
                )?;
                Recorded::Queued
            }
            Some(_) => Recorded::Known,
        };
        transaction.commit()?;
        Ok(recorded)
    }

    /// Drops waiting jobs of other fingerprints and queues one for every recorded content that has
    /// none under `fingerprint`. Returns how many were queued.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn queue_stale(&mut self, fingerprint: &str, now_s: f64) -> Result<usize> {
        let transaction = self.connection.transaction()?;
        let queued = transaction.execute(
            "INSERT INTO jobs (blake3, fingerprint, path, state, priority, arrival, created_at_s)
             SELECT blake3, ?1, min(path), 'queued',
                    EXISTS (SELECT 1 FROM jobs WHERE blake3 = files.blake3 AND state IN ('done', 'rejected', 'failed')),
                    coalesce((SELECT max(arrival) FROM jobs WHERE blake3 = files.blake3), 0), ?2
             FROM files
             WHERE NOT EXISTS (SELECT 1 FROM jobs WHERE blake3 = files.blake3 AND fingerprint = ?1)
             GROUP BY blake3",
            params![fingerprint, now_s],
        )?;
        transaction
            .execute("DELETE FROM jobs WHERE state = 'queued' AND fingerprint <> ?1", [fingerprint])?;
        transaction.commit()?;
        Ok(queued)
    }

    /// Queues what was rejected or given up under `fingerprint` once more. Returns how many.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn queue_failed(&mut self, fingerprint: &str) -> Result<usize> {
        Ok(self.connection.execute(
            "UPDATE jobs SET state = 'queued', attempts = 0, interruptions = 0, not_before_s = 0
             WHERE fingerprint = ?1 AND state IN ('rejected', 'failed')",
            [fingerprint],
        )?)
    }

    /// Claims the most urgent, newest job that is due.
    ///
    /// `max_delay_s` is the longest wait that can have been asked for: a job that seems to wait longer
    /// was written before the clock was set back, and is due.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn claim(&mut self, fingerprint: &str, now_s: f64, max_delay_s: f64) -> Result<Option<Job>> {
        let transaction = self.connection.transaction()?;
        let job = transaction
            .prepare_cached(
                "SELECT id, blake3, fingerprint, path, priority, attempts + 1 FROM jobs
                 WHERE fingerprint = ?1 AND state = 'queued' AND (not_before_s <= ?2 OR not_before_s > ?3)
                 ORDER BY priority, arrival DESC LIMIT 1",
            )?
            .query_row(params![fingerprint, now_s, now_s + max_delay_s], read_job)
            .optional()?;
        if let Some(job) = &job {
            transaction
                .prepare_cached(
                    "UPDATE jobs SET state = 'running', attempts = ?2, started_at_s = ?3 WHERE id = ?1",
                )?
                .execute(params![job.id, job.attempts, now_s])?;
        }
        transaction.commit()?;
        Ok(job)
    }

    /// Whether `path` is recorded with this signature and content.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn holds(&self, path: &Path, signature: &Signature, blake3: &str) -> Result<bool> {
        let query =
            "SELECT 1 FROM files WHERE path = ?1 AND size = ?2 AND modified_ns = ?3 AND changed_ns = ?4
                       AND inode = ?5 AND blake3 = ?6";
        Ok(self.connection.prepare_cached(query)?.exists(params![
            path.as_os_str().as_bytes(),
            signature.size as i64,
            signature.modified_ns,
            signature.changed_ns,
            signature.inode as i64,
            blake3
        ])?)
    }

    /// Whether some file is still recorded with this content, that is, its report is in force.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn is_in_force(&self, blake3: &str) -> Result<bool> {
        Ok(self.connection.prepare_cached("SELECT 1 FROM files WHERE blake3 = ?1")?.exists([blake3])?)
    }

    /// The pointers that stop being in force when the content `blake3` is done: its own of earlier
    /// answers (an object may have got another name), and those of contents that it replaced and that
    /// stand nowhere else.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn superseded_pointers(&self, blake3: &str) -> Result<Vec<String>> {
        let mut query = self.connection.prepare_cached(
            "SELECT DISTINCT pointer FROM documents WHERE blake3 = ?1
             UNION
             SELECT pointer FROM documents
             WHERE blake3 IN (SELECT replaced.blake3 FROM replaced JOIN files USING (path) WHERE files.blake3 = ?1)
               AND NOT EXISTS (SELECT 1 FROM files WHERE files.blake3 = documents.blake3)",
        )?;
        let pointers = query.query_map([blake3], |row| row.get(0))?;
        Ok(pointers.collect::<rusqlite::Result<_>>()?)
    }

    /// Records that the job's reports are on disk. Call it after they are.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn finish(&mut self, job: &Job, documents: &[DocumentRecord], now_s: f64) -> Result<()> {
        self.close(job, documents, "done", None, now_s)
    }

    /// Records what went into the answer of a job; see [`Ledger::documents_of_answer`].
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn note_answer(&mut self, job: &Job, answer: &str) -> Result<()> {
        self.connection
            .prepare_cached("UPDATE jobs SET answer = ?2 WHERE id = ?1")?
            .execute(params![job.id, answer])?;
        Ok(())
    }

    /// Records that the job will not be tried again: `state` is `rejected` or `failed`.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn give_up(
        &mut self,
        job: &Job,
        is_rejected: bool,
        documents: &[DocumentRecord],
        fault: (&str, &str),
        now_s: f64,
    ) -> Result<()> {
        self.close(job, documents, if is_rejected { "rejected" } else { "failed" }, Some(fault), now_s)
    }

    fn close(
        &mut self,
        job: &Job,
        documents: &[DocumentRecord],
        state: &str,
        fault: Option<(&str, &str)>,
        now_s: f64,
    ) -> Result<()> {
        let transaction = self.connection.transaction()?;
        transaction
            .prepare_cached("DELETE FROM documents WHERE blake3 = ?1 AND fingerprint = ?2")?
            .execute([&job.blake3, &job.fingerprint])?;
        for (ordinal, document) in documents.iter().enumerate() {
            transaction
                .prepare_cached("INSERT INTO documents VALUES (?1, ?2, ?3, ?4, ?5, ?6, ?7, ?8)")?
                .execute(params![
                    job.blake3,
                    job.fingerprint,
                    ordinal as i64,
                    document.object_name,
                    document.verdict,
                    document.report,
                    document.pointer,
                    document.catalogue_row
                ])?;
        }
        transaction
            .prepare_cached(
                "UPDATE jobs SET state = ?2, finished_at_s = ?3, last_code = ?4, last_detail = ?5 WHERE id = ?1",
            )?
            .execute(params![job.id, state, now_s, fault.map(|f| f.0), fault.map(|f| f.1)])?;
        transaction
            .prepare_cached("DELETE FROM replaced WHERE path IN (SELECT path FROM files WHERE blake3 = ?1)")?
            .execute([&job.blake3])?;
        transaction.commit()?;
        Ok(())
    }

    /// Puts the job back to be tried again not before a time.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn retry(&mut self, job: &Job, fault: (&str, &str), not_before_s: f64) -> Result<()> {
        self.connection.execute(
            "UPDATE jobs SET state = 'queued', not_before_s = ?2, last_code = ?3, last_detail = ?4 WHERE id = ?1",
            params![job.id, not_before_s, fault.0, fault.1],
        )?;
        Ok(())
    }

    /// Puts the job back as if it had not been claimed.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn release(&mut self, job: &Job) -> Result<()> {
        self.connection
            .execute("UPDATE jobs SET state = 'queued', attempts = attempts - 1 WHERE id = ?1", [job.id])?;
        Ok(())
    }

    /// The file at the job's path is not what was recorded. If a file is recorded with the job's content
    /// the job goes there (it may have been recorded anew, or moved), else it is over until the
    /// content comes back.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn lose(&mut self, job: &Job, now_s: f64) -> Result<()> {
        /// The records may be behind the disk, so this must end; a scan finds what really stands there.
        const MOST_ATTEMPTS: u32 = 4;
        let recorded_at: Option<Vec<u8>> = self
            .connection
            .query_row(
                "SELECT path FROM files WHERE blake3 = ?1 ORDER BY path = ?2, seen_at_s DESC LIMIT 1",
                params![job.blake3, job.path.as_os_str().as_bytes()],
                |row| row.get(0),
            )
            .optional()?;
        match recorded_at {
            Some(path) if job.attempts < MOST_ATTEMPTS => {
                self.connection.execute(
                    "UPDATE jobs SET state = 'queued', path = ?2 WHERE id = ?1",
                    params![job.id, path],
                )?;
            }
            _ => {
                self.connection.execute(
                    "UPDATE jobs SET state = 'gone', finished_at_s = ?2 WHERE id = ?1",
                    params![job.id, now_s],
                )?;
            }
        }
        Ok(())
    }

    /// Seconds until the next waiting job is due; `None` when none waits.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn next_due_in_s(&self, fingerprint: &str, now_s: f64, max_delay_s: f64) -> Result<Option<f64>> {
        let soonest: Option<f64> = self
            .connection
            .prepare_cached(
                "SELECT min(CASE WHEN not_before_s > ?3 THEN ?2 ELSE not_before_s END) FROM jobs
                 WHERE fingerprint = ?1 AND state = 'queued'",
            )?
            .query_row(params![fingerprint, now_s, now_s + max_delay_s], |row| row.get(0))?;
        Ok(soonest.map(|at_s| (at_s - now_s).max(0.0)))
    }
}

fn read_job(row: &Row<'_>) -> rusqlite::Result<Job> {
    let path: Vec<u8> = row.get(3)?;
    Ok(Job {
        id: row.get(0)?,
        blake3: row.get(1)?,
        fingerprint: row.get(2)?,
        path: PathBuf::from(OsStr::from_bytes(&path)),
        is_refit: row.get::<_, i64>(4)? == Priority::Refit as i64,
        attempts: row.get(5)?,
    })
}
