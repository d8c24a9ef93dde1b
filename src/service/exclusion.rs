//! Which files are looked at, and why the others are left alone.
//!
//! In: a path inside a watched folder. Out: the [`Signature`] of a file worth reading, or a
//! [`Reason`]. Reasons are counted per path since the last full scan and told by `status`.

use std::collections::{BTreeMap, HashMap};
use std::fs::{self, File, OpenOptions};
use std::hash::{DefaultHasher, Hash, Hasher};
use std::io::{self, ErrorKind, Read};
use std::os::unix::fs::OpenOptionsExt;
use std::path::{Path, PathBuf};

use globset::{GlobBuilder, GlobSet, GlobSetBuilder};

use crate::archive::ledger::Signature;
use crate::service::config::InboxConfig;

/// Endings of spectra, compared without regard to case.
const SPECTRUM_ENDINGS: [&str; 7] = [".fits", ".fit", ".fts", ".fits.gz", ".fit.gz", ".fits.fz", ".fz"];

/// Endings of files that some program is still working on.
const TEMPORARY_ENDINGS: [&str; 7] = ["~", ".tmp", ".temp", ".part", ".partial", ".filepart", ".swp"];

/// Why a file is left alone.
#[derive(Debug, Clone, Copy, PartialEq, Eq, PartialOrd, Ord, Hash)]
pub enum Reason {
    /// Its name does not end like a spectrum's.
    OtherEnding,
    /// Its name says that some program still works on it; hidden files and folders count.
    TemporaryName,
    /// `inbox.include` does not name it, or `inbox.exclude` does.
    Excluded,
    /// A link that leads out of the watched folders, or nowhere.
    LinkLeavesFolder,
    /// A FIFO, a socket or a device.
    NotRegular,
    /// No bytes.
    Empty,
    /// Larger than `inbox.max_file_mb`.
    TooLarge,
    /// It may not be read.
    Unreadable,
}

impl Reason {
    /// Stable name, for status and log.
    pub fn name(self) -> &'static str {
        match self {
            Reason::OtherEnding => "other-ending",
            Reason::TemporaryName => "temporary-name",
            Reason::Excluded => "excluded",
            Reason::LinkLeavesFolder => "link-leaves-folder",
            Reason::NotRegular => "not-regular",
            Reason::Empty => "empty",
            Reason::TooLarge => "too-large",
            Reason::Unreadable => "unreadable",
        }
    }
}

/// What became of a look at a path.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Look {
    /// A file worth reading.
    File(Signature),
    /// A folder.
    Folder,
    /// Left alone.
    Excluded(Reason),
    /// Not there any more.
    Vanished,
}

/// The rules of one configuration, compiled.
#[derive(Debug)]
pub struct Rules {
    include: GlobSet,
    exclude: GlobSet,
    max_bytes: u64,
}

impl Rules {
    /// Compiles the patterns, which were checked when the configuration was parsed.
    pub fn new(config: &InboxConfig) -> Rules {
        Rules {
            include: pattern_set(&config.include),
            exclude: pattern_set(&config.exclude),
            max_bytes: (config.max_file_mb * 1e6) as u64,
        }
    }

    /// Looks at `path`, which stands below `root`; links may lead into any of `real_roots`.
    pub fn look(&self, root: &Path, real_roots: &[PathBuf], path: &Path) -> Look {
        let kind = match fs::symlink_metadata(path) {
            Ok(metadata) => metadata.file_type(),
            Err(error) => return failed_look(&error),
        };
        let relative = path.strip_prefix(root).unwrap_or(path);
        if is_temporary(relative) {
            return Look::Excluded(Reason::TemporaryName);
        }
        if kind.is_dir() {
            return Look::Folder;
        }
        if !has_spectrum_ending(path) {
            return Look::Excluded(Reason::OtherEnding);
        }
        if !self.include.is_match(relative) || self.exclude.is_match(relative) {
            return Look::Excluded(Reason::Excluded);
        }
        let real = match fs::canonicalize(path) {
            Ok(real) => real,
            Err(_) if kind.is_symlink() => return Look::Excluded(Reason::LinkLeavesFolder),
            Err(error) => return failed_look(&error),
        };
        if !real_roots.iter().any(|root| real.starts_with(root)) {
            return Look::Excluded(Reason::LinkLeavesFolder);
        }
        let metadata = match fs::metadata(&real) {
            Ok(metadata) => metadata,
            Err(error) => return failed_look(&error),
        };
        if !metadata.is_file() {
            return Look::Excluded(Reason::NotRegular);
        }
        match metadata.len() {
            0 => Look::Excluded(Reason::Empty),
            bytes if bytes > self.max_bytes => Look::Excluded(Reason::TooLarge),
            _ => Look::File(Signature::of(&metadata)),
        }
    }
}

fn failed_look(error: &io::Error) -> Look {
    match error.kind() {
        ErrorKind::NotFound | ErrorKind::NotADirectory => Look::Vanished,
        _ => Look::Excluded(Reason::Unreadable),
    }
}

fn pattern_set(patterns: &[String]) -> GlobSet {
    let mut builder = GlobSetBuilder::new();
    for pattern in patterns {
        if let Ok(glob) = GlobBuilder::new(pattern).literal_separator(true).build() {
            builder.add(glob);
        }
    }
    builder.build().unwrap_or_else(|_| GlobSet::empty())
}

fn has_spectrum_ending(path: &Path) -> bool {
    let name = path.file_name().map(|name| name.to_string_lossy().to_ascii_lowercase()).unwrap_or_default();
    SPECTRUM_ENDINGS.iter().any(|ending| name.len() > ending.len() && name.ends_with(ending))
}

fn is_temporary(relative: &Path) -> bool {
    let mut parts = relative.iter().map(|part| part.to_string_lossy());
    parts.any(|part| {
        part.starts_with(['.', '#']) || TEMPORARY_ENDINGS.iter().any(|ending| part.ends_with(ending))
    })
}

/// Hashes the bytes of a whole file, or finds that it is not whole.
///
/// Returns `Ok(None)` when the file changed meanwhile. `beat` is called now and then.
///
/// # Errors
/// The file cannot be opened or read.
pub fn hash_file(path: &Path, expected: &Signature, beat: impl Fn()) -> io::Result<Option<String>> {
    // O_NONBLOCK: a FIFO put in the file's place must not block the intake.
    let mut file = OpenOptions::new().read(true).custom_flags(libc::O_NONBLOCK).open(path)?;
    if !is_still(&file, expected)? {
        return Ok(None);
    }
    let mut hasher = blake3::Hasher::new();
    let mut buffer = vec![0_u8; 256 * 1024];
    loop {
        beat();
        match file.read(&mut buffer) {
            Ok(0) => break,
            Ok(count) => {
                hasher.update(&buffer[..count]);
            }
            Err(error) if error.kind() == ErrorKind::Interrupted => {}
            Err(error) => return Err(error),
        }
    }
    Ok(is_still(&file, expected)?.then(|| hasher.finalize().to_hex().to_string()))
}

fn is_still(file: &File, expected: &Signature) -> io::Result<bool> {
    let metadata = file.metadata()?;
    Ok(metadata.is_file() && Signature::of(&metadata) == *expected)
}

/// Counts of what is left alone: each path once, since the last full scan.
#[derive(Debug, Default)]
pub struct ExclusionCounts {
    // Hashes of the paths instead of the paths: 16 bytes for each of perhaps a million files.
    reasons: HashMap<u64, Reason>,
    tally: BTreeMap<Reason, u64>,
}

impl ExclusionCounts {
    /// Counts a path.
    pub fn add(&mut self, path: &Path, reason: Reason) {
        let mut hasher = DefaultHasher::new();
        path.hash(&mut hasher);
        let before = self.reasons.insert(hasher.finish(), reason);
        if let Some(count) = before.and_then(|before| self.tally.get_mut(&before)) {
            *count -= 1;
        }
        *self.tally.entry(reason).or_insert(0) += 1;
    }

    /// The numbers by name of the reason.
    pub fn tally(&self) -> BTreeMap<String, u64> {
        let told = self.tally.iter().filter(|(_, count)| **count > 0);
        told.map(|(reason, count)| (reason.name().to_owned(), *count)).collect()
    }
}
