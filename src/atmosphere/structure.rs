//! Temperature structure of a hydrogen atmosphere in hydrostatic and radiative-convective
//! equilibrium.
//!
//! Plane-parallel, LTE with coherent scattering. Temperatures at fixed column masses are the
//! unknowns of a Newton iteration; the transfer equation of every frequency is eliminated with its
//! opacity and Planck derivatives (Rybicki 1971, in the form with variable Eddington factors of
//! Gustafsson & Nissen 1972, A&A 19, 261), so that convergence is quadratic near the solution.
//! The upper layers balance absorbed against emitted energy, the lower ones carry the total flux;
//! in the differencing of [`super::transfer`] the two are equivalent, and the flux comes out
//! constant to rounding. Convection is ML2 ([`super::convection`]). Gas pressure is gravity's
//! minus the radiation's.

use nalgebra::{DMatrix, DVector};
use ndarray::Array2;

use super::convection::{Point, convective_flux};
use super::extinction::{Extinction, LineStore, Sources};
use super::frequency::{FrequencyGrid, NO_LINES, STRUCTURE_LINES};
use super::transfer::{Field, Medium, Scratch, cell_depth};
use crate::physics::constants::{LIGHT_SPEED_CM_S, STEFAN_BOLTZMANN_CGS};
use crate::physics::planck::{planck_per_hz, planck_slope_per_hz};
use crate::physics::stark::ProfileTable;
use crate::physics::state::{State, Thermodynamics};

/// Depth points.
pub const DEPTHS: usize = 96;
/// Rosseland optical depth of the first and last point of the starting model.
const OPTICAL_DEPTH_RANGE: (f64, f64) = (1e-7, 300.0);
/// Above this Rosseland optical depth the flux, below it the local balance, fixes the temperature.
const SWITCH_DEPTH: f64 = 0.3;
/// Largest relative change of a temperature in one iteration.
const LARGEST_STEP: f64 = 0.1;
/// A line's shape is computed anew where the temperature has moved, since it was last computed, by this
/// fraction of the last iteration's largest change ...
const SHAPE_LENIENCE: f64 = 0.3;
/// ... but never by less or more than this: a tenth of a per cent in temperature is a tenth of a per cent
/// in a Doppler width.
const SHAPE_TOLERANCE: (f64, f64) = (1e-3, 3e-2);
/// Converged: largest relative temperature change.
pub const TEMPERATURE_TOLERANCE: f64 = 1e-5;
/// Converged: largest relative departure of the total flux from sigma Teff^4.
pub const FLUX_TOLERANCE: f64 = 1e-3;
/// Gradient of the starting model's convective layers over the adiabatic one. Too much convection
/// decays by a factor five an iteration; none at all has no derivative and makes the first steps
/// blind.
const STARTING_EXCESS: f64 = 1.03;
/// With larger relative flux errors the convective layers are settled one by one after each step.
const LARGEST_NEWTON_FLUX_ERROR: f64 = 1.0;
/// Convective fraction of the flux from which a layer takes part in that.
const SETTLED_FRACTION: f64 = 0.3;
/// Iterations before a model is given up.
const MOST_ITERATIONS: usize = 40;
/// Temperature of a helping model over that of the one that failed, and how many may stand in line.
const HELPER_RATIO: f64 = 1.04;
const MOST_HELPERS: u32 = 4;

/// A model that did not converge, with how far it came.
#[derive(Debug, Clone, thiserror::Error)]
#[error(
    "cannot converge the atmosphere of Teff {teff_k} K, log g {log_g}: after {iterations} iterations the temperature \
     still moves by {temperature_change:.1e} (need 1e-5) and the flux departs by {flux_error:.1e} (need 1e-3)"
)]
pub struct NotConverged {
    /// Effective temperature, K.
    pub teff_k: f64,
    /// log10 of gravity in cm s^-2.
    pub log_g: f64,
    /// Iterations done.
    pub iterations: usize,
    /// Last largest relative temperature change.
    pub temperature_change: f64,
    /// Last largest relative flux error.
    pub flux_error: f64,
}

/// How well a model is converged.
#[derive(Debug, Clone, Copy)]
pub struct Convergence {
    /// Newton iterations used.
    pub iterations: usize,
    /// Last largest relative temperature change.
    pub temperature_change: f64,
    /// Largest relative departure of the total flux from sigma Teff^4 at any depth.
    pub flux_error_max: f64,
    /// The same at the surface.
    pub flux_error_surface: f64,
    /// Largest fraction of the flux that convection carries.
    pub convective_fraction_max: f64,
}

/// A converged atmosphere; vectors run from the top inward and have equal lengths.
#[derive(Debug, Clone)]
pub struct Atmosphere {
    /// Effective temperature, K.
    pub teff_k: f64,
    /// log10 of gravity in cm s^-2.
    pub log_g: f64,
    /// Column mass, g cm^-2.
    pub column_g_cm2: Vec<f64>,
    /// Rosseland optical depth.
    pub rosseland_depth: Vec<f64>,
    /// The gas at each depth.
    pub states: Vec<State>,
    /// How well it is converged.
    pub convergence: Convergence,
}

/// Computes the atmosphere of an effective temperature (K) and log10 gravity (cm s^-2).
///
/// # Domain
/// 6 000 - 100 000 K, log g 5.5 - 9.7.
///
/// # Errors
/// [`NotConverged`] where the iteration does not settle.
pub fn compute_atmosphere(
    teff_k: f64,
    log_g: f64,
    profiles: &ProfileTable,
) -> Result<Atmosphere, NotConverged> {
    compute_with_help(teff_k, log_g, profiles, MOST_HELPERS)
}

/// Starts from the grey run; where that fails (deep convection in the coolest, densest models), from
/// the structure of a slightly hotter star, found the same way.
fn compute_with_help(
    teff_k: f64,
    log_g: f64,
    profiles: &ProfileTable,
    helpers: u32,
) -> Result<Atmosphere, NotConverged> {
    let sources = Sources::new(FrequencyGrid::for_structure(teff_k), STRUCTURE_LINES, profiles);
    let fault = match converge(Iteration::start(teff_k, log_g, &sources, profiles)) {
        Ok(atmosphere) => return Ok(atmosphere),
        Err(fault) if helpers == 0 => return Err(fault),
        Err(fault) => fault,
    };
    let hotter = compute_with_help(teff_k * HELPER_RATIO, log_g, profiles, helpers - 1).map_err(|_| fault)?;
    converge(Iteration::start_from(&hotter, teff_k, &sources))
}

fn converge(mut iteration: Iteration<'_, '_>) -> Result<Atmosphere, NotConverged> {
    let (teff_k, log_g) = (iteration.teff_k, iteration.log_g);
    let mut temperature_change = f64::INFINITY;
    for iterations in 1..=MOST_ITERATIONS {
        let linear = iteration.linearise(temperature_change);
        if temperature_change < TEMPERATURE_TOLERANCE && linear.flux_error_max < FLUX_TOLERANCE {
            return Ok(iteration.finish(Convergence {
                iterations,
                temperature_change,
                flux_error_max: linear.flux_error_max,
                flux_error_surface: linear.flux_error_surface,
                convective_fraction_max: linear.convective_fraction_max,
            }));
        }
        tracing::debug!(
            teff_k,
            log_g,
            iterations,
            temperature_change,
            flux_error = linear.flux_error_max,
            convective = linear.convective_fraction_max,
            "iteration"
        );
        let flux_error = linear.flux_error_max;
        temperature_change = match linear.solve() {
            Some(steps) => iteration.apply(&steps),
            None => f64::INFINITY,
        };
        if flux_error > LARGEST_NEWTON_FLUX_ERROR {
            iteration.settle_convection();
        }
        if !temperature_change.is_finite() || iterations == MOST_ITERATIONS {
            return Err(NotConverged { teff_k, log_g, iterations, temperature_change, flux_error });
        }
    }
    unreachable!("the loop returns in its last round")
}

struct Iteration<'s, 't> {
    teff_k: f64,
    log_g: f64,
    gravity_cgs: f64,
    sources: &'s Sources<'t>,
    column_g_cm2: Vec<f64>,
    temperature_k: Vec<f64>,
    pressure_cgs: Vec<f64>,
    fields: Vec<Field>,
    lines: LineStore,
    states: Vec<State>,
    rosseland_depth: Vec<f64>,
    rosseland_cm2_g: Vec<f64>,
    /// Radiative and convective flux at the interval midpoints, first-moment units.
    fluxes: Vec<(f64, f64)>,
}

/// The linear system for the temperature changes, and the flux errors it starts from.
struct Linear {
    matrix: DMatrix<f64>,
    rhs: DVector<f64>,
    flux_error_max: f64,
    flux_error_surface: f64,
    convective_fraction_max: f64,
}

impl Linear {
    fn solve(self) -> Option<DVector<f64>> {
        self.matrix.lu().solve(&self.rhs)
    }
}

/// Sums over frequency that the equations of condition are made of.
struct Sums {
    /// d(flux at interval i) / dT_j, radiative, first-moment units.
    flux_slope: Array2<f64>,
    /// d(net emission of cell i) / dT_j.
    balance_slope: Array2<f64>,
    /// Radiative flux at interval i.
    flux: Vec<f64>,
    /// Net absorbed energy of cell i.
    balance: Vec<f64>,
    /// Flux-weighted opacity times flux at interval i, for the radiative acceleration.
    momentum: Vec<f64>,
    surface_flux: f64,
}

impl<'s, 't> Iteration<'s, 't> {
    /// Grey temperature run, adiabatic where the grey gradient would be unstable.
    fn start(teff_k: f64, log_g: f64, sources: &'s Sources<'t>, profiles: &ProfileTable) -> Self {
        let gravity_cgs = 10f64.powf(log_g);
        // Lines matter little to the mean opacity, and cost most of its time.
        let continuum = Sources::new(FrequencyGrid::for_start(teff_k), NO_LINES, profiles);
        let (first, last) = OPTICAL_DEPTH_RANGE;
        let mut column_g_cm2 = Vec::with_capacity(DEPTHS);
        let mut temperature_k: Vec<f64> = Vec::with_capacity(DEPTHS);
        let mut pressure_cgs: Vec<f64> = Vec::with_capacity(DEPTHS);
        let mut previous_depth = 0.0;
        let mut previous_opacity = 0.0;
        for i in 0..DEPTHS {
            let depth = first * (last / first).powf(i as f64 / (DEPTHS - 1) as f64);
            let grey_k = teff_k * (0.75 * (depth + hopf(depth))).powf(0.25);
            let (mut column, mut temperature) = match column_g_cm2.last() {
                None => (depth / 1e-2, grey_k),
                Some(above) => (above + (depth - previous_depth) / previous_opacity, grey_k),
            };
            let mut opacity = previous_opacity;
            for _ in 0..30 {
                if let (Some(above_k), Some(above_cgs)) = (temperature_k.last(), pressure_cgs.last()) {
                    let ratio = column * gravity_cgs / above_cgs;
                    let limit: f64 = if grey_k > 1.3 * teff_k || teff_k < 20_000.0 {
                        STARTING_EXCESS * Thermodynamics::new(*above_k, *above_cgs).adiabatic_gradient
                    } else {
                        1.0
                    };
                    temperature = grey_k.min(above_k * ratio.powf(limit));
                }
                let state = State::new(temperature, column * gravity_cgs);
                let renewed = continuum.evaluate(std::slice::from_ref(&state)).rosseland_cm2_g[0];
                let renewed_column = match column_g_cm2.last() {
                    None => depth / renewed,
                    Some(above) => above + 2.0 * (depth - previous_depth) / (previous_opacity + renewed),
                };
                let change = (renewed_column / column - 1.0).abs();
                opacity = renewed;
                column = if i == 0 { (column * renewed_column).sqrt() } else { renewed_column };
                if change < 1e-3 {
                    break;
                }
            }
            column_g_cm2.push(column);
            temperature_k.push(temperature);
            pressure_cgs.push(column * gravity_cgs);
            previous_depth = depth;
            previous_opacity = opacity;
        }
        Self::with_structure(teff_k, log_g, sources, column_g_cm2, temperature_k, pressure_cgs)
    }

    /// The temperatures of another effective temperature's model, scaled.
    fn start_from(other: &Atmosphere, teff_k: f64, sources: &'s Sources<'t>) -> Self {
        let ratio = teff_k / other.teff_k;
        let temperature_k = other.states.iter().map(|state| state.temperature_k * ratio).collect();
        let pressure_cgs = other.states.iter().map(|state| state.pressure_cgs).collect();
        Self::with_structure(
            teff_k,
            other.log_g,
            sources,
            other.column_g_cm2.clone(),
            temperature_k,
            pressure_cgs,
        )
    }

    fn with_structure(
        teff_k: f64,
        log_g: f64,
        sources: &'s Sources<'t>,
        column_g_cm2: Vec<f64>,
        temperature_k: Vec<f64>,
        pressure_cgs: Vec<f64>,
    ) -> Self {
        let fields = sources
            .grid()
            .frequency_hz
            .iter()
            .map(|hz| {
                let planck: Vec<f64> = temperature_k.iter().map(|t| planck_per_hz(*hz, *t)).collect();
                Field::isotropic(&planck)
            })
            .collect();
        let mut iteration = Iteration {
            teff_k,
            log_g,
            gravity_cgs: 10f64.powf(log_g),
            sources,
            column_g_cm2,
            temperature_k,
            pressure_cgs,
            fields,
            lines: LineStore::default(),
            states: Vec::new(),
            rosseland_depth: Vec::new(),
            rosseland_cm2_g: Vec::new(),
            fluxes: Vec::new(),
        };
        iteration.renew_states();
        iteration
    }

    fn renew_states(&mut self) {
        self.states =
            self.temperature_k.iter().zip(&self.pressure_cgs).map(|(t, p)| State::new(*t, *p)).collect();
    }

    /// Target flux in first-moment units, sigma Teff^4 / 4 pi.
    fn target_flux(&self) -> f64 {
        STEFAN_BOLTZMANN_CGS * self.teff_k.powi(4) / (4.0 * std::f64::consts::PI)
    }

    /// Solves the transfer, renews pressures, and sets up the Newton equations; `temperature_change` is
    /// the largest relative one of the last step.
    fn linearise(&mut self, temperature_change: f64) -> Linear {
        let tolerance = (SHAPE_LENIENCE * temperature_change).clamp(SHAPE_TOLERANCE.0, SHAPE_TOLERANCE.1);
        let extinction = self.sources.evaluate_with_slopes(&self.states, &mut self.lines, tolerance);
        self.rosseland_depth = integrate_depth(&self.column_g_cm2, &extinction.rosseland_cm2_g);
        let sums = self.sum_frequencies(&extinction);
        let convection = self.convection(&extinction.rosseland_cm2_g);
        let linear = self.assemble(&sums, &convection);
        self.fluxes = sums.flux.iter().copied().zip(convection.iter().map(|[flux, ..]| *flux)).collect();
        self.rosseland_cm2_g = extinction.rosseland_cm2_g;
        self.renew_pressures(&sums.momentum);
        linear
    }

    fn sum_frequencies(&mut self, extinction: &Extinction) -> Sums {
        let depths = self.column_g_cm2.len();
        let intervals = depths - 1;
        let mut sums = Sums {
            flux_slope: Array2::zeros((intervals, depths)),
            balance_slope: Array2::zeros((depths, depths)),
            flux: vec![0.0; intervals],
            balance: vec![0.0; depths],
            momentum: vec![0.0; intervals],
            surface_flux: 0.0,
        };
        let step: Vec<f64> = self.column_g_cm2.windows(2).map(|pair| pair[1] - pair[0]).collect();
        let mut scratch = Scratch::new(depths);
        let mut interval = vec![0.0; intervals];
        let mut planck = vec![0.0; depths];
        let mut planck_slope = vec![0.0; depths];
        let mut response = Response::new(depths);
        let grid = self.sources.grid();
        for (k, field) in self.fields.iter_mut().enumerate() {
            let (hz, weight) = (grid.frequency_hz[k], grid.weight_hz[k]);
            let total = extinction.total_cm2_g.row(k);
            for i in 0..intervals {
                interval[i] = 0.5 * (total[i] + total[i + 1]) * step[i];
            }
            for (i, t) in self.temperature_k.iter().enumerate() {
                planck[i] = planck_per_hz(hz, *t);
                planck_slope[i] = planck_slope_per_hz(hz, *t);
            }
            let thermal_fraction = row_slice(&extinction.thermal_fraction, k);
            let medium = Medium { interval: &interval, thermal_fraction, planck: &planck };
            field.solve(medium, 3, 1e-6, &mut scratch);
            response.fill(
                field,
                medium,
                row_slice(&extinction.total_slope, k),
                row_slice(&extinction.thermal_slope, k),
                &planck_slope,
                &step,
            );
            response.accumulate(field, medium, total.as_slice().unwrap_or(&[]), weight, &mut sums);
        }
        sums
    }

    /// Convective flux in first-moment units and its derivatives with the two temperatures.
    fn convection(&self, rosseland_cm2_g: &[f64]) -> Vec<[f64; 3]> {
        (0..self.column_g_cm2.len() - 1)
            .map(|i| {
                let flux = |above: f64, below: f64| {
                    self.convective_flux(
                        rosseland_cm2_g,
                        i,
                        self.temperature_k[i] * above,
                        self.temperature_k[i + 1] * below,
                    )
                };
                let value = flux(1.0, 1.0);
                if value == 0.0 {
                    return [0.0; 3];
                }
                let tiny = 1e-6;
                let slope = |above: f64, below: f64, t: f64| {
                    (flux(1.0 + above * tiny, 1.0 + below * tiny)
                        - flux(1.0 - above * tiny, 1.0 - below * tiny))
                        / (2.0 * tiny * t)
                };
                [value, slope(1.0, 0.0, self.temperature_k[i]), slope(0.0, 1.0, self.temperature_k[i + 1])]
            })
            .collect()
    }

    /// Convective flux of interval i with given temperatures at its ends, first-moment units.
    fn convective_flux(&self, rosseland_cm2_g: &[f64], i: usize, above_k: f64, below_k: f64) -> f64 {
        let point = |i: usize, temperature_k: f64| Point {
            temperature_k,
            pressure_cgs: self.pressure_cgs[i],
            rosseland_cm2_g: rosseland_cm2_g[i],
        };
        convective_flux(point(i, above_k), point(i + 1, below_k), self.gravity_cgs)
            / (4.0 * std::f64::consts::PI)
    }

    /// Gives each convective layer, from the top down, the gradient that carries what radiation
    /// leaves. Far from the solution Newton steps overshoot here, because the flux goes with the
    /// 3/2 power of a tiny difference of gradients; this brings them into reach.
    fn settle_convection(&mut self) {
        let target = self.target_flux();
        for i in 0..self.column_g_cm2.len() - 1 {
            let (radiative, convective) = self.fluxes[i];
            let wanted = target - radiative;
            if convective < SETTLED_FRACTION * target || wanted < SETTLED_FRACTION * target {
                continue;
            }
            let above_k = self.temperature_k[i];
            let log_pressure_ratio = (self.pressure_cgs[i + 1] / self.pressure_cgs[i]).ln();
            let (mut low, mut high) = (0.03, 1.5);
            for _ in 0..32 {
                let gradient = 0.5 * (low + high);
                let below_k = above_k * (gradient * log_pressure_ratio).exp();
                if self.convective_flux(&self.rosseland_cm2_g, i, above_k, below_k) > wanted {
                    high = gradient;
                } else {
                    low = gradient;
                }
            }
            self.temperature_k[i + 1] = above_k * (0.5 * (low + high) * log_pressure_ratio).exp();
        }
        self.renew_states();
    }

    fn assemble(&self, sums: &Sums, convection: &[[f64; 3]]) -> Linear {
        let depths = self.column_g_cm2.len();
        let target = self.target_flux();
        let mut matrix = DMatrix::zeros(depths, depths);
        let mut rhs = DVector::zeros(depths);
        let switch = self.rosseland_depth.partition_point(|depth| *depth < SWITCH_DEPTH).clamp(1, depths - 2);
        for i in 0..depths {
            if i <= switch {
                // Net absorbed energy plus the convergence of the convective flux vanish.
                let above = if i > 0 { convection[i - 1] } else { [0.0; 3] };
                let below = convection.get(i).copied().unwrap_or([0.0; 3]);
                for j in 0..depths {
                    matrix[(i, j)] = sums.balance_slope[(i, j)];
                }
                matrix[(i, i)] += below[1] - above[2];
                if i > 0 {
                    matrix[(i, i - 1)] -= above[1];
                }
                if i + 1 < depths {
                    matrix[(i, i + 1)] += below[2];
                }
                rhs[i] = -(sums.balance[i] + below[0] - above[0]);
            } else {
                let [flux, slope_above, slope_below] = convection[i - 1];
                for j in 0..depths {
                    matrix[(i, j)] = sums.flux_slope[(i - 1, j)];
                }
                matrix[(i, i - 1)] += slope_above;
                matrix[(i, i)] += slope_below;
                rhs[i] = target - sums.flux[i - 1] - flux;
            }
            let scale = matrix.row(i).iter().fold(0.0_f64, |largest, value| largest.max(value.abs()));
            for j in 0..depths {
                matrix[(i, j)] /= scale;
            }
            rhs[i] /= scale;
        }
        let errors = sums
            .flux
            .iter()
            .zip(convection)
            .map(|(flux, [convective, ..])| ((flux + convective) / target - 1.0).abs());
        let flux_error_surface = (sums.surface_flux / target - 1.0).abs();
        Linear {
            matrix,
            rhs,
            flux_error_max: errors.fold(flux_error_surface, f64::max),
            flux_error_surface,
            convective_fraction_max: convection.iter().fold(0.0, |most, [flux, ..]| most.max(flux / target)),
        }
    }

    /// Gas pressure from gravity less the radiative acceleration of the present field.
    fn renew_pressures(&mut self, momentum: &[f64]) {
        let acceleration = |i: usize| {
            // A photosphere is far from the Eddington limit; the bound keeps first iterations sane.
            (4.0 * std::f64::consts::PI / LIGHT_SPEED_CM_S * momentum[i]).min(0.9 * self.gravity_cgs)
        };
        let mut pressure = (self.gravity_cgs - acceleration(0)) * self.column_g_cm2[0];
        self.pressure_cgs[0] = pressure;
        for i in 1..self.column_g_cm2.len() {
            let step = self.column_g_cm2[i] - self.column_g_cm2[i - 1];
            pressure += (self.gravity_cgs - acceleration(i - 1)) * step;
            self.pressure_cgs[i] = pressure;
        }
    }

    /// Applies bounded steps; returns the largest relative change asked for.
    fn apply(&mut self, steps: &DVector<f64>) -> f64 {
        let mut largest = 0.0_f64;
        for (t, step) in self.temperature_k.iter_mut().zip(steps.iter()) {
            let relative = step / *t;
            largest = largest.max(relative.abs());
            *t *= 1.0 + relative.clamp(-LARGEST_STEP, LARGEST_STEP);
            if !relative.is_finite() {
                largest = f64::INFINITY;
            }
        }
        self.renew_states();
        largest
    }

    fn finish(self, convergence: Convergence) -> Atmosphere {
        Atmosphere {
            teff_k: self.teff_k,
            log_g: self.log_g,
            column_g_cm2: self.column_g_cm2,
            rosseland_depth: self.rosseland_depth,
            states: self.states,
            convergence,
        }
    }
}

/// Response of one frequency's mean intensity to the temperatures: dJ_i / dT_j.
struct Response {
    depths: usize,
    /// dJ_i / dT_j, row i contiguous.
    slope: Vec<f64>,
    /// Factors of the tridiagonal elimination.
    diagonal: Vec<f64>,
    upper: Vec<f64>,
    /// Half the interval's thickness per unit change of the opacity at its upper / lower end.
    interval_above: Vec<f64>,
    interval_below: Vec<f64>,
    /// Midpoint fluxes.
    flux: Vec<f64>,
    /// Explicit derivatives of the balance of cell i with T_{i-1}, T_i, T_{i+1}.
    balance_explicit: Vec<[f64; 3]>,
}

impl Response {
    fn new(depths: usize) -> Self {
        Response {
            depths,
            slope: vec![0.0; depths * depths],
            diagonal: vec![0.0; depths],
            upper: vec![0.0; depths],
            interval_above: vec![0.0; depths],
            interval_below: vec![0.0; depths],
            flux: vec![0.0; depths],
            balance_explicit: vec![[0.0; 3]; depths],
        }
    }

    fn fill(
        &mut self,
        field: &Field,
        medium: Medium<'_>,
        total_slope: &[f64],
        thermal_slope: &[f64],
        planck_slope: &[f64],
        step: &[f64],
    ) {
        let depths = self.depths;
        let last = depths - 1;
        let moment = |i: usize| field.eddington[i] * field.mean_intensity[i];
        for i in 0..last {
            self.interval_above[i] = 0.5 * total_slope[i] * step[i];
            self.interval_below[i] = 0.5 * total_slope[i + 1] * step[i];
            self.flux[i] = (moment(i + 1) - moment(i)) / medium.interval[i];
        }
        self.slope.fill(0.0);
        // Right-hand side: minus the explicit derivative of each row of the moment equations.
        for i in 0..depths {
            let excess = field.mean_intensity[i] - medium.planck[i];
            let emission = medium.thermal_fraction[i] * excess;
            let cell = cell_depth(medium.interval, i);
            let mut balance = [0.0; 3];
            balance[1] = cell * (thermal_slope[i] * excess - medium.thermal_fraction[i] * planck_slope[i]);
            let mut explicit = [0.0; 3];
            if i > 0 {
                balance[0] += 0.5 * self.interval_above[i - 1] * emission;
                balance[1] += 0.5 * self.interval_below[i - 1] * emission;
                let factor = self.flux[i - 1] / medium.interval[i - 1];
                explicit[0] += factor * self.interval_above[i - 1];
                explicit[1] += factor * self.interval_below[i - 1];
            }
            if i < last {
                balance[1] += 0.5 * self.interval_above[i] * emission;
                balance[2] += 0.5 * self.interval_below[i] * emission;
                let factor = self.flux[i] / medium.interval[i];
                explicit[1] -= factor * self.interval_above[i];
                explicit[2] -= factor * self.interval_below[i];
            } else {
                let interval = medium.interval[last - 1];
                let slope = medium.bottom_slope();
                explicit[1] += planck_slope[last] / 2.0 + planck_slope[last] / (3.0 * interval)
                    - slope / (3.0 * interval) * self.interval_below[last - 1];
                explicit[0] -= planck_slope[last - 1] / (3.0 * interval)
                    + slope / (3.0 * interval) * self.interval_above[last - 1];
            }
            self.balance_explicit[i] = balance;
            for (offset, (derivative, part)) in explicit.iter().zip(balance).enumerate() {
                if let Some(j) = (i + offset).checked_sub(1).filter(|j| *j < depths) {
                    self.slope[i * depths + j] = -(derivative - part);
                }
            }
        }
        self.eliminate(field, medium);
    }

    /// Thomas algorithm with the identity-like right-hand sides of all temperatures at once.
    fn eliminate(&mut self, field: &Field, medium: Medium<'_>) {
        let depths = self.depths;
        for i in 0..depths {
            let (lower, mut diagonal, upper) = field.moment_row(medium, i);
            if i > 0 {
                let factor = lower / self.diagonal[i - 1];
                diagonal -= factor * self.upper[i - 1];
                let (done, rest) = self.slope.split_at_mut(i * depths);
                let above = &done[(i - 1) * depths..];
                // Row i has entries up to column i + 1 only; above it, up to column i.
                for (target, source) in rest[..depths].iter_mut().zip(above).take(i + 2) {
                    *target -= factor * source;
                }
            }
            self.diagonal[i] = diagonal;
            self.upper[i] = upper;
        }
        for i in (0..depths).rev() {
            let (head, tail) = self.slope.split_at_mut((i + 1) * depths);
            let row = &mut head[i * depths..];
            let inverse = 1.0 / self.diagonal[i];
            if i + 1 < depths {
                let upper = self.upper[i];
                for (target, below) in row.iter_mut().zip(&tail[..depths]) {
                    *target = (*target - upper * below) * inverse;
                }
            } else {
                row.iter_mut().for_each(|value| *value *= inverse);
            }
        }
    }

    fn accumulate(&self, field: &Field, medium: Medium<'_>, total: &[f64], weight: f64, sums: &mut Sums) {
        let depths = self.depths;
        for i in 0..depths {
            let absorbing = cell_depth(medium.interval, i) * medium.thermal_fraction[i];
            let excess = field.mean_intensity[i] - medium.planck[i];
            sums.balance[i] += weight * absorbing * excess;
            let row = &self.slope[i * depths..(i + 1) * depths];
            let factor = weight * absorbing;
            for (sum, slope) in sums.balance_slope.row_mut(i).iter_mut().zip(row) {
                *sum += factor * slope;
            }
            for (offset, explicit) in self.balance_explicit[i].iter().enumerate() {
                if let Some(j) = (i + offset).checked_sub(1).filter(|j| *j < depths) {
                    sums.balance_slope[(i, j)] += weight * explicit;
                }
            }
        }
        for i in 0..depths - 1 {
            let interval = medium.interval[i];
            let (above, below) = self.slope[i * depths..(i + 2) * depths].split_at(depths);
            let scale_above = weight * field.eddington[i] / interval;
            let scale_below = weight * field.eddington[i + 1] / interval;
            for (sum, (above, below)) in sums.flux_slope.row_mut(i).iter_mut().zip(above.iter().zip(below)) {
                *sum += scale_below * below - scale_above * above;
            }
            let factor = weight * self.flux[i] / interval;
            sums.flux_slope[(i, i)] -= factor * self.interval_above[i];
            sums.flux_slope[(i, i + 1)] -= factor * self.interval_below[i];
            sums.flux[i] += weight * self.flux[i];
            sums.momentum[i] += weight * self.flux[i] * 0.5 * (total[i] + total[i + 1]);
        }
        sums.surface_flux += weight * field.surface_flux();
    }
}

/// Hopf function of the grey atmosphere (fit good to 1 %; only the start depends on it).
fn hopf(depth: f64) -> f64 {
    0.7104 - 0.1331 * (-3.4488 * depth).exp()
}

fn integrate_depth(column_g_cm2: &[f64], opacity_cm2_g: &[f64]) -> Vec<f64> {
    let mut depth = column_g_cm2[0] * opacity_cm2_g[0];
    let mut run = vec![depth];
    for i in 1..column_g_cm2.len() {
        depth += 0.5 * (opacity_cm2_g[i] + opacity_cm2_g[i - 1]) * (column_g_cm2[i] - column_g_cm2[i - 1]);
        run.push(depth);
    }
    run
}

fn row_slice(array: &Array2<f64>, row: usize) -> &[f64] {
    let depths = array.ncols();
    // Rows of a standard-layout array are contiguous.
    array.as_slice().map_or(&[], |all| &all[row * depths..(row + 1) * depths])
}
