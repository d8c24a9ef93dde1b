//! Opening and migrating the ledger's database.
//!
//! The schema's version is SQLite's `user_version`. Each migration is one transaction, so a crash
//! inside one leaves the older version whole. A database of a newer program is refused.

use std::fs::{File, OpenOptions, TryLockError};
use std::path::Path;
use std::time::Duration;

use rusqlite::Connection;

use super::ledger::LedgerError;

/// Migration number i brings the schema from version i to i + 1.
const MIGRATIONS: &[&str] = &[
    // files: what stands where, with the signature that tells whether it changed.
    // replaced: contents that once stood at a path; their reports lose `current` when the new
    // content is done. jobs.arrival is the order in which files were noticed, immune to clocks.
    "CREATE TABLE files (
        path BLOB PRIMARY KEY,
        size INTEGER NOT NULL, modified_ns INTEGER NOT NULL, changed_ns INTEGER NOT NULL, inode INTEGER NOT NULL,
        blake3 TEXT NOT NULL,
        seen_at_s REAL NOT NULL
     ) WITHOUT ROWID;
     CREATE INDEX files_by_content ON files (blake3);
     CREATE TABLE replaced (
        path BLOB NOT NULL, blake3 TEXT NOT NULL,
        PRIMARY KEY (path, blake3)
     ) WITHOUT ROWID;
     CREATE TABLE jobs (
        id INTEGER PRIMARY KEY AUTOINCREMENT,
        blake3 TEXT NOT NULL, fingerprint TEXT NOT NULL,
        path BLOB NOT NULL,
        state TEXT NOT NULL CHECK (state IN ('queued', 'running', 'done', 'rejected', 'failed', 'gone')),
        priority INTEGER NOT NULL, arrival INTEGER NOT NULL,
        attempts INTEGER NOT NULL DEFAULT 0, interruptions INTEGER NOT NULL DEFAULT 0,
        not_before_s REAL NOT NULL DEFAULT 0,
        created_at_s REAL NOT NULL, started_at_s REAL, finished_at_s REAL,
        last_code TEXT, last_detail TEXT,
        UNIQUE (blake3, fingerprint)
     );
     CREATE INDEX jobs_queue ON jobs (fingerprint, state, priority, arrival DESC);
     CREATE INDEX jobs_arrival ON jobs (arrival);
     CREATE TABLE documents (
        blake3 TEXT NOT NULL, fingerprint TEXT NOT NULL, ordinal INTEGER NOT NULL,
        object_name TEXT NOT NULL, verdict TEXT NOT NULL,
        report TEXT NOT NULL, pointer TEXT NOT NULL,
        catalogue_row TEXT NOT NULL,
        PRIMARY KEY (blake3, fingerprint, ordinal)
     ) WITHOUT ROWID;",
    // moved: finished files that were taken out of the inbox, or are about to be.
    // jobs.answer names what really went into the answer, a part of what the fingerprint covers.
    "ALTER TABLE jobs ADD COLUMN answer TEXT;
     CREATE TABLE moved (
        origin BLOB NOT NULL, path BLOB NOT NULL, blake3 TEXT NOT NULL, is_done INTEGER NOT NULL,
        PRIMARY KEY (origin, path)
     ) WITHOUT ROWID;",
];

/// Takes the lock beside the database; it is free again when the file is dropped or the process dies.
pub(super) fn take_lock(path: &Path) -> Result<File, LedgerError> {
    let mut lock_path = path.as_os_str().to_owned();
    lock_path.push(".lock");
    let unreadable = |source| LedgerError::Lock { path: path.to_owned(), source };
    let lock = OpenOptions::new()
        .create(true)
        .truncate(false)
        .write(true)
        .open(Path::new(&lock_path))
        .map_err(unreadable)?;
    match lock.try_lock() {
        Ok(()) => Ok(lock),
        Err(TryLockError::WouldBlock) => Err(LedgerError::InUse { path: path.to_owned() }),
        Err(TryLockError::Error(source)) => Err(unreadable(source)),
    }
}

/// Opens the database and brings its schema up to date.
pub(super) fn open(path: &Path) -> Result<Connection, LedgerError> {
    let mut connection = Connection::open(path)?;
    connection.busy_timeout(Duration::from_secs(10))?;
    connection.pragma_update(None, "journal_mode", "WAL")?;
    // In WAL mode NORMAL survives the death of the process whole; a power cut may lose the last
    // commits but never tears the file. What is lost is found again by the start-up scan, and its
    // reports are on disk already, so the repeat changes nothing. FULL costs a sync per commit.
    connection.pragma_update(None, "synchronous", "NORMAL")?;
    migrate(&mut connection)?;
    Ok(connection)
}

fn migrate(connection: &mut Connection) -> Result<(), LedgerError> {
    let found: u32 = connection.pragma_query_value(None, "user_version", |row| row.get(0))?;
    let known = MIGRATIONS.len() as u32;
    if found > known {
        return Err(LedgerError::TooNew { found, known });
    }
    for (version, migration) in (0..known).zip(MIGRATIONS).skip(found as usize) {
        let transaction = connection.transaction()?;
        transaction.execute_batch(migration)?;
        transaction.pragma_update(None, "user_version", version + 1)?;
        transaction.commit()?;
    }
    Ok(())
}
