//! `emberline rehearse`: an invented night, written as files, fitted by the daemon, against its truth.
//!
//! The night goes into an inbox folder as FITS files; the daemon of `emberline watch --drain` runs over it in
//! this process; the reports that it wrote are read back and scored.

use std::error::Error;
use std::fs;
use std::io::{self, Write};
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::sync::Arc;
use std::time::{Instant, SystemTime};

use clap::Args;
use rayon::prelude::*;
use serde_json::json;

use super::{CommandResult, analyst, progress};
use crate::grid::FluxGrid;
use crate::rehearsal::{Region, Sighting, Summary, fits_table, observe, page, score, truth_table};
use crate::report::{Report, write_atomically};
use crate::service::config::Config;
use crate::service::daemon::{Daemon, EXIT_DONE, Options};
use crate::service::output::ReportPlace;
use crate::service::signals;

/// Arguments of `rehearse`.
#[derive(Debug, Args)]
pub struct RehearseArguments {
    /// Number of invented objects.
    #[arg(long, default_value_t = 1000)]
    stars: u64,
    /// Seed of the random numbers: the same seed gives the same night.
    #[arg(long, default_value_t = 1)]
    seed: u64,
    /// Folder to keep: `inbox` with the spectra, `reports`, `truth.csv`, and `index.html` with figures.
    #[arg(long, value_name = "DIR")]
    into: Option<PathBuf>,
    /// End with one line of JSON instead of a table.
    #[arg(long)]
    json: bool,
}

/// The rehearsal could not be held.
#[derive(Debug, thiserror::Error)]
enum RehearsalFault {
    /// An earlier one lies there.
    #[error("cannot rehearse into {}: it has an inbox with files already (name another folder)", .0.display())]
    Taken(PathBuf),
    /// The daemon gave up or was interrupted.
    #[error("cannot finish the rehearsal: the daemon ended with exit code {exit_code}{}", .why.as_ref().map(|why| format!(", {why}")).unwrap_or_default())]
    DaemonEnded {
        /// Its exit code.
        exit_code: u8,
        /// Its last words.
        why: Option<String>,
    },
    /// A report is missing: the daemon was interrupted.
    #[error("cannot finish the rehearsal: {name} has no report")]
    NoReport {
        /// The object.
        name: String,
        /// What the system said.
        source: io::Error,
    },
}

/// Runs the command.
///
/// # Errors
/// When the tables cannot be read, the files cannot be written, or the daemon cannot finish.
pub fn run(arguments: &RehearseArguments) -> CommandResult {
    let tables = analyst::shared_tables()?;
    let scratch = tempfile::Builder::new().prefix("emberline-rehearsal-").tempdir()?;
    let folder = arguments.into.as_deref().unwrap_or(scratch.path());
    let config = config(folder, scratch.path());
    let inbox = &config.inbox.folders[0];
    if fs::read_dir(inbox).is_ok_and(|mut entries| entries.next().is_some()) {
        return Err(RehearsalFault::Taken(folder.to_owned()).into());
    }
    fs::create_dir_all(inbox)?;
    let night = write_night(&tables.grid, arguments, inbox)?;
    let seconds = run_daemon(&config, arguments.stars)?;
    let fingerprint = analyst::answer_fingerprint(tables, &config);
    let night = night
        .into_par_iter()
        .map(|(sighting, blake3)| {
            let report = read_report(&config.output.reports, &sighting, &blake3, &fingerprint)?;
            Ok((sighting, report))
        })
        .collect::<Result<Vec<_>, RehearsalFault>>()?;
    let (summary, regions) = score(&night, seconds);
    if let Some(folder) = &arguments.into {
        let sightings = night.iter().map(|(sighting, _)| sighting);
        write_atomically(&folder.join("truth.csv"), truth_table(sightings).as_bytes())?;
        write_atomically(&folder.join("index.html"), page(arguments.seed, &night, &summary)?.as_bytes())?;
    }
    let mut out = io::stdout().lock();
    if arguments.json {
        writeln!(out, "{}", json!({ "summary": summary }))?;
    } else {
        print_table(&mut out, arguments.seed, &summary, &regions)?;
    }
    Ok(ExitCode::SUCCESS)
}

/// The defaults, with everything below one folder. The socket goes to the scratch folder, because the paths of
/// sockets must be short.
fn config(folder: &Path, scratch: &Path) -> Config {
    let mut config = Config::default();
    config.inbox.folders = vec![folder.join("inbox")];
    // Everything is written before the daemon starts.
    config.inbox.still_s = 0.0;
    // A thread that waits for the disk leaves its core to another one: a report takes as long to sync as to fit.
    config.workers.threads = 2 * config.workers.thread_count();
    config.output.reports = folder.join("reports");
    config.output.ledger = folder.join("ledger.sqlite");
    config.service.socket = scratch.join("socket");
    config
}

/// Invents the night and writes it; returns each object with the hash of its file.
fn write_night(
    grid: &FluxGrid,
    arguments: &RehearseArguments,
    inbox: &Path,
) -> Result<Vec<(Sighting, String)>, Box<dyn Error>> {
    let bar = progress::bar(arguments.stars, "observing", "spectra");
    let written: Result<Vec<_>, Box<dyn Error + Send + Sync>> = (0..arguments.stars)
        .into_par_iter()
        .map(|number| {
            let sighting = observe(grid, arguments.seed, number)?;
            let bytes = fits_table(&sighting);
            fs::write(inbox.join(format!("{}.fits", sighting.name.replace(' ', "-"))), &bytes)?;
            bar.inc(1);
            Ok((sighting, blake3::hash(&bytes).to_hex().to_string()))
        })
        .collect();
    bar.finish_and_clear();
    written.map_err(|fault| -> Box<dyn Error> { fault })
}

/// Runs the daemon until all is done; returns the seconds that it took.
fn run_daemon(config: &Config, stars: u64) -> Result<f64, Box<dyn Error>> {
    let source = config.clone();
    let options = Options {
        config: Box::new(move || Ok(source.clone())),
        analysts: analyst::factory(),
        clock: Arc::new(SystemTime::now),
        is_drain: true,
        log: None,
    };
    let started = Instant::now();
    let caught = signals::catch()?;
    let (daemon, commands) = Daemon::start(options)?;
    caught.forward(commands)?;
    let ending = progress::run_daemon(daemon, &progress::bar(stars, "fitting", "spectra"));
    let seconds = started.elapsed().as_secs_f64();
    if ending.exit_code != EXIT_DONE {
        let why = ending.fault.map(|fault| fault.to_string());
        return Err(RehearsalFault::DaemonEnded { exit_code: ending.exit_code, why }.into());
    }
    Ok(seconds)
}

/// The report in force on one object.
fn read_report(
    reports: &Path,
    sighting: &Sighting,
    blake3: &str,
    fingerprint: &str,
) -> Result<Report, RehearsalFault> {
    let place = ReportPlace::new(&sighting.name, blake3, 0, fingerprint);
    let missing = |source| RehearsalFault::NoReport { name: sighting.name.clone(), source };
    let bytes = fs::read(reports.join(&place.pointer)).map_err(missing)?;
    serde_json::from_slice(&bytes).map_err(|fault| missing(fault.into()))
}

fn print_table(out: &mut impl Write, seed: u64, summary: &Summary, regions: &[Region]) -> io::Result<()> {
    writeln!(out, "Kestrel Fell survey, invented night {seed}: {} objects", summary.stars)?;
    writeln!(out)?;
    writeln!(
        out,
        "{:>15} {:>6}  {:>16}  {:>16}  {:>14}  {:>20}  {:>11}",
        "true Teff, K", "stars", "dTeff/Teff, %", "dlog g", "dv, km/s", "pull widths T, g, v", "in 68, 95 %"
    )?;
    for region in regions {
        let [teff, log_g, velocity] = region.pull_widths;
        writeln!(
            out,
            "{:>6.0} - {:>6.0} {:>6}  {:>+7.2} +- {:>5.2}  {:>+7.3} +- {:>5.3}  {:>+5.1} +- {:>5.1}  {:>6.2} {:>6.2} {:>6.2}  {:>5.0} {:>5.0}",
            region.teff_k.0,
            region.teff_k.1,
            region.stars,
            100.0 * region.teff_relative.0,
            100.0 * region.teff_relative.1,
            region.log_g.0,
            region.log_g.1,
            region.radial_velocity_km_s.0,
            region.radial_velocity_km_s.1,
            teff,
            log_g,
            velocity,
            100.0 * region.coverage.0,
            100.0 * region.coverage.1
        )?;
    }
    writeln!(out)?;
    let percent = |share: f64| format!("{:.1} %", 100.0 * share);
    writeln!(
        out,
        "pulls (mean, width): Teff {:+.2} {:.2}, log g {:+.2} {:.2}, velocity {:+.2} {:.2}",
        summary.pull_mean_teff,
        summary.pull_width_teff,
        summary.pull_mean_log_g,
        summary.pull_width_log_g,
        summary.pull_mean_radial_velocity,
        summary.pull_width_radial_velocity
    )?;
    writeln!(
        out,
        "within 1 and 1.96 standard deviations: {} and {}",
        percent(summary.coverage_68),
        percent(summary.coverage_95)
    )?;
    writeln!(
        out,
        "hot and cold mistaken: {}; of S/N 20 or more: {}; and accepted: {}",
        percent(summary.wrong_solution_fraction),
        percent(summary.wrong_solution_fraction_bright),
        percent(summary.wrong_solution_accepted_fraction)
    )?;
    writeln!(
        out,
        "not a DA, but accepted: {} of {}",
        percent(summary.contaminants_accepted_fraction),
        summary.contaminants
    )?;
    writeln!(out, "DA of S/N 15 or more, not accepted: {}", percent(summary.good_not_accepted_fraction))?;
    writeln!(out, "speed: {:.0} spectra per second", summary.spectra_per_s)
}
