//! Bytes on disk, whole or not at all.

use std::fs::{self, File};
use std::io::{self, Write};
use std::path::{Path, PathBuf};

use crate::codes::{self, Code, Disposition};

/// Why a file could not be written.
#[derive(Debug, thiserror::Error)]
#[error("cannot {step} {}", path.display())]
pub struct WriteFault {
    /// What was attempted.
    step: &'static str,
    /// On which file or folder.
    path: PathBuf,
    /// What the operating system said.
    source: io::Error,
}

impl WriteFault {
    /// The row of the table of codes.
    pub fn code(&self) -> &'static Code {
        &codes::REPORT_NOT_WRITTEN
    }

    /// Output that cannot be written fails for every object, so the program stops.
    pub fn disposition(&self) -> Disposition {
        Disposition::Stop
    }
}

/// Writes bytes under a temporary name beside `path`, syncs, renames, and syncs the folder: after a
/// crash at any line the path holds the old content or the new, never a part.
///
/// The temporary name is `path` + `.partial`, so a left-over is overwritten by the next attempt.
///
/// # Errors
/// [`WriteFault`]; the temporary file is then removed where that is possible.
pub fn write_atomically(path: &Path, bytes: &[u8]) -> Result<(), WriteFault> {
    let fault = |step, path: &Path| {
        let path = path.to_owned();
        move |source| WriteFault { step, path, source }
    };
    let mut name = path.file_name().unwrap_or_default().to_owned();
    name.push(".partial");
    let partial = path.with_file_name(name);
    let folder = match path.parent() {
        Some(folder) if !folder.as_os_str().is_empty() => folder,
        _ => Path::new("."),
    };
    let outcome = (|| {
        let mut file = File::create(&partial).map_err(fault("create", &partial))?;
        file.write_all(bytes).map_err(fault("write", &partial))?;
        file.sync_all().map_err(fault("sync", &partial))?;
        fs::rename(&partial, path).map_err(fault("rename to", path))?;
        File::open(folder).and_then(|folder| folder.sync_all()).map_err(fault("sync folder", folder))
    })();
    if outcome.is_err() {
        // Best effort: what matters, the file under its final name, was not touched.
        let _ = fs::remove_file(&partial);
    }
    outcome
}
