//! Errors where chi-square is no parabola: close to the ridge, where Balmer lines are strongest.
//!
//! There temperature hardly changes the lines to first order, and a hot and a cold minimum may run into
//! one with a flat floor; the curvature at its bottom then promises too much. So chi-square is followed
//! along temperature, gravity and velocity fitted anew at each step, and the covariance is taken from
//! exp(-chi2 / 2) along that path (law of total covariance: the path's own spread, and that of gravity and
//! velocity about it). Steps of one curvature sigma at most: the
//! trapezoidal rule is exact to 1e-8 for a Gaussian.
//! `rehearse` measures the pulls; before this their width in Teff was 1.12 from 11 500 to 15 500 K.

use argmin::core::Error;
use nalgebra::{Matrix2, Matrix3, Vector3};

use super::objective::Objective;
use crate::numerics::least_squares::{Bounds, minimise};

/// Chi-square above the minimum, in units of the inflation, beyond which nothing is left: exp(-6) = 0.2 %.
const FAR: f64 = 12.0;
const MOST_STEPS: usize = 20;
/// Longest step, relative: on the ridge itself the curvature vanishes and its sigma is no scale.
const LONGEST_STEP: f64 = 0.03;
const MOST_ITERATIONS: u64 = 8;

/// A minimum, as the curvature there describes it.
#[derive(Debug, Clone, Copy)]
pub struct Bottom {
    /// (Teff, log g, velocity).
    pub at: Vector3<f64>,
    /// Chi-square.
    pub chi2: f64,
    /// Covariance from the curvature, inflation included.
    pub covariance: Matrix3<f64>,
    /// By how much the covariance was scaled up.
    pub inflation: f64,
}

/// Covariance about a minimum from the profile of chi-square within a range of temperatures, K.
///
/// # Errors
/// Where the model cannot be evaluated.
pub fn profiled_covariance(
    objective: &Objective<'_>,
    bottom: &Bottom,
    bounds: &Bounds<3>,
    range_k: (f64, f64),
) -> Result<Matrix3<f64>, Error> {
    let step_k = bottom.covariance[(0, 0)].sqrt().min(LONGEST_STEP * bottom.at[0]);
    let mut total = 1.0;
    let mut sum = spread_about_path(&bottom.covariance);
    for direction in [-1.0, 1.0] {
        let mut here = bottom.at;
        for count in 1..=MOST_STEPS {
            let teff_k = bottom.at[0] + direction * step_k * count as f64;
            if !(range_k.0..=range_k.1).contains(&teff_k) {
                break;
            }
            let mut fixed = *bounds;
            (fixed.lower[0], fixed.upper[0], here[0]) = (teff_k, teff_k, teff_k);
            let fitted = minimise(objective, here, fixed, MOST_ITERATIONS, 1.0)?;
            here = fitted.parameters;
            let above = (fitted.at.chi2 - bottom.chi2) / bottom.inflation;
            if above > FAR {
                break;
            }
            let weight = (-0.5 * above).exp();
            let off = here - bottom.at;
            let curvature = fitted.at.curvature.fixed_view::<2, 2>(1, 1).into_owned();
            let about = curvature.try_inverse().unwrap_or_else(Matrix2::zeros) * bottom.inflation;
            sum += weight * (off * off.transpose());
            for i in 0..2 {
                for j in 0..2 {
                    sum[(i + 1, j + 1)] += weight * about[(i, j)];
                }
            }
            total += weight;
        }
    }
    Ok(sum / total)
}

/// What gravity and velocity scatter at fixed temperature.
fn spread_about_path(covariance: &Matrix3<f64>) -> Matrix3<f64> {
    let with_teff = covariance.column(0).into_owned();
    covariance - with_teff * with_teff.transpose() / covariance[(0, 0)]
}
