//! The bounded least-squares solver on certified problems.
//!
//! Data and certified values: NIST Statistical Reference Datasets, nonlinear regression (public domain):
//! Misra1a (lower difficulty), BoxBOD and MGH09 (higher difficulty).

use argmin::core::Error;
use emberline::numerics::least_squares::{Bounds, Fitted, LeastSquares, Linearisation, minimise};
use nalgebra::{SMatrix, SVector};

struct Problem<const N: usize> {
    x: &'static [f64],
    y: &'static [f64],
    /// Value and gradient of the model.
    model: fn(&SVector<f64, N>, f64) -> (f64, SVector<f64, N>),
}

impl<const N: usize> LeastSquares<N> for Problem<N> {
    fn linearise(&self, b: &SVector<f64, N>) -> Result<Linearisation<N>, Error> {
        let mut at = Linearisation { chi2: 0.0, gradient: SVector::zeros(), curvature: SMatrix::zeros() };
        for (x, y) in self.x.iter().zip(self.y) {
            let (value, slope) = (self.model)(b, *x);
            let residual = y - value;
            at.chi2 += residual * residual;
            at.gradient -= slope * residual;
            at.curvature += slope * slope.transpose();
        }
        Ok(at)
    }
}

fn wide<const N: usize>() -> Bounds<N> {
    Bounds { lower: SVector::repeat(-1e6), upper: SVector::repeat(1e6) }
}

fn assert_certified<const N: usize>(fitted: &Fitted<N>, certified: [f64; N], sum_of_squares: f64) {
    assert!(fitted.is_converged, "not converged after {} iterations", fitted.iterations);
    assert!((fitted.at.chi2 / sum_of_squares - 1.0).abs() < 1e-9, "sum of squares {}", fitted.at.chi2);
    for (found, expected) in fitted.parameters.iter().zip(certified) {
        assert!((found / expected - 1.0).abs() < 1e-5, "{found} against {expected}");
    }
}

const MISRA1A: Problem<2> = Problem {
    x: &[77.6, 114.9, 141.1, 190.8, 239.9, 289.0, 332.8, 378.4, 434.8, 477.3, 536.8, 593.1, 689.1, 760.0],
    y: &[10.07, 14.73, 17.94, 23.93, 29.61, 35.18, 40.02, 44.82, 50.76, 55.05, 61.01, 66.40, 75.47, 81.78],
    model: |b, x| {
        let decay = (-b[1] * x).exp();
        (b[0] * (1.0 - decay), SVector::from([1.0 - decay, b[0] * x * decay]))
    },
};

const BOX_BOD: Problem<2> = Problem {
    x: &[1.0, 2.0, 3.0, 5.0, 7.0, 10.0],
    y: &[109.0, 149.0, 149.0, 191.0, 213.0, 224.0],
    model: MISRA1A.model,
};

const MGH09: Problem<4> = Problem {
    x: &[4.0, 2.0, 1.0, 0.5, 0.25, 0.167, 0.125, 0.1, 0.0833, 0.0714, 0.0625],
    y: &[0.1957, 0.1947, 0.1735, 0.16, 0.0844, 0.0627, 0.0456, 0.0342, 0.0323, 0.0235, 0.0246],
    model: |b, x| {
        let (top, bottom) = (x * x + x * b[1], x * x + x * b[2] + b[3]);
        let scale = b[0] / bottom;
        let value = scale * top;
        (value, SVector::from([top / bottom, scale * x, -value * x / bottom, -value / bottom]))
    },
};

#[test]
fn validate_misra1a() {
    for start in [[500.0, 1e-4], [250.0, 5e-4]] {
        let fitted = minimise(MISRA1A, SVector::from(start), wide(), 500, 0.0).unwrap();
        assert_certified(&fitted, [2.389_421_291_8e2, 5.501_564_318_1e-4], 1.245_513_889_4e-1);
    }
}

#[test]
fn validate_box_bod() {
    let fitted = minimise(BOX_BOD, SVector::from([100.0, 0.75]), wide(), 500, 0.0).unwrap();
    assert_certified(&fitted, [2.138_094_088_9e2, 5.472_374_854_2e-1], 1.168_008_876_6e3);
}

#[test]
fn validate_mgh09() {
    let fitted = minimise(MGH09, SVector::from([0.25, 0.39, 0.415, 0.39]), wide(), 500, 0.0).unwrap();
    let certified = [1.928_069_345_8e-1, 1.912_823_287_3e-1, 1.230_565_069_3e-1, 1.360_623_306_8e-1];
    assert_certified(&fitted, certified, 3.075_056_038_5e-4);
}

/// With the minimum outside the box the best point of the box is on its wall.
#[test]
fn verify_bounds_hold() {
    let bounds = Bounds { lower: SVector::from([0.0, 0.0]), upper: SVector::from([200.0, 1.0]) };
    let fitted = minimise(BOX_BOD, SVector::from([100.0, 0.75]), bounds, 500, 0.0).unwrap();
    assert!(fitted.is_converged);
    assert_eq!(fitted.parameters[0], 200.0);
    assert!(fitted.at.chi2 > 1.168_008_876_6e3);
    // The free parameter's gradient vanishes there.
    assert!(fitted.at.gradient[1].abs() < 1e-2, "{}", fitted.at.gradient[1]);
}

/// A flat direction and too few iterations must not be called converged.
#[test]
fn verify_running_out_of_iterations_is_told() {
    let fitted = minimise(MGH09, SVector::from([0.25, 0.39, 0.415, 0.39]), wide(), 2, 0.0).unwrap();
    assert!(!fitted.is_converged);
}
