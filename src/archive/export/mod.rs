//! The catalogue as a file: CSV, ECSV, VOTable, FITS or Parquet.
//!
//! Rows are streamed from the database to the file, so that memory does not grow with the catalogue.
//! The file appears under its name only when it is whole.

mod fits;
mod parquet;
mod text;
mod votable;

use std::fs::{File, Permissions};
use std::io::{self, BufWriter, Write};
use std::os::unix::fs::PermissionsExt;
use std::path::{Path, PathBuf};

use super::catalogue::{Catalogue, CatalogueError, Filter};
use super::column::Cell;

/// Format of an export.
#[derive(Debug, Clone, Copy, PartialEq, Eq, clap::ValueEnum)]
pub enum Format {
    /// FITS binary table.
    Fits,
    /// VOTable 1.4.
    Votable,
    /// Apache Parquet.
    Parquet,
    /// Enhanced CSV with units and descriptions.
    Ecsv,
    /// Plain CSV.
    Csv,
}

/// An export could not be made.
#[derive(Debug, thiserror::Error)]
pub enum ExportError {
    /// The catalogue failed.
    #[error(transparent)]
    Catalogue(#[from] CatalogueError),
    /// The file could not be written.
    #[error("cannot write {}", path.display())]
    Write {
        /// The file.
        path: PathBuf,
        /// Why.
        source: io::Error,
    },
    /// A row could not be written.
    #[error("cannot write a row of the export")]
    Row(#[from] io::Error),
}

/// Writes the rows of a format.
trait Sink {
    fn write_row(&mut self, cells: &[Cell]) -> io::Result<()>;
    fn finish(self: Box<Self>) -> io::Result<()>;
}

/// Writes the rows of a filter to a file; `on_row` is told of each. Returns the number of rows.
///
/// # Errors
/// [`ExportError`]; then no file of that name is made or changed.
pub fn export(
    catalogue: &Catalogue,
    filter: &Filter,
    format: Format,
    path: &Path,
    on_row: &dyn Fn(),
) -> Result<u64, ExportError> {
    let failed = |source| ExportError::Write { path: path.to_owned(), source };
    let folder = path.parent().filter(|folder| !folder.as_os_str().is_empty()).unwrap_or(Path::new("."));
    // Of its own name, and gone if anything fails.
    let temporary = tempfile::Builder::new()
        .permissions(Permissions::from_mode(READABLE_BY_ALL))
        .tempfile_in(folder)
        .map_err(failed)?;
    let file = temporary.as_file().try_clone().map_err(failed)?;
    let count = write_all(catalogue, filter, format, file, on_row)?;
    temporary.as_file().sync_all().map_err(failed)?;
    temporary.persist(path).map_err(|fault| failed(fault.error))?;
    File::open(folder).and_then(|folder| folder.sync_all()).map_err(failed)?;
    Ok(count)
}

/// Mode of an export, less the process's mask: others load it.
const READABLE_BY_ALL: u32 = 0o644;

fn write_all(
    catalogue: &Catalogue,
    filter: &Filter,
    format: Format,
    file: File,
    on_row: &dyn Fn(),
) -> Result<u64, ExportError> {
    let out: BufWriter<File> = BufWriter::with_capacity(1 << 18, file);
    let mut sink: Box<dyn Sink> = match format {
        Format::Csv => Box::new(text::Csv::new(out)?),
        Format::Ecsv => Box::new(text::Csv::with_description(out)?),
        Format::Votable => Box::new(votable::Votable::new(out)?),
        Format::Parquet => Box::new(parquet::Parquet::new(out)?),
        Format::Fits => {
            Box::new(fits::FitsTable::new(out, catalogue.count(filter)?, &catalogue.widths(filter)?)?)
        }
    };
    let mut count = 0;
    catalogue.for_each(filter, |cells| {
        sink.write_row(cells)?;
        count += 1;
        on_row();
        Ok::<(), ExportError>(())
    })?;
    sink.finish()?;
    Ok(count)
}

/// Flushes a buffer and says whether that worked.
fn flush(mut out: impl Write) -> io::Result<()> {
    out.flush()
}
