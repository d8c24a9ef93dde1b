//! From a path to reports: read, analyse, assemble, once per object, with everything that can go wrong
//! turned into a report.
//!
//! What is done between reading and reporting comes in as `Analyse`, so that commands, the daemon and
//! the rehearsal run the same code and tests can put anything there.

use std::error::Error;
use std::panic::{AssertUnwindSafe, catch_unwind};
use std::path::Path;
use std::time::Instant;

use super::assemble::Findings;
use super::document::{Provenance, Report};
use crate::codes::{self, Flag};
use crate::spectrum::{ObjectRecord, Observation, Outcomes, ReadSettings, Refusal, SourceRecord, read_file};

/// What is done with one observation between reading and reporting.
pub trait Analyse: Sync {
    /// Fits one spectrum and derives what follows for the star.
    fn analyse(&self, observation: &Observation) -> Findings;
}

/// One report per object of a file; a file that cannot be read is one rejected report.
pub fn report_file(path: &Path, settings: &ReadSettings, pipeline: &dyn Analyse) -> Vec<Report> {
    let started = Instant::now();
    let Ok(outcomes) = catch_unwind(AssertUnwindSafe(|| read_file(path, settings))) else {
        let source = SourceRecord { path: path.display().to_string(), ..SourceRecord::default() };
        return vec![report_panic("reading", ObjectRecord::default(), source)];
    };
    report_outcomes(outcomes, started.elapsed().as_secs_f64() * 1e3, pipeline)
}

/// One report per outcome of reading, which took `read_ms`.
pub fn report_outcomes(outcomes: Outcomes, read_ms: f64, pipeline: &dyn Analyse) -> Vec<Report> {
    let report_one = |outcome: Result<Observation, Box<Refusal>>| match outcome {
        Ok(observation) => report_observation(observation, read_ms, pipeline),
        Err(refusal) => report_refusal(*refusal, read_ms),
    };
    outcomes.into_iter().map(report_one).collect()
}

/// The report about one observation; a panic while it is analysed costs this object only.
pub fn report_observation(observation: Observation, read_ms: f64, pipeline: &dyn Analyse) -> Report {
    let Ok(mut findings) = catch_unwind(AssertUnwindSafe(|| pipeline.analyse(&observation))) else {
        return report_panic("fitting", observation.object, observation.source);
    };
    findings.flags.splice(0..0, observation.flags);
    findings.timing_ms.insert("read".to_owned(), read_ms);
    Report::assemble(observation.object, observation.source, findings)
}

/// The report about an object, or a file, that could not be read.
pub fn report_refusal(refusal: Refusal, read_ms: f64) -> Report {
    let Refusal { object, source, fault } = refusal;
    let detail = error_chain(&fault);
    tracing::warn!(path = source.path, code = fault.code().id, "{detail}");
    let findings = Findings {
        flags: vec![Flag::new(fault.code(), detail)],
        provenance: Provenance::of_this_program(),
        timing_ms: [("read".to_owned(), read_ms)].into(),
        ..Findings::default()
    };
    Report::assemble(object, source, findings)
}

/// A broken invariant costs one object, not the run.
fn report_panic(step: &str, object: ObjectRecord, source: SourceRecord) -> Report {
    tracing::error!(path = source.path, "panic while {step}");
    let findings = Findings {
        flags: vec![Flag::new(&codes::INTERNAL, format!("while {step}"))],
        provenance: Provenance::of_this_program(),
        ..Findings::default()
    };
    Report::assemble(object, source, findings)
}

/// A fault and all its causes in one line.
pub fn error_chain(fault: &dyn Error) -> String {
    let mut words = fault.to_string();
    let mut cause = fault.source();
    while let Some(inner) = cause {
        words.push_str(": ");
        words.push_str(&inner.to_string());
        cause = inner.source();
    }
    words
}
