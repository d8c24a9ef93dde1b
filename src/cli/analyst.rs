//! The real analysis behind the daemon: tables read once per process, reports as documents.

use std::path::Path;
use std::sync::{Arc, OnceLock};

use serde::Serialize;

use super::Tables;
use crate::codes;
use crate::fit::FitSettings;
use crate::report::{Analysis, error_chain, report_file};
use crate::service::analyst::{Analyst, AnalystFactory, Document, Fault};
use crate::service::config::Config;
use crate::spectrum::{ReadSettings, instruments_of};

/// The tables, read once; they stay for the life of the process.
///
/// # Errors
/// Missing or damaged tables.
pub(super) fn shared_tables() -> Result<&'static Tables, Fault> {
    static TABLES: OnceLock<Tables> = OnceLock::new();
    match TABLES.get() {
        Some(tables) => Ok(tables),
        None => {
            let read = Tables::read()
                .map_err(|fault| Fault::stop(&codes::SERVICE_TABLES, error_chain(fault.as_ref())))?;
            Ok(TABLES.get_or_init(|| read))
        }
    }
}

/// Makes the analyst of a configuration.
pub fn factory() -> AnalystFactory {
    Arc::new(|config| {
        let tables = shared_tables()?;
        let settings = read_settings(config);
        let analysis = Analysis::new(&tables.grid, &tables.tracks, &config.fit);
        let fingerprint = answer_fingerprint(tables, config);
        Ok(Arc::new(DaemonAnalyst { analysis, settings, fit: config.fit.clone(), tables, fingerprint }))
    })
}

/// Names everything that can change an answer: program, tables, and the part of the configuration that
/// matters; 32 hex digits.
pub(super) fn answer_fingerprint(tables: &Tables, config: &Config) -> String {
    hash_with_tables(tables, &config.answer_fingerprint())
}

fn hash_with_tables(tables: &Tables, rest: &str) -> String {
    let parts = [env!("CARGO_PKG_VERSION"), &tables.grid.header.blake3, tables.tracks.checksum(), rest];
    blake3::hash(parts.join("\n").as_bytes()).to_hex()[..32].to_owned()
}

struct DaemonAnalyst {
    analysis: Analysis<'static>,
    settings: ReadSettings,
    fit: FitSettings,
    tables: &'static Tables,
    fingerprint: String,
}

impl Analyst for DaemonAnalyst {
    fn fingerprint(&self) -> String {
        self.fingerprint.clone()
    }

    fn answer_key(&self, path: &Path) -> Option<String> {
        let instruments = instruments_of(path, &self.settings)?;
        let used = serde_json::to_string(&(&self.fit, instruments)).ok()?;
        Some(hash_with_tables(self.tables, &used))
    }

    fn analyse(&self, path: &Path, bytes_blake3: &str) -> Result<Vec<Document>, Fault> {
        report_file(path, &self.settings, &self.analysis)
            .into_iter()
            .map(|mut report| {
                report.provenance.config_fingerprint = Some(self.fingerprint.clone());
                // A file that could not even be opened as FITS has a hash as well.
                report.source.blake3.get_or_insert_with(|| bytes_blake3.to_owned());
                let json = serde_json::to_vec_pretty(&report).map_err(|fault| internal(&fault))?;
                Ok(Document {
                    object_name: report.object.name.clone().unwrap_or_default(),
                    verdict: word(&report.verdict)?,
                    row: serde_json::to_value(&report.parameters).map_err(|fault| internal(&fault))?,
                    json,
                })
            })
            .collect()
    }
}

/// How the daemon reads files, by its configuration.
pub(super) fn read_settings(config: &Config) -> ReadSettings {
    ReadSettings { instruments: config.instrument.clone(), ..ReadSettings::default() }
}

/// A value of an enumeration as the word that reports use.
fn word(value: &impl Serialize) -> Result<String, Fault> {
    let value = serde_json::to_value(value).map_err(|fault| internal(&fault))?;
    serde_json::from_value(value).map_err(|fault| internal(&fault))
}

fn internal(fault: &dyn std::error::Error) -> Fault {
    Fault::reject(&codes::INTERNAL, error_chain(fault))
}
