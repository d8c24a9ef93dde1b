//! `emberline fit FILE...`: one report per object, one line each, on stdout.

use std::io::{self, Write};
use std::path::PathBuf;
use std::process::ExitCode;
use std::time::Instant;

use clap::Args;
use indicatif::ProgressBar;
use rayon::prelude::*;
use serde::de::DeserializeOwned;

use super::analyst::answer_fingerprint;
use super::{CommandResult, EXIT_INPUT_FAILED, EXIT_WRONG_USE, Tables, progress};
use crate::report::{Analysis, Report, Verdict, report_file};
use crate::service::config::Config;
use crate::spectrum::{
    Assumptions, ErrorKind, Exposures, FluxScale, Medium, ReadSettings, VelocityFrame, WaveUnit,
};

/// Files read and fitted at once before their reports are printed, so that output streams.
const FILES_PER_BATCH: usize = 64;
/// More files than this get a progress bar.
const FEW_FILES: usize = 4;

/// Arguments of `fit`.
#[derive(Debug, Args)]
pub struct FitArguments {
    /// Reduced FITS spectra, plain or compressed with gzip.
    #[arg(required = true, value_name = "FILE")]
    files: Vec<PathBuf>,

    /// Configuration whose instrument sections and fit settings are used; none is read unless named.
    #[arg(long, value_name = "FILE")]
    config: Option<PathBuf>,

    /// Medium of the wavelengths, for files that do not state it: air or vacuum.
    #[arg(long, value_parser = word::<Medium>)]
    medium: Option<Medium>,

    /// FWHM of the instrument in angstroms, for files that do not give their resolution.
    #[arg(long, value_name = "AA", conflicts_with = "resolving_power")]
    resolution_fwhm_aa: Option<f64>,

    /// Resolving power (wavelength / FWHM), for files that do not give their resolution.
    #[arg(long, value_name = "R")]
    resolving_power: Option<f64>,

    /// Unit of the wavelengths, for files that do not state it: angstrom, nm, um or m.
    #[arg(long, value_parser = word::<WaveUnit>)]
    wave_unit: Option<WaveUnit>,

    /// Scale of the fluxes, for files that do not state it: calibrated or relative.
    #[arg(long, value_parser = word::<FluxScale>)]
    flux_scale: Option<FluxScale>,

    /// What the errors are, for files that do not state it: sigma, variance or inverse_variance.
    #[arg(long, value_parser = word::<ErrorKind>)]
    error_kind: Option<ErrorKind>,

    /// Signal-to-noise ratio per pixel, for files without errors.
    #[arg(long, value_name = "SNR")]
    assume_snr: Option<f64>,

    /// Observer to whom the wavelengths refer, for files that do not state it: topocentric,
    /// heliocentric or barycentric.
    #[arg(long, value_parser = word::<VelocityFrame>)]
    velocity_frame: Option<VelocityFrame>,

    /// Use the values given here even where a file states something else.
    #[arg(long)]
    overrule_file: bool,

    /// Several exposures of one object in one file: apart or combine.
    #[arg(long, value_parser = word::<Exposures>, default_value = "apart")]
    exposures: Exposures,

    /// Only this row, fibre or aperture of each file, from 0.
    #[arg(long)]
    row: Option<usize>,

    /// Largest file to read, packed or unpacked, MB.
    #[arg(long, value_name = "MB", default_value_t = ReadSettings::default().largest_file_mb)]
    largest_file_mb: u64,
}

impl FitArguments {
    fn settings(&self, config: &Config) -> ReadSettings {
        ReadSettings {
            assume: Assumptions {
                medium: self.medium,
                wave_unit: self.wave_unit,
                flux_scale: self.flux_scale,
                error_kind: self.error_kind,
                assume_snr: self.assume_snr,
                resolution_fwhm_aa: self.resolution_fwhm_aa,
                resolving_power: self.resolving_power,
                velocity_frame: self.velocity_frame,
                overrule_file: self.overrule_file,
            },
            exposures: self.exposures,
            row: self.row,
            largest_file_mb: self.largest_file_mb,
            instruments: config.instrument.clone(),
        }
    }
}

/// Parses a value by the same words as the configuration file.
fn word<T: DeserializeOwned>(words: &str) -> Result<T, String> {
    serde_json::from_value(serde_json::Value::String(words.to_owned())).map_err(|fault| fault.to_string())
}

/// Checks the options, then reads the tables, then reads, analyses and reports every object of every
/// file.
pub fn run(arguments: &FitArguments) -> CommandResult {
    let config = match &arguments.config {
        Some(path) => Config::read(Some(path))?.1,
        None => Config::default(),
    };
    let settings = arguments.settings(&config);
    if let Err(detail) = settings.check() {
        writeln!(io::stderr(), "emberline: cannot use the options: {detail}")?;
        return Ok(ExitCode::from(EXIT_WRONG_USE));
    }
    let tables = Tables::read()?;
    let pipeline = Analysis::new(&tables.grid, &tables.tracks, &config.fit);
    let fingerprint = answer_fingerprint(&tables, &config);
    let count = arguments.files.len();
    let bar = if count > FEW_FILES {
        progress::bar(count as u64, "fitting", "files")
    } else {
        ProgressBar::hidden()
    };
    let started = Instant::now();
    let mut out = io::BufWriter::new(io::stdout().lock());
    let mut tally = Tally::default();
    for batch in arguments.files.chunks(FILES_PER_BATCH) {
        let reports: Vec<Vec<Report>> = batch
            .par_iter()
            .map(|path| {
                let mut reports = report_file(path, &settings, &pipeline);
                for report in &mut reports {
                    report.provenance.config_fingerprint = Some(fingerprint.clone());
                }
                bar.inc(1);
                reports
            })
            .collect();
        for report in reports.iter().flatten() {
            tally.count(report);
            serde_json::to_writer(&mut out, report).map_err(io::Error::from)?;
            out.write_all(b"\n")?;
        }
        out.flush()?;
    }
    bar.finish_and_clear();
    tally.print(started.elapsed().as_secs_f64())?;
    Ok(if tally.rejected == 0 { ExitCode::SUCCESS } else { ExitCode::from(EXIT_INPUT_FAILED) })
}

/// How many objects ended how.
#[derive(Debug, Default)]
struct Tally {
    accepted: usize,
    review: usize,
    rejected: usize,
}

impl Tally {
    fn count(&mut self, report: &Report) {
        match report.verdict {
            Verdict::Accepted => self.accepted += 1,
            Verdict::Review => self.review += 1,
            Verdict::Rejected => self.rejected += 1,
        }
    }

    fn print(&self, seconds: f64) -> io::Result<()> {
        let objects = self.accepted + self.review + self.rejected;
        writeln!(
            io::stderr(),
            "{objects} object{} in {seconds:.1} s: {} accepted, {} for review, {} rejected",
            if objects == 1 { "" } else { "s" },
            self.accepted,
            self.review,
            self.rejected
        )
    }
}
