//! FITS binary table (FITS Standard 4.0, sections 7.3 and 3), written as a stream.
//!
//! Not by cfitsio, which wants the file by a name that it parses, and the number of rows is known here. Null
//! is NaN for floats and TNULL for integers. Texts are ASCII in FITS: other characters become `?`, and what is
//! longer than [`LONGEST_TEXT`] is cut.

use std::io::{self, Write};

use super::Sink;
use crate::archive::column::{Cell, Kind, columns};

/// Bytes of a text that are kept: one name of a megabyte must not make every row as long.
const LONGEST_TEXT: usize = 512;
const BLOCK: usize = 2880;
const CARD: usize = 80;
/// Stands for no integer.
const NO_INTEGER: i64 = i64::MIN;

/// Writes rows as a FITS table.
pub struct FitsTable<W: Write> {
    out: W,
    widths: Vec<usize>,
    written: usize,
}

/// Cards, padded to 80 characters.
#[derive(Default)]
struct Header(Vec<u8>);

impl Header {
    fn card(&mut self, text: &str) {
        let ascii: Vec<u8> = text.chars().map(|c| if c.is_ascii() { c as u8 } else { b'?' }).collect();
        self.0.extend(ascii.iter().copied().chain(std::iter::repeat(b' ')).take(CARD));
    }

    fn value(&mut self, keyword: &str, value: impl std::fmt::Display) {
        self.card(&format!("{keyword:<8}= {value:>20}"));
    }

    fn text(&mut self, keyword: &str, value: &str) {
        // A quote counts twice; 68 characters are left between the outer ones.
        let value: String = value.replace('\'', "''").chars().take(68).collect();
        self.card(&format!("{keyword:<8}= '{value:<8}'"));
    }

    fn finish(mut self, out: &mut impl Write) -> io::Result<()> {
        self.card("END");
        let padded = self.0.len().div_ceil(BLOCK) * BLOCK;
        self.0.resize(padded, b' ');
        out.write_all(&self.0)
    }
}

impl<W: Write> FitsTable<W> {
    /// Writes the headers; `longest` is the longest text of each column.
    pub fn new(mut out: W, rows: u64, longest: &[usize]) -> io::Result<Self> {
        let widths: Vec<usize> = columns()
            .iter()
            .zip(longest)
            .map(|(column, longest)| match column.kind {
                Kind::Text => (*longest).clamp(1, LONGEST_TEXT),
                _ => 8,
            })
            .collect();
        let mut primary = Header::default();
        primary.value("SIMPLE", "T");
        primary.value("BITPIX", 8);
        primary.value("NAXIS", 0);
        primary.value("EXTEND", "T");
        primary.finish(&mut out)?;
        let mut table = Header::default();
        table.text("XTENSION", "BINTABLE");
        table.value("BITPIX", 8);
        table.value("NAXIS", 2);
        table.value("NAXIS1", widths.iter().sum::<usize>());
        table.value("NAXIS2", rows);
        table.value("PCOUNT", 0);
        table.value("GCOUNT", 1);
        table.value("TFIELDS", widths.len());
        table.text("EXTNAME", "EMBERLINE");
        for (i, (column, width)) in columns().iter().zip(&widths).enumerate() {
            let number = i + 1;
            table.text(&format!("TTYPE{number}"), &column.name);
            let form = match column.kind {
                Kind::Text => format!("{width}A"),
                Kind::Integer => "K".to_owned(),
                Kind::Float => "D".to_owned(),
            };
            table.text(&format!("TFORM{number}"), &form);
            if !column.unit.is_empty() {
                table.text(&format!("TUNIT{number}"), column.unit);
            }
            if column.kind == Kind::Integer {
                table.value(&format!("TNULL{number}"), NO_INTEGER);
            }
            table.text(&format!("TCOMM{number}"), &column.description);
            table.text(&format!("TUCD{number}"), &column.ucd);
        }
        table.finish(&mut out)?;
        Ok(FitsTable { out, widths, written: 0 })
    }
}

impl<W: Write> Sink for FitsTable<W> {
    fn write_row(&mut self, cells: &[Cell]) -> io::Result<()> {
        for ((cell, column), width) in cells.iter().zip(columns()).zip(&self.widths) {
            match (cell, column.kind) {
                (Cell::Text(text), Kind::Text) => {
                    let ascii = text.chars().map(|c| if matches!(c, ' '..='~') { c as u8 } else { b'?' });
                    let padded: Vec<u8> = ascii.chain(std::iter::repeat(0)).take(*width).collect();
                    self.out.write_all(&padded)?;
                }
                (Cell::Integer(number), Kind::Integer) => self.out.write_all(&number.to_be_bytes())?,
                (Cell::Float(number), Kind::Float) => self.out.write_all(&number.to_be_bytes())?,
                (_, Kind::Text) => self.out.write_all(&vec![0; *width])?,
                (_, Kind::Integer) => self.out.write_all(&NO_INTEGER.to_be_bytes())?,
                (_, Kind::Float) => self.out.write_all(&f64::NAN.to_be_bytes())?,
            }
            self.written += width;
        }
        Ok(())
    }

    fn finish(mut self: Box<Self>) -> io::Result<()> {
        let padding = self.written.next_multiple_of(BLOCK) - self.written;
        self.out.write_all(&vec![0; padding])?;
        super::flush(self.out)
    }
}
