//! CSV, plain or with the ECSV 1.0 header (Taylor et al., APE 6). Null is an empty field.

use std::io::{self, Write};

use super::Sink;
use crate::archive::column::{Cell, Kind, columns};

/// Writes rows as CSV.
pub struct Csv<W: Write> {
    writer: csv::Writer<W>,
}

impl<W: Write> Csv<W> {
    /// Plain CSV: a line of names, then the rows.
    pub fn new(out: W) -> io::Result<Self> {
        let mut writer = csv::Writer::from_writer(out);
        writer.write_record(columns().iter().map(|column| &column.name))?;
        Ok(Csv { writer })
    }

    /// ECSV: types, units, descriptions and UCDs before the same lines.
    pub fn with_description(mut out: W) -> io::Result<Self> {
        writeln!(out, "# %ECSV 1.0\n# ---\n# delimiter: ','\n# datatype:")?;
        for column in columns() {
            let datatype = match column.kind {
                Kind::Text => "string",
                Kind::Integer => "int64",
                Kind::Float => "float64",
            };
            let unit =
                if column.unit.is_empty() { String::new() } else { format!("unit: {}, ", column.unit) };
            writeln!(
                out,
                "# - {{name: {}, {unit}datatype: {datatype}, description: '{}', meta: !!omap [{{ucd: '{}'}}]}}",
                column.name,
                column.description.replace('\'', "''"),
                column.ucd
            )?;
        }
        writeln!(out, "# schema: astropy-2.0")?;
        Csv::new(out)
    }
}

impl<W: Write> Sink for Csv<W> {
    fn write_row(&mut self, cells: &[Cell]) -> io::Result<()> {
        for cell in cells {
            match cell {
                Cell::Null => self.writer.write_field("")?,
                Cell::Text(text) => self.writer.write_field(text)?,
                Cell::Integer(number) => self.writer.write_field(number.to_string())?,
                Cell::Float(number) => self.writer.write_field(number.to_string())?,
            }
        }
        Ok(self.writer.write_record(None::<&[u8]>)?)
    }

    fn finish(self: Box<Self>) -> io::Result<()> {
        let out = self.writer.into_inner().map_err(csv::IntoInnerError::into_error)?;
        super::flush(out)
    }
}
