//! What is done (ledger), what was found (catalogue), and how two runs differ (comparison).

/// The durable list of files, jobs and documents.
pub mod ledger;

/// Opening and migrating the ledger's database.
mod ledger_schema;

/// Finished files that were moved out of the watched folders.
pub mod ledger_moves;

/// What the ledger tells.
mod ledger_views;

/// The catalogue's columns: names, types, units, descriptions, and where they come from.
pub mod column;

/// The catalogue's rows.
pub mod catalogue;

/// The catalogue as files of other formats.
pub mod export;

/// How the results of two runs differ.
pub mod comparison;
