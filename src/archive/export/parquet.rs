//! Apache Parquet: one row group per [`GROUP_ROWS`] rows, every column optional.
//!
//! Units, UCDs and descriptions stand in the file's key-value metadata under `emberline.columns`, as JSON.

use std::io::{self, Write};
use std::sync::Arc;

use parquet::basic::{ConvertedType, Repetition, Type as Physical};
use parquet::column::writer::ColumnWriter;
use parquet::data_type::ByteArray;
use parquet::errors::ParquetError;
use parquet::file::metadata::KeyValue;
use parquet::file::properties::WriterProperties;
use parquet::file::writer::SerializedFileWriter;
use parquet::schema::types::Type;

use super::Sink;
use crate::archive::column::{Cell, Column, Kind, columns};

/// Most rows, and bytes of text, held in memory and written together.
const GROUP_ROWS: usize = 16_384;
const GROUP_TEXT_BYTES: usize = 64 << 20;

/// Writes rows as Parquet.
pub struct Parquet<W: Write + Send> {
    writer: SerializedFileWriter<W>,
    /// The rows of the group that is being filled, column by column.
    held: Vec<Vec<Cell>>,
    held_text_bytes: usize,
}

impl<W: Write + Send> Parquet<W> {
    /// Writes the head.
    pub fn new(out: W) -> io::Result<Self> {
        let fields = columns().iter().map(field).collect::<Result<Vec<_>, _>>().map_err(io_error)?;
        let schema = Type::group_type_builder("emberline").with_fields(fields).build().map_err(io_error)?;
        let about: Vec<serde_json::Value> = columns()
            .iter()
            .map(|column| {
                serde_json::json!({
                    "name": column.name, "unit": column.unit, "ucd": column.ucd, "description": column.description,
                })
            })
            .collect();
        let about = KeyValue::new("emberline.columns".to_owned(), serde_json::to_string(&about)?);
        let properties = WriterProperties::builder().set_key_value_metadata(Some(vec![about])).build();
        let writer =
            SerializedFileWriter::new(out, Arc::new(schema), Arc::new(properties)).map_err(io_error)?;
        Ok(Parquet { writer, held: vec![Vec::new(); columns().len()], held_text_bytes: 0 })
    }

    fn write_group(&mut self) -> Result<(), ParquetError> {
        let mut group = self.writer.next_row_group()?;
        for cells in &mut self.held {
            let Some(mut column) = group.next_column()? else { break };
            let levels: Vec<i16> = cells.iter().map(|cell| i16::from(*cell != Cell::Null)).collect();
            match column.untyped() {
                ColumnWriter::DoubleColumnWriter(writer) => {
                    let of = |cell: &Cell| if let Cell::Float(number) = cell { Some(*number) } else { None };
                    let values: Vec<f64> = cells.iter().filter_map(of).collect();
                    writer.write_batch(&values, Some(&levels), None)?;
                }
                ColumnWriter::Int64ColumnWriter(writer) => {
                    let of =
                        |cell: &Cell| if let Cell::Integer(number) = cell { Some(*number) } else { None };
                    let values: Vec<i64> = cells.iter().filter_map(of).collect();
                    writer.write_batch(&values, Some(&levels), None)?;
                }
                ColumnWriter::ByteArrayColumnWriter(writer) => {
                    let of = |cell: &Cell| match cell {
                        Cell::Text(text) => Some(ByteArray::from(text.as_str())),
                        _ => None,
                    };
                    let values: Vec<ByteArray> = cells.iter().filter_map(of).collect();
                    writer.write_batch(&values, Some(&levels), None)?;
                }
                _ => return Err(ParquetError::General("a column of a type that is not written".to_owned())),
            }
            column.close()?;
            cells.clear();
        }
        self.held_text_bytes = 0;
        group.close()?;
        Ok(())
    }
}

impl<W: Write + Send> Sink for Parquet<W> {
    fn write_row(&mut self, cells: &[Cell]) -> io::Result<()> {
        for (held, cell) in self.held.iter_mut().zip(cells) {
            if let Cell::Text(text) = cell {
                self.held_text_bytes += text.len();
            }
            held.push(cell.clone());
        }
        if self.held[0].len() == GROUP_ROWS || self.held_text_bytes > GROUP_TEXT_BYTES {
            self.write_group().map_err(io_error)
        } else {
            Ok(())
        }
    }

    fn finish(mut self: Box<Self>) -> io::Result<()> {
        if !self.held[0].is_empty() {
            self.write_group().map_err(io_error)?;
        }
        let out = self.writer.into_inner().map_err(io_error)?;
        super::flush(out)
    }
}

fn field(column: &Column) -> Result<Arc<Type>, ParquetError> {
    let (physical, converted) = match column.kind {
        Kind::Text => (Physical::BYTE_ARRAY, ConvertedType::UTF8),
        Kind::Integer => (Physical::INT64, ConvertedType::NONE),
        Kind::Float => (Physical::DOUBLE, ConvertedType::NONE),
    };
    let builder = Type::primitive_type_builder(&column.name, physical);
    let builder = builder.with_repetition(Repetition::OPTIONAL).with_converted_type(converted);
    builder.build().map(Arc::new)
}

fn io_error(fault: ParquetError) -> io::Error {
    io::Error::other(fault)
}
