//! Building the track table: all masses and both layer thicknesses, in parallel, resumable.
//!
//! Every finished track is kept as one small file in a folder beside the output until the table is
//! written; a build that was interrupted takes up where it stopped. The folder's name holds the program's
//! version and the axes' hash, so that tracks of another build are not mixed in.
//! Several minutes on two cores.

use std::fs;
use std::io;
use std::path::{Path, PathBuf};

use indicatif::{ProgressBar, ProgressStyle};
use ndarray::Array1;
use rayon::prelude::*;
use thiserror::Error;

use super::track_table::{Nodes, QUANTITIES, TrackTable, TrackTableError};
use crate::interior::cooling::{CoolingTrack, cooling_track};
use crate::interior::core::Core;
use crate::interior::structure::HydrogenLayer;
use crate::physics::constants::JULIAN_YEAR_S;

/// Teff axis, K and nodes: steps of 0.02 dex.
const TEFF_K: (f64, f64, usize) = (4000.0, 80_000.0, 66);
/// Where tracks end, a little cooler than the axis.
const COOLEST_TEFF_K: f64 = 3950.0;
/// Youngest age kept, Gyr: 10 yr, below which the starting model decides.
const YOUNGEST_GYR: f64 = 1e-8;

/// Why a build failed.
#[derive(Debug, Error)]
pub enum TrackBuildError {
    /// The file system refused.
    #[error("cannot {action} {path}", path = path.display())]
    Io {
        /// What was attempted.
        action: &'static str,
        /// On what.
        path: PathBuf,
        /// The system's answer.
        source: io::Error,
    },
    /// A mass without any model.
    #[error("cannot build the track of {mass_msun} Msun: found no starting model, need one")]
    NoTrack {
        /// Which mass.
        mass_msun: f64,
    },
    /// The table could not be put together or written.
    #[error("cannot finish the track table")]
    Table(#[from] TrackTableError),
}

/// Masses of the table, solar: steps of 0.01 up to the change of core, where radii change fastest with mass,
/// then of 0.02; a node on each side of the change.
pub fn masses_msun() -> Vec<f64> {
    // Whole thousandths, so that nodes are round numbers.
    let run =
        |first: i32, step: usize, last: i32| (first..=last).step_by(step).map(|m| f64::from(m) / 1000.0);
    let mut masses: Vec<f64> = run(150, 10, 440).collect();
    masses.extend([0.449, 0.451]);
    masses.extend(run(470, 20, 1350));
    masses.push(1.36);
    masses
}

/// log10 Teff of the table.
pub fn log_teffs() -> Vec<f64> {
    let (low, high, count) = TEFF_K;
    (0..count).map(|i| low.log10() + (high / low).log10() * i as f64 / (count - 1) as f64).collect()
}

/// A track on the Teff axis: one row of quantities per node, NaN where the star never was.
fn resample(track: &CoolingTrack, log_teffs: &[f64]) -> Vec<f64> {
    let rows: Vec<(f64, [f64; QUANTITIES.len()])> = track
        .models
        .iter()
        .zip(&track.age_s)
        .map(|(m, age_s)| {
            let age_gyr = (age_s / (1e9 * JULIAN_YEAR_S)).max(YOUNGEST_GYR);
            let row = [
                m.radius_rsun().log10(),
                age_gyr.log10(),
                m.central_temperature_k.log10(),
                m.central_density_g_cm3.log10(),
                m.crystallised_fraction,
            ];
            (m.teff_k.log10(), row)
        })
        .collect();
    let mut values = Vec::with_capacity(log_teffs.len() * QUANTITIES.len());
    for &wanted in log_teffs {
        // The last passage: a contracting star may first have warmed through the same temperature.
        let passage = rows.windows(2).rposition(|w| w[0].0 >= wanted && w[1].0 <= wanted);
        match passage {
            Some(i) => {
                let (a, b) = (&rows[i], &rows[i + 1]);
                let share = (wanted - a.0) / (b.0 - a.0);
                values.extend((0..QUANTITIES.len()).map(|k| a.1[k] + share * (b.1[k] - a.1[k])));
            }
            None => values.extend([f64::NAN; QUANTITIES.len()]),
        }
    }
    values
}

struct Task {
    mass_msun: f64,
    layer: HydrogenLayer,
}

impl Task {
    fn file(&self, folder: &Path) -> PathBuf {
        folder.join(format!("{:?}-{:.3}.track", self.layer, self.mass_msun).to_lowercase())
    }

    /// Values of the track, from an earlier run if it is there.
    fn run(&self, folder: &Path, log_teffs: &[f64]) -> Result<Vec<f64>, TrackBuildError> {
        let path = self.file(folder);
        let expected = log_teffs.len() * QUANTITIES.len() * size_of::<f64>();
        if let Some(bytes) = fs::read(&path).ok().filter(|bytes| bytes.len() == expected) {
            let words = bytes.chunks_exact(size_of::<f64>());
            return Ok(words.map(|w| f64::from_le_bytes(w.try_into().unwrap_or_default())).collect());
        }
        let core = Core::of_mass(self.mass_msun);
        let track = cooling_track(self.mass_msun, COOLEST_TEFF_K, self.layer, core)
            .ok_or(TrackBuildError::NoTrack { mass_msun: self.mass_msun })?;
        let values = resample(&track, log_teffs);
        let bytes: Vec<u8> = values.iter().flat_map(|v| v.to_le_bytes()).collect();
        let part = path.with_extension("part");
        let fault = |action, path: &Path| {
            let path = path.to_owned();
            move |source| TrackBuildError::Io { action, path, source }
        };
        fs::write(&part, bytes).map_err(fault("write", &part))?;
        fs::rename(&part, &path).map_err(fault("move into place", &path))?;
        Ok(values)
    }
}

/// Builds the table and writes it to `output`; returns it with its checksum.
///
/// # Errors
/// [`TrackBuildError`]; finished tracks stay for the next run.
pub fn build_track_table(
    output: &Path,
    show_progress: bool,
) -> Result<(TrackTable, String), TrackBuildError> {
    let (masses, log_teffs) = (masses_msun(), log_teffs());
    let mut hasher = blake3::Hasher::new();
    masses.iter().chain(&log_teffs).for_each(|v| {
        hasher.update(&v.to_le_bytes());
    });
    let axes = hasher.finalize().to_hex();
    let mut name = output.file_name().unwrap_or_default().to_owned();
    name.push(format!(".{}-{}.parts", env!("CARGO_PKG_VERSION"), &axes[..8]));
    let folder = output.with_file_name(name);
    let fault = |action, path: &Path| {
        let path = path.to_owned();
        move |source| TrackBuildError::Io { action, path, source }
    };
    fs::create_dir_all(&folder).map_err(fault("create", &folder))?;

    let layers = [HydrogenLayer::Thick, HydrogenLayer::Thin];
    let tasks: Vec<Task> = layers
        .iter()
        .flat_map(|&layer| masses.iter().map(move |&mass_msun| Task { mass_msun, layer }))
        .collect();
    let bar = if show_progress { ProgressBar::new(tasks.len() as u64) } else { ProgressBar::hidden() };
    if let Ok(style) =
        ProgressStyle::with_template("tracks {bar:40} {pos}/{len}  {elapsed} elapsed, {eta} to go")
    {
        bar.set_style(style);
    }
    let rows: Vec<Vec<f64>> = tasks
        .par_iter()
        .map(|task| {
            let values = task.run(&folder, &log_teffs);
            bar.inc(1);
            values
        })
        .collect::<Result<_, _>>()?;
    bar.finish();

    let shape = (masses.len(), log_teffs.len(), QUANTITIES.len());
    let nodes = |rows: &[Vec<f64>]| {
        let found = format!("{} tracks", rows.len());
        Nodes::from_shape_vec(shape, rows.concat())
            .map_err(|_| TrackTableError::Contents { found, need: "one track per mass" })
    };
    let (thick, thin) = rows.split_at(masses.len());
    let table =
        TrackTable::new(Array1::from(masses.clone()), Array1::from(log_teffs), nodes(thick)?, nodes(thin)?)?;
    let checksum = table.write(output)?;
    fs::remove_dir_all(&folder).map_err(fault("remove", &folder))?;
    Ok((table, checksum))
}
