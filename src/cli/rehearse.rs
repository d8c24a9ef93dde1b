//! `emberline rehearse`: an invented night, fitted by the real code, against its truth.

use std::io::{self, IsTerminal, Write};
use std::path::PathBuf;
use std::process::ExitCode;
use std::time::Instant;

use clap::Args;
use indicatif::{ProgressBar, ProgressStyle};
use rayon::prelude::*;
use serde_json::json;

use super::{CommandResult, Tables};
use crate::fit::FitSettings;
use crate::rehearsal::{Region, Summary, observe, score, truth_table};
use crate::report::{Analysis, report_observation, write_atomically};
use crate::spectrum::{ObjectRecord, Observation, SourceRecord};

/// Arguments of `rehearse`.
#[derive(Debug, Args)]
pub struct RehearseArguments {
    /// Number of invented objects.
    #[arg(long, default_value_t = 1000)]
    stars: u64,
    /// Seed of the random numbers: the same seed gives the same night.
    #[arg(long, default_value_t = 1)]
    seed: u64,
    /// Folder for the reports, one JSON file per object, and truth.csv; made if missing.
    #[arg(long, value_name = "DIR")]
    into: Option<PathBuf>,
    /// End with one line of JSON instead of a table.
    #[arg(long)]
    json: bool,
}

/// Runs the command.
///
/// # Errors
/// When the tables cannot be read or the reports cannot be written.
pub fn run(arguments: &RehearseArguments) -> CommandResult {
    let tables = Tables::read()?;
    let analysis = Analysis::new(&tables.grid, &tables.tracks, &FitSettings::default());
    if let Some(folder) = &arguments.into {
        std::fs::create_dir_all(folder)?;
    }
    let bar = progress_bar(arguments.stars);
    let started = Instant::now();
    let night = (0..arguments.stars)
        .into_par_iter()
        .map(|number| {
            let sighting = observe(&tables.grid, arguments.seed, number)?;
            let object = ObjectRecord { name: Some(sighting.name.clone()), ..ObjectRecord::default() };
            let observation = Observation {
                spectrum: sighting.spectrum.clone(),
                object,
                source: SourceRecord {
                    path: format!("rehearsal/{}", sighting.name),
                    ..SourceRecord::default()
                },
                flags: Vec::new(),
            };
            let report = report_observation(observation, 0.0, &analysis);
            bar.inc(1);
            Ok((sighting, report))
        })
        .collect::<Result<Vec<_>, crate::spectrum::SpectrumFault>>()?;
    let seconds = started.elapsed().as_secs_f64();
    bar.finish_and_clear();
    if let Some(folder) = &arguments.into {
        for (sighting, report) in &night {
            let file = folder.join(format!("{}.json", sighting.name.replace(' ', "-")));
            write_atomically(&file, &serde_json::to_vec_pretty(report)?)?;
        }
        let sightings = night.iter().map(|(sighting, _)| sighting);
        write_atomically(&folder.join("truth.csv"), truth_table(sightings).as_bytes())?;
    }
    let (summary, regions) = score(&night, seconds);
    let mut out = io::stdout().lock();
    if arguments.json {
        writeln!(out, "{}", json!({ "summary": summary }))?;
    } else {
        print_table(&mut out, arguments.seed, &summary, &regions)?;
    }
    Ok(ExitCode::SUCCESS)
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

fn progress_bar(stars: u64) -> ProgressBar {
    if !io::stderr().is_terminal() {
        return ProgressBar::hidden();
    }
    let style = ProgressStyle::with_template("{bar:40} {pos}/{len} spectra, {eta} left")
        .unwrap_or_else(|_| ProgressStyle::default_bar());
    ProgressBar::new(stars).with_style(style)
}
