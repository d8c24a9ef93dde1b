//! FITS files of our own making, sealed with a checksum that is verified before the C library sees them.
//!
//! The primary header holds `BLAKE3`: the hash of the whole file with the 64 digits of that card set to
//! zero. Reading: ordinary file, size cap, hash in Rust, then a sealed memory file under a name without
//! special characters, so that neither the extended file-name parser nor a damaged header can do harm.
//! Writing: into a temporary folder, hash patched in, then moved into place atomically.

use std::fs;
use std::io::{self, Read, Write};
use std::os::fd::AsRawFd;
use std::path::{Path, PathBuf};

use fitsio::FitsFile;
use memfd::{FileSeal, MemfdOptions};
use thiserror::Error;

const CARD: &[u8] = b"BLAKE3  = '";
/// Header key of the seal.
pub const SEAL_KEY: &str = "BLAKE3";
/// What a writer puts under [`SEAL_KEY`] before the file is sealed.
pub const UNSEALED: &str = "0000000000000000000000000000000000000000000000000000000000000000";
const DIGITS: usize = UNSEALED.len();
/// Cards lie in the first blocks of the file; further on there is nothing to look for.
const HEADER_CAP: usize = 10 * 2880;

/// Why a sealed file could not be read or written.
#[derive(Debug, Error)]
pub enum SealedFitsError {
    /// The file system refused.
    #[error("cannot {action} {path}", path = path.display())]
    Io {
        /// What was attempted.
        action: &'static str,
        /// On which file.
        path: PathBuf,
        /// The system's answer.
        source: io::Error,
    },
    /// Not an ordinary file, or larger than any table of ours.
    #[error("cannot use {path}: found {found_bytes} bytes, need an ordinary file of at most {most_bytes} bytes",
        path = path.display())]
    NotOrdinary {
        /// Which file.
        path: PathBuf,
        /// Its size.
        found_bytes: u64,
        /// The cap.
        most_bytes: u64,
    },
    /// No seal, or a seal that does not fit the bytes.
    #[error("cannot trust {path}: found checksum {found}, need {need} (rebuild or copy the file again)",
        path = path.display())]
    Broken {
        /// Which file.
        path: PathBuf,
        /// The checksum of its bytes.
        found: String,
        /// The checksum it states.
        need: String,
    },
    /// The temporary folder's name would be misread by the FITS library.
    #[error("cannot write through {path}: found special characters, need only letters, digits, / . _ - (set TMPDIR)",
        path = path.display())]
    AwkwardName {
        /// Which folder.
        path: PathBuf,
    },
    /// The FITS library refused.
    #[error("cannot read or write the FITS structure")]
    Fits(#[from] fitsio::errors::Error),
}

fn io_fault(action: &'static str, path: &Path) -> impl FnOnce(io::Error) -> SealedFitsError {
    let path = path.to_owned();
    move |source| SealedFitsError::Io { action, path, source }
}

/// Position of the digits of the seal.
fn seal_position(bytes: &[u8]) -> Option<usize> {
    let header = &bytes[..bytes.len().min(HEADER_CAP)];
    let card = header.chunks(80).position(|card| card.starts_with(CARD))?;
    let start = card * 80 + CARD.len();
    (start + DIGITS <= header.len()).then_some(start)
}

/// The stated and the true checksum; the bytes are left with zeros in place of the seal.
fn unseal(bytes: &mut [u8]) -> Option<(String, String)> {
    let start = seal_position(bytes)?;
    let digits = &mut bytes[start..start + DIGITS];
    let stated = String::from_utf8_lossy(digits).into_owned();
    digits.copy_from_slice(UNSEALED.as_bytes());
    Some((stated, blake3::hash(bytes).to_hex().to_string()))
}

/// Opens a sealed file whose checksum fits, and returns it with the checksum.
///
/// # Errors
/// [`SealedFitsError`]; nothing of a file with a wrong checksum reaches the FITS library.
pub fn open_sealed(path: &Path, most_bytes: u64) -> Result<(FitsFile, String), SealedFitsError> {
    let file = fs::File::open(path).map_err(io_fault("open", path))?;
    let metadata = file.metadata().map_err(io_fault("inspect", path))?;
    if !metadata.is_file() || metadata.len() > most_bytes {
        return Err(SealedFitsError::NotOrdinary {
            path: path.to_owned(),
            found_bytes: metadata.len(),
            most_bytes,
        });
    }
    let mut bytes = Vec::with_capacity(metadata.len() as usize);
    file.take(most_bytes).read_to_end(&mut bytes).map_err(io_fault("read", path))?;
    let broken = |found: String, need: String| SealedFitsError::Broken { path: path.to_owned(), found, need };
    let Some((stated, found)) = unseal(&mut bytes) else {
        return Err(broken("none".to_owned(), "a BLAKE3 card in the first header".to_owned()));
    };
    if stated != found {
        return Err(broken(found, stated));
    }
    let memory = MemfdOptions::default()
        .allow_sealing(true)
        .close_on_exec(true)
        .create("sealed-fits")
        .map_err(|fault| io_fault("load", path)(io::Error::other(fault)))?;
    memory.as_file().write_all(&bytes).map_err(io_fault("load", path))?;
    let seals = [FileSeal::SealShrink, FileSeal::SealGrow, FileSeal::SealWrite, FileSeal::SealSeal];
    memory.add_seals(&seals).map_err(|fault| io_fault("load", path)(io::Error::other(fault)))?;
    // The library opens the memory anew through this name, so ours may close when the function ends.
    let opened = FitsFile::open(format!("/proc/self/fd/{}", memory.as_file().as_raw_fd()))?;
    Ok((opened, found))
}

/// Writes a FITS file through `fill`, seals it and moves it into place; returns the checksum.
///
/// `fill` must put [`UNSEALED`] under [`SEAL_KEY`] into the primary header.
///
/// # Errors
/// [`SealedFitsError`].
pub fn write_sealed(
    path: &Path,
    fill: impl FnOnce(&mut FitsFile) -> Result<(), fitsio::errors::Error>,
) -> Result<String, SealedFitsError> {
    let folder = std::env::temp_dir();
    let draft = folder.join(format!("emberline-{}.fits", std::process::id()));
    let plain = |c: char| c.is_ascii_alphanumeric() || "/._-".contains(c);
    if !draft.to_str().is_some_and(|name| name.chars().all(plain)) {
        return Err(SealedFitsError::AwkwardName { path: folder });
    }
    {
        let mut fits = FitsFile::create(&draft).overwrite().open()?;
        fill(&mut fits)?;
    }
    let mut bytes = fs::read(&draft).map_err(io_fault("read", &draft))?;
    fs::remove_file(&draft).map_err(io_fault("remove", &draft))?;
    let Some((start, (_, checksum))) = seal_position(&bytes).zip(unseal(&mut bytes)) else {
        return Err(SealedFitsError::Broken {
            path: draft,
            found: "none".to_owned(),
            need: "a BLAKE3 card in the first header".to_owned(),
        });
    };
    bytes[start..start + DIGITS].copy_from_slice(checksum.as_bytes());

    let parent = path.parent().filter(|p| !p.as_os_str().is_empty()).unwrap_or(Path::new("."));
    let mut name = path.file_name().unwrap_or_default().to_owned();
    name.push(".part");
    let part = parent.join(name);
    let mut file = fs::File::create(&part).map_err(io_fault("create", &part))?;
    file.write_all(&bytes).map_err(io_fault("write", &part))?;
    file.sync_all().map_err(io_fault("write", &part))?;
    fs::rename(&part, path).map_err(io_fault("move into place", path))?;
    fs::File::open(parent).and_then(|folder| folder.sync_all()).map_err(io_fault("sync", parent))?;
    Ok(checksum)
}
