//! The real analysis behind the daemon: tables read once per process, reports as documents.

use std::path::Path;
use std::sync::{Arc, OnceLock};
use std::time::Instant;

use serde::Serialize;

use super::Tables;
use crate::codes;
use crate::fit::FitSettings;
use crate::report::{Analysis, error_chain, report_outcomes};
use crate::service::analyst::{Analyst, AnalystFactory, Document, Fault};
use crate::service::config::Config;
use crate::service::reader_process::{Limits, ReaderPool};
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
        let readers = start_readers(config, &settings)?;
        let fit = config.fit.clone();
        Ok(Arc::new(DaemonAnalyst { analysis, readers, settings, fit, tables, fingerprint }))
    })
}

/// This program, also after its file has been replaced.
const THIS_PROGRAM: &str = "/proc/self/exe";

fn start_readers(config: &Config, settings: &ReadSettings) -> Result<ReaderPool, Fault> {
    let reader = &config.reader;
    let limits = Limits { memory_bytes: (reader.memory_mb * 1e6) as u64, time_s: reader.time_limit_s };
    let processes = match reader.processes {
        0 => config.workers.thread_count(),
        count => count,
    };
    ReaderPool::start(THIS_PROGRAM, settings, limits, processes).map_err(|error| {
        Fault::stop(&codes::READER_NOT_STARTED, format!("cannot start a reader process: {error}"))
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
    readers: ReaderPool,
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
        let used = serde_json::to_string(&(&self.fit, self.settings.exposures, instruments)).ok()?;
        Some(hash_with_tables(self.tables, &used))
    }

    fn analyse(&self, path: &Path, bytes_blake3: &str) -> Result<Vec<Document>, Fault> {
        let started = Instant::now();
        let outcomes = self.readers.read(path);
        // Nothing was learnt about the file, so it keeps its turn.
        if let [Err(refusal)] = outcomes.as_slice()
            && refusal.fault.code().id == codes::READER_NOT_STARTED.id
        {
            return Err(Fault::retry(&codes::READER_NOT_STARTED, error_chain(&refusal.fault)));
        }
        report_outcomes(outcomes, started.elapsed().as_secs_f64() * 1e3, &self.analysis)
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
    ReadSettings {
        instruments: config.instrument.clone(),
        exposures: config.reader.exposures,
        ..ReadSettings::default()
    }
}

/// A value of an enumeration as the word that reports use.
fn word(value: &impl Serialize) -> Result<String, Fault> {
    let value = serde_json::to_value(value).map_err(|fault| internal(&fault))?;
    serde_json::from_value(value).map_err(|fault| internal(&fault))
}

fn internal(fault: &dyn std::error::Error) -> Fault {
    Fault::reject(&codes::INTERNAL, error_chain(fault))
}
