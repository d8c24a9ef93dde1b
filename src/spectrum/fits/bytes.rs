//! A path to bytes in memory: an ordinary file, of bounded size, unpacked with a bound.

use std::fs::{File, OpenOptions};
use std::io::{self, Read};
use std::os::unix::fs::{FileTypeExt, OpenOptionsExt};
use std::path::Path;

use flate2::read::MultiGzDecoder;

use super::FileFault;

const GZIP_START: [u8; 2] = [0x1f, 0x8b];

/// Opens an ordinary file for reading; never waits for a pipe, never opens a device.
pub fn open_regular_file(path: &Path) -> Result<File, FileFault> {
    // Without O_NONBLOCK, opening a pipe that nobody writes to would wait for ever.
    let file =
        OpenOptions::new().read(true).custom_flags(libc::O_NONBLOCK).open(path).map_err(
            |error| match error.kind() {
                io::ErrorKind::NotFound | io::ErrorKind::NotADirectory => FileFault::Missing,
                _ if error.raw_os_error() == Some(libc::ENXIO) => FileFault::NotRegular { found: "a socket" },
                _ => FileFault::Unreadable(error),
            },
        )?;
    // Asked of the open file, not of the path: the path may have changed meanwhile.
    let kind = file.metadata().map_err(FileFault::Unreadable)?.file_type();
    if !kind.is_file() {
        let found = match () {
            () if kind.is_dir() => "a folder",
            () if kind.is_fifo() => "a pipe",
            () if kind.is_socket() => "a socket",
            () => "a device",
        };
        return Err(FileFault::NotRegular { found });
    }
    Ok(file)
}

/// All bytes of an open file, if they are not too many.
pub fn read_open_file(file: File, largest_bytes: u64) -> Result<Vec<u8>, FileFault> {
    read_bounded(file, largest_bytes, "on disk").map_err(|fault| match fault {
        BoundedFault::TooLarge(fault) | BoundedFault::NoMemory(fault) => fault,
        BoundedFault::Io(error) => FileFault::Unreadable(error),
    })
}

/// Unpacks gzip (also several members in a row); other bytes are returned as they are.
pub fn unpack(packed: Vec<u8>, largest_bytes: u64) -> Result<Vec<u8>, FileFault> {
    if !packed.starts_with(&GZIP_START) {
        return Ok(packed);
    }
    read_bounded(MultiGzDecoder::new(packed.as_slice()), largest_bytes, "after unpacking").map_err(|fault| {
        match fault {
            BoundedFault::TooLarge(fault) | BoundedFault::NoMemory(fault) => fault,
            BoundedFault::Io(error) => FileFault::BadGzip(error),
        }
    })
}

enum BoundedFault {
    TooLarge(FileFault),
    NoMemory(FileFault),
    Io(io::Error),
}

fn read_bounded(source: impl Read, largest_bytes: u64, when: &'static str) -> Result<Vec<u8>, BoundedFault> {
    let mut bytes = Vec::new();
    let outcome = source.take(largest_bytes.saturating_add(1)).read_to_end(&mut bytes);
    outcome.map_err(|error| match error.kind() {
        io::ErrorKind::OutOfMemory => BoundedFault::NoMemory(FileFault::NoMemory { when }),
        _ => BoundedFault::Io(error),
    })?;
    if bytes.len() as u64 > largest_bytes {
        return Err(BoundedFault::TooLarge(FileFault::TooLarge { largest_bytes, when }));
    }
    Ok(bytes)
}
