//! The fit of one spectrum, from coarse scan to chosen solution.
//!
//! 1. Scan of a coarse subset of the grid's nodes at one velocity; the velocity is found first, by shifting
//!    the best node's model. 2. Every distinct minimum of the scan, and at least one on each side
//!    of the ridge where Balmer lines are strongest, is refined. 3. Pixels that the best solution cannot
//!    explain are set aside, the worst first; lines whose wavelengths disagree are aligned; then scan and
//!    refinement are repeated without them. 4. The choice between the solutions
//!    uses chi-square and, where the flux is calibrated, the slope of the continuum.

use nalgebra::{Matrix3, Vector3};

use super::errors::{Errors, compute_errors};
use super::objective::{Objective, Seen};
use super::outliers::set_worst_aside;
use super::profile::{Bottom, profiled_covariance};
use super::screening::screen;
use super::settings::FitSettings;
use super::solution::{Branch, Fit, FitFault, LineResult, Solution};
use super::windows::WINDOWS;
use crate::grid::FluxGrid;
use crate::numerics::least_squares::{Bounds, minimise};
use crate::spectrum::Spectrum;

/// Rough spacing of the scan's nodes: relative in Teff, absolute in log g.
const SCAN_STEP: (f64, f64) = (0.07, 0.5);
/// Velocities tried before the scan, km/s.
const FIRST_VELOCITY_STEP_KM_S: f64 = 50.0;
/// Velocity beyond which the scan is repeated with moved operators, km/s.
const SCAN_VELOCITY_TOLERANCE_KM_S: f64 = 120.0;
/// The operators follow the fitted velocity until they agree to this, km/s.
const VELOCITY_TOLERANCE_KM_S: f64 = 3.0;
const MOST_VELOCITY_ROUNDS: usize = 6;
const MOST_ITERATIONS: u64 = 60;
/// Most minima that are refined.
const MOST_MINIMA: usize = 4;
/// Solutions this many standard deviations of Teff from the ridge, or nearer, have their errors from a
/// profile, unless their Teff differs from it by more than this factor.
const RIDGE_SIGMA: f64 = 8.0;
const RIDGE_FACTOR: f64 = 1.7;
/// A line's velocity disagrees with the others' from this on, km/s and standard deviations: more than any
/// asymmetry of Stark-broadened lines makes.
const OFFSET_KM_S: f64 = 60.0;
const OFFSET_SIGMA: f64 = 4.0;
const MOST_ALIGNMENTS: usize = 6;
/// Largest change of an offset in one round, km/s.
const LARGEST_ALIGNMENT_KM_S: f64 = 250.0;
const MOST_OUTLIER_ROUNDS: usize = 6;
/// Grid edges count as reached within this: relative in Teff, absolute in log g.
const EDGE: (f64, f64) = (2e-3, 5e-3);

/// Fits spectra against one grid; shared by all threads.
#[derive(Debug)]
pub struct Fitter<'g> {
    grid: &'g FluxGrid,
    settings: FitSettings,
    scan_teff: Vec<usize>,
    scan_log_g: Vec<usize>,
    /// Per log g node of the grid: Teff at which H-gamma is widest and deepest, K.
    ridge_k: Vec<f64>,
}

impl<'g> Fitter<'g> {
    /// Prepares the scan and finds the ridge of line strength in the grid.
    pub fn new(grid: &'g FluxGrid, settings: FitSettings) -> Self {
        let thin = |axis: &[f64], is_far: &dyn Fn(f64, f64) -> bool| {
            let mut kept = vec![0];
            for i in 1..axis.len() {
                if is_far(axis[kept[kept.len() - 1]], axis[i]) || i + 1 == axis.len() {
                    kept.push(i);
                }
            }
            kept
        };
        let scan_teff = thin(&grid.teff_k, &|last, next| next > last * (1.0 + SCAN_STEP.0));
        let scan_log_g = thin(&grid.log_g, &|last, next| next > last + SCAN_STEP.1 - 1e-6);
        let ridge_k = (0..grid.log_g.len()).map(|j| strongest_teff_k(grid, j)).collect();
        Fitter { grid, settings, scan_teff, scan_log_g, ridge_k }
    }

    /// Teff at which the Balmer lines are strongest for a gravity, K.
    pub fn ridge_k(&self, log_g: f64) -> f64 {
        let nodes = &self.grid.log_g;
        let cell = nodes.partition_point(|node| *node <= log_g).clamp(1, nodes.len() - 1) - 1;
        let share = ((log_g - nodes[cell]) / (nodes[cell + 1] - nodes[cell])).clamp(0.0, 1.0);
        self.ridge_k[cell] + share * (self.ridge_k[cell + 1] - self.ridge_k[cell])
    }

    /// Fits one spectrum.
    ///
    /// # Errors
    /// [`FitFault`] where the spectrum does not cover enough lines; everything else is said by flags.
    pub fn fit(&self, spectrum: &Spectrum) -> Result<Fit, FitFault> {
        let wanted: Vec<_> =
            WINDOWS.iter().filter(|window| self.settings.lines.contains(window)).copied().collect();
        let mut objective = self.prepare(spectrum, &wanted, 0.0);
        if objective.windows.len() < self.settings.fewest_windows {
            return Err(FitFault::TooFewWindows {
                found: objective.windows.len(),
                need: self.settings.fewest_windows,
            });
        }
        let starts = self.scan(spectrum, &wanted, &mut objective);
        let first = self.refine(&mut objective, starts[0])?;
        // What bends the fit is found before it can look like a wrong wavelength scale.
        self.set_outliers_aside(&mut objective, first.vector())?;
        let largest_offset_km_s = self.align_windows(&mut objective, &first)?;
        let mut starts = starts;
        if objective.set_aside() > 0 || largest_offset_km_s.is_some() {
            // The other side of the ridge may have been lost to the same defects: it gets its starts again.
            starts = self.pick_starts(&self.scan_nodes(&objective), objective.velocity_km_s());
        }
        starts.push(first.vector());
        let mut solutions = self.refine_all(&mut objective, &starts)?;
        if !first.is_same(&solutions[0]) && objective.set_aside() > 0 {
            objective.take_all_pixels();
            self.set_outliers_aside(&mut objective, solutions[0].vector())?;
            let starts: Vec<_> = solutions.iter().map(Solution::vector).collect();
            solutions = self.refine_all(&mut objective, &starts)?;
        }
        let rejected = objective.set_aside();
        self.choose(&mut solutions, &mut objective, spectrum.is_flux_calibrated())?;
        self.profile_near_ridge(&mut solutions, &mut objective)?;
        objective.set_velocity(solutions[0].radial_velocity_km_s);
        let views = objective.view(&solutions[0].vector()).map_err(FitFault::Model)?;
        let lines =
            objective.windows.iter().zip(&views).map(|(data, seen)| LineResult::new(data, seen)).collect();
        let chi2_without_lines = objective.chi2_without_lines();
        let mut fit = Fit {
            solutions,
            lines,
            flags: Vec::new(),
            rejected_pixels: rejected,
            largest_offset_km_s,
            chi2_without_lines,
            views,
            wave_vac_aa: objective
                .windows
                .iter()
                .map(|data| data.pixels.iter().map(|pixel| pixel.wave_vac_aa).collect())
                .collect(),
        };
        fit.flags = screen(&fit, &objective, spectrum, self.grid);
        Ok(fit)
    }

    fn prepare(
        &self,
        spectrum: &Spectrum,
        wanted: &[super::windows::Window],
        velocity_km_s: f64,
    ) -> Objective<'g> {
        let core_mask = self.settings.core_mask_half_width_aa;
        Objective::new(spectrum, self.grid, wanted, velocity_km_s, core_mask)
    }

    /// Starting points: the scan's local minima, and the best node on either side of the ridge.
    fn scan(
        &self,
        spectrum: &Spectrum,
        wanted: &[super::windows::Window],
        objective: &mut Objective<'g>,
    ) -> Vec<Vector3<f64>> {
        let mut chi2 = self.scan_nodes(objective);
        let (i, j) = lowest(&chi2);
        let largest = self.settings.largest_velocity_km_s;
        let count = ((largest / FIRST_VELOCITY_STEP_KM_S) as i32 - 2).max(0);
        let velocities: Vec<f64> =
            (-count..=count).map(|k| f64::from(k) * FIRST_VELOCITY_STEP_KM_S).collect();
        let velocity = objective.best_velocity(self.scan_teff[i], self.scan_log_g[j], &velocities);
        let has_core_masks = self.settings.core_mask_half_width_aa > 0.0;
        if velocity.abs() > SCAN_VELOCITY_TOLERANCE_KM_S || has_core_masks {
            // Windows and masks move with the star; where that loses too many, stay.
            let moved = self.prepare(spectrum, wanted, velocity);
            if moved.windows.len() == objective.windows.len() {
                *objective = moved;
                chi2 = self.scan_nodes(objective);
            }
        } else {
            objective.set_velocity(velocity);
        }
        self.pick_starts(&chi2, objective.velocity_km_s())
    }

    /// Chi-square of every scanned node; outer index Teff.
    fn scan_nodes(&self, objective: &Objective<'g>) -> Vec<Vec<f64>> {
        let row = |i: &usize| self.scan_log_g.iter().map(|j| objective.chi2_at_node(*i, *j)).collect();
        self.scan_teff.iter().map(row).collect()
    }

    fn pick_starts(&self, chi2: &[Vec<f64>], velocity_km_s: f64) -> Vec<Vector3<f64>> {
        let (rows, columns) = (chi2.len(), chi2[0].len());
        let mut minima = Vec::new();
        let mut best_of_branch: [Option<(f64, usize, usize)>; 2] = [None, None];
        for i in 0..rows {
            for j in 0..columns {
                let value = chi2[i][j];
                let side = usize::from(self.node_teff_k(i) > self.ridge_k(self.node_log_g(j)));
                if best_of_branch[side].is_none_or(|(best, ..)| value < best) {
                    best_of_branch[side] = Some((value, i, j));
                }
                let near = |a: usize, last: usize| a.saturating_sub(1)..=(a + 1).min(last);
                let is_lowest = near(i, rows - 1)
                    .all(|a| near(j, columns - 1).all(|b| (a, b) == (i, j) || chi2[a][b] > value));
                if is_lowest {
                    minima.push((value, i, j));
                }
            }
        }
        minima.sort_by(|a, b| a.0.total_cmp(&b.0));
        minima.truncate(MOST_MINIMA - 2);
        for candidate in best_of_branch.into_iter().flatten() {
            if !minima.iter().any(|(_, i, j)| (*i, *j) == (candidate.1, candidate.2)) {
                minima.push(candidate);
            }
        }
        minima
            .iter()
            .map(|(_, i, j)| Vector3::new(self.node_teff_k(*i), self.node_log_g(*j), velocity_km_s))
            .collect()
    }

    fn node_teff_k(&self, scan_index: usize) -> f64 {
        self.grid.teff_k[self.scan_teff[scan_index]]
    }

    fn node_log_g(&self, scan_index: usize) -> f64 {
        self.grid.log_g[self.scan_log_g[scan_index]]
    }

    /// Refines all starts; keeps the distinct solutions, best chi-square first.
    fn refine_all(
        &self,
        objective: &mut Objective<'g>,
        starts: &[Vector3<f64>],
    ) -> Result<Vec<Solution>, FitFault> {
        let mut solutions: Vec<Solution> = Vec::new();
        for start in starts {
            let solution = self.refine(objective, *start)?;
            let is_known = solutions.iter().any(|known| known.is_same(&solution));
            if !is_known {
                solutions.push(solution);
            }
        }
        solutions.sort_by(|a, b| a.chi2.total_cmp(&b.chi2));
        Ok(solutions)
    }

    fn bounds(&self) -> Bounds<3> {
        let (teff_first_k, teff_last_k) = self.grid.teff_range_k();
        let (log_g_first, log_g_last) = self.grid.log_g_range();
        Bounds {
            lower: Vector3::new(teff_first_k, log_g_first, -self.settings.largest_velocity_km_s),
            upper: Vector3::new(teff_last_k, log_g_last, self.settings.largest_velocity_km_s),
        }
    }

    /// Errors of solutions that reach the ridge, from the profile of chi-square out to the half-way point
    /// (in ln Teff) to the next solution.
    fn profile_near_ridge(
        &self,
        solutions: &mut [Solution],
        objective: &mut Objective<'g>,
    ) -> Result<(), FitFault> {
        let temperatures: Vec<f64> = solutions.iter().map(|solution| solution.teff_k).collect();
        let (teff_first_k, teff_last_k) = self.grid.teff_range_k();
        for solution in solutions {
            let ridge_k = self.ridge_k(solution.log_g);
            let reaches_ridge = (solution.teff_k - ridge_k).abs() < RIDGE_SIGMA * solution.sigma(0)
                && (ridge_k / RIDGE_FACTOR..ridge_k * RIDGE_FACTOR).contains(&solution.teff_k);
            if !reaches_ridge || solution.is_at_edge {
                continue;
            }
            let mut range_k = (teff_first_k, teff_last_k);
            for other in &temperatures {
                let middle = (other * solution.teff_k).sqrt();
                if *other < solution.teff_k {
                    range_k.0 = range_k.0.max(middle);
                } else if *other > solution.teff_k {
                    range_k.1 = range_k.1.min(middle);
                }
            }
            objective.set_velocity(solution.radial_velocity_km_s);
            let bottom = Bottom {
                at: solution.vector(),
                chi2: solution.chi2,
                covariance: Matrix3::from_fn(|i, j| solution.covariance[i][j]),
                inflation: solution.inflation,
            };
            let covariance =
                profiled_covariance(objective, &bottom, &self.bounds(), range_k).map_err(FitFault::Model)?;
            solution.covariance = std::array::from_fn(|i| std::array::from_fn(|j| covariance[(i, j)]));
        }
        Ok(())
    }

    fn refine(&self, objective: &mut Objective<'g>, start: Vector3<f64>) -> Result<Solution, FitFault> {
        let (teff_first_k, teff_last_k) = self.grid.teff_range_k();
        let (log_g_first, log_g_last) = self.grid.log_g_range();
        let bounds = self.bounds();
        let mut at = start;
        let mut iterations = 0;
        let mut round = 0;
        let fitted = loop {
            if (at[2] - objective.velocity_km_s()).abs() > 1e-6 {
                objective.set_velocity(at[2]);
            }
            let fitted = minimise(&*objective, at, bounds, MOST_ITERATIONS, 1.0).map_err(FitFault::Model)?;
            at = fitted.parameters;
            iterations += fitted.iterations;
            round += 1;
            let moved_km_s = (at[2] - objective.velocity_km_s()).abs();
            if moved_km_s < VELOCITY_TOLERANCE_KM_S || round == MOST_VELOCITY_ROUNDS {
                break fitted;
            }
        };
        let views = objective.view(&at).map_err(FitFault::Model)?;
        let Errors { covariance, dof, inflation } = compute_errors(objective, &fitted.at, &views);
        let edge_teff = |node: f64| (at[0] / node - 1.0).abs() < EDGE.0;
        let edge_log_g = |node: f64| (at[1] - node).abs() < EDGE.1;
        let ridge_k = self.ridge_k(at[1]);
        Ok(Solution {
            teff_k: at[0],
            log_g: at[1],
            radial_velocity_km_s: at[2],
            covariance,
            inflation,
            chi2: fitted.at.chi2,
            dof,
            probability: 1.0,
            tilt: None,
            branch: if at[0] > ridge_k { Branch::Hot } else { Branch::Cold },
            iterations,
            is_converged: fitted.is_converged && round < MOST_VELOCITY_ROUNDS,
            is_at_edge: edge_teff(teff_first_k)
                || edge_teff(teff_last_k)
                || edge_log_g(log_g_first)
                || edge_log_g(log_g_last),
        })
    }

    /// Where the lines disagree on the velocity far beyond their errors, the wavelengths are wrong (arms of a
    /// spectrograph with different zero points): each window then gets an offset of its own, so that
    /// temperature and gravity do not suffer. Returns the largest, km/s; `None` where all agree.
    fn align_windows(&self, objective: &mut Objective<'g>, best: &Solution) -> Result<Option<f64>, FitFault> {
        let mut largest = None;
        let mut at = best.vector();
        for _ in 0..MOST_ALIGNMENTS {
            objective.set_velocity(at[2]);
            let velocities = objective.window_velocities(&at).map_err(FitFault::Model)?;
            let scatter = best.reduced_chi2().max(1.0).sqrt();
            let disagrees =
                |(v, sigma): (f64, f64)| v.abs() > OFFSET_KM_S && v.abs() > OFFSET_SIGMA * scatter * sigma;
            if !velocities.iter().any(|velocity| disagrees(*velocity)) {
                break;
            }
            for (data, velocity) in objective.windows.iter_mut().zip(&velocities) {
                // A line too weak to say where it is stays with the others.
                if disagrees(*velocity) {
                    // Far from the truth the first order overshoots.
                    data.offset_km_s += velocity.0.clamp(-LARGEST_ALIGNMENT_KM_S, LARGEST_ALIGNMENT_KM_S);
                }
            }
            let sizes = objective.windows.iter().map(|data| data.offset_km_s.abs());
            largest = Some(sizes.fold(0.0, f64::max));
            at = self.refine(objective, at)?.vector();
        }
        Ok(largest)
    }

    /// Sets outliers aside round by round, refining in between, from a start.
    fn set_outliers_aside(&self, objective: &mut Objective<'g>, start: Vector3<f64>) -> Result<(), FitFault> {
        let mut at = start;
        for _ in 0..MOST_OUTLIER_ROUNDS {
            objective.set_velocity(at[2]);
            let views = objective.view(&at).map_err(FitFault::Model)?;
            if set_worst_aside(objective, &views, self.settings.outlier_sigma) == 0 {
                break;
            }
            at = self.refine(objective, at)?.vector();
        }
        Ok(())
    }

    /// Orders the solutions by probability.
    fn choose(
        &self,
        solutions: &mut [Solution],
        objective: &mut Objective<'g>,
        is_flux_calibrated: bool,
    ) -> Result<(), FitFault> {
        let best = solutions.iter().fold(f64::INFINITY, |least, s| least.min(s.chi2 / s.dof as f64));
        let mut badness = Vec::new();
        for solution in solutions.iter_mut() {
            let mut sum = solution.chi2 / best.max(1.0);
            if is_flux_calibrated {
                objective.set_velocity(solution.radial_velocity_km_s);
                let views = objective.view(&solution.vector()).map_err(FitFault::Model)?;
                let tilt = continuum_tilt(objective, &views);
                solution.tilt = tilt;
                sum += tilt.map_or(0.0, |tilt| (tilt / self.settings.tilt_sigma).powi(2));
            }
            badness.push(sum);
        }
        let least = badness.iter().copied().fold(f64::INFINITY, f64::min);
        let total: f64 = badness.iter().map(|sum| (-0.5 * (sum - least)).exp()).sum();
        for (solution, sum) in solutions.iter_mut().zip(&badness) {
            solution.probability = (-0.5 * (sum - least)).exp() / total;
        }
        solutions.sort_by(|a, b| b.probability.total_cmp(&a.probability).then(a.chi2.total_cmp(&b.chi2)));
        Ok(())
    }
}

/// How much the ratio of data to model changes between the wavelengths of H-beta and H8, as a natural
/// logarithm: zero for the right model of well calibrated, unreddened flux. `None` with fewer than two
/// windows or negative flux.
fn continuum_tilt(objective: &Objective<'_>, views: &[Seen]) -> Option<f64> {
    let points: Vec<(f64, f64)> = objective
        .windows
        .iter()
        .zip(views)
        .map(|(data, seen)| {
            let mean = seen.scale.iter().sum::<f64>() / seen.scale.len() as f64;
            (1e4 / data.window.centre_vac_aa(), mean.ln())
        })
        .collect();
    if points.len() < 2 || points.iter().any(|(_, ratio)| !ratio.is_finite()) {
        return None;
    }
    let count = points.len() as f64;
    let mean_x = points.iter().map(|(x, _)| x).sum::<f64>() / count;
    let mean_y = points.iter().map(|(_, y)| y).sum::<f64>() / count;
    let covariance: f64 = points.iter().map(|(x, y)| (x - mean_x) * (y - mean_y)).sum();
    let variance: f64 = points.iter().map(|(x, _)| (x - mean_x).powi(2)).sum();
    let span = 1e4 / 3890.2 - 1e4 / 4862.7;
    Some(covariance / variance * span)
}

fn lowest(chi2: &[Vec<f64>]) -> (usize, usize) {
    let mut best = (0, 0);
    for (i, row) in chi2.iter().enumerate() {
        for (j, value) in row.iter().enumerate() {
            if *value < chi2[best.0][best.1] {
                best = (i, j);
            }
        }
    }
    best
}

/// Teff of the grid's largest H-gamma equivalent width at one gravity node, refined by a parabola, K.
fn strongest_teff_k(grid: &FluxGrid, log_g_index: usize) -> f64 {
    let window = WINDOWS[2];
    let first = grid.wave_vac_aa.partition_point(|wave| *wave < window.range_vac_aa.0);
    let end = grid.wave_vac_aa.partition_point(|wave| *wave < window.range_vac_aa.1);
    let waves = &grid.wave_vac_aa[first..end];
    let width = |i: usize| {
        let row = grid.ln_flux.slice(ndarray::s![i, log_g_index, first..end]);
        let flux: Vec<f64> = row.iter().map(|value| f64::from(*value).exp()).collect();
        equivalent_width_aa(waves, &flux)
    };
    let widths: Vec<f64> = (0..grid.teff_k.len()).map(width).collect();
    let peak = widths.iter().enumerate().max_by(|a, b| a.1.total_cmp(b.1)).map_or(0, |(i, _)| i);
    if peak == 0 || peak + 1 == widths.len() {
        return grid.teff_k[peak];
    }
    let x: [f64; 3] = std::array::from_fn(|k| grid.teff_k[peak - 1 + k]);
    let y: [f64; 3] = std::array::from_fn(|k| widths[peak - 1 + k]);
    let (left, right) = ((y[1] - y[0]) / (x[1] - x[0]), (y[2] - y[1]) / (x[2] - x[1]));
    let curvature = (right - left) / (x[2] - x[0]);
    (0.5 * (x[0] + x[1]) - 0.5 * left / curvature).clamp(x[0], x[2])
}

/// Equivalent width over a window, A, below the straight line through its two ends.
pub fn equivalent_width_aa(wave_vac_aa: &[f64], flux: &[f64]) -> f64 {
    let last = flux.len() - 1;
    // The outer tenth on either side carries the line.
    let tenth = (flux.len() / 10).max(1);
    let mean = |range: std::ops::Range<usize>| {
        let count = range.len() as f64;
        let wave = wave_vac_aa[range.clone()].iter().sum::<f64>() / count;
        (wave, flux[range].iter().sum::<f64>() / count)
    };
    let (blue, red) = (mean(0..tenth), mean(last + 1 - tenth..last + 1));
    let slope = (red.1 - blue.1) / (red.0 - blue.0);
    let depth = |i: usize| 1.0 - flux[i] / (blue.1 + slope * (wave_vac_aa[i] - blue.0));
    (1..=last).map(|i| 0.5 * (depth(i) + depth(i - 1)) * (wave_vac_aa[i] - wave_vac_aa[i - 1])).sum()
}
