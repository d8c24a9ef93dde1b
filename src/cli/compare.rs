//! `emberline compare`: how the results of two runs differ.

use std::fs;
use std::io::{self, Write};
use std::path::{Path, PathBuf};
use std::process::ExitCode;

use clap::Args;
use indicatif::{ProgressBar, ProgressStyle};
use serde_json::Value;
use walkdir::WalkDir;

use crate::archive::comparison::{compare, render_figure, render_text};
use crate::service::config::{Config, ConfigError};

/// Compare the results of two runs.
#[derive(Debug, Args)]
pub struct CompareArgs {
    /// Old run: the first characters of a configuration's fingerprint, or a folder of reports.
    pub old: String,
    /// New run: as OLD; of a folder, the reports in force count.
    pub new: String,
    /// Configuration, for the folder of reports [default: config/emberline.toml, then /etc/emberline/emberline.toml].
    #[arg(long, value_name = "FILE")]
    pub config: Option<PathBuf>,
    /// Write a figure (SVG) there.
    #[arg(long, value_name = "FILE")]
    pub figure: Option<PathBuf>,
    /// Print JSON.
    #[arg(long)]
    pub json: bool,
}

/// The runs could not be compared.
#[derive(Debug, thiserror::Error)]
pub enum CompareError {
    /// The configuration is no good.
    #[error(transparent)]
    Config(#[from] ConfigError),
    /// Nothing belongs to a run.
    #[error(
        "cannot compare: found no reports of {run}, need a folder of reports or the first characters of a fingerprint (see `emberline status`)"
    )]
    NoReports {
        /// The run.
        run: String,
    },
    /// The first characters belong to several fingerprints.
    #[error("cannot compare: {run} stands for {}, need more characters", found.join(" and "))]
    Ambiguous {
        /// The run.
        run: String,
        /// What it may stand for.
        found: Vec<String>,
    },
    /// A report could not be read.
    #[error("cannot read the report {}", path.display())]
    Report {
        /// The report.
        path: PathBuf,
        /// Why not.
        source: io::Error,
    },
    /// The figure could not be drawn.
    #[error("cannot draw the figure")]
    Figure(#[from] minijinja::Error),
    /// The result could not be written.
    #[error("cannot write the comparison")]
    Write(#[from] io::Error),
}

/// Prints the comparison and writes the figure.
///
/// # Errors
/// A run has no reports, a report cannot be read, or the result cannot be written.
pub fn run(args: &CompareArgs) -> Result<ExitCode, CompareError> {
    let reports = if [&args.old, &args.new].iter().all(|run| Path::new(run).is_dir()) {
        PathBuf::new()
    } else {
        Config::read(args.config.as_deref())?.1.output.reports
    };
    let comparison = compare(&read_run(&reports, &args.old)?, &read_run(&reports, &args.new)?);
    if let Some(path) = &args.figure {
        fs::write(path, render_figure(&comparison, &args.old, &args.new)?)?;
    }
    let text = if args.json {
        serde_json::to_string(&comparison).map_err(io::Error::from)? + "\n"
    } else {
        render_text(&comparison)
    };
    io::stdout().lock().write_all(text.as_bytes())?;
    Ok(ExitCode::SUCCESS)
}

/// Reads the reports of a run, in the order of their paths.
///
/// # Errors
/// There are none, several runs fit, or one cannot be read.
pub fn read_run(reports: &Path, run: &str) -> Result<Vec<Value>, CompareError> {
    let is_folder = Path::new(run).is_dir();
    let folder = if is_folder { Path::new(run) } else { reports };
    let mut found = Vec::new();
    let mut runs = Vec::new();
    // How many there are is only known when all are read.
    let style = ProgressStyle::with_template("reading {pos} reports, {per_sec}");
    let bar = ProgressBar::no_length().with_style(style.unwrap_or_else(|_| ProgressStyle::default_spinner()));
    for entry in WalkDir::new(folder).sort_by_file_name().into_iter().filter_map(Result::ok) {
        // <source>.<fingerprint or "current">.json
        let file_name = entry.file_name().to_string_lossy();
        let mut parts = file_name.rsplit('.').skip(1);
        let Some(of_run) =
            parts.next().filter(|_| file_name.ends_with(".json") && !file_name.starts_with('.'))
        else {
            continue;
        };
        let is_wanted =
            if is_folder { of_run == "current" } else { of_run != "current" && starts_alike(of_run, run) };
        if !is_wanted {
            continue;
        }
        if !runs.iter().any(|known| known == of_run) {
            runs.push(of_run.to_owned());
        }
        bar.inc(1);
        let path = entry.path();
        let unreadable = |source| CompareError::Report { path: path.to_owned(), source };
        let bytes = fs::read(path).map_err(unreadable)?;
        found.push(serde_json::from_slice(&bytes).map_err(|error| unreadable(error.into()))?);
    }
    bar.finish_and_clear();
    if runs.len() > 1 {
        return Err(CompareError::Ambiguous { run: run.to_owned(), found: runs });
    }
    if found.is_empty() {
        return Err(CompareError::NoReports { run: run.to_owned() });
    }
    Ok(found)
}

/// File names hold the first 16 characters; a person may paste more or fewer.
fn starts_alike(in_name: &str, given: &str) -> bool {
    !given.is_empty() && (in_name.starts_with(given) || given.starts_with(in_name))
}
