//! The JSON document: what the program says about one object.
//!
//! `Report` is the only definition of the document; its schema and its Rust type are the same
//! thing. `Report::assemble` turns findings into a document and decides the verdict from the flags;
//! `report_file` runs a file through reading, analysis and assembly; `write_atomically` puts bytes on disk so that a crash at any line leaves the old file or the new
//! one. Keys stand in the order of declaration, so equal findings give equal bytes.

mod analysis;
mod assemble;
mod document;
mod pipeline;
mod write;

pub use analysis::Analysis;
pub use assemble::{Findings, FittedParameters};
pub use document::{
    LineRow, Parameter, Parameters, Provenance, Report, SCHEMA_VERSION, SolutionRow, Verdict,
};
pub use pipeline::{Analyse, error_chain, report_file, report_observation, report_outcomes, report_refusal};
pub use write::{WriteFault, write_atomically};

/// JSON schema of [`Report`], made from the type itself.
pub fn schema() -> schemars::Schema {
    schemars::schema_for!(Report)
}
