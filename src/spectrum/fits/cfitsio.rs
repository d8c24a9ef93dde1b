//! The one audited file with `unsafe`: a handle of the C library on sealed memory.
//!
//! What the library gets is decided here and in `walk`: a header that we wrote (never the file's
//! own), data whose length that header states truly, a file descriptor instead of a name to parse
//! (`fits_open_diskfile` on `/proc/self/fd/N`: the extended file-name syntax is not applied), and
//! requests inside the shape that the header states. It is opened read only on memory sealed against
//! every change, so nothing can be written and the size cannot change while it reads.
//!
//! A handle stays on its thread (`*mut` is not `Send`); the library itself is built reentrant.

#![allow(unsafe_code)]

use std::ffi::CString;
use std::io::Write;
use std::os::fd::AsRawFd;
use std::ptr;

use fitsio_sys::fitsfile;
use memfd::{FileSeal, Memfd, MemfdOptions};

use super::header::BLOCK_BYTES;

/// One extension, open in the C library.
pub struct Handle {
    /// Never null, closed exactly once, in `drop`.
    file: *mut fitsfile,
    /// The memory behind it; must outlive `file`, hence dropped after `drop` has run.
    _memory: Memfd,
}

impl Handle {
    /// Opens an image or a table given as a checked header (whole blocks) and its data.
    pub fn open(header: &str, data: &[u8]) -> Result<Self, String> {
        let memory = seal(header, data).map_err(|error| format!("no sealed memory: {error}"))?;
        let name = CString::new(format!("/proc/self/fd/{}", memory.as_file().as_raw_fd()))
            .map_err(|error| error.to_string())?;
        let mut file: *mut fitsfile = ptr::null_mut();
        let mut status = 0;
        // SAFETY: `name` is a C string that outlives the call; `file` and `status` are valid for
        // writing. Mode 0 is read only. On failure the library leaves `file` null.
        unsafe { fitsio_sys::ffdkopn(&mut file, name.as_ptr(), 0, &mut status) };
        if file.is_null() {
            return Err(message(status.max(1)));
        }
        // From here on `drop` closes the file, also on the error paths below.
        let handle = Handle { file, _memory: memory };
        if status != 0 {
            return Err(message(status));
        }
        if header.starts_with("XTENSION") {
            // SAFETY: `file` is an open handle; a null type pointer is allowed by the library.
            unsafe { fitsio_sys::ffmahd(handle.file, 2, ptr::null_mut(), &mut status) };
            if status != 0 {
                return Err(message(status));
            }
        }
        Ok(handle)
    }

    /// `count` values of column `number` (from 1) from `row` (from 0) on; undefined ones are NaN.
    pub fn column(&mut self, number: i32, row: u64, count: u64) -> Result<Vec<f64>, String> {
        let (first_row, wanted) = (to_signed(row)? + 1, to_signed(count)?);
        self.fill(count, |file, values, status| {
            let mut any_null = 0;
            // SAFETY: `values` has room for `wanted` numbers; the library checks column and rows
            // against the header, which states the true length of the data.
            unsafe {
                fitsio_sys::ffgcvd(
                    file,
                    number,
                    first_row,
                    1,
                    wanted,
                    f64::NAN,
                    values,
                    &mut any_null,
                    status,
                )
            };
        })
    }

    /// `count` pixels from index `first` (from 0) on; undefined ones are NaN.
    pub fn pixels(&mut self, first: u64, count: u64) -> Result<Vec<f64>, String> {
        let (first_pixel, wanted) = (to_signed(first)? + 1, to_signed(count)?);
        self.fill(count, |file, values, status| {
            let mut any_null = 0;
            // SAFETY: as for `column`; group 1 is the only one.
            unsafe {
                fitsio_sys::ffgpvd(file, 1, first_pixel, wanted, f64::NAN, values, &mut any_null, status)
            };
        })
    }

    fn fill(
        &mut self,
        count: u64,
        read: impl FnOnce(*mut fitsfile, *mut f64, &mut i32),
    ) -> Result<Vec<f64>, String> {
        let length = usize::try_from(count).map_err(|error| error.to_string())?;
        let mut values = vec![f64::NAN; length];
        let mut status = 0;
        read(self.file, values.as_mut_ptr(), &mut status);
        if status == 0 { Ok(values) } else { Err(message(status)) }
    }
}

impl Drop for Handle {
    fn drop(&mut self) {
        let mut status = 0;
        // SAFETY: `file` is open and is not used again. A read-only close has nothing to lose.
        unsafe { fitsio_sys::ffclos(self.file, &mut status) };
    }
}

/// Writes header and data into anonymous memory and forbids every change. A table gets the empty
/// primary unit that the standard demands before it.
fn seal(header: &str, data: &[u8]) -> Result<Memfd, Box<dyn std::error::Error>> {
    let memory = MemfdOptions::default().allow_sealing(true).close_on_exec(true).create("emberline-fits")?;
    let mut file = memory.as_file();
    if header.starts_with("XTENSION") {
        let primary = [
            "SIMPLE  =                    T",
            "BITPIX  =                    8",
            "NAXIS   =                    0",
            "END",
        ];
        let cards: String = primary.iter().map(|card| format!("{card:80}")).collect();
        file.write_all(format!("{cards:BLOCK_BYTES$}").as_bytes())?;
    }
    file.write_all(header.as_bytes())?;
    file.write_all(data)?;
    file.write_all(&vec![0; data.len().next_multiple_of(BLOCK_BYTES) - data.len()])?;
    memory.add_seals(&[FileSeal::SealShrink, FileSeal::SealGrow, FileSeal::SealWrite, FileSeal::SealSeal])?;
    Ok(memory)
}

fn to_signed(value: u64) -> Result<i64, String> {
    i64::try_from(value).map_err(|error| error.to_string())
}

/// The library's own words for a status.
fn message(status: i32) -> String {
    let mut text = [0 as std::os::raw::c_char; 31];
    // SAFETY: the library writes at most 30 characters and a zero.
    unsafe { fitsio_sys::ffgerr(status, text.as_mut_ptr()) };
    let words: String =
        text.iter().take_while(|byte| **byte != 0).map(|byte| char::from(*byte as u8)).collect();
    // SAFETY: clears this thread-shared message stack; no pointers are involved.
    unsafe { fitsio_sys::ffcmsg() };
    format!("{words} (cfitsio status {status})")
}
