//! VOTable 1.4 with TABLEDATA (IVOA Recommendation 2019). Null is an empty cell.

use std::io::{self, Write};

use quick_xml::escape::escape;

use super::Sink;
use crate::archive::column::{Cell, Kind, columns};

/// Writes rows as VOTable.
pub struct Votable<W: Write> {
    out: W,
}

impl<W: Write> Votable<W> {
    /// Writes everything before the rows.
    pub fn new(mut out: W) -> io::Result<Self> {
        writeln!(
            out,
            "<?xml version=\"1.0\" encoding=\"UTF-8\"?>\n<VOTABLE version=\"1.4\" \
             xmlns=\"http://www.ivoa.net/xml/VOTable/v1.3\">\n<RESOURCE type=\"results\">\n\
             <TABLE name=\"emberline\">"
        )?;
        for column in columns() {
            let datatype = match column.kind {
                Kind::Text => "datatype=\"unicodeChar\" arraysize=\"*\"",
                Kind::Integer => "datatype=\"long\"",
                Kind::Float => "datatype=\"double\"",
            };
            let unit =
                if column.unit.is_empty() { String::new() } else { format!(" unit=\"{}\"", column.unit) };
            writeln!(
                out,
                "<FIELD name=\"{0}\" ID=\"{0}\" {datatype}{unit} ucd=\"{1}\"><DESCRIPTION>{2}</DESCRIPTION></FIELD>",
                column.name,
                column.ucd,
                escape(column.description.as_str())
            )?;
        }
        writeln!(out, "<DATA>\n<TABLEDATA>")?;
        Ok(Votable { out })
    }
}

impl<W: Write> Sink for Votable<W> {
    fn write_row(&mut self, cells: &[Cell]) -> io::Result<()> {
        write!(self.out, "<TR>")?;
        for cell in cells {
            match cell {
                Cell::Null => write!(self.out, "<TD/>")?,
                Cell::Text(text) => write!(self.out, "<TD>{}</TD>", escape(text.as_str()))?,
                Cell::Integer(number) => write!(self.out, "<TD>{number}</TD>")?,
                Cell::Float(number) => write!(self.out, "<TD>{number}</TD>")?,
            }
        }
        writeln!(self.out, "</TR>")
    }

    fn finish(mut self: Box<Self>) -> io::Result<()> {
        writeln!(self.out, "</TABLEDATA>\n</DATA>\n</TABLE>\n</RESOURCE>\n</VOTABLE>")?;
        super::flush(self.out)
    }
}
