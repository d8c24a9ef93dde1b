//! What the ledger tells: counts, troubles, and which reports are in force. Changes nothing.

use std::collections::BTreeMap;

use rusqlite::params;

use super::ledger::{DocumentRecord, JobCounts, Ledger, Priority, Result, Trouble};

impl Ledger {
    /// Counts jobs by state under `fingerprint`.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn counts(&self, fingerprint: &str) -> Result<JobCounts> {
        // Read from the index alone: an archive has a million rows.
        let mut query = self.connection.prepare_cached(
            "SELECT state, priority, count(*) FROM jobs WHERE fingerprint = ?1 GROUP BY state, priority",
        )?;
        let mut rows = query.query([fingerprint])?;
        let mut counts = JobCounts::default();
        while let Some(row) = rows.next()? {
            let (state, priority): (String, i64) = (row.get(0)?, row.get(1)?);
            let count = row.get::<_, i64>(2)? as u64;
            let slot = match state.as_str() {
                "queued" if priority == Priority::New as i64 => &mut counts.queued_new,
                "queued" => &mut counts.queued_refit,
                "running" => &mut counts.running,
                "done" => &mut counts.done,
                "rejected" => &mut counts.rejected,
                "failed" => &mut counts.failed,
                _ => &mut counts.gone,
            };
            *slot += count;
        }
        counts.waiting_for_retry = self
            .connection
            .prepare_cached(
                "SELECT count(*) FROM jobs WHERE fingerprint = ?1 AND state = 'queued' AND attempts > 0",
            )?
            .query_row([fingerprint], |row| row.get::<_, i64>(0))? as u64;
        Ok(counts)
    }

    /// Numbers of rejected and given-up jobs by code.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn counts_by_code(&self, fingerprint: &str) -> Result<BTreeMap<String, u64>> {
        let mut query = self.connection.prepare_cached(
            "SELECT last_code, count(*) FROM jobs
             WHERE fingerprint = ?1 AND state IN ('rejected', 'failed') AND last_code IS NOT NULL GROUP BY last_code",
        )?;
        let rows = query.query_map([fingerprint], |row| Ok((row.get(0)?, row.get::<_, i64>(1)? as u64)))?;
        Ok(rows.collect::<rusqlite::Result<_>>()?)
    }

    /// The last jobs that went wrong, newest first.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn last_troubles(&self, fingerprint: &str, limit: u32) -> Result<Vec<Trouble>> {
        let mut query = self.connection.prepare_cached(
            "SELECT path, state, last_code, last_detail FROM jobs
             WHERE fingerprint = ?1 AND last_code IS NOT NULL AND state <> 'done' ORDER BY arrival DESC LIMIT ?2",
        )?;
        let rows = query.query_map(params![fingerprint, limit], |row| {
            Ok(Trouble {
                path: String::from_utf8_lossy(&row.get::<_, Vec<u8>>(0)?).into_owned(),
                state: row.get(1)?,
                code: row.get(2)?,
                detail: row.get(3)?,
            })
        })?;
        Ok(rows.collect::<rusqlite::Result<_>>()?)
    }

    /// The documents of an earlier job on this content that everything went into which goes into `answer`;
    /// empty when there is none.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn documents_of_answer(&self, blake3: &str, answer: &str) -> Result<Vec<DocumentRecord>> {
        let mut query = self.connection.prepare_cached(
            "SELECT object_name, verdict, report, pointer, catalogue_row FROM documents
             WHERE blake3 = ?1 AND fingerprint = (
                SELECT fingerprint FROM jobs WHERE blake3 = ?1 AND answer = ?2 AND state = 'done'
                ORDER BY finished_at_s DESC LIMIT 1)
             ORDER BY ordinal",
        )?;
        let rows = query.query_map([blake3, answer], |row| {
            Ok(DocumentRecord {
                object_name: row.get(0)?,
                verdict: row.get(1)?,
                report: row.get(2)?,
                pointer: row.get(3)?,
                catalogue_row: row.get(4)?,
            })
        })?;
        Ok(rows.collect::<rusqlite::Result<_>>()?)
    }

    /// Every document made under `fingerprint` whose content is in force, as (report, pointer).
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn reports_in_force(&self, fingerprint: &str) -> Result<Vec<(String, String)>> {
        let mut query = self.connection.prepare_cached(
            "SELECT report, pointer FROM documents
             WHERE fingerprint = ?1 AND EXISTS (SELECT 1 FROM files WHERE files.blake3 = documents.blake3)",
        )?;
        let rows = query.query_map([fingerprint], |row| Ok((row.get(0)?, row.get(1)?)))?;
        Ok(rows.collect::<rusqlite::Result<_>>()?)
    }

    /// Pointers of answers under other fingerprints to contents that have an answer under this one, at
    /// places where this one has no pointer.
    ///
    /// # Errors
    /// The database cannot be read.
    pub fn foreign_pointers(&self, fingerprint: &str) -> Result<Vec<String>> {
        let mut query = self.connection.prepare_cached(
            "SELECT DISTINCT pointer FROM documents
             WHERE fingerprint <> ?1
               AND EXISTS (SELECT 1 FROM documents AS mine WHERE mine.blake3 = documents.blake3 AND mine.fingerprint = ?1)
             EXCEPT SELECT pointer FROM documents WHERE fingerprint = ?1",
        )?;
        let rows = query.query_map([fingerprint], |row| row.get(0))?;
        Ok(rows.collect::<rusqlite::Result<_>>()?)
    }
}
