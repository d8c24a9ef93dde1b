//! Every header of a file, parsed in Rust, with declared sizes compared to the bytes that are there.
//!
//! # Reference
//! FITS Standard 4.0 (2016), sections 3, 4.4, 7.1 and 7.3.

use std::ops::Range;

use super::FileFault;
use super::header::{BLOCK_BYTES, CARD_BYTES, Header};

/// Most axes of an image: real spectra have at most 4; the standard allows 999.
const MOST_AXES: i64 = 8;
/// Most columns of a table, as the standard says.
const MOST_COLUMNS: i64 = 999;

/// Most cards of one header (8 MB); the widest tables have some thousands.
const MOST_CARDS: usize = 100_000;
/// Most units of one file; multi-exposure files have some hundreds.
const MOST_UNITS: usize = 10_000;
/// First bytes of every extension.
const EXTENSION_START: &[u8] = b"XTENSION";

/// One header-data unit.
#[derive(Debug, Clone)]
pub struct Hdu {
    /// Position in the file, from 0.
    pub index: usize,
    /// Its cards.
    pub header: Header,
    /// What its data are.
    pub kind: Kind,
    /// Where its data are in the unpacked file.
    pub data: Range<usize>,
}

/// What the data of a unit are.
#[derive(Debug, Clone)]
pub enum Kind {
    /// No data.
    Empty,
    /// An array.
    Image(Image),
    /// A binary table.
    Table(Table),
    /// Anything that is not read here, with the reason.
    Unsupported(String),
}

/// Shape of an image.
#[derive(Debug, Clone)]
pub struct Image {
    /// Bits per pixel, negative for floats: 8, 16, 32, 64, -32, -64.
    pub bitpix: i64,
    /// Length of each axis, the fastest first.
    pub axes: Vec<u64>,
}

impl Image {
    /// Number of pixels.
    pub fn pixels(&self) -> u64 {
        self.axes.iter().product()
    }

    /// Length of the first axis.
    pub fn length(&self) -> u64 {
        self.axes.first().copied().unwrap_or(0)
    }

    /// Number of lines along the second axis, 1 for a one-dimensional image.
    pub fn lines(&self) -> u64 {
        self.axes.get(1).copied().unwrap_or(1)
    }
}

/// Shape of a binary table.
#[derive(Debug, Clone)]
pub struct Table {
    /// Number of rows.
    pub rows: u64,
    /// Bytes of one row.
    pub row_bytes: u64,
    /// The columns in file order.
    pub columns: Vec<Column>,
}

impl Table {
    /// The column of this name, letter case aside.
    pub fn column(&self, name: &str) -> Option<&Column> {
        self.columns.iter().find(|column| column.name.eq_ignore_ascii_case(name))
    }

    /// Whether all these columns exist.
    pub fn has_columns(&self, names: &[&str]) -> bool {
        names.iter().all(|name| self.column(name).is_some())
    }
}

/// One column of a binary table.
#[derive(Debug, Clone)]
pub struct Column {
    /// `TTYPEn`, empty where missing.
    pub name: String,
    /// `TUNITn`.
    pub unit: Option<String>,
    /// Data type, the letter of `TFORMn`.
    pub letter: char,
    /// Values per cell.
    pub repeat: u64,
    /// Bytes from the start of a row.
    pub offset: usize,
    /// Bytes of one cell.
    pub width: usize,
    /// Number in the table that the C library sees, from 1; none where the cell has no bytes.
    pub number: Option<i32>,
    /// Position in the file's table, from 1, as in `TTYPEn`.
    pub position: usize,
}

impl Column {
    /// Whether cells hold numbers that can be read as floats.
    pub fn is_numeric(&self) -> bool {
        matches!(self.letter, 'B' | 'I' | 'J' | 'K' | 'E' | 'D')
    }

    /// Whether cells hold truth values.
    pub fn is_logical(&self) -> bool {
        self.letter == 'L'
    }
}

impl Hdu {
    /// Whether `EXTNAME` is this, letter case aside.
    pub fn is_named(&self, name: &str) -> bool {
        self.header.text("EXTNAME").is_some_and(|found| found.eq_ignore_ascii_case(name))
    }

    /// Its table, if it is one.
    pub fn table(&self) -> Option<&Table> {
        match &self.kind {
            Kind::Table(table) => Some(table),
            Kind::Empty | Kind::Image(_) | Kind::Unsupported(_) => None,
        }
    }

    /// Its image, if it is one.
    pub fn image(&self) -> Option<&Image> {
        match &self.kind {
            Kind::Image(image) => Some(image),
            Kind::Empty | Kind::Table(_) | Kind::Unsupported(_) => None,
        }
    }

    /// Where the bytes are that [`Self::plain_header`] describes: without a table's heap.
    pub fn plain_data(&self) -> Range<usize> {
        let length = match &self.kind {
            Kind::Image(image) => image.pixels() * image.bitpix.unsigned_abs() / 8,
            Kind::Table(table) => table.rows * table.row_bytes,
            Kind::Empty | Kind::Unsupported(_) => 0,
        };
        // Not more than what the walk found to be there.
        self.data.start..self.data.start + (length as usize).min(self.data.len())
    }

    /// A header with nothing but shape, scale and null values, all checked: all that the C library
    /// is told about this unit. Text, bits and descriptors are declared as plain bytes.
    pub fn plain_header(&self) -> String {
        let mut cards = Vec::new();
        match &self.kind {
            Kind::Image(image) => {
                cards.push(card("SIMPLE", "T"));
                cards.push(card("BITPIX", image.bitpix));
                cards.push(card("NAXIS", image.axes.len()));
                for (axis, length) in image.axes.iter().enumerate() {
                    cards.push(card(&format!("NAXIS{}", axis + 1), length));
                }
                self.add_scale(&mut cards, "BSCALE", "BSCALE", 1.0);
                self.add_scale(&mut cards, "BZERO", "BZERO", 0.0);
                if image.bitpix > 0
                    && let Some(blank) = self.header.integer("BLANK")
                {
                    cards.push(card("BLANK", blank));
                }
            }
            Kind::Table(table) => {
                cards.push(card("XTENSION", "'BINTABLE'"));
                cards.push(card("BITPIX", 8));
                cards.push(card("NAXIS", 2));
                cards.push(card("NAXIS1", table.row_bytes));
                cards.push(card("NAXIS2", table.rows));
                cards.push(card("PCOUNT", 0));
                cards.push(card("GCOUNT", 1));
                cards.push(card("TFIELDS", table.columns.iter().filter(|c| c.number.is_some()).count()));
                for column in &table.columns {
                    self.add_column(&mut cards, column);
                }
            }
            Kind::Empty | Kind::Unsupported(_) => {}
        }
        cards.push(format!("{:CARD_BYTES$}", "END"));
        let header = cards.concat();
        let blocks = header.len().div_ceil(BLOCK_BYTES);
        format!("{header:width$}", width = blocks * BLOCK_BYTES)
    }

    fn add_column(&self, cards: &mut Vec<String>, column: &Column) {
        let Some(number) = column.number else { return };
        if !column.is_numeric() {
            cards.push(card(&format!("TFORM{number}"), format!("'{}B'", column.width)));
            return;
        }
        cards.push(card(&format!("TFORM{number}"), format!("'{}{}'", column.repeat, column.letter)));
        let is_integer = matches!(column.letter, 'B' | 'I' | 'J' | 'K');
        self.add_scale(cards, &format!("TSCAL{}", column.position), &format!("TSCAL{number}"), 1.0);
        self.add_scale(cards, &format!("TZERO{}", column.position), &format!("TZERO{number}"), 0.0);
        if is_integer && let Some(null) = self.header.integer(&format!("TNULL{}", column.position)) {
            cards.push(card(&format!("TNULL{number}"), null));
        }
    }

    /// Copies a scale or an offset that changes something; a scale of zero would erase the data.
    fn add_scale(&self, cards: &mut Vec<String>, key_in_file: &str, key: &str, neutral: f64) {
        if let Some(value) = self.header.real(key_in_file)
            && value != neutral
            && value != 0.0
        {
            cards.push(card(key, number_word(value)));
        }
    }
}

fn card(key: &str, value: impl std::fmt::Display) -> String {
    let line = format!("{key:8}= {value:>20}");
    format!("{line:CARD_BYTES$}")
}

/// A number in at most 24 characters that reads back to the same value.
fn number_word(value: f64) -> String {
    if value.fract() == 0.0 && value.abs() < 1e18 { format!("{value:.1}") } else { format!("{value:E}") }
}

/// Finds all units of a file.
pub fn walk(bytes: &[u8]) -> Result<Vec<Hdu>, FileFault> {
    if bytes.is_empty() {
        return Err(FileFault::Empty);
    }
    if !bytes.starts_with(b"SIMPLE  =") {
        let start = &bytes[..bytes.len().min(9)];
        return Err(FileFault::NotFits { found: String::from_utf8_lossy(start).into_owned() });
    }
    let mut hdus = Vec::new();
    let mut at = 0;
    while at < bytes.len() {
        let index = hdus.len();
        // After the last unit, anything that does not start an extension is padding or a special record.
        // The first bytes of the word alone are an extension cut off right there.
        let start = &bytes[at..bytes.len().min(at + EXTENSION_START.len())];
        if index > 0 && !EXTENSION_START.starts_with(start) {
            break;
        }
        if index >= MOST_UNITS {
            let detail = format!("found more units than {MOST_UNITS}");
            return Err(FileFault::BadHeader { hdu: index, detail });
        }
        let header_bytes = header_length(&bytes[at..], index)?;
        let header = Header::parse(&bytes[at..at + header_bytes]);
        let start = at + header_bytes.next_multiple_of(BLOCK_BYTES);
        let (kind, length) = shape(&header, index)?;
        let available = (bytes.len().saturating_sub(start)) as u64;
        if length > available {
            return Err(FileFault::Truncated {
                hdu: index,
                what: "bytes of data",
                found: available,
                needed: length,
            });
        }
        // Fits in memory, as it is not longer than the bytes that are there.
        let length = length as usize;
        let start = start.min(bytes.len());
        hdus.push(Hdu { index, header, kind, data: start..start + length });
        at = start + length.next_multiple_of(BLOCK_BYTES);
    }
    Ok(hdus)
}

/// Bytes up to and with the END card.
fn header_length(bytes: &[u8], hdu: usize) -> Result<usize, FileFault> {
    let mut cards = bytes.chunks_exact(CARD_BYTES);
    match cards.position(|card| card.starts_with(b"END") && card[3..].iter().all(|byte| *byte == b' ')) {
        Some(cards_before) if cards_before >= MOST_CARDS => {
            let detail = format!("found {cards_before} cards, need at most {MOST_CARDS}");
            Err(FileFault::BadHeader { hdu, detail })
        }
        Some(cards_before) => Ok((cards_before + 1) * CARD_BYTES),
        None => {
            let found = bytes.len() as u64;
            Err(FileFault::Truncated { hdu, what: "bytes of header before END", found, needed: found + 1 })
        }
    }
}

/// What the data are, and how many bytes they declare.
fn shape(header: &Header, hdu: usize) -> Result<(Kind, u64), FileFault> {
    let fault = |detail: String| FileFault::BadHeader { hdu, detail };
    let need = |key: &str| {
        header.integer(key).ok_or_else(|| fault(format!("found no whole number {key}, need one")))
    };
    let bitpix = need("BITPIX")?;
    if ![8, 16, 32, 64, -32, -64].contains(&bitpix) {
        return Err(fault(format!("found BITPIX = {bitpix}, need 8, 16, 32, 64, -32 or -64")));
    }
    let naxis = need("NAXIS")?;
    if !(0..=MOST_AXES).contains(&naxis) {
        return Err(fault(format!("found NAXIS = {naxis}, need 0 to {MOST_AXES}")));
    }
    let mut axes = Vec::new();
    for axis in 1..=naxis {
        let key = format!("NAXIS{axis}");
        let length = need(&key)?;
        axes.push(
            u64::try_from(length).map_err(|_| fault(format!("found {key} = {length}, need 0 or more")))?,
        );
    }
    let count = |key: &str, default: i64| {
        let value = header.integer(key).unwrap_or(default);
        u64::try_from(value).map_err(|_| fault(format!("found {key} = {value}, need 0 or more")))
    };
    let (parameters, groups) = (count("PCOUNT", 0)?, count("GCOUNT", 1)?);
    let overflow = || fault("declares more data than can exist".to_owned());
    let is_grouped = header.logical("GROUPS") == Some(true) && axes.first() == Some(&0);
    let counted = if is_grouped { &axes[1..] } else { &axes[..] };
    let values = if axes.is_empty() {
        0
    } else {
        counted.iter().try_fold(1u64, |product, length| product.checked_mul(*length)).ok_or_else(overflow)?
    };
    let length = values
        .checked_add(parameters)
        .and_then(|values| values.checked_mul(groups))
        .and_then(|values| values.checked_mul(bitpix.unsigned_abs() / 8))
        .ok_or_else(overflow)?;

    let kind = match header.text("XTENSION") {
        None if hdu == 0 && is_grouped => Kind::Unsupported("random groups".to_owned()),
        None if hdu == 0 => image_kind(bitpix, axes, values),
        Some("IMAGE") => image_kind(bitpix, axes, values),
        Some("BINTABLE") if header.logical("ZIMAGE") == Some(true) => {
            Kind::Unsupported("a compressed image".to_owned())
        }
        Some("BINTABLE") => match table_kind(header, bitpix, &axes) {
            Ok(table) => Kind::Table(table),
            Err(reason) => Kind::Unsupported(reason),
        },
        Some(other) => Kind::Unsupported(format!("an extension of kind {other}")),
        None => Kind::Unsupported("an extension without a kind".to_owned()),
    };
    Ok((kind, length))
}

fn image_kind(bitpix: i64, axes: Vec<u64>, values: u64) -> Kind {
    if values == 0 { Kind::Empty } else { Kind::Image(Image { bitpix, axes }) }
}

fn table_kind(header: &Header, bitpix: i64, axes: &[u64]) -> Result<Table, String> {
    let &[row_bytes, rows] = axes else {
        return Err(format!("a table with {} axes", axes.len()));
    };
    if bitpix != 8 {
        return Err(format!("a table with BITPIX = {bitpix}"));
    }
    let fields = header.integer("TFIELDS").unwrap_or(0);
    if !(1..=MOST_COLUMNS).contains(&fields) {
        return Err(format!("a table with TFIELDS = {fields}"));
    }
    let mut columns = Vec::new();
    let (mut offset, mut number) = (0usize, 0);
    for position in 1..=fields as usize {
        let form = header.text(&format!("TFORM{position}")).unwrap_or_default();
        let Some((repeat, letter, width)) = parse_form(form) else {
            return Err(format!("a table with TFORM{position} = {form:?}"));
        };
        number += i32::from(width > 0);
        columns.push(Column {
            name: header.text(&format!("TTYPE{position}")).unwrap_or_default().to_owned(),
            unit: header.text(&format!("TUNIT{position}")).map(str::to_owned),
            letter,
            repeat,
            offset,
            width,
            number: (width > 0).then_some(number),
            position,
        });
        offset = offset.checked_add(width).ok_or("a table with rows too long to exist")?;
    }
    if offset as u64 != row_bytes {
        return Err(format!("a table whose columns take {offset} bytes in rows of {row_bytes}"));
    }
    Ok(Table { rows, row_bytes, columns })
}

/// Repeat count, letter and bytes of a cell.
fn parse_form(form: &str) -> Option<(u64, char, usize)> {
    let digits = form.len() - form.trim_start_matches(|c: char| c.is_ascii_digit()).len();
    let repeat: u64 = if digits == 0 { 1 } else { form[..digits].parse().ok()? };
    let letter = form[digits..].chars().next()?;
    let element = match letter {
        'L' | 'B' | 'A' => 1,
        'I' => 2,
        'J' | 'E' => 4,
        'K' | 'D' | 'C' | 'P' => 8,
        'M' | 'Q' => 16,
        'X' => return Some((repeat, letter, usize::try_from(repeat.div_ceil(8)).ok()?)),
        _ => return None,
    };
    let width = usize::try_from(repeat).ok()?.checked_mul(element)?;
    Some((repeat, letter, width))
}
