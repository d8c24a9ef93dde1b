//! Non-linear least squares: bounded Levenberg-Marquardt as a solver of `argmin`.
//!
//! argmin brings the executor, iteration limits and observers; this file brings the one algorithm that it
//! lacks. Damping follows Marquardt's scaling with the gain-ratio update of Nielsen (1999); a
//! step that leaves the box is clamped to it, and coordinates that are held by a bound and would move
//! outward leave the linear system. A result counts as converged only where gradient *and* step are
//! small ([`Fitted::is_converged`] is computed here, never taken from the executor's word).
//!
//! Checked against certified problems of the NIST Statistical Reference Datasets in
//! `tests/reference/least_squares.rs`.

use argmin::core::{
    Error, Executor, IterState, KV, Problem, Solver, State, TerminationReason, TerminationStatus,
};
use nalgebra::{SMatrix, SVector};

/// A sum of squares in N parameters, linearised.
#[derive(Debug, Clone, Copy)]
pub struct Linearisation<const N: usize> {
    /// Sum of squared residuals.
    pub chi2: f64,
    /// J^T r: half the gradient of `chi2`.
    pub gradient: SVector<f64, N>,
    /// J^T J: half the Gauss-Newton Hessian of `chi2`.
    pub curvature: SMatrix<f64, N, N>,
}

/// A least-squares problem.
pub trait LeastSquares<const N: usize> {
    /// Residuals at a point, as their normal equations; the point lies within the bounds.
    ///
    /// # Errors
    /// Where the model cannot be evaluated.
    fn linearise(&self, parameters: &SVector<f64, N>) -> Result<Linearisation<N>, Error>;
}

/// Box of allowed parameters.
#[derive(Debug, Clone, Copy)]
pub struct Bounds<const N: usize> {
    /// Smallest values.
    pub lower: SVector<f64, N>,
    /// Largest values.
    pub upper: SVector<f64, N>,
}

/// Where the iteration ended.
#[derive(Debug, Clone, Copy)]
pub struct Fitted<const N: usize> {
    /// Best parameters.
    pub parameters: SVector<f64, N>,
    /// Linearisation there.
    pub at: Linearisation<N>,
    /// Accepted and rejected steps together.
    pub iterations: u64,
    /// Whether gradient and step are both small there.
    pub is_converged: bool,
}

/// A step is small when it changes the model by this fraction of the residuals, or every parameter by
/// this fraction of itself.
const STEP_TOLERANCE: f64 = 1e-5;
const RELATIVE_STEP_TOLERANCE: f64 = 1e-12;
/// A gradient is small when the cosine between residuals and each free parameter's direction is: for 500
/// residuals the parameter is then within a fiftieth of its standard deviation.
const GRADIENT_TOLERANCE: f64 = 1e-3;
const FIRST_DAMPING: f64 = 1e-3;
const LARGEST_DAMPING: f64 = 1e12;

/// Minimises from a start inside the bounds.
///
/// Steps and gradients are judged against the residuals; `chi2_floor` (in units of the sum of squares)
/// stands in for residuals that vanish: 1 for residuals in standard deviations, 0 where nothing is known.
///
/// # Errors
/// What the problem reports where it cannot be evaluated.
pub fn minimise<const N: usize, P: LeastSquares<N>>(
    problem: P,
    start: SVector<f64, N>,
    bounds: Bounds<N>,
    most_iterations: u64,
    chi2_floor: f64,
) -> Result<Fitted<N>, Error> {
    let solver =
        LevenbergMarquardt { bounds, chi2_floor, damping: FIRST_DAMPING, growth: 2.0, at: None, ended: None };
    let result = Executor::new(problem, solver)
        .configure(|state: Parameters<N>| state.param(start).max_iters(most_iterations))
        .ctrlc(false)
        .timer(false)
        .run()?;
    let iterations = result.state.get_iter();
    let solver = result.solver;
    let (Some(parameters), Some(at)) = (result.state.get_param().copied(), solver.at) else {
        return Err(Error::msg("the solver ended before its first evaluation"));
    };
    let is_held = held(&parameters, &at.gradient, &bounds);
    let is_small = tangent_cosine(&at, &is_held, chi2_floor) < GRADIENT_TOLERANCE;
    let is_converged = solver.ended == Some(Ending::Still) && is_small;
    Ok(Fitted { parameters, at, iterations, is_converged })
}

type Parameters<const N: usize> = IterState<SVector<f64, N>, (), (), (), (), f64>;

/// Why the solver itself stopped.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Ending {
    /// The step is below its tolerance.
    Still,
    /// No damping gives a smaller sum.
    Stuck,
}

struct LevenbergMarquardt<const N: usize> {
    bounds: Bounds<N>,
    chi2_floor: f64,
    damping: f64,
    growth: f64,
    at: Option<Linearisation<N>>,
    ended: Option<Ending>,
}

impl<const N: usize, P: LeastSquares<N>> Solver<P, Parameters<N>> for LevenbergMarquardt<N> {
    fn name(&self) -> &str {
        "bounded Levenberg-Marquardt"
    }

    fn init(
        &mut self,
        problem: &mut Problem<P>,
        state: Parameters<N>,
    ) -> Result<(Parameters<N>, Option<KV>), Error> {
        let start = state.get_param().copied().ok_or_else(|| Error::msg("no start was given"))?;
        let at = problem.problem("linearise", |problem| problem.linearise(&start))?;
        self.at = Some(at);
        Ok((state.param(start).cost(at.chi2), None))
    }

    fn next_iter(
        &mut self,
        problem: &mut Problem<P>,
        state: Parameters<N>,
    ) -> Result<(Parameters<N>, Option<KV>), Error> {
        let (Some(here), Some(at)) = (state.get_param().copied(), self.at) else {
            return Err(Error::msg("the solver was not initialised"));
        };
        let step = self.bounded_step(&here, &at);
        let there = here + step;
        let is_still = (at.curvature * step).dot(&step)
            <= STEP_TOLERANCE.powi(2) * at.chi2.max(self.chi2_floor)
            || (0..N).all(|i| step[i].abs() <= RELATIVE_STEP_TOLERANCE * here[i].abs());
        let trial = problem.problem("linearise", |problem| problem.linearise(&there))?;
        let predicted = -(2.0 * at.gradient + at.curvature * step).dot(&step);
        let gain = (at.chi2 - trial.chi2) / predicted;
        if trial.chi2 <= at.chi2 && gain.is_finite() && gain > 0.0 {
            self.damping *= (1.0 - (2.0 * gain - 1.0).powi(3)).max(1.0 / 3.0);
            self.growth = 2.0;
            self.at = Some(trial);
            if is_still {
                self.ended = Some(Ending::Still);
            }
            return Ok((state.param(there).cost(trial.chi2), None));
        }
        if is_still {
            self.ended = Some(Ending::Still);
        } else if self.damping > LARGEST_DAMPING {
            self.ended = Some(Ending::Stuck);
        }
        self.damping *= self.growth;
        self.growth *= 2.0;
        Ok((state.param(here).cost(at.chi2), None))
    }

    fn terminate(&mut self, _state: &Parameters<N>) -> TerminationStatus {
        match self.ended {
            Some(_) => TerminationStatus::Terminated(TerminationReason::SolverConverged),
            None => TerminationStatus::NotTerminated,
        }
    }
}

impl<const N: usize> LevenbergMarquardt<N> {
    fn bounded_step(&self, here: &SVector<f64, N>, at: &Linearisation<N>) -> SVector<f64, N> {
        let is_held = held(here, &at.gradient, &self.bounds);
        let mut matrix = at.curvature;
        let mut rhs = -at.gradient;
        for i in 0..N {
            if is_held[i] {
                matrix.fill_row(i, 0.0);
                matrix.fill_column(i, 0.0);
                rhs[i] = 0.0;
                matrix[(i, i)] = 1.0;
            } else {
                // Marquardt's scaling; the floor keeps a parameter without effect solvable.
                matrix[(i, i)] += self.damping * matrix[(i, i)].max(f64::MIN_POSITIVE * 1e10);
            }
        }
        let step = matrix.cholesky().map_or_else(|| rhs.map(|_| 0.0), |factor| factor.solve(&rhs));
        let there = (here + step).zip_map(&self.bounds.lower, f64::max).zip_map(&self.bounds.upper, f64::min);
        there - here
    }
}

/// Parameters that sit on a bound and would leave the box downhill.
fn held<const N: usize>(here: &SVector<f64, N>, gradient: &SVector<f64, N>, bounds: &Bounds<N>) -> [bool; N] {
    std::array::from_fn(|i| {
        here[i] <= bounds.lower[i] && gradient[i] > 0.0 || here[i] >= bounds.upper[i] && gradient[i] < 0.0
    })
}

/// Largest cosine of the angle between the residuals and a free parameter's direction.
fn tangent_cosine<const N: usize>(at: &Linearisation<N>, is_held: &[bool; N], chi2_floor: f64) -> f64 {
    let mut largest = 0.0_f64;
    for i in 0..N {
        let length = (at.curvature[(i, i)] * at.chi2.max(chi2_floor)).sqrt();
        if !is_held[i] && length > 0.0 {
            largest = largest.max(at.gradient[i].abs() / length);
        }
    }
    largest
}
