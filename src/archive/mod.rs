//! What is done (ledger), what was found (catalogue), and how two runs differ (comparison).

/// The durable list of files, jobs and documents.
pub mod ledger;

/// Opening and migrating the ledger's database.
mod ledger_schema;

/// Finished files that were moved out of the watched folders.
pub mod ledger_moves;

/// What the ledger tells.
mod ledger_views;

/// How the results of two runs differ.
pub mod comparison;
