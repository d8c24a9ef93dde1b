//! Statistical errors of a solution.

use nalgebra::Matrix3;

use super::objective::{Objective, Seen};
use crate::numerics::least_squares::Linearisation;

/// External relative error of Teff and absolute error of log g: what repeated observations of the
/// same stars scatter beyond their noise (Liebert, Bergeron & Holberg 2005, ApJS 156, 47).
pub const EXTERNAL_TEFF: f64 = 0.012;
/// External error of log g, dex (same source).
pub const EXTERNAL_LOG_G: f64 = 0.038;

/// Longest lag, pixels, over which residuals may be correlated.
const LONGEST_LAG: usize = 10;

/// Covariance of (Teff, log g, velocity) and what it was scaled by.
#[derive(Debug, Clone, Copy)]
pub struct Errors {
    /// Statistical covariance in K, dex and km/s.
    pub covariance: [[f64; 3]; 3],
    /// Pixels less all free parameters, those of the normalisation included.
    pub dof: u64,
    /// By how much the covariance was scaled up, at least 1.
    pub inflation: f64,
}

/// Inverse curvature with the normalisation projected out, scaled up where the residuals scatter more
/// than the errors say, or are correlated from pixel to pixel; never down.
pub fn compute_errors(objective: &Objective<'_>, at: &Linearisation<3>, views: &[Seen]) -> Errors {
    let (pixels, coefficients) = objective.counts();
    let dof = pixels.saturating_sub(coefficients + 3).max(1) as u64;
    let inflation = (at.chi2 / dof as f64).max(1.0) * correlation_factor(views);
    let covariance =
        at.curvature.try_inverse().unwrap_or_else(|| Matrix3::from_element(f64::NAN)) * inflation;
    Errors {
        covariance: std::array::from_fn(|i| std::array::from_fn(|j| covariance[(i, j)])),
        dof,
        inflation,
    }
}

/// 1 + 2 sum of the autocorrelation at positive lags up to the first insignificant one: how much fewer
/// independent pixels there are.
fn correlation_factor(views: &[Seen]) -> f64 {
    let pixels: usize = views.iter().map(|seen| seen.residual.len()).sum();
    let variance: f64 = views.iter().flat_map(|seen| &seen.residual).map(|r| r * r).sum();
    let noise = 2.0 / (pixels.max(1) as f64).sqrt();
    let mut factor = 1.0;
    for lag in 1..=LONGEST_LAG {
        let products: f64 = views
            .iter()
            .map(|seen| {
                let r = &seen.residual;
                r.iter().zip(r.get(lag..).unwrap_or_default()).map(|(a, b)| a * b).sum::<f64>()
            })
            .sum();
        let correlation = products / variance;
        if correlation.is_nan() || correlation <= noise {
            break;
        }
        factor += 2.0 * correlation;
    }
    factor
}
