//! `emberline tracks`: build, check, describe, ask and draw the table of cooling tracks.

use std::io::{self, Write};
use std::path::{Path, PathBuf};
use std::process::ExitCode;

use clap::{Args, Subcommand, ValueEnum};
use serde::Serialize;
use thiserror::Error;

use crate::codes::{self, Flag};
use crate::grid::FluxGrid;
use crate::grid::magnitude_table::MagnitudeTable;
use crate::grid::place::FLUX_FILE;
use crate::grid::track_build::{TrackBuildError, build_track_table, log_teffs, masses_msun};
use crate::grid::track_table::{QUANTITIES, TrackTable, TrackTableError};
use crate::interior::structure::HydrogenLayer;
use crate::star::{ApparentMagnitude, Star, StarModels, StarReport, describe};

/// Build, check, describe, ask and draw the table of cooling tracks.
#[derive(Debug, Args)]
pub struct TracksArgs {
    #[command(subcommand)]
    command: TracksCommand,
    /// The table.
    #[arg(long, global = true, default_value = "grids/tracks.fits", value_name = "FILE")]
    tracks: PathBuf,
}

#[derive(Debug, Subcommand)]
enum TracksCommand {
    /// Compute all tracks and write the table (several minutes; resumes where it stopped).
    Build,
    /// Verify the table: checksum, axes, and that radius and age behave as they must.
    Check,
    /// Print what the table holds.
    Info,
    /// Print the star of a temperature and gravity as JSON.
    At(AtArgs),
    /// Draw the mass-radius relation as SVG on stdout.
    Plot,
}

#[derive(Debug, Args)]
struct AtArgs {
    /// Effective temperature, K.
    #[arg(long, allow_negative_numbers = true)]
    teff_k: f64,
    /// Surface gravity, log10 cm/s2.
    #[arg(long, allow_negative_numbers = true)]
    log_g: f64,
    /// Standard deviation of the temperature, K.
    #[arg(long, default_value_t = 0.0)]
    teff_err_k: f64,
    /// Standard deviation of log g, dex.
    #[arg(long, default_value_t = 0.0)]
    log_g_err: f64,
    /// Correlation of the two.
    #[arg(long, default_value_t = 0.0, allow_negative_numbers = true)]
    correlation: f64,
    /// Radial velocity, km/s.
    #[arg(long, allow_negative_numbers = true)]
    radial_velocity_km_s: Option<f64>,
    /// A magnitude, for the distance: gaia_g, gaia_bp, gaia_rp, sdss_u ... sdss_z or johnson_v.
    #[arg(long, value_name = "BAND=VALUE[:ERROR]")]
    magnitude: Option<ApparentMagnitude>,
    /// Thickness of the hydrogen layer.
    #[arg(long, value_enum, default_value_t = LayerName::Thick)]
    layer: LayerName,
}

#[derive(Debug, Clone, Copy, ValueEnum)]
enum LayerName {
    /// 1e-4 of the mass.
    Thick,
    /// 1e-10 of the mass.
    Thin,
}

impl From<LayerName> for HydrogenLayer {
    fn from(name: LayerName) -> Self {
        match name {
            LayerName::Thick => HydrogenLayer::Thick,
            LayerName::Thin => HydrogenLayer::Thin,
        }
    }
}

/// Why `tracks` failed.
#[derive(Debug, Error)]
pub enum TracksError {
    /// The table could not be read.
    #[error(transparent)]
    Table(#[from] TrackTableError),
    /// The table could not be built.
    #[error(transparent)]
    Build(#[from] TrackBuildError),
    /// The answer could not be written.
    #[error("cannot print the answer")]
    Output(#[from] io::Error),
    /// The answer could not be put into JSON.
    #[error("cannot put the answer into JSON")]
    Json(#[from] serde_json::Error),
    /// The figure could not be made.
    #[error("cannot draw the figure")]
    Figure(#[from] super::tracks_figure::FigureError),
}

/// Runs the command.
///
/// # Errors
/// [`TracksError`]; a table that fails `check` is not an error but exit code 3.
pub fn run(args: &TracksArgs) -> Result<ExitCode, TracksError> {
    let mut out = io::stdout().lock();
    match &args.command {
        TracksCommand::Build => {
            let (_, checksum) = build_track_table(&args.tracks, true)?;
            writeln!(out, "{} {checksum}", args.tracks.display())?;
        }
        TracksCommand::Check => {
            let faults = check_table(&TrackTable::read(&args.tracks)?);
            for fault in &faults {
                writeln!(out, "{fault}")?;
            }
            if !faults.is_empty() {
                return Ok(ExitCode::from(3));
            }
            writeln!(out, "{}: good", args.tracks.display())?;
        }
        TracksCommand::Info => {
            let table = TrackTable::read(&args.tracks)?;
            let (masses, temperatures) = (table.masses_msun(), table.log_teffs());
            writeln!(out, "made by     {}", table.origin())?;
            writeln!(out, "blake3      {}", table.checksum())?;
            writeln!(
                out,
                "masses      {} from {} to {} Msun",
                masses.len(),
                masses[0],
                masses[masses.len() - 1]
            )?;
            let hottest_k = 10f64.powf(temperatures[temperatures.len() - 1]);
            let coolest_k = 10f64.powf(temperatures[0]);
            writeln!(out, "Teff        {} from {coolest_k:.0} to {hottest_k:.0} K", temperatures.len())?;
            writeln!(out, "quantities  {}", QUANTITIES.join(" "))?;
            for layer in [HydrogenLayer::Thick, HydrogenLayer::Thin] {
                let nodes = table.nodes(layer);
                let known = nodes.iter().step_by(QUANTITIES.len()).filter(|v| v.is_finite()).count();
                let all = nodes.len() / QUANTITIES.len();
                writeln!(out, "{layer:?} layer: {known} of {all} nodes hold a star")?;
            }
        }
        TracksCommand::At(at) => {
            let StarReport { star, flags } = star_at(at, &args.tracks, &TrackTable::read(&args.tracks)?);
            writeln!(out, "{}", serde_json::to_string(&StarBlock { star, flags })?)?;
        }
        TracksCommand::Plot => {
            let figure = super::tracks_figure::mass_radius_svg(&TrackTable::read(&args.tracks)?)?;
            out.write_all(figure.as_bytes())?;
        }
    }
    Ok(ExitCode::SUCCESS)
}

/// The report's `star` block, with its flags beside the values.
#[derive(Serialize)]
struct StarBlock {
    #[serde(flatten)]
    star: Star,
    flags: Vec<Flag>,
}

/// The star with magnitudes from the model spectra beside the tracks, if they are there.
fn star_at(at: &AtArgs, path: &Path, tracks: &TrackTable) -> StarReport {
    let mixed = at.correlation * at.teff_err_k * at.log_g_err;
    let covariance = [[at.teff_err_k * at.teff_err_k, mixed], [mixed, at.log_g_err * at.log_g_err]];
    let grid = FluxGrid::read(&path.with_file_name(FLUX_FILE));
    let magnitudes = grid.as_ref().map(MagnitudeTable::new);
    let models = StarModels { tracks, magnitudes: magnitudes.as_ref().ok(), layer: at.layer.into() };
    let (velocity, apparent) = (at.radial_velocity_km_s, at.magnitude.as_ref());
    let mut report = describe(at.teff_k, at.log_g, &covariance, velocity, apparent, &models);
    if let Err(fault) = magnitudes {
        report.flags.push(Flag::new(&codes::NO_MAGNITUDES, fault.to_string()));
    }
    report
}

/// Radii of nearly cold stars no longer change with Teff; this is the noise of the material tables, log10 R: at most 2e-4
/// was seen, at 1.35 Msun with a thin layer, where the helium envelope freezes.
const RADIUS_NOISE_DEX: f64 = 3e-4;

/// What is wrong with a table whose checksum is right; empty if nothing.
pub fn check_table(table: &TrackTable) -> Vec<String> {
    let mut faults = Vec::new();
    if table.masses_msun().to_vec() != masses_msun() || table.log_teffs().to_vec() != log_teffs() {
        faults.push("axes differ from those this program builds".to_owned());
    }
    let masses = table.masses_msun();
    let temperatures = table.log_teffs();
    for layer in [HydrogenLayer::Thick, HydrogenLayer::Thin] {
        let nodes = table.nodes(layer);
        for (i, mass) in masses.iter().enumerate() {
            for (j, log_teff) in temperatures.iter().enumerate() {
                let place = || format!("{layer:?} layer, {mass} Msun, {:.0} K", 10f64.powf(*log_teff));
                let (radius, age) = (nodes[[i, j, 0]], nodes[[i, j, 1]]);
                if radius.is_nan() {
                    continue;
                }
                if i > 0 && nodes[[i - 1, j, 0]] <= radius {
                    faults.push(format!("{}: radius does not fall with mass", place()));
                }
                if j > 0 && nodes[[i, j - 1, 0]] > radius + RADIUS_NOISE_DEX {
                    faults.push(format!("{}: radius does not rise with Teff", place()));
                }
                if j > 0 && nodes[[i, j - 1, 1]] <= age {
                    faults.push(format!("{}: age does not fall with Teff", place()));
                }
            }
        }
    }
    faults
}
