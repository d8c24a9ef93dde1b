//! The analysis of one observation: fit, three-dimensional correction, star, findings.

use std::collections::BTreeMap;
use std::time::Instant;

use super::assemble::{Findings, FittedParameters};
use super::document::{LineRow, Provenance, SolutionRow};
use super::pipeline::{Analyse, error_chain};
use crate::codes::{self, Flag};
use crate::fit::{Fit, FitSettings, Fitter, LineResult, Solution};
use crate::grid::FluxGrid;
use crate::grid::magnitude_table::MagnitudeTable;
use crate::grid::track_table::TrackTable;
use crate::interior::structure::HydrogenLayer;
use crate::spectrum::Observation;
use crate::star::three_d::{HOTTEST_K, correct_3d};
use crate::star::{StarModels, StarReport, describe};

/// Everything that an analysis needs, shared by all threads.
pub struct Analysis<'t> {
    fitter: Fitter<'t>,
    tracks: &'t TrackTable,
    magnitudes: MagnitudeTable,
    provenance: Provenance,
    /// External errors: of Teff, relative, and of log g, dex.
    external: [f64; 2],
}

impl<'t> Analysis<'t> {
    /// Prepares the fit against a grid, and the look-up in a track table.
    pub fn new(grid: &'t FluxGrid, tracks: &'t TrackTable, settings: &FitSettings) -> Self {
        let fingerprint = blake3::hash(format!("{settings:?}").as_bytes()).to_hex()[..16].to_owned();
        let physics: Vec<String> =
            grid.header.physics.iter().map(|(key, value)| format!("{key}={value}")).collect();
        let provenance = Provenance {
            config_fingerprint: Some(fingerprint),
            grid: Some(format!("physics {}: {}", grid.header.physics_version, physics.join("; "))),
            grid_blake3: Some(grid.header.blake3.clone()),
            tracks: Some(tracks.checksum().to_owned()),
            ..Provenance::of_this_program()
        };
        Analysis {
            fitter: Fitter::new(grid, settings.clone()),
            tracks,
            magnitudes: MagnitudeTable::new(grid),
            provenance,
            external: [settings.external_teff_relative, settings.external_log_g],
        }
    }

    fn star(&self, parameters: &FittedParameters, solution: &Solution) -> StarReport {
        let [teff_k, _, teff_external_k] = parameters.teff_k;
        let [log_g, _, log_g_external] = parameters.log_g;
        let statistical = &solution.covariance;
        let covariance = [
            [statistical[0][0] + teff_external_k.powi(2), statistical[0][1]],
            [statistical[1][0], statistical[1][1] + log_g_external.powi(2)],
        ];
        let models = StarModels {
            tracks: self.tracks,
            magnitudes: Some(&self.magnitudes),
            layer: HydrogenLayer::Thick,
        };
        describe(teff_k, log_g, &covariance, Some(parameters.radial_velocity_km_s[0]), None, &models)
    }
}

impl Analyse for Analysis<'_> {
    fn analyse(&self, observation: &Observation) -> Findings {
        let started = Instant::now();
        let provenance =
            Provenance { fitted_at: Some(jiff::Timestamp::now().to_string()), ..self.provenance.clone() };
        let fit = match self.fitter.fit(&observation.spectrum) {
            Ok(fit) => fit,
            Err(fault) => {
                let flags = vec![Flag::new(fault.code(), error_chain(&fault))];
                return Findings { flags, provenance, ..Findings::default() };
            }
        };
        let fit_ms = started.elapsed().as_secs_f64() * 1e3;
        let mut flags = fit.flags.clone();
        let parameters = fitted_parameters(fit.chosen(), self.external, &mut flags);
        let StarReport { star, flags: star_flags } = self.star(&parameters, fit.chosen());
        flags.extend(star_flags);
        let star_ms = started.elapsed().as_secs_f64() * 1e3 - fit_ms;
        Findings {
            flags,
            solutions: solution_rows(&fit),
            lines: fit.lines.iter().map(line_row).collect(),
            parameters: Some(parameters),
            star: Some(star),
            provenance,
            timing_ms: BTreeMap::from([("fit".to_owned(), fit_ms), ("star".to_owned(), star_ms)]),
        }
    }
}

/// The chosen solution, corrected for three-dimensional convection where that is known.
fn fitted_parameters(
    solution: &Solution,
    [external_teff_relative, external_log_g]: [f64; 2],
    flags: &mut Vec<Flag>,
) -> FittedParameters {
    let (mut teff_k, mut log_g) = (solution.teff_k, solution.log_g);
    if teff_k <= HOTTEST_K {
        let detail = match correct_3d(teff_k, log_g) {
            Some((dteff_k, dlog_g)) => {
                teff_k += dteff_k;
                log_g += dlog_g;
                format!("corrected by {dteff_k:+.0} K and {dlog_g:+.3} dex")
            }
            None => format!("no correction is known at {teff_k:.0} K, log g {log_g:.2}"),
        };
        flags.push(Flag::new(&codes::FIT_THREE_D, detail));
    }
    FittedParameters {
        teff_k: [teff_k, solution.sigma(0), external_teff_relative * teff_k],
        log_g: [log_g, solution.sigma(1), external_log_g],
        radial_velocity_km_s: [solution.radial_velocity_km_s, solution.sigma(2), 0.0],
    }
}

fn solution_rows(fit: &Fit) -> Vec<SolutionRow> {
    let row = |(index, solution): (usize, &Solution)| {
        let corrected = correct_3d(solution.teff_k, solution.log_g);
        SolutionRow {
            branch: solution.branch.name().to_owned(),
            is_chosen: index == 0,
            teff_k: finite(solution.teff_k),
            log_g: finite(solution.log_g),
            radial_velocity_km_s: finite(solution.radial_velocity_km_s),
            teff_3d_k: corrected.and_then(|(dteff_k, _)| finite(solution.teff_k + dteff_k)),
            log_g_3d: corrected.and_then(|(_, dlog_g)| finite(solution.log_g + dlog_g)),
            covariance: solution
                .covariance
                .iter()
                .flatten()
                .all(|value| value.is_finite())
                .then_some(solution.covariance),
            chi2: finite(solution.chi2),
            dof: solution.dof,
            probability: finite(solution.probability),
        }
    };
    fit.solutions.iter().enumerate().map(row).collect()
}

fn line_row(line: &LineResult) -> LineRow {
    LineRow {
        line: line.name.to_owned(),
        rest_wave_vac_aa: line.rest_wave_vac_aa,
        pixels: line.pixels as u64,
        bad_pixels: line.bad_pixels as u64,
        chi2: finite(line.chi2),
        rms_residual: finite(line.rms_residual),
        equivalent_width_aa: finite(line.equivalent_width_aa),
    }
}

fn finite(value: f64) -> Option<f64> {
    value.is_finite().then_some(value)
}
