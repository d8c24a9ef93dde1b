//! Residuals of a spectrum against the grid, with the normalisation solved along the way.
//!
//! In each window the model, seen through the instrument, is multiplied by a polynomial whose
//! coefficients are the linear least-squares ones at every step (variable projection, Golub & Pereyra
//! 1973), with the Jacobian in Kaufman's (1975) approximation: the part of each derivative that the
//! polynomial could take up is projected out. What the normalisation does not know is thereby part of
//! the errors.

use std::cell::RefCell;
use std::ops::Range;

use argmin::core::Error;
use nalgebra::{Matrix3, Vector3};

use super::line_spread::{LineSpread, Pixel, model_range};
use super::windows::Window;
use crate::grid::FluxGrid;
use crate::numerics::dot::dot;
use crate::numerics::least_squares::{LeastSquares, Linearisation};
use crate::physics::wavelength::doppler_factor;
use crate::spectrum::Spectrum;

/// Fastest radial velocity that can be tried, km/s: beyond, a star has left the Galaxy.
pub const LARGEST_VELOCITY_KM_S: f64 = 1500.0;
/// Fewest good pixels of a window that is fitted.
const FEWEST_PIXELS: usize = 12;
/// Least share of a window that a spectrum must cover.
const LEAST_COVERAGE: f64 = 0.85;
/// Largest number of normalising coefficients.
const MOST_COEFFICIENTS: usize = 3;

/// One window's pixels. Lists have one entry per pixel.
#[derive(Debug)]
pub struct WindowData {
    /// The window.
    pub window: Window,
    /// Where and how wide the pixels are.
    pub pixels: Vec<Pixel>,
    /// Observed flux.
    pub flux: Vec<f64>,
    /// 1 / standard deviation; 0 for pixels that were set aside by the fit.
    pub inverse_sigma: Vec<f64>,
    /// 1 / standard deviation as the spectrum gives it.
    given_inverse_sigma: Vec<f64>,
    /// Pixels that the spectrum's mask, or the mask of the line's core, took away.
    pub masked: usize,
    /// Wavelength error of this window against the others, as a velocity, km/s.
    pub offset_km_s: f64,
    /// Position in the window, -1 to 1.
    position: Vec<f64>,
    model_range: Range<usize>,
    operator: LineSpread,
}

/// A window's best normalisation of one model; lists have one entry per pixel.
#[derive(Debug, Clone, Default)]
pub struct Seen {
    /// Normalised model times polynomial: what the fit compares with the flux.
    pub model: Vec<f64>,
    /// The polynomial: observed over surface flux.
    pub scale: Vec<f64>,
    /// (flux - model) / sigma; 0 for pixels set aside.
    pub residual: Vec<f64>,
}

/// A spectrum prepared for comparison with a grid.
#[derive(Debug)]
pub struct Objective<'g> {
    grid: &'g FluxGrid,
    /// The windows that the spectrum covers.
    pub windows: Vec<WindowData>,
    velocity_km_s: f64,
    scratch: RefCell<Scratch>,
}

#[derive(Debug, Default)]
struct Scratch {
    model: [Vec<f64>; 3],
    /// Folded model and its derivatives with Teff, log g, velocity.
    seen: [Vec<f64>; 4],
    basis: [Vec<f64>; MOST_COEFFICIENTS],
    residual: Vec<f64>,
    direction: [Vec<f64>; 3],
}

impl<'g> Objective<'g> {
    /// Takes the windows that the spectrum covers well enough, at a first guess of the velocity, without the
    /// pixels that are nearer to the centre of their line than `core_mask_half_width_aa`.
    pub fn new(
        spectrum: &Spectrum,
        grid: &'g FluxGrid,
        windows: &[Window],
        velocity_km_s: f64,
        core_mask_half_width_aa: f64,
    ) -> Self {
        let windows = windows
            .iter()
            .filter_map(|window| {
                WindowData::cut(spectrum, grid, window, velocity_km_s, core_mask_half_width_aa)
            })
            .collect();
        let mut objective =
            Objective { grid, windows, velocity_km_s, scratch: RefCell::new(Scratch::default()) };
        objective.set_velocity(velocity_km_s);
        objective
    }

    /// Builds the operators at another velocity, about which the model is linear.
    pub fn set_velocity(&mut self, velocity_km_s: f64) {
        self.velocity_km_s = velocity_km_s;
        for data in &mut self.windows {
            let waves = &self.grid.wave_vac_aa[data.model_range.clone()];
            data.operator = LineSpread::new(&data.pixels, waves, velocity_km_s + data.offset_km_s);
        }
    }

    /// Velocity of each window against the common one that its own residuals ask for, and its standard
    /// deviation, km/s, to first order, at (Teff, log g, velocity).
    ///
    /// # Errors
    /// Outside the grid.
    pub fn window_velocities(&self, parameters: &Vector3<f64>) -> Result<Vec<(f64, f64)>, Error> {
        let stencil = self.grid.stencil(parameters[0], parameters[1])?;
        let mut scratch = self.scratch.borrow_mut();
        let mut velocities = Vec::with_capacity(self.windows.len());
        for data in &self.windows {
            scratch.fit_to(data.pixels.len());
            let Scratch { model, seen, .. } = &mut *scratch;
            model[0].resize(data.model_range.len(), 0.0);
            self.grid.interpolate(&stencil, data.model_range.clone(), &mut model[0]);
            data.operator.apply(&model[0], &mut seen[0]);
            data.operator.apply_velocity_slope(&model[0], &mut seen[3]);
            let scale = scratch.project(data);
            scratch.project_directions(data, &scale);
            let information = dot(&scratch.direction[2], &scratch.direction[2]);
            velocities.push((
                dot(&scratch.direction[2], &scratch.residual) / information,
                1.0 / information.sqrt(),
            ));
        }
        Ok(velocities)
    }

    /// The velocity of the operators, km/s.
    pub fn velocity_km_s(&self) -> f64 {
        self.velocity_km_s
    }

    /// Number of pixels in use, and of free normalising coefficients.
    pub fn counts(&self) -> (usize, usize) {
        let used = |data: &WindowData| data.inverse_sigma.iter().filter(|weight| **weight > 0.0).count();
        (self.windows.iter().map(used).sum(), self.windows.iter().map(|data| data.window.coefficients).sum())
    }

    /// Gives all pixels that were set aside their weight back.
    pub fn take_all_pixels(&mut self) {
        for data in &mut self.windows {
            data.inverse_sigma.clone_from(&data.given_inverse_sigma);
        }
    }

    /// Number of pixels that were set aside.
    pub fn set_aside(&self) -> usize {
        self.windows.iter().flat_map(|data| &data.inverse_sigma).filter(|weight| **weight == 0.0).count()
    }

    /// Chi-square of a model without lines: what the polynomials alone can do.
    pub fn chi2_without_lines(&self) -> f64 {
        let mut scratch = self.scratch.borrow_mut();
        self.windows
            .iter()
            .map(|data| {
                scratch.fit_to(data.pixels.len());
                scratch.seen[0].fill(1.0);
                scratch.project(data);
                scratch.residual.iter().map(|r| r * r).sum::<f64>()
            })
            .sum()
    }

    /// Chi-square at a node of the grid, at the operators' velocity.
    pub fn chi2_at_node(&self, teff_index: usize, log_g_index: usize) -> f64 {
        let mut scratch = self.scratch.borrow_mut();
        let mut chi2 = 0.0;
        for data in &self.windows {
            scratch.fit_to(data.pixels.len());
            self.fold_node(data, teff_index, log_g_index, &mut scratch);
            scratch.project(data);
            chi2 += scratch.residual.iter().map(|r| r * r).sum::<f64>();
        }
        chi2
    }

    /// Best of a list of velocities (km/s) for a node's model, shifted on the pixels themselves: good
    /// enough to put the operators where their linear range holds.
    pub fn best_velocity(&self, teff_index: usize, log_g_index: usize, velocities_km_s: &[f64]) -> f64 {
        let mut scratch = self.scratch.borrow_mut();
        let mut chi2 = vec![0.0; velocities_km_s.len()];
        for data in &self.windows {
            scratch.fit_to(data.pixels.len());
            self.fold_node(data, teff_index, log_g_index, &mut scratch);
            let model = scratch.seen[0].clone();
            for (sum, velocity) in chi2.iter_mut().zip(velocities_km_s) {
                let stretch = doppler_factor(velocity - self.velocity_km_s);
                let mut cell = 0;
                for (i, pixel) in data.pixels.iter().enumerate() {
                    let wanted = pixel.wave_vac_aa / stretch;
                    while cell + 2 < data.pixels.len() && data.pixels[cell + 1].wave_vac_aa < wanted {
                        cell += 1;
                    }
                    let (left, right) = (data.pixels[cell].wave_vac_aa, data.pixels[cell + 1].wave_vac_aa);
                    let share = ((wanted - left) / (right - left)).clamp(0.0, 1.0);
                    scratch.seen[0][i] = model[cell] + share * (model[cell + 1] - model[cell]);
                }
                scratch.project(data);
                *sum += scratch.residual.iter().map(|r| r * r).sum::<f64>();
            }
        }
        let best = chi2.iter().enumerate().min_by(|a, b| a.1.total_cmp(b.1));
        best.map_or(self.velocity_km_s, |(i, _)| velocities_km_s[i])
    }

    /// Model, normalisation and residuals of every window at (Teff, log g, velocity).
    ///
    /// # Errors
    /// Outside the grid.
    pub fn view(&self, parameters: &Vector3<f64>) -> Result<Vec<Seen>, Error> {
        let stencil = self.grid.stencil(parameters[0], parameters[1])?;
        let mut scratch = self.scratch.borrow_mut();
        let mut views = Vec::with_capacity(self.windows.len());
        for data in &self.windows {
            scratch.fit_to(data.pixels.len());
            let Scratch { model, seen, .. } = &mut *scratch;
            model[0].resize(data.model_range.len(), 0.0);
            self.grid.interpolate(&stencil, data.model_range.clone(), &mut model[0]);
            data.operator.apply(&model[0], &mut seen[0]);
            data.operator.apply_velocity_slope(&model[0], &mut seen[3]);
            scratch.move_by(parameters[2] - self.velocity_km_s);
            let scale = scratch.project(data);
            views.push(Seen {
                model: scratch.seen[0].iter().zip(&scale).map(|(m, p)| m * p).collect(),
                scale,
                residual: scratch.residual.clone(),
            });
        }
        Ok(views)
    }

    fn fold_node(&self, data: &WindowData, teff_index: usize, log_g_index: usize, scratch: &mut Scratch) {
        let row = self.grid.ln_flux.slice(ndarray::s![teff_index, log_g_index, data.model_range.clone()]);
        scratch.model[0].clear();
        scratch.model[0].extend(row.iter().map(|value| f64::from(*value).exp()));
        data.operator.apply(&scratch.model[0], &mut scratch.seen[0]);
    }
}

impl LeastSquares<3> for &Objective<'_> {
    fn linearise(&self, parameters: &Vector3<f64>) -> Result<Linearisation<3>, Error> {
        let stencil = self.grid.stencil(parameters[0], parameters[1])?;
        let mut scratch = self.scratch.borrow_mut();
        let mut result = Linearisation { chi2: 0.0, gradient: Vector3::zeros(), curvature: Matrix3::zeros() };
        for data in &self.windows {
            scratch.fit_to(data.pixels.len());
            let Scratch { model, seen, .. } = &mut *scratch;
            let [flux, per_kelvin, per_log_g] = model;
            for run in [&mut *flux, &mut *per_kelvin, &mut *per_log_g] {
                run.resize(data.model_range.len(), 0.0);
            }
            let range = data.model_range.clone();
            self.grid.interpolate_with_slopes(&stencil, range, flux, per_kelvin, per_log_g);
            data.operator.apply(flux, &mut seen[0]);
            data.operator.apply(per_kelvin, &mut seen[1]);
            data.operator.apply(per_log_g, &mut seen[2]);
            data.operator.apply_velocity_slope(flux, &mut seen[3]);
            scratch.move_by(parameters[2] - self.velocity_km_s);
            let scale = scratch.project(data);
            scratch.project_directions(data, &scale);
            result.chi2 += dot(&scratch.residual, &scratch.residual);
            for k in 0..3 {
                // Residuals fall as the model rises.
                result.gradient[k] -= dot(&scratch.direction[k], &scratch.residual);
                for l in 0..3 {
                    result.curvature[(k, l)] += dot(&scratch.direction[k], &scratch.direction[l]);
                }
            }
        }
        Ok(result)
    }
}

impl WindowData {
    fn cut(
        spectrum: &Spectrum,
        grid: &FluxGrid,
        window: &Window,
        velocity_km_s: f64,
        core_mask_half_width_aa: f64,
    ) -> Option<Self> {
        let doppler = doppler_factor(velocity_km_s);
        let (blue, red) = (window.range_vac_aa.0 * doppler, window.range_vac_aa.1 * doppler);
        let waves = spectrum.wave_vac_aa();
        let first = waves.partition_point(|wave| *wave < blue);
        let end = waves.partition_point(|wave| *wave <= red);
        let mut data = WindowData {
            window: *window,
            pixels: Vec::new(),
            flux: Vec::new(),
            inverse_sigma: Vec::new(),
            given_inverse_sigma: Vec::new(),
            masked: 0,
            offset_km_s: 0.0,
            position: Vec::new(),
            model_range: 0..0,
            operator: LineSpread::default(),
        };
        for i in first..end {
            let sigma = spectrum.sigma()[i];
            let is_core = (waves[i] - window.centre_vac_aa() * doppler).abs() < core_mask_half_width_aa;
            if !spectrum.is_good()[i] || !sigma.is_finite() || is_core {
                data.masked += 1;
                continue;
            }
            let (before, after) = (waves[i.saturating_sub(1)], waves[(i + 1).min(waves.len() - 1)]);
            let neighbours = if i == 0 || i + 1 == waves.len() { 1.0 } else { 2.0 };
            data.pixels.push(Pixel {
                wave_vac_aa: waves[i],
                width_aa: (after - before) / neighbours,
                fwhm_aa: spectrum.resolution().fwhm_aa(i, waves[i]),
            });
            data.flux.push(spectrum.flux()[i]);
            data.inverse_sigma.push(1.0 / sigma);
            data.position.push(2.0 * (waves[i] - blue) / (red - blue) - 1.0);
        }
        data.given_inverse_sigma.clone_from(&data.inverse_sigma);
        let (first, last) = (*data.pixels.first()?, *data.pixels.last()?);
        let covered = (last.wave_vac_aa - first.wave_vac_aa) / (red - blue);
        if data.pixels.len() < FEWEST_PIXELS || covered < LEAST_COVERAGE {
            return None;
        }
        data.model_range = model_range(&grid.wave_vac_aa, first, last, LARGEST_VELOCITY_KM_S)?;
        Some(data)
    }
}

impl Scratch {
    fn fit_to(&mut self, pixels: usize) {
        let runs = self.seen.iter_mut().chain(&mut self.basis).chain(&mut self.direction);
        for run in runs.chain(std::iter::once(&mut self.residual)) {
            run.resize(pixels, 0.0);
        }
    }

    /// Shifts the folded model by a velocity difference, to first order.
    fn move_by(&mut self, difference_km_s: f64) {
        let (values, slopes) = self.seen.split_at_mut(3);
        for (value, slope) in values[0].iter_mut().zip(&slopes[0]) {
            *value += difference_km_s * slope;
        }
    }

    /// Orthonormal basis of what the normalisation can make of the folded model, the residuals left by
    /// it, and the polynomial at each pixel.
    fn project(&mut self, data: &WindowData) -> Vec<f64> {
        let count = data.window.coefficients;
        // Columns P_l m / sigma, made orthonormal (Gram-Schmidt, twice for safety); `triangle` keeps how.
        let mut triangle = [[0.0; MOST_COEFFICIENTS]; MOST_COEFFICIENTS];
        for l in 0..count {
            let (done, rest) = self.basis.split_at_mut(l);
            let column = &mut rest[0];
            for (i, value) in column.iter_mut().enumerate() {
                *value = legendre(l, data.position[i]) * self.seen[0][i] * data.inverse_sigma[i];
            }
            for _ in 0..2 {
                for (k, earlier) in done.iter().enumerate() {
                    let share = dot(earlier, column);
                    triangle[k][l] += share;
                    column.iter_mut().zip(earlier).for_each(|(value, e)| *value -= share * e);
                }
            }
            let length = dot(column, column).sqrt().max(f64::MIN_POSITIVE);
            triangle[l][l] = length;
            column.iter_mut().for_each(|value| *value /= length);
        }
        for (i, residual) in self.residual.iter_mut().enumerate() {
            *residual = data.flux[i] * data.inverse_sigma[i];
        }
        let mut shares = [0.0; MOST_COEFFICIENTS];
        for l in 0..count {
            shares[l] = dot(&self.basis[l], &self.residual);
            let basis = &self.basis[l];
            self.residual.iter_mut().zip(basis).for_each(|(residual, b)| *residual -= shares[l] * b);
        }
        // Back substitution: coefficients of the polynomial itself.
        let mut coefficients = [0.0; MOST_COEFFICIENTS];
        for l in (0..count).rev() {
            let later: f64 = (l + 1..count).map(|k| triangle[l][k] * coefficients[k]).sum();
            coefficients[l] = (shares[l] - later) / triangle[l][l];
        }
        data.position.iter().map(|x| (0..count).map(|l| coefficients[l] * legendre(l, *x)).sum()).collect()
    }

    /// Derivatives of the model, less what the normalisation would take up.
    fn project_directions(&mut self, data: &WindowData, scale: &[f64]) {
        for k in 0..3 {
            for (i, value) in self.direction[k].iter_mut().enumerate() {
                *value = self.seen[k + 1][i] * scale[i] * data.inverse_sigma[i];
            }
            for l in 0..data.window.coefficients {
                let share = dot(&self.basis[l], &self.direction[k]);
                let basis = &self.basis[l];
                self.direction[k].iter_mut().zip(basis).for_each(|(value, b)| *value -= share * b);
            }
        }
    }
}

fn legendre(order: usize, x: f64) -> f64 {
    match order {
        0 => 1.0,
        1 => x,
        _ => 1.5 * x * x - 0.5,
    }
}
