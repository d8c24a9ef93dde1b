//! `emberline catalogue export | load`: the catalogue as a file, and a catalogue from reports.

use std::fs;
use std::io::{self, Write};
use std::path::{Path, PathBuf};
use std::process::ExitCode;

use clap::{Args, Subcommand};
use walkdir::WalkDir;

use super::progress::bar;
use super::{CommandResult, EXIT_INPUT_FAILED};
use crate::archive::catalogue::{Catalogue, Filter};
use crate::archive::column;
use crate::archive::export::{Format, export};
use crate::service::config::Config;

/// Arguments of `catalogue`.
#[derive(Debug, Args)]
pub struct CatalogueArgs {
    #[command(subcommand)]
    command: CatalogueCommand,
    /// Configuration that names the catalogue [default: config/emberline.toml, then /etc/emberline/emberline.toml].
    #[arg(long, global = true, value_name = "FILE")]
    config: Option<PathBuf>,
    /// The catalogue itself, instead of the configuration's.
    #[arg(long, global = true, value_name = "FILE")]
    catalogue: Option<PathBuf>,
}

#[derive(Debug, Subcommand)]
enum CatalogueCommand {
    /// Write the catalogue to a file of another format.
    Export(ExportArgs),
    /// Fill the catalogue from a folder of JSON reports.
    Load {
        /// Folder of reports, as the daemon writes it.
        reports: PathBuf,
    },
}

#[derive(Debug, Args)]
struct ExportArgs {
    /// Format of the file.
    #[arg(long, value_enum)]
    format: Format,
    /// Only this verdict: accepted, review or rejected.
    #[arg(long, value_parser = ["accepted", "review", "rejected"])]
    verdict: Option<String>,
    /// Only what was fitted at or after this time, UTC, such as 2026-03-01 or 2026-03-01T12:00.
    #[arg(long, value_name = "TIME", value_parser = checked_time)]
    since: Option<String>,
    /// Only this run: the first characters of a configuration's fingerprint; implies --superseded.
    #[arg(long, value_name = "FINGERPRINT")]
    run: Option<String>,
    /// Rows that a later configuration superseded, too.
    #[arg(long)]
    superseded: bool,
    /// The file to write.
    file: PathBuf,
}

/// A time that begins with a date; it is compared as text with the times of the catalogue.
fn checked_time(text: &str) -> Result<String, String> {
    let is_date = text.get(..10).is_some_and(|date| date.parse::<jiff::civil::Date>().is_ok());
    if is_date {
        Ok(text.to_owned())
    } else {
        Err("need a time such as 2026-03-01 or 2026-03-01T12:00".to_owned())
    }
}

/// Runs the command.
///
/// # Errors
/// The configuration, the catalogue or the file cannot be used.
pub fn run(arguments: &CatalogueArgs) -> CommandResult {
    let path = match &arguments.catalogue {
        Some(path) => path.clone(),
        None => Config::read(arguments.config.as_deref())?.1.catalogue_path(),
    };
    match &arguments.command {
        CatalogueCommand::Export(options) => export_catalogue(&path, options),
        CatalogueCommand::Load { reports } => load_reports(&path, reports),
    }
}

fn export_catalogue(path: &Path, options: &ExportArgs) -> CommandResult {
    let catalogue = Catalogue::open_to_read(path)
        .map_err(|fault| format!("{fault} {}: {}", path.display(), super::error_chain(&fault)))?;
    let filter = Filter {
        verdict: options.verdict.clone(),
        since: options.since.clone(),
        run: options.run.clone(),
        with_superseded: options.superseded || options.run.is_some(),
    };
    let progress = bar(catalogue.count(&filter)?, "exporting", "rows");
    let count = export(&catalogue, &filter, options.format, &options.file, &|| progress.inc(1))?;
    progress.finish_and_clear();
    writeln!(io::stderr(), "{count} rows in {}", options.file.display())?;
    Ok(ExitCode::SUCCESS)
}

/// Reports written together: one transaction.
const BATCH: usize = 1000;

/// A report is `<object>/<source>.<fingerprint>.json`; `<object>/<source>.current.json` leads to the one in force.
fn load_reports(path: &Path, reports: &Path) -> CommandResult {
    if !reports.is_dir() {
        return Err(format!("cannot load {}: found no folder there", reports.display()).into());
    }
    let mut catalogue = Catalogue::open(path)?;
    let progress = bar(0, "loading", "reports");
    let (mut batch, mut loaded, mut refused) = (Vec::new(), 0_u64, 0_u64);
    for entry in WalkDir::new(reports).min_depth(2).max_depth(2).sort_by_file_name() {
        let entry = entry?;
        let name = entry.file_name().to_string_lossy().into_owned();
        let source = name.strip_suffix(".json").and_then(|stem| stem.rsplit_once('.'));
        let Some((source, _)) = source.filter(|_| entry.file_type().is_file() && !name.starts_with('.'))
        else {
            continue;
        };
        let folder = entry.path().parent().unwrap_or(reports);
        let relative = |name: &str| {
            let object = folder.file_name().unwrap_or_default().to_string_lossy();
            format!("{object}/{name}")
        };
        let pointer = format!("{source}.current.json");
        let is_current =
            fs::read_link(folder.join(&pointer)).is_ok_and(|target| target.as_os_str() == name.as_str());
        progress.inc_length(1);
        progress.inc(1);
        match fs::read(entry.path()).and_then(|bytes| Ok(serde_json::from_slice(&bytes)?)) {
            Ok(report) => batch.push(column::row(&report, &relative(&name), &relative(&pointer), is_current)),
            Err(fault) => {
                refused += 1;
                writeln!(io::stderr(), "cannot load {}: {fault}", entry.path().display())?;
            }
        }
        if batch.len() == BATCH {
            loaded += batch.len() as u64;
            catalogue.put(&std::mem::take(&mut batch))?;
        }
    }
    loaded += batch.len() as u64;
    catalogue.put(&batch)?;
    progress.finish_and_clear();
    writeln!(io::stderr(), "{loaded} reports loaded, {refused} refused")?;
    Ok(if refused == 0 { ExitCode::SUCCESS } else { ExitCode::from(EXIT_INPUT_FAILED) })
}
