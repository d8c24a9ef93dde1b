//! The catalogue: one row per spectrum and configuration, in SQLite.
//!
//! Rows are keyed by the report's path, so that writing one twice changes nothing. Of the rows that
//! share a pointer (one spectrum under several configurations) one at most is in force; the others are kept as
//! superseded.

use std::path::Path;
use std::time::Duration;

use rusqlite::types::{ToSqlOutput, Value as SqlValue, ValueRef};
use rusqlite::{Connection, OpenFlags, ToSql, params};

use super::column::{Cell, IS_CURRENT, Kind, POINTER, REPORT, columns};

/// Version of the table, in SQLite's `user_version`; a column that is added raises it.
const VERSION: u32 = 1;

/// The catalogue could not be used.
#[derive(Debug, thiserror::Error)]
pub enum CatalogueError {
    /// SQLite failed.
    #[error("cannot use the catalogue")]
    Database(#[from] rusqlite::Error),
    /// It was made by a newer program.
    #[error(
        "cannot use the catalogue: its version is {found}, need at most {VERSION} (use a newer emberline)"
    )]
    TooNew {
        /// Version found.
        found: u32,
    },
}

/// Which rows are wanted; `None` means all.
#[derive(Debug, Clone, Default)]
pub struct Filter {
    /// Only this verdict.
    pub verdict: Option<String>,
    /// Only rows fitted at or after this time (UTC, ISO 8601; compared as text).
    pub since: Option<String>,
    /// Only this fingerprint of the configuration; its beginning is enough.
    pub run: Option<String>,
    /// Superseded rows too.
    pub with_superseded: bool,
}

/// The table of results.
pub struct Catalogue {
    connection: Connection,
}

impl ToSql for Cell {
    fn to_sql(&self) -> rusqlite::Result<ToSqlOutput<'_>> {
        Ok(match self {
            Cell::Null => ToSqlOutput::Owned(SqlValue::Null),
            Cell::Text(text) => ToSqlOutput::Borrowed(ValueRef::Text(text.as_bytes())),
            Cell::Integer(number) => ToSqlOutput::Owned(SqlValue::Integer(*number)),
            Cell::Float(number) => ToSqlOutput::Owned(SqlValue::Real(*number)),
        })
    }
}

impl Catalogue {
    /// Opens the catalogue, or makes it.
    ///
    /// # Errors
    /// It cannot be opened, or a newer program made it.
    pub fn open(path: &Path) -> Result<Catalogue, CatalogueError> {
        let connection = Connection::open(path)?;
        connection.busy_timeout(Duration::from_secs(10))?;
        connection.pragma_update(None, "journal_mode", "WAL")?;
        // As for the ledger: what a power cut takes is put back by the start of the daemon.
        connection.pragma_update(None, "synchronous", "NORMAL")?;
        let found: u32 = connection.pragma_query_value(None, "user_version", |row| row.get(0))?;
        if found > VERSION {
            return Err(CatalogueError::TooNew { found });
        }
        if found == 0 {
            connection
                .execute_batch(&format!("BEGIN; {}; PRAGMA user_version = {VERSION}; COMMIT", schema()))?;
        }
        Ok(Catalogue { connection })
    }

    /// Opens an existing catalogue for reading only.
    ///
    /// # Errors
    /// It is not there or cannot be opened.
    pub fn open_to_read(path: &Path) -> Result<Catalogue, CatalogueError> {
        let connection = Connection::open_with_flags(path, OpenFlags::SQLITE_OPEN_READ_ONLY)?;
        connection.busy_timeout(Duration::from_secs(10))?;
        let found: u32 = connection.pragma_query_value(None, "user_version", |row| row.get(0))?;
        if found > VERSION {
            return Err(CatalogueError::TooNew { found });
        }
        // All that is read through this connection is one state of the catalogue, whatever is written meanwhile.
        connection.execute_batch("BEGIN")?;
        Ok(Catalogue { connection })
    }

    /// Writes rows (cells in the order of [`columns`]), all or none; a row in force supersedes the others of its
    /// pointer.
    ///
    /// # Errors
    /// The rows cannot be written.
    pub fn put(&mut self, rows: &[Vec<Cell>]) -> Result<(), CatalogueError> {
        let place = |name: &str| columns().iter().position(|column| column.name == name).unwrap_or_default();
        let (report, pointer, is_current) = (place(REPORT), place(POINTER), place(IS_CURRENT));
        let transaction = self.connection.transaction()?;
        {
            let mut insert = transaction.prepare_cached(&insert_statement())?;
            let mut supersede = transaction.prepare_cached(&format!(
                "UPDATE results SET {IS_CURRENT} = 0 WHERE {POINTER} = ?1 AND {REPORT} <> ?2 AND {IS_CURRENT} = 1"
            ))?;
            for row in rows {
                insert.execute(rusqlite::params_from_iter(row))?;
                if row[is_current] == Cell::Integer(1) {
                    supersede.execute(params![row[pointer], row[report]])?;
                }
            }
        }
        Ok(transaction.commit()?)
    }

    /// Rows of a pointer are no longer in force.
    ///
    /// # Errors
    /// The rows cannot be written.
    pub fn retire(&mut self, pointer: &str) -> Result<(), CatalogueError> {
        let statement = format!("UPDATE results SET {IS_CURRENT} = 0 WHERE {POINTER} = ?1");
        self.connection.prepare_cached(&statement)?.execute([pointer])?;
        Ok(())
    }

    /// Whether the row of a report is there and, if so, in force.
    ///
    /// # Errors
    /// The catalogue cannot be read.
    pub fn standing(&self, report: &str) -> Result<Option<bool>, CatalogueError> {
        let statement = format!("SELECT {IS_CURRENT} FROM results WHERE {REPORT} = ?1");
        let mut query = self.connection.prepare_cached(&statement)?;
        let mut rows = query.query([report])?;
        Ok(rows.next()?.map(|row| row.get(0)).transpose()?)
    }

    /// Number of rows that a filter lets through.
    ///
    /// # Errors
    /// The catalogue cannot be read.
    pub fn count(&self, filter: &Filter) -> Result<u64, CatalogueError> {
        let (condition, values) = filter.sql();
        let statement = format!("SELECT count(*) FROM results {condition}");
        let parameters = rusqlite::params_from_iter(values);
        let count: i64 = self.connection.query_row(&statement, parameters, |row| row.get(0))?;
        Ok(count.unsigned_abs())
    }

    /// Longest text of each column among those rows, bytes; 0 for numbers.
    ///
    /// # Errors
    /// The catalogue cannot be read.
    pub fn widths(&self, filter: &Filter) -> Result<Vec<usize>, CatalogueError> {
        let (condition, values) = filter.sql();
        let lengths: Vec<String> = columns()
            .iter()
            .map(|column| match column.kind {
                Kind::Text => format!("coalesce(max(length(CAST({} AS BLOB))), 0)", column.name),
                _ => "0".to_owned(),
            })
            .collect();
        let statement = format!("SELECT {} FROM results {condition}", lengths.join(", "));
        let read = |row: &rusqlite::Row<'_>| {
            (0..columns().len()).map(|i| Ok(row.get::<_, i64>(i)?.unsigned_abs() as usize)).collect()
        };
        Ok(self.connection.query_row(&statement, rusqlite::params_from_iter(values), read)?)
    }

    /// Gives the rows of a filter to a function, one after the other, ordered by report.
    ///
    /// # Errors
    /// The catalogue cannot be read, or what the function says.
    pub fn for_each<E: From<CatalogueError>>(
        &self,
        filter: &Filter,
        mut on_row: impl FnMut(&[Cell]) -> Result<(), E>,
    ) -> Result<(), E> {
        let (condition, values) = filter.sql();
        let names: Vec<&str> = columns().iter().map(|column| column.name.as_str()).collect();
        let statement = format!("SELECT {} FROM results {condition} ORDER BY {REPORT}", names.join(", "));
        let database = |fault| E::from(CatalogueError::Database(fault));
        let mut query = self.connection.prepare(&statement).map_err(database)?;
        let mut rows = query.query(rusqlite::params_from_iter(values)).map_err(database)?;
        let mut cells = Vec::with_capacity(names.len());
        while let Some(row) = rows.next().map_err(database)? {
            cells.clear();
            for i in 0..names.len() {
                cells.push(match row.get_ref(i).map_err(database)? {
                    ValueRef::Text(text) | ValueRef::Blob(text) => {
                        Cell::Text(String::from_utf8_lossy(text).into_owned())
                    }
                    ValueRef::Integer(number) => Cell::Integer(number),
                    ValueRef::Real(number) => Cell::Float(number),
                    ValueRef::Null => Cell::Null,
                });
            }
            on_row(&cells)?;
        }
        Ok(())
    }
}

impl Filter {
    fn sql(&self) -> (String, Vec<String>) {
        let mut conditions = Vec::new();
        let mut values = Vec::new();
        let mut add = |condition: &str, value: &Option<String>| {
            if let Some(value) = value {
                values.push(value.clone());
                conditions.push(condition.replace('?', &format!("?{}", values.len())));
            }
        };
        add("verdict = ?", &self.verdict);
        add("fitted_at >= ?", &self.since);
        add("substr(config_fingerprint, 1, length(?)) = ?", &self.run);
        if !self.with_superseded {
            conditions.push(format!("{IS_CURRENT} = 1"));
        }
        if conditions.is_empty() {
            return (String::new(), values);
        }
        (format!("WHERE {}", conditions.join(" AND ")), values)
    }
}

fn schema() -> String {
    let columns: Vec<String> = columns()
        .iter()
        .map(|column| {
            let kind = match column.kind {
                Kind::Text => "TEXT",
                Kind::Integer => "INTEGER",
                Kind::Float => "REAL",
            };
            let key = if column.name == REPORT { " PRIMARY KEY NOT NULL" } else { "" };
            format!("{} {kind}{key}", column.name)
        })
        .collect();
    format!(
        "CREATE TABLE results ({}) WITHOUT ROWID; CREATE INDEX results_by_pointer ON results ({POINTER}); \
         CREATE INDEX results_by_position ON results (healpix_18)",
        columns.join(", ")
    )
}

fn insert_statement() -> String {
    let names: Vec<&str> = columns().iter().map(|column| column.name.as_str()).collect();
    let marks: Vec<String> = (1..=names.len()).map(|i| format!("?{i}")).collect();
    format!("INSERT OR REPLACE INTO results ({}) VALUES ({})", names.join(", "), marks.join(", "))
}
