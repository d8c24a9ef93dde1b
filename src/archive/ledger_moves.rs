//! Finished files that were moved out of the watched folders.
//!
//! A move is planned here before it is done and completed after, so that after a crash at any moment
//! each file is found again, at one of the two places. A completed move stays on record under the
//! place that the file came from: another content that arrives there replaces the moved one.

use std::ffi::OsStr;
use std::os::unix::ffi::OsStrExt;
use std::path::{Path, PathBuf};

use rusqlite::{OptionalExtension, Row, Transaction, params};

use super::ledger::{Ledger, Result, Signature};

/// A move that was planned and not completed.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct PlannedMove {
    /// Where the file stood.
    pub origin: PathBuf,
    /// Where it was to go.
    pub target: PathBuf,
    /// Hash of the content, hex.
    pub blake3: String,
}

impl Ledger {
    /// The places at which a content is recorded, with the signatures of the files.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn places_of(&self, blake3: &str) -> Result<Vec<(PathBuf, Signature)>> {
        let mut query = self.connection.prepare_cached(
            "SELECT path, size, modified_ns, changed_ns, inode FROM files WHERE blake3 = ?1 ORDER BY path",
        )?;
        let rows = query.query_map([blake3], |row| {
            let signature = Signature {
                size: row.get::<_, i64>(1)? as u64,
                modified_ns: row.get(2)?,
                changed_ns: row.get(3)?,
                inode: row.get::<_, i64>(4)? as u64,
            };
            Ok((path_at(row, 0)?, signature))
        })?;
        Ok(rows.collect::<rusqlite::Result<_>>()?)
    }

    /// The content recorded at `path`, if its job under `fingerprint` has ended with a report.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn finished_content_at(&self, path: &Path, fingerprint: &str) -> Result<Option<String>> {
        Ok(self
            .connection
            .prepare_cached(
                "SELECT blake3 FROM files JOIN jobs USING (blake3)
                 WHERE files.path = ?1 AND fingerprint = ?2 AND state IN ('done', 'rejected', 'failed')",
            )?
            .query_row(params![path.as_os_str().as_bytes(), fingerprint], |row| row.get(0))
            .optional()?)
    }

    /// Records that a file is about to be moved.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn plan_move(&mut self, planned: &PlannedMove) -> Result<()> {
        self.connection.execute(
            "INSERT OR REPLACE INTO moved VALUES (?1, ?2, ?3, 0)",
            params![
                planned.origin.as_os_str().as_bytes(),
                planned.target.as_os_str().as_bytes(),
                planned.blake3
            ],
        )?;
        Ok(())
    }

    /// Records that a planned move was not done.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn cancel_move(&mut self, planned: &PlannedMove) -> Result<()> {
        self.connection.execute(
            "DELETE FROM moved WHERE origin = ?1 AND path = ?2",
            [planned.origin.as_os_str().as_bytes(), planned.target.as_os_str().as_bytes()],
        )?;
        Ok(())
    }

    /// Records that a planned move was done: the file that had the signature `before` has `after` at its new
    /// place, and the content is looked for there from now on.
    ///
    /// # Errors
    /// The database cannot be written.
    pub fn complete_move(
        &mut self,
        planned: &PlannedMove,
        before: &Signature,
        after: &Signature,
    ) -> Result<()> {
        let (origin, target) = (planned.origin.as_os_str().as_bytes(), planned.target.as_os_str().as_bytes());
        let transaction = self.connection.transaction()?;
        transaction
            .execute("UPDATE moved SET is_done = 1 WHERE origin = ?1 AND path = ?2", [origin, target])?;
        // Another file may have been recorded at the origin meanwhile, which stays recorded there. If it has
        // the same content both are places of it; if not, it has replaced what was moved.
        transaction.execute(
            "INSERT OR REPLACE INTO files SELECT ?2, ?4, ?5, ?6, ?7, blake3, seen_at_s FROM files
             WHERE path = ?1 AND blake3 = ?3",
            params![
                origin,
                target,
                planned.blake3,
                after.size as i64,
                after.modified_ns,
                after.changed_ns,
                after.inode as i64
            ],
        )?;
        transaction.execute(
            "DELETE FROM files WHERE path = ?1 AND blake3 = ?2 AND inode = ?3 AND changed_ns = ?4",
            params![origin, planned.blake3, before.inode as i64, before.changed_ns],
        )?;
        transaction.execute(
            "UPDATE jobs SET path = ?2 WHERE path = ?1 AND blake3 = ?3",
            params![origin, target, planned.blake3],
        )?;
        transaction.commit()?;
        Ok(())
    }

    /// Moves that a crash interrupted.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn unfinished_moves(&self) -> Result<Vec<PlannedMove>> {
        let mut query =
            self.connection.prepare("SELECT origin, path, blake3 FROM moved WHERE is_done = 0")?;
        let rows = query.query_map([], |row| {
            Ok(PlannedMove { origin: path_at(row, 0)?, target: path_at(row, 1)?, blake3: row.get(2)? })
        })?;
        Ok(rows.collect::<rusqlite::Result<_>>()?)
    }
}

/// A content arrives at a place from which others were moved: they are replaced by it, as if they still
/// stood there. Returns whether there were any.
pub(super) fn replace_moved(transaction: &Transaction<'_>, origin: &[u8], blake3: &str) -> Result<bool> {
    let others = "SELECT path FROM moved WHERE origin = ?1 AND blake3 <> ?2 AND is_done = 1";
    let is_replacement = transaction.prepare_cached(others)?.exists(params![origin, blake3])?;
    if is_replacement {
        transaction.execute(
            "INSERT OR IGNORE INTO replaced SELECT origin, blake3 FROM moved
             WHERE origin = ?1 AND blake3 <> ?2 AND is_done = 1",
            params![origin, blake3],
        )?;
        transaction.execute(
            "DELETE FROM files WHERE path IN (SELECT path FROM moved WHERE origin = ?1 AND blake3 <> ?2 AND is_done = 1)",
            params![origin, blake3],
        )?;
        transaction.execute(
            "DELETE FROM moved WHERE origin = ?1 AND blake3 <> ?2 AND is_done = 1",
            params![origin, blake3],
        )?;
    }
    Ok(is_replacement)
}

fn path_at(row: &Row<'_>, column: usize) -> rusqlite::Result<PathBuf> {
    let bytes: Vec<u8> = row.get(column)?;
    Ok(PathBuf::from(OsStr::from_bytes(&bytes)))
}
