//! Moving originals out of the inbox when they are finished, if `output.move_finished_to` says so.
//!
//! Finished means: the report is on disk and in the ledger, whatever its verdict. A file keeps its path
//! below the watched folder; a name that is taken gets the content's hash, so that nothing is ever written
//! over. Order: plan in the ledger, move, complete in the ledger; [`resume`] settles what a crash left in
//! between. On another file system the file is copied, hashed and synced before the original goes.
//! A file that cannot be moved stays where it is and is tried again at the next full scan.

use std::fs::{self, File, FileTimes, OpenOptions};
use std::io::{self, ErrorKind, Read, Write};
use std::os::unix::fs::OpenOptionsExt;
use std::path::{Path, PathBuf};

use rustix::fs::{CWD, RenameFlags, renameat_with};
use rustix::io::Errno;

use crate::archive::ledger::{Ledger, LedgerError, Signature};
use crate::archive::ledger_moves::PlannedMove;
use crate::service::analyst::Fault;
use crate::service::config::Config;
use crate::service::exclusion::hash_file;
use crate::service::shared::Shared;

/// Hex digits of the hash in a name that was taken.
const SHORT: usize = 16;

/// Moves every file with this content that still stands in a watched folder.
///
/// # Errors
/// The ledger cannot be used; a file that cannot be moved is no reason to stop.
pub fn move_content(shared: &Shared, config: &Config, blake3: &str) -> Result<(), Fault> {
    if config.output.move_finished_to.as_os_str().is_empty() {
        return Ok(());
    }
    // One at a time: two threads may have finished two files of one name.
    let _guard = shared.lock_moves();
    for (path, signature) in shared.with_ledger(|ledger| ledger.places_of(blake3))? {
        let Some(relative) = relative_path(config, &path) else { continue };
        let is_as_recorded = fs::symlink_metadata(&path)
            .is_ok_and(|metadata| metadata.is_file() && Signature::of(&metadata) == signature);
        // A link stays, and what was changed is a matter of the inbox.
        if is_as_recorded {
            move_file(shared, config, &path, &relative, &signature, blake3)?;
        }
    }
    Ok(())
}

/// Moves what stands at `path` if it is finished: for files that were finished before they were noticed
/// here (a copy of a known content, a key that was set later, a move that failed).
///
/// # Errors
/// The ledger cannot be used.
pub fn move_if_finished(shared: &Shared, path: &Path) -> Result<(), Fault> {
    let settings = shared.settings();
    if settings.config.output.move_finished_to.as_os_str().is_empty() {
        return Ok(());
    }
    match shared.with_ledger(|ledger| ledger.finished_content_at(path, &settings.fingerprint))? {
        Some(blake3) => move_content(shared, &settings.config, &blake3),
        None => Ok(()),
    }
}

/// The path below the watched folder that a file stands in.
fn relative_path(config: &Config, path: &Path) -> Option<PathBuf> {
    config.inbox.folders.iter().find_map(|folder| {
        let named = std::path::absolute(folder).ok()?;
        let real = fs::canonicalize(&named).unwrap_or(named);
        path.strip_prefix(real).ok().map(Path::to_owned)
    })
}

fn move_file(
    shared: &Shared,
    config: &Config,
    path: &Path,
    relative: &Path,
    signature: &Signature,
    blake3: &str,
) -> Result<(), Fault> {
    /// As many copies of one content under one name are kept apart.
    const MOST_NAMES: u32 = 10_000;
    let folder = std::path::absolute(&config.output.move_finished_to)
        .unwrap_or_else(|_| config.output.move_finished_to.clone());
    for number in 0..MOST_NAMES {
        let target = candidate(&folder, relative, blake3, number);
        // Planning it would write over the record of what was moved there.
        if fs::symlink_metadata(&target).is_ok() {
            continue;
        }
        let planned = PlannedMove { origin: path.to_owned(), target, blake3: blake3.to_owned() };
        shared.with_ledger(|ledger| ledger.plan_move(&planned))?;
        match carry(&planned, signature) {
            Ok(moved) => {
                shared.with_ledger(|ledger| ledger.complete_move(&planned, signature, &moved))?;
                tracing::info!(path = %path.display(), to = %planned.target.display(), "original moved");
                return look_again(shared, &planned.target, signature, &moved);
            }
            Err(error) => {
                shared.with_ledger(|ledger| ledger.cancel_move(&planned))?;
                if error.kind() != ErrorKind::AlreadyExists {
                    tracing::warn!(path = %path.display(), %error, "original not moved, it stays in the inbox");
                    return Ok(());
                }
            }
        }
    }
    tracing::warn!(path = %path.display(), "original not moved: every name is taken");
    Ok(())
}

/// Between the last look and the rename another file may have been renamed in: what was moved then is a
/// new file, and gets its job where it stands now.
fn look_again(shared: &Shared, target: &Path, before: &Signature, moved: &Signature) -> Result<(), Fault> {
    // A copy was compared with the hash already.
    let is_copy = before.inode != moved.inode;
    let is_same = before.size == moved.size && before.modified_ns == moved.modified_ns;
    if is_same || is_copy {
        return Ok(());
    }
    match hash_file(target, moved, || {}) {
        Ok(Some(blake3)) => shared.record_file(target, moved, &blake3, shared.next_arrival()),
        Ok(None) | Err(_) => {
            tracing::warn!(path = %target.display(), "changed while it was moved");
            Ok(())
        }
    }
}

/// `a/b.fits.gz` below the folder; if that is taken `a/b.<hash>.fits.gz`, then `a/b.<hash>-2.fits.gz` ...
fn candidate(folder: &Path, relative: &Path, blake3: &str, number: u32) -> PathBuf {
    let plain = folder.join(relative);
    let hash = blake3.get(..SHORT).unwrap_or(blake3);
    let addition = match number {
        0 => return plain,
        1 => format!(".{hash}"),
        _ => format!(".{hash}-{number}"),
    };
    let name = relative.file_name().unwrap_or_default().as_encoded_bytes();
    let at = name.iter().position(|byte| *byte == b'.').filter(|at| *at > 0).unwrap_or(name.len());
    let mut changed = name[..at].to_vec();
    changed.extend_from_slice(addition.as_bytes());
    changed.extend_from_slice(&name[at..]);
    let changed: std::ffi::OsString = std::os::unix::ffi::OsStringExt::from_vec(changed);
    plain.with_file_name(changed)
}

/// Moves the file, never over another one, and returns its new signature when both folders are on disk.
fn carry(planned: &PlannedMove, signature: &Signature) -> io::Result<Signature> {
    let PlannedMove { origin, target, blake3 } = planned;
    let folder = target.parent().unwrap_or(Path::new("/"));
    // Not as "already exists", which here means a name that is taken.
    fs::create_dir_all(folder).map_err(io::Error::other)?;
    match rename_to_new(origin, target) {
        Err(error) if error.kind() == ErrorKind::CrossesDevices => copy(origin, target, signature, blake3)?,
        outcome => outcome?,
    }
    sync_folder(folder)?;
    sync_folder(origin.parent().unwrap_or(Path::new("/")))?;
    Ok(Signature::of(&fs::symlink_metadata(target)?))
}

/// Renames, unless something has the new name already.
fn rename_to_new(from: &Path, to: &Path) -> io::Result<()> {
    match renameat_with(CWD, from, CWD, to, RenameFlags::NOREPLACE) {
        // Some network file systems cannot promise that; a link also never replaces anything.
        Err(Errno::INVAL | Errno::NOSYS | Errno::OPNOTSUPP) => {
            fs::hard_link(from, to)?;
            fs::remove_file(from)
        }
        outcome => Ok(outcome?),
    }
}

/// Copies to another file system, and takes the original away when the copy is whole and on disk.
fn copy(origin: &Path, target: &Path, signature: &Signature, blake3: &str) -> io::Result<()> {
    let temporary = hidden_beside(target);
    remove_if_there(&temporary)?;
    let written =
        write_copy(origin, &temporary, signature, blake3).and_then(|()| rename_to_new(&temporary, target));
    if written.is_err() {
        remove_if_there(&temporary)?;
    }
    written?;
    sync_folder(target.parent().unwrap_or(Path::new("/")))?;
    let taken = take_away(origin, signature);
    if taken.is_err() {
        // Else every further try would leave another copy.
        remove_if_there(target)?;
    }
    taken
}

fn write_copy(origin: &Path, temporary: &Path, signature: &Signature, blake3: &str) -> io::Result<()> {
    let changed = || io::Error::other("the file changed while it was copied");
    let flags = libc::O_NOFOLLOW | libc::O_NONBLOCK;
    let mut source = OpenOptions::new().read(true).custom_flags(flags).open(origin)?;
    let metadata = source.metadata()?;
    if Signature::of(&metadata) != *signature {
        return Err(changed());
    }
    let mut copy = OpenOptions::new().write(true).create_new(true).open(temporary)?;
    let mut hasher = blake3::Hasher::new();
    let mut buffer = vec![0_u8; 256 * 1024];
    loop {
        match source.read(&mut buffer) {
            Ok(0) => break,
            Ok(count) => {
                hasher.update(&buffer[..count]);
                copy.write_all(&buffer[..count])?;
            }
            Err(error) if error.kind() == ErrorKind::Interrupted => {}
            Err(error) => return Err(error),
        }
    }
    if hasher.finalize().to_hex().as_str() != blake3 {
        return Err(changed());
    }
    copy.set_permissions(metadata.permissions())?;
    copy.set_times(FileTimes::new().set_modified(metadata.modified()?))?;
    copy.sync_all()
}

/// Removes the original, unless another file has taken its name: it is put aside under a hidden name first,
/// because between a look and a removal a new file could be renamed in.
fn take_away(origin: &Path, signature: &Signature) -> io::Result<()> {
    let aside = hidden_beside(origin);
    match rename_to_new(origin, &aside) {
        Err(error) if error.kind() == ErrorKind::NotFound => return Ok(()),
        outcome => outcome?,
    }
    let found = Signature::of(&fs::symlink_metadata(&aside)?);
    if (found.size, found.modified_ns, found.inode)
        == (signature.size, signature.modified_ns, signature.inode)
    {
        fs::remove_file(&aside)
    } else {
        rename_to_new(&aside, origin)
    }
}

/// Settles the moves that a crash interrupted: a whole file at the new place counts as moved, all else as
/// not begun. Run it before anything looks at the files.
///
/// # Errors
/// The ledger cannot be used.
pub fn resume(ledger: &mut Ledger) -> Result<(), LedgerError> {
    for planned in ledger.unfinished_moves()? {
        let arrived =
            fs::symlink_metadata(&planned.target).ok().filter(fs::Metadata::is_file).filter(|metadata| {
                let hash = hash_file(&planned.target, &Signature::of(metadata), || {});
                hash.is_ok_and(|hash| hash.as_deref() == Some(planned.blake3.as_str()))
            });
        let Some(metadata) = arrived else {
            ledger.cancel_move(&planned)?;
            continue;
        };
        let after = Signature::of(&metadata);
        let places = ledger.places_of(&planned.blake3)?;
        let recorded = places.into_iter().find(|(path, _)| *path == planned.origin).map(|(_, before)| before);
        if let Some(before) = &recorded
            && let Err(error) = take_away(&planned.origin, before)
        {
            tracing::warn!(path = %planned.origin.display(), %error, "moved, but the original stays as well");
        }
        tracing::info!(path = %planned.origin.display(), to = %planned.target.display(), "interrupted move completed");
        ledger.complete_move(&planned, &recorded.unwrap_or(after), &after)?;
    }
    Ok(())
}

fn hidden_beside(path: &Path) -> PathBuf {
    let mut name = std::ffi::OsString::from(".");
    name.push(path.file_name().unwrap_or_default());
    name.push(".moving");
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
