//! FITS files opened so that no file may bring the program down.
//!
//! The C library is fast and complete but trusts names, sizes and headers, so it is given none of
//! them: `bytes` opens the path in Rust (ordinary file, bounded size, hashed, unpacked with a
//! bound), `walk` parses every header in Rust and compares declared sizes with the bytes that are
//! there, and `cfitsio`, the only file with `unsafe`, decodes one extension at a time from sealed
//! memory behind a header that we wrote ourselves. Headers are answered from the Rust side only.
//!
//! Checked by `spectrum::mutants` in the test binary: thousands of mutated files, no crash.

mod bytes;
mod cfitsio;
mod header;
mod walk;

pub use header::{Header, Value};
pub use walk::{Column, Hdu, Image, Kind, Table};

pub use bytes::open_regular_file;

use std::cell::RefCell;
use std::collections::BTreeMap;
use std::collections::btree_map::Entry;
use std::fs::File;
use std::io;
use std::path::Path;

use cfitsio::Handle;

use crate::codes::{self, Code, Disposition};

/// Most values given out by one call: 160 MB of f64, more than any one-dimensional spectrum needs.
const MOST_VALUES: u64 = 20_000_000;

/// A FITS file whose headers were walked and whose sizes were found true.
pub struct FitsFile {
    hdus: Vec<Hdu>,
    bytes: Vec<u8>,
    /// The units that the C library has open, by index: readers go back and forth between them.
    open: RefCell<BTreeMap<usize, Handle>>,
}

impl FitsFile {
    /// Reads and checks a file of at most `largest_bytes`, packed or unpacked.
    ///
    /// # Errors
    /// [`FileFault`].
    pub fn read(path: &Path, largest_bytes: u64) -> Result<Self, FileFault> {
        let packed = bytes::read_open_file(bytes::open_regular_file(path)?, largest_bytes)?;
        Self::parse(packed, largest_bytes)
    }

    /// Checks the bytes of a file, packed with gzip or plain.
    ///
    /// # Errors
    /// [`FileFault`].
    pub fn parse(packed: Vec<u8>, largest_bytes: u64) -> Result<Self, FileFault> {
        Self::of_unpacked(bytes::unpack(packed, largest_bytes)?)
    }

    /// Checks bytes that are not packed.
    ///
    /// # Errors
    /// [`FileFault`].
    pub fn of_unpacked(bytes: Vec<u8>) -> Result<Self, FileFault> {
        let hdus = walk::walk(&bytes)?;
        Ok(FitsFile { hdus, bytes, open: RefCell::default() })
    }

    /// All header-data units, the primary first.
    pub fn hdus(&self) -> &[Hdu] {
        &self.hdus
    }

    /// How many extensions the first header announces beyond those that are there: the file may have
    /// been cut between two of them, or the keyword is left over from its origin.
    pub fn missing_extensions(&self) -> u64 {
        let announced = self.hdus[0].header.integer("NEXTEND").unwrap_or(0);
        u64::try_from(announced).unwrap_or(0).saturating_sub(self.hdus.len() as u64 - 1)
    }

    /// The first unit with this `EXTNAME`, letter case aside.
    pub fn hdu_named(&self, name: &str) -> Option<&Hdu> {
        self.hdus.iter().find(|hdu| hdu.is_named(name))
    }

    /// All values of a column of numbers, row after row; scaled, with undefined values as NaN. Truth
    /// values are 1 and 0.
    ///
    /// # Errors
    /// [`FileFault::BadData`], also when there is no such column.
    pub fn column(&self, hdu: &Hdu, name: &str) -> Result<Vec<f64>, FileFault> {
        let (table, column) = find_column(hdu, name)?;
        self.column_values(hdu, column, 0, table.rows)
    }

    /// All values of one cell of a numeric column.
    ///
    /// # Errors
    /// [`FileFault::BadData`], also when there is no such column or row.
    pub fn cell(&self, hdu: &Hdu, name: &str, row: u64) -> Result<Vec<f64>, FileFault> {
        let (table, column) = find_column(hdu, name)?;
        if row >= table.rows {
            return Err(bad_data(hdu, format!("found {} rows, need row {row}", table.rows)));
        }
        self.column_values(hdu, column, row, 1)
    }

    /// One value of a column of whole numbers, exactly.
    ///
    /// # Errors
    /// [`FileFault::BadData`], also when the column is missing or not of whole numbers.
    pub fn integer_cell(&self, hdu: &Hdu, name: &str, row: u64) -> Result<i64, FileFault> {
        let (table, column) = find_column(hdu, name)?;
        let cell = self.cell_bytes(hdu, table, column, row)?;
        let integer = match (column.letter, cell) {
            ('B', &[byte, ..]) => i64::from(byte),
            ('I', &[a, b, ..]) => i64::from(i16::from_be_bytes([a, b])),
            ('J', &[a, b, c, d, ..]) => i64::from(i32::from_be_bytes([a, b, c, d])),
            ('K', &[a, b, c, d, e, f, g, h, ..]) => i64::from_be_bytes([a, b, c, d, e, f, g, h]),
            _ => return Err(bad_data(hdu, format!("column {name} does not hold whole numbers"))),
        };
        Ok(integer)
    }

    /// One text cell, without padding.
    ///
    /// # Errors
    /// [`FileFault::BadData`], also when the column is missing or not of text.
    pub fn text_cell(&self, hdu: &Hdu, name: &str, row: u64) -> Result<String, FileFault> {
        let (table, column) = find_column(hdu, name)?;
        if column.letter != 'A' {
            return Err(bad_data(hdu, format!("column {name} does not hold text")));
        }
        let cell = self.cell_bytes(hdu, table, column, row)?;
        let text = cell.split(|byte| *byte == 0).next().unwrap_or_default();
        Ok(String::from_utf8_lossy(text).trim().to_owned())
    }

    /// `count` pixels of an image from index `first` on, in file order (first axis fastest).
    ///
    /// # Errors
    /// [`FileFault::BadData`], also when the pixels are outside the image.
    pub fn pixels(&self, hdu: &Hdu, first: u64, count: u64) -> Result<Vec<f64>, FileFault> {
        let Kind::Image(image) = &hdu.kind else {
            return Err(bad_data(hdu, "found no image, need one".to_owned()));
        };
        let last =
            first.checked_add(count).ok_or_else(|| bad_data(hdu, "pixel index overflows".to_owned()))?;
        if last > image.pixels() {
            return Err(bad_data(hdu, format!("found {} pixels, need {last}", image.pixels())));
        }
        self.decode(hdu, count, |handle| handle.pixels(first, count))
    }

    fn column_values(&self, hdu: &Hdu, column: &Column, row: u64, rows: u64) -> Result<Vec<f64>, FileFault> {
        let name = &column.name;
        let Some(number) = column.number.filter(|_| column.is_numeric() || column.is_logical()) else {
            return Err(bad_data(hdu, format!("column {name} does not hold numbers")));
        };
        let count = rows
            .checked_mul(column.repeat)
            .ok_or_else(|| bad_data(hdu, format!("column {name} is too large")))?;
        let mut values = self.decode(hdu, count, |handle| handle.column(number, row, count))?;
        if column.is_logical() {
            values.iter_mut().for_each(|value| *value = truth(*value));
        }
        Ok(values)
    }

    fn cell_bytes(&self, hdu: &Hdu, table: &Table, column: &Column, row: u64) -> Result<&[u8], FileFault> {
        let missing = || bad_data(hdu, format!("found {} rows, need row {row}", table.rows));
        if row >= table.rows {
            return Err(missing());
        }
        let start = hdu.data.start + (row * table.row_bytes) as usize + column.offset;
        self.bytes.get(start..start + column.width).ok_or_else(missing)
    }

    /// Has the C library open this unit and read `count` values from it.
    fn decode(
        &self,
        hdu: &Hdu,
        count: u64,
        read: impl FnOnce(&mut Handle) -> Result<Vec<f64>, String>,
    ) -> Result<Vec<f64>, FileFault> {
        if count > MOST_VALUES {
            return Err(bad_data(hdu, format!("found {count} values, need at most {MOST_VALUES}")));
        }
        let mut open = self.open.borrow_mut();
        let handle = match open.entry(hdu.index) {
            Entry::Occupied(entry) => entry.into_mut(),
            Entry::Vacant(entry) => {
                let data = self.bytes.get(hdu.plain_data()).unwrap_or_default();
                let handle = Handle::open(&hdu.plain_header(), data).map_err(|why| bad_data(hdu, why))?;
                entry.insert(handle)
            }
        };
        read(handle).map_err(|why| bad_data(hdu, why))
    }
}

/// The unpacked bytes of an open file of at most `largest_bytes`, packed or unpacked, and the BLAKE3 of the
/// bytes on disk, hexadecimal.
///
/// # Errors
/// [`FileFault`].
pub fn read_unpacked(file: File, largest_bytes: u64) -> Result<(Vec<u8>, String), FileFault> {
    let packed = bytes::read_open_file(file, largest_bytes)?;
    let blake3 = blake3::hash(&packed).to_hex().to_string();
    Ok((bytes::unpack(packed, largest_bytes)?, blake3))
}

fn find_column<'a>(hdu: &'a Hdu, name: &str) -> Result<(&'a Table, &'a Column), FileFault> {
    let Kind::Table(table) = &hdu.kind else {
        return Err(bad_data(hdu, "found no table, need one".to_owned()));
    };
    let column =
        table.column(name).ok_or_else(|| bad_data(hdu, format!("found no column {name}, need one")))?;
    Ok((table, column))
}

/// A logical cell holds the letter T or F, or zero where undefined.
fn truth(letter: f64) -> f64 {
    match letter as u8 {
        b'T' => 1.0,
        b'F' => 0.0,
        _ => f64::NAN,
    }
}

fn bad_data(hdu: &Hdu, detail: String) -> FileFault {
    FileFault::BadData { hdu: hdu.index, detail }
}

/// Why a file cannot be opened as FITS.
#[derive(Debug, thiserror::Error)]
pub enum FileFault {
    /// There is no such file.
    #[error("cannot open the file: found nothing of this name")]
    Missing,
    /// A folder, pipe, socket or device.
    #[error("cannot open the file: found {found}, need an ordinary file")]
    NotRegular {
        /// What it is.
        found: &'static str,
    },
    /// The operating system refused.
    #[error("cannot read the file")]
    Unreadable(#[source] io::Error),
    /// No bytes.
    #[error("cannot use the file: found 0 bytes, need FITS")]
    Empty,
    /// More bytes than the limit, before or after unpacking.
    #[error("cannot use the file: found more than {largest_bytes} bytes {when} (raise largest_file_mb)")]
    TooLarge {
        /// The limit.
        largest_bytes: u64,
        /// Before or after unpacking.
        when: &'static str,
    },
    /// The memory that this process may use does not hold the file.
    #[error("cannot hold the file in memory {when}")]
    NoMemory {
        /// Before or after unpacking.
        when: &'static str,
    },
    /// Starts like gzip but does not unpack.
    #[error("cannot unpack the file")]
    BadGzip(#[source] io::Error),
    /// Does not start like FITS.
    #[error("cannot use the file: found {found:?} at the start, need \"SIMPLE  =\"")]
    NotFits {
        /// The first characters.
        found: String,
    },
    /// A header breaks the standard.
    #[error("cannot use the header of HDU {hdu}: {detail}")]
    BadHeader {
        /// From 0.
        hdu: usize,
        /// What was found and what was needed.
        detail: String,
    },
    /// The file ends too early.
    #[error("cannot use HDU {hdu}: found {found} of {needed} {what} (copy the file again)")]
    Truncated {
        /// From 0.
        hdu: usize,
        /// Of what.
        what: &'static str,
        /// How much is there.
        found: u64,
        /// How much is declared.
        needed: u64,
    },
    /// Data that are not what the reader needs or that the C library refuses.
    #[error("cannot read the data of HDU {hdu}: {detail}")]
    BadData {
        /// From 0.
        hdu: usize,
        /// What was found and what was needed.
        detail: String,
    },
}

impl FileFault {
    /// The row of the table of codes.
    pub fn code(&self) -> &'static Code {
        match self {
            FileFault::Missing => &codes::FILE_MISSING,
            FileFault::NotRegular { .. } => &codes::FILE_NOT_REGULAR,
            FileFault::Unreadable(_) => &codes::FILE_UNREADABLE,
            FileFault::Empty => &codes::FILE_EMPTY,
            FileFault::TooLarge { .. } => &codes::FILE_TOO_LARGE,
            FileFault::NoMemory { .. } => &codes::READER_MEMORY,
            FileFault::BadGzip(_) => &codes::FILE_BAD_GZIP,
            FileFault::NotFits { .. } => &codes::FILE_NOT_FITS,
            FileFault::BadHeader { .. } => &codes::FILE_BAD_HEADER,
            FileFault::Truncated { .. } => &codes::FILE_TRUNCATED,
            FileFault::BadData { .. } => &codes::FILE_BAD_DATA,
        }
    }

    /// What looks unfinished or like a hiccup may be whole at the next try; the rest never will.
    pub fn disposition(&self) -> Disposition {
        match self {
            FileFault::Unreadable(_)
            | FileFault::Empty
            | FileFault::BadGzip(_)
            | FileFault::Truncated { .. } => Disposition::Retry,
            FileFault::Missing
            | FileFault::NotRegular { .. }
            | FileFault::TooLarge { .. }
            | FileFault::NoMemory { .. }
            | FileFault::NotFits { .. }
            | FileFault::BadHeader { .. }
            | FileFault::BadData { .. } => Disposition::Reject,
        }
    }
}
