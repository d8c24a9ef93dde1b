//! `emberline grid build | check | info`: the tables of model spectra and Stark profiles.

use std::io::{self, Write};
use std::path::PathBuf;
use std::process::ExitCode;

use clap::{Args, Subcommand};
use indicatif::{ProgressBar, ProgressStyle};

use super::{CommandResult, EXIT_INPUT_FAILED};
use crate::atmosphere::FLUX_TOLERANCE;
use crate::fit::{WINDOWS, Window};
use crate::grid::FluxGrid;
use crate::grid::build::{Nodes, build_flux_grid};
use crate::grid::place::{FLUX_FILE, PROFILE_FILE, grids_folder};
use crate::grid::profile_table::{build_profile_table, tabulated_lines};

/// Finished nodes between two lines of a build that nobody watches.
const NODES_PER_LINE: u64 = 100;

/// Arguments of `grid`.
#[derive(Debug, Args)]
pub struct GridArguments {
    #[command(subcommand)]
    command: GridCommand,
    /// Folder of the tables (default: EMBERLINE_GRIDS, ./grids, the installed place).
    #[arg(long, global = true, value_name = "DIR")]
    grids: Option<PathBuf>,
}

#[derive(Debug, Subcommand)]
enum GridCommand {
    /// Compute the Stark profiles and the grid; an interrupted build goes on where it stopped.
    Build,
    /// Verify the checksum and the convergence of every node; print the interpolation error.
    Check,
    /// Print where the grid comes from.
    Info,
}

/// Runs the command.
///
/// # Errors
/// When a table cannot be read, built or written.
pub fn run(arguments: &GridArguments) -> CommandResult {
    let folder = arguments.grids.clone().unwrap_or_else(grids_folder);
    let path = folder.join(FLUX_FILE);
    let mut out = io::stdout().lock();
    match arguments.command {
        GridCommand::Build => {
            std::fs::create_dir_all(&folder)?;
            let bar = progress_bar("Stark profiles", tabulated_lines().len());
            let profiles =
                build_profile_table(&folder.join(PROFILE_FILE), &|done, _| bar.set_position(done as u64))?;
            bar.finish();
            let nodes = Nodes::bundled();
            let bar = progress_bar("atmospheres", nodes.teff_k.len() * nodes.log_g.len());
            // Where no bar can be seen (a log file), a line now and then.
            let on_node = || {
                bar.inc(1);
                if bar.is_hidden() && bar.position().is_multiple_of(NODES_PER_LINE) {
                    let _ = writeln!(io::stderr(), "{} nodes done", bar.position());
                }
            };
            let built_at = jiff::Timestamp::now().strftime("%Y-%m-%dT%H:%M:%S").to_string();
            let grid = build_flux_grid(&path, &nodes, &profiles, &built_at, &on_node)?;
            bar.finish();
            writeln!(out, "{} {}", path.display(), grid.header.blake3)?;
        }
        GridCommand::Check => {
            let grid = FluxGrid::read(&path)?;
            let faults = unconverged(&grid);
            for fault in &faults {
                writeln!(out, "{fault}")?;
            }
            print_interpolation(&mut out, &grid)?;
            if !faults.is_empty() {
                return Ok(ExitCode::from(EXIT_INPUT_FAILED));
            }
            writeln!(out, "{}: good", path.display())?;
        }
        GridCommand::Info => print_info(&mut out, &FluxGrid::read(&path)?)?,
    }
    Ok(ExitCode::SUCCESS)
}

fn unconverged(grid: &FluxGrid) -> Vec<String> {
    let is_bad = |error: f64| error.is_nan() || error > FLUX_TOLERANCE;
    grid.nodes
        .iter()
        .filter(|node| is_bad(node.flux_error_max) || is_bad(node.flux_error_surface))
        .map(|node| {
            format!(
                "node Teff {} K, log g {}: flux error {:.1e}, need {FLUX_TOLERANCE:.0e}",
                node.teff_k, node.log_g, node.flux_error_max
            )
        })
        .collect()
}

/// Leave-one-out error of each line's profile: every interior node is interpolated from the others.
fn print_interpolation(out: &mut impl Write, grid: &FluxGrid) -> io::Result<()> {
    writeln!(out, "leave-one-out interpolation error of the normalised profiles, rms in % of the continuum")?;
    writeln!(out, "{:>10} {:>10} {:>10} {:>10}  worst node", "line", "median", "95 %", "worst")?;
    for window in WINDOWS {
        let mut errors = grid.leave_one_out(window.range_vac_aa);
        errors.sort_by(|a, b| a.rms.total_cmp(&b.rms));
        let at = |q: f64| 100.0 * errors[((errors.len() - 1) as f64 * q) as usize].rms;
        let Some(worst) = errors.last() else { continue };
        let Window { name, .. } = window;
        writeln!(
            out,
            "{name:>10} {:>10.3} {:>10.3} {:>10.3}  {} K, log g {}",
            at(0.5),
            at(0.95),
            at(1.0),
            worst.teff_k,
            worst.log_g
        )?;
    }
    Ok(())
}

fn print_info(out: &mut impl Write, grid: &FluxGrid) -> io::Result<()> {
    let header = &grid.header;
    let axis = |axis: &[f64]| format!("{} from {} to {}", axis.len(), axis[0], axis[axis.len() - 1]);
    writeln!(out, "made by          emberline {} at {}", header.program_version, header.built_at)?;
    writeln!(out, "layout, physics  {}, {}", header.format_version, header.physics_version)?;
    writeln!(out, "blake3           {}", header.blake3)?;
    for (key, value) in &header.physics {
        writeln!(out, "{key:<16} {value}")?;
    }
    writeln!(out, "Teff, K          {}", axis(&grid.teff_k))?;
    writeln!(out, "log g            {}", axis(&grid.log_g))?;
    writeln!(out, "fine, vacuum A   {}", axis(&grid.wave_vac_aa))?;
    writeln!(out, "coarse, vacuum A {}", axis(&grid.sed_wave_vac_aa))?;
    let worst = grid.nodes.iter().fold(0.0_f64, |worst, node| worst.max(node.flux_error_max));
    writeln!(out, "worst flux error {worst:.1e}")
}

fn progress_bar(what: &'static str, length: usize) -> ProgressBar {
    let style = ProgressStyle::with_template("{msg:>15} {bar:40} {pos}/{len}, {eta} left")
        .unwrap_or_else(|_| ProgressStyle::default_bar());
    ProgressBar::new(length as u64).with_style(style).with_message(what)
}
