//! The seam between the daemon and the science: what the daemon asks for, and what it gets back.
//!
//! In: the path of one whole file and the hash of its bytes. Out: one [`Document`] per object of the
//! file, or one [`Fault`] that says what to do about the file. The daemon knows nothing else of
//! spectra, so everything in `service` is tested with a stand-in.

use std::path::Path;
use std::sync::Arc;

use crate::codes::Code;
use crate::service::config::Config;

/// Turns one file into reports. Shared by all worker threads.
pub trait Analyst: Send + Sync {
    /// Names everything that can change an answer: software version, grids, and
    /// [`Config::answer_fingerprint`]. Two analysts with the same fingerprint give the same
    /// answers; a changed log level must not change it. At least 16 characters, `[0-9a-z]` only.
    fn fingerprint(&self) -> String;

    /// Names what really goes into the answer on this file: less than [`Analyst::fingerprint`] covers, because
    /// an instrument section matters only to the files that it matches. Two answers with the same key
    /// on the same content are the same. `None`: not known, so a re-fit is needed.
    fn answer_key(&self, path: &Path) -> Option<String> {
        let _ = path;
        None
    }

    /// Analyses the file at `path`, whose bytes hash to `bytes_blake3` (hex).
    ///
    /// # Errors
    /// A [`Fault`] when no report can be made of this file; what was made but cannot be trusted is a
    /// document with a verdict instead.
    fn analyse(&self, path: &Path, bytes_blake3: &str) -> Result<Vec<Document>, Fault>;
}

/// Makes an analyst for a configuration: called at the start and at each reload.
pub type AnalystFactory = Arc<dyn Fn(&Config) -> Result<Arc<dyn Analyst>, Fault> + Send + Sync>;

/// The result for one object.
#[derive(Debug, Clone, PartialEq)]
pub struct Document {
    /// Name as the file gives it; not trusted as a file name.
    pub object_name: String,
    /// `accepted`, `review` or `rejected`.
    pub verdict: String,
    /// The JSON report, as it goes to disk.
    pub json: Vec<u8>,
    /// The row for the catalogue.
    pub row: serde_json::Value,
}

/// What the daemon does about a fault.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Disposition {
    /// It may pass: try again later, a bounded number of times.
    Retry,
    /// It never will work: record it and go on with the next file.
    Reject,
    /// Going on is pointless: stop with a non-zero exit code.
    Stop,
}

/// A file could not be analysed, or its reports could not be kept.
#[derive(Debug, Clone, thiserror::Error)]
#[error("{}: {detail}", code.id)]
pub struct Fault {
    /// The row of the codes table.
    pub code: &'static Code,
    /// What was attempted, what was found, what was expected.
    pub detail: String,
    /// What the daemon does about it.
    pub disposition: Disposition,
}

impl Fault {
    /// A fault that may pass.
    pub fn retry(code: &'static Code, detail: impl Into<String>) -> Self {
        Fault { code, detail: detail.into(), disposition: Disposition::Retry }
    }

    /// A fault of this file for ever.
    pub fn reject(code: &'static Code, detail: impl Into<String>) -> Self {
        Fault { code, detail: detail.into(), disposition: Disposition::Reject }
    }

    /// A fault that makes going on pointless.
    pub fn stop(code: &'static Code, detail: impl Into<String>) -> Self {
        Fault { code, detail: detail.into(), disposition: Disposition::Stop }
    }
}
