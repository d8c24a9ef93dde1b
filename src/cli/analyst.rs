//! The real analysis behind the daemon: tables read once per process, reports as documents.

use std::path::Path;
use std::sync::{Arc, OnceLock};
use std::time::Instant;

use serde::Serialize;
use serde::de::DeserializeOwned;

use super::Tables;
use crate::codes;
use crate::fit::FitSettings;
use crate::report::{Analysis, error_chain, report_outcomes};
use crate::service::analyst::{Analyst, AnalystFactory, Document, Fault};
use crate::service::config::{Config, InstrumentConfig};
use crate::service::reader_process::{Limits, ReaderPool};
use crate::spectrum::{Assumptions, ReadSettings};

/// Header keyword by which the readers look up an instrument's settings.
const INSTRUMENT_KEYWORD: &str = "INSTRUME";

/// Makes the analyst of a configuration; the tables stay for the life of the process.
pub fn factory() -> AnalystFactory {
    Arc::new(|config| {
        static TABLES: OnceLock<Tables> = OnceLock::new();
        let tables = match TABLES.get() {
            Some(tables) => tables,
            None => {
                let read = Tables::read()
                    .map_err(|fault| Fault::stop(&codes::SERVICE_TABLES, error_chain(fault.as_ref())))?;
                TABLES.get_or_init(|| read)
            }
        };
        let settings = ReadSettings { exposures: config.reader.exposures, ..read_settings(config)? };
        let analysis = Analysis::new(&tables.grid, &tables.tracks, &FitSettings::default());
        let parts = [
            env!("CARGO_PKG_VERSION"),
            &tables.grid.header.blake3,
            tables.tracks.checksum(),
            &config.answer_fingerprint(),
        ];
        let fingerprint = blake3::hash(parts.join("\n").as_bytes()).to_hex()[..32].to_owned();
        let readers = start_readers(config, &settings)?;
        Ok(Arc::new(DaemonAnalyst { analysis, readers, fingerprint }))
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

struct DaemonAnalyst {
    analysis: Analysis<'static>,
    readers: ReaderPool,
    fingerprint: String,
}

impl Analyst for DaemonAnalyst {
    fn fingerprint(&self) -> String {
        self.fingerprint.clone()
    }

    fn analyse(&self, path: &Path, _bytes_blake3: &str) -> Result<Vec<Document>, Fault> {
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
            .map(|report| {
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

/// What the readers may assume, from the instrument sections.
fn read_settings(config: &Config) -> Result<ReadSettings, Fault> {
    let mut settings = ReadSettings::default();
    for instrument in &config.instrument {
        let assumptions = Assumptions {
            medium: instrument.medium.map(|medium| same_word(&medium)).transpose()?,
            velocity_frame: instrument.velocity_frame.map(|frame| same_word(&frame)).transpose()?,
            resolution_fwhm_aa: instrument.resolution_fwhm_aa,
            resolving_power: instrument.resolving_power,
            ..Assumptions::default()
        };
        check_supported(instrument)?;
        match instrument.keywords.get(INSTRUMENT_KEYWORD) {
            Some(value) => {
                settings.instruments.insert(value.clone(), assumptions);
            }
            None => settings.assume = assumptions,
        }
    }
    settings.check().map_err(|detail| Fault::stop(&codes::SERVICE_INSTRUMENT, detail))?;
    Ok(settings)
}

/// Refuses what the readers cannot do yet, rather than leave it out in silence.
fn check_supported(instrument: &InstrumentConfig) -> Result<(), Fault> {
    let refuse = |what: &str| {
        let detail =
            format!("cannot use instrument {}: {what} is not supported by the readers", instrument.name);
        Err(Fault::stop(&codes::SERVICE_INSTRUMENT, detail))
    };
    if instrument.keywords.keys().any(|keyword| keyword != INSTRUMENT_KEYWORD) {
        return refuse("a match on other keywords than INSTRUME");
    }
    if !instrument.masks_vac_aa.is_empty() {
        return refuse("masks_vac_aa");
    }
    if instrument.error_scale.is_some() {
        return refuse("error_scale");
    }
    Ok(())
}

/// The same word in another layer's type.
fn same_word<T: DeserializeOwned>(value: &impl Serialize) -> Result<T, Fault> {
    let value = serde_json::to_value(value).map_err(|fault| internal(&fault))?;
    serde_json::from_value(value).map_err(|fault| internal(&fault))
}

fn word(value: &impl Serialize) -> Result<String, Fault> {
    same_word::<String>(value)
}

fn internal(fault: &dyn std::error::Error) -> Fault {
    Fault::reject(&codes::INTERNAL, error_chain(fault))
}
