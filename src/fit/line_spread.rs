//! From the model's wavelengths to the instrument's pixels: a sparse linear operator.
//!
//! A pixel sees the model folded with the Gaussian line-spread function and with the pixel's own
//! width. The model is taken as linear between its wavelengths, for which the folding is exact: the weight
//! of a model point is a second difference of the twice-integrated kernel, so that undersampled pixels
//! are integrated and not point-sampled, and the weights of a pixel always sum to 1.

use std::ops::Range;

use statrs::function::erf::erf;

use crate::numerics::dot::dot;
use crate::physics::constants::LIGHT_SPEED_KM_S;
use crate::physics::wavelength::doppler_factor;

/// The kernel is followed to this many standard deviations: beyond, 1e-6 of it is left.
const REACH_SIGMA: f64 = 5.0;
/// Peak of the unit Gaussian, 1 / sqrt(2 pi).
const GAUSS_PEAK: f64 = std::f64::consts::FRAC_2_SQRT_PI * std::f64::consts::FRAC_1_SQRT_2 / 2.0;

/// Rows of pixels over columns of model wavelengths.
#[derive(Debug, Clone, Default)]
pub struct LineSpread {
    /// Per pixel: first model index and offset of its first weight; one more entry closes the last.
    rows: Vec<(usize, usize)>,
    weight: Vec<f64>,
    /// Change of each weight per km/s of radial velocity.
    per_km_s: Vec<f64>,
}

/// A pixel as the operator sees it, in the observer's frame.
#[derive(Debug, Clone, Copy)]
pub struct Pixel {
    /// Centre, vacuum A.
    pub wave_vac_aa: f64,
    /// Full width, A.
    pub width_aa: f64,
    /// Full width at half maximum of the line-spread function, A.
    pub fwhm_aa: f64,
}

impl LineSpread {
    /// Builds the operator of pixels that see a star receding with `radial_velocity_km_s`, on model
    /// wavelengths (vacuum A, ascending) that must reach beyond all kernels: see [`model_range`].
    pub fn new(pixels: &[Pixel], model_wave_vac_aa: &[f64], radial_velocity_km_s: f64) -> Self {
        let mut operator = LineSpread::default();
        let beta = radial_velocity_km_s / LIGHT_SPEED_KM_S;
        let doppler = doppler_factor(radial_velocity_km_s);
        // d ln(Doppler factor) / dv.
        let stretch_per_km_s = 1.0 / (LIGHT_SPEED_KM_S * (1.0 - beta * beta));
        for pixel in pixels {
            let kernel = Kernel::new(pixel, doppler);
            let range = covered(model_wave_vac_aa, kernel.centre, kernel.reach());
            operator.rows.push((range.start, operator.weight.len()));
            operator.push_row(&model_wave_vac_aa[range], kernel, kernel.centre * stretch_per_km_s);
        }
        operator.rows.push((0, operator.weight.len()));
        operator
    }

    /// Appends the weights of model points, second differences of the twice-integrated kernel, and their
    /// change when the kernel's centre moves blueward by `shift_per_km_s`; the outermost points take what
    /// lies beyond them. The kernel's own width changes a thousand times less and is left.
    fn push_row(&mut self, waves: &[f64], kernel: Kernel, shift_per_km_s: f64) {
        let mut before = Integrals { twice: 0.0, once: 0.0 };
        let (mut slope_before, mut change_before) = (0.0, 0.0);
        for (i, wave) in waves.iter().enumerate() {
            let here = kernel.integrals(wave - kernel.centre);
            if i > 0 {
                let inverse = 1.0 / (wave - waves[i - 1]);
                let slope = (here.twice - before.twice) * inverse;
                let change = (here.once - before.once) * inverse * shift_per_km_s;
                self.weight.push(slope - slope_before);
                self.per_km_s.push(change - change_before);
                (slope_before, change_before) = (slope, change);
            }
            before = here;
        }
        self.weight.push(1.0 - slope_before);
        self.per_km_s.push(-change_before);
    }

    /// Folds a model; `seen` has one entry per pixel.
    pub fn apply(&self, model: &[f64], seen: &mut [f64]) {
        fold(&self.rows, &self.weight, model, seen);
    }

    /// Derivative of the folded model with radial velocity, per km/s.
    pub fn apply_velocity_slope(&self, model: &[f64], seen: &mut [f64]) {
        fold(&self.rows, &self.per_km_s, model, seen);
    }
}

/// Model wavelengths that pixels between two wavelengths need, with room for a velocity of either
/// sign; `None` where the model does not reach.
pub fn model_range(
    model_wave_vac_aa: &[f64],
    first: Pixel,
    last: Pixel,
    largest_velocity_km_s: f64,
) -> Option<Range<usize>> {
    let stretch = doppler_factor(largest_velocity_km_s);
    let blue = first.wave_vac_aa / stretch - Kernel::new(&first, 1.0).reach() - 1.0;
    let red = last.wave_vac_aa * stretch + Kernel::new(&last, 1.0).reach() + 1.0;
    let start = model_wave_vac_aa.partition_point(|wave| *wave < blue);
    let end = model_wave_vac_aa.partition_point(|wave| *wave <= red);
    (start > 0 && end < model_wave_vac_aa.len()).then(|| start - 1..end + 1)
}

fn fold(rows: &[(usize, usize)], weights: &[f64], model: &[f64], seen: &mut [f64]) {
    for (pair, output) in rows.windows(2).zip(seen) {
        let weights = &weights[pair[0].1..pair[1].1];
        *output = dot(weights, &model[pair[0].0..]);
    }
}

/// Gaussian folded with a pixel, in the rest frame of the model.
#[derive(Clone, Copy)]
struct Kernel {
    centre: f64,
    sigma: f64,
    half_width: f64,
}

impl Kernel {
    fn new(pixel: &Pixel, doppler: f64) -> Self {
        Kernel {
            centre: pixel.wave_vac_aa / doppler,
            sigma: pixel.fwhm_aa / doppler / crate::spectrum::FWHM_PER_SIGMA,
            half_width: 0.5 * pixel.width_aa / doppler,
        }
    }

    fn reach(&self) -> f64 {
        REACH_SIGMA * self.sigma + self.half_width
    }

    /// The kernel integrated once and twice, at a distance from its centre.
    fn integrals(&self, x: f64) -> Integrals {
        // The Gaussian integrated twice: x Phi + s^2 g; three times: ((x^2 + s^2) Phi + x s^2 g) / 2.
        let sigma2 = self.sigma * self.sigma;
        let ends = [x + self.half_width, x - self.half_width].map(|x| {
            let z = x / self.sigma;
            let phi = 0.5 * (1.0 + erf(z * std::f64::consts::FRAC_1_SQRT_2));
            let gauss = GAUSS_PEAK * self.sigma * (-0.5 * z * z).exp();
            (x * phi + gauss, 0.5 * ((x * x + sigma2) * phi + x * gauss))
        });
        let inverse = 0.5 / self.half_width;
        Integrals { once: (ends[0].0 - ends[1].0) * inverse, twice: (ends[0].1 - ends[1].1) * inverse }
    }
}

/// Integrals of a kernel up to one place.
#[derive(Clone, Copy)]
struct Integrals {
    once: f64,
    twice: f64,
}

/// Model points that a kernel touches, with one more on either side.
fn covered(waves: &[f64], centre: f64, reach: f64) -> Range<usize> {
    let start = waves.partition_point(|wave| *wave < centre - reach).saturating_sub(1);
    let end = (waves.partition_point(|wave| *wave <= centre + reach) + 1).min(waves.len());
    start..end.max(start + 2).min(waves.len())
}

#[cfg(test)]
mod tests {
    use super::*;

    fn waves() -> Vec<f64> {
        (0..2000).map(|i| 4800.0 + 0.05 * f64::from(i) + 1e-5 * f64::from(i).powi(2)).collect()
    }

    fn pixel(fwhm_aa: f64) -> Pixel {
        Pixel { wave_vac_aa: 4861.3, width_aa: 1.2, fwhm_aa }
    }

    #[test]
    fn verify_linear_models_pass_unchanged() {
        let model: Vec<f64> = waves().iter().map(|wave| 3.0 + 0.1 * (wave - 4861.3)).collect();
        for fwhm_aa in [0.05, 1.0, 5.0] {
            let mut seen = [0.0];
            LineSpread::new(&[pixel(fwhm_aa)], &waves(), 0.0).apply(&model, &mut seen);
            assert!((seen[0] - 3.0).abs() < 1e-6, "FWHM {fwhm_aa}: {}", seen[0]);
        }
    }

    /// A Gaussian line folded with a Gaussian is a Gaussian whose variances add; averaging over the
    /// pixel adds width^2/12 to second order.
    #[test]
    fn validate_gaussian_folds_to_gaussian() {
        let sigma = 1.5_f64;
        let model: Vec<f64> =
            waves().iter().map(|wave| (-0.5 * ((wave - 4861.3) / sigma).powi(2)).exp()).collect();
        let fwhm_aa = 4.0;
        let narrow = Pixel { width_aa: 0.01, ..pixel(fwhm_aa) };
        let mut seen = [0.0];
        LineSpread::new(&[narrow], &waves(), 0.0).apply(&model, &mut seen);
        let spread = fwhm_aa / crate::spectrum::FWHM_PER_SIGMA;
        let exact = sigma / sigma.hypot(spread);
        assert!((seen[0] / exact - 1.0).abs() < 2e-4, "{} against {exact}", seen[0]);
    }

    #[test]
    fn verify_velocity_slope_is_the_derivative() {
        let model: Vec<f64> =
            waves().iter().map(|wave| 1.0 - 0.5 / (1.0 + ((wave - 4863.0) / 4.0).powi(2))).collect();
        let at = |velocity: f64| {
            let mut seen = [0.0];
            LineSpread::new(&[pixel(2.0)], &waves(), velocity).apply(&model, &mut seen);
            seen[0]
        };
        let mut slope = [0.0];
        LineSpread::new(&[pixel(2.0)], &waves(), 30.0).apply_velocity_slope(&model, &mut slope);
        let difference = (at(35.0) - at(25.0)) / 10.0;
        assert!((slope[0] / difference - 1.0).abs() < 0.02, "{} against {difference}", slope[0]);
    }
}
