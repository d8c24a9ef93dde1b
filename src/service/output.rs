//! Writing reports: names made safe, files never torn, pointers switched in one step.
//!
//! Layout, below `output.reports`:
//! `<object>/<source>.<fingerprint>.json`, one file for each spectrum and configuration, never changed
//! once it stands there; `<object>/<source>.current.json`, a symbolic link to the one in force.
//! `<source>` is the first 16 hex digits of the input's BLAKE3 (with `-2`, `-3` ... for further
//! spectra of the same object in one file), `<fingerprint>` the first 16 of the fingerprint.
//! So two spectra of one star do not overwrite each other, and `*/*.current.json` is the catalogue.
//!
//! Order of one report: temporary file, sync, rename, pointer (also by rename), sync of the folder;
//! then, by the caller, the ledger. A crash in between repeats the job, finds the report, and keeps it.

use std::fs::{self, File};
use std::io::{self, ErrorKind, Write};
use std::os::unix::fs::symlink;
use std::path::{Path, PathBuf};

use crate::archive::column;

/// Longest readable part of a folder's name, bytes.
const MAX_NAME_BYTES: usize = 80;

/// Hex digits kept of hashes in names: 64 bits.
const SHORT: usize = 16;

/// Where a report and its pointer go, relative to the folder of reports.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct ReportPlace {
    /// The report.
    pub report: String,
    /// The pointer to the report in force.
    pub pointer: String,
}

impl ReportPlace {
    /// For the `occurrence`-th (from 0) spectrum of an object in a file.
    pub fn new(object_name: &str, bytes_blake3: &str, occurrence: usize, fingerprint: &str) -> ReportPlace {
        let folder = safe_name(object_name);
        let mut source = short(bytes_blake3).to_owned();
        if occurrence > 0 {
            source.push_str(&format!("-{}", occurrence + 1));
        }
        ReportPlace {
            report: format!("{folder}/{source}.{}.json", short(fingerprint)),
            pointer: format!("{folder}/{source}.current.json"),
        }
    }
}

fn short(hash: &str) -> &str {
    hash.get(..SHORT).unwrap_or(hash)
}

/// A name for a folder: ASCII letters, digits and `+-_.` stay, so ordinary names stay readable.
/// A name that had to be changed gets `~` and a hash of the original, and no unchanged name contains
/// `~`: different names never meet.
pub fn safe_name(name: &str) -> String {
    let is_plain = |c: char| c.is_ascii_alphanumeric() || "+-_.".contains(c);
    if !name.is_empty()
        && name.len() <= MAX_NAME_BYTES
        && name.chars().all(is_plain)
        && !name.starts_with('.')
    {
        return name.to_owned();
    }
    let mut safe: String =
        name.chars().take(MAX_NAME_BYTES).map(|c| if is_plain(c) { c } else { '_' }).collect();
    if safe.starts_with('.') {
        safe.replace_range(..1, "_");
    }
    let hash = blake3::hash(name.as_bytes()).to_hex();
    format!("{safe}~{}", short(&hash))
}

/// Writes a report unless a whole one stands there already, makes the pointer lead to it if it
/// `is_in_force`, and returns when both would survive a power cut.
///
/// # Errors
/// The folder, file or link cannot be made, written or synced.
pub fn publish(reports: &Path, place: &ReportPlace, json: &[u8], is_in_force: bool) -> io::Result<()> {
    let path = reports.join(&place.report);
    let folder = path.parent().unwrap_or(reports);
    if !is_whole_json(&path) {
        if !folder.is_dir() {
            fs::create_dir_all(folder)?;
            sync_folder(reports)?;
        }
        let temporary = temporary_for(&path);
        let mut file = File::create(&temporary)?;
        file.write_all(json)?;
        file.sync_all()?;
        fs::rename(&temporary, &path)?;
    }
    if is_in_force {
        point(reports, place)?;
    }
    sync_folder(folder)
}

/// Makes a report under another fingerprint stand for this place too, and the pointer lead to it: nothing
/// that went into the answer has changed, so the same bytes are the answer. Says whether that could be
/// done; it cannot where the earlier report is gone or torn.
///
/// # Errors
/// The links cannot be made or synced.
pub fn adopt(reports: &Path, place: &ReportPlace, earlier: &str, is_in_force: bool) -> io::Result<bool> {
    let (own, earlier) = (reports.join(&place.report), reports.join(earlier));
    if own.parent() != earlier.parent() || !is_whole_json(&earlier) {
        return Ok(false);
    }
    if !is_whole_json(&own) {
        // Always a link to the file itself: links to links would grow with each reload.
        let file = fs::read_link(&earlier).unwrap_or(earlier);
        let temporary = temporary_for(&own);
        remove_if_there(&temporary)?;
        symlink(file.file_name().unwrap_or_default(), &temporary)?;
        fs::rename(&temporary, &own)?;
    }
    if is_in_force {
        point(reports, place)?;
    }
    sync_folder(own.parent().unwrap_or(reports))?;
    Ok(true)
}

/// Makes the pointer lead to the report, in one step.
///
/// # Errors
/// The link cannot be made.
pub fn point(reports: &Path, place: &ReportPlace) -> io::Result<()> {
    let pointer = reports.join(&place.pointer);
    let target = Path::new(Path::new(&place.report).file_name().unwrap_or_default());
    if fs::read_link(&pointer).is_ok_and(|present| present == target) {
        return Ok(());
    }
    let temporary = temporary_for(&pointer);
    remove_if_there(&temporary)?;
    symlink(target, &temporary)?;
    fs::rename(&temporary, &pointer)
}

/// The catalogue's row of a report on disk.
///
/// # Errors
/// The report cannot be read, or is no JSON.
pub fn catalogue_row(
    reports: &Path,
    report: &str,
    pointer: &str,
    is_current: bool,
) -> io::Result<Vec<column::Cell>> {
    let document = serde_json::from_slice(&fs::read(reports.join(report))?)?;
    Ok(column::row(&document, report, pointer, is_current))
}

/// Removes a pointer that is no longer in force; the report stays.
///
/// # Errors
/// The link cannot be removed.
pub fn retire(reports: &Path, pointer: &str) -> io::Result<()> {
    remove_if_there(&reports.join(pointer))
}

/// Tries whether reports can be written, before any work is done for them.
///
/// # Errors
/// They cannot.
pub fn check_writable(reports: &Path) -> io::Result<()> {
    fs::create_dir_all(reports)?;
    let probe = reports.join(".probe.tmp");
    File::create(&probe)?.write_all(b"emberline")?;
    fs::remove_file(&probe)
}

fn is_whole_json(path: &Path) -> bool {
    fs::read(path).is_ok_and(|bytes| serde_json::from_slice::<serde::de::IgnoredAny>(&bytes).is_ok())
}

// The same name for every try: a crash leaves at most one behind, and the repeat takes it over.
fn temporary_for(path: &Path) -> PathBuf {
    let mut name = std::ffi::OsString::from(".");
    name.push(path.file_name().unwrap_or_default());
    name.push(".tmp");
    path.with_file_name(name)
}

fn remove_if_there(path: &Path) -> io::Result<()> {
    match fs::remove_file(path) {
        Err(error) if error.kind() != ErrorKind::NotFound => Err(error),
        _ => Ok(()),
    }
}

fn sync_folder(folder: &Path) -> io::Result<()> {
    File::open(folder)?.sync_all()
}
