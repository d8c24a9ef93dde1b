//! Lines that a pure-hydrogen star does not have: helium and calcium, measured against the best model.
//!
//! Around each line the spectrum is divided by the model as the instrument sees it; a straight line
//! through the sidebands takes up what is left of calibration, and the equivalent width of the core is
//! summed below it. The error follows from the file's errors, scaled up where the sidebands scatter more,
//! and from how well the sidebands fix the line. Wavelengths: NIST Atomic Spectra Database, air, made vacuum.

use std::ops::RangeInclusive;

use super::line_spread::{LineSpread, Pixel, model_range};
use super::solution::Solution;
use crate::codes::{self, Code};
use crate::grid::FluxGrid;
use crate::physics::wavelength::{air_to_vacuum_aa, doppler_factor};
use crate::spectrum::Spectrum;

/// A line that is looked for.
#[derive(Debug)]
pub struct ForeignLine {
    /// Name as astronomers write it.
    pub name: &'static str,
    /// Wavelength in standard air, A.
    wave_air_aa: f64,
    /// Half the width over which the line is summed, A.
    core_aa: f64,
    /// Half the width of core and sidebands together, A.
    reach_aa: f64,
    /// Smallest equivalent width that is told, A: below, one per cent of calibration error over the core
    /// could make it.
    least_width_aa: f64,
    /// The flag that it raises.
    pub code: &'static Code,
}

/// All lines that are looked for. Helium lines are broad in white dwarfs (common practice: 15 A); calcium is
/// sharp.
pub static FOREIGN_LINES: [ForeignLine; 4] = [
    ForeignLine {
        name: "He I 4471",
        wave_air_aa: 4471.48,
        core_aa: 15.0,
        reach_aa: 40.0,
        least_width_aa: 0.5,
        code: &codes::SCREEN_HELIUM,
    },
    ForeignLine {
        name: "He I 5876",
        wave_air_aa: 5875.62,
        core_aa: 15.0,
        reach_aa: 40.0,
        least_width_aa: 0.5,
        code: &codes::SCREEN_HELIUM,
    },
    ForeignLine {
        name: "He II 4686",
        wave_air_aa: 4685.70,
        core_aa: 15.0,
        reach_aa: 40.0,
        least_width_aa: 0.5,
        code: &codes::SCREEN_HELIUM,
    },
    ForeignLine {
        name: "Ca II K",
        wave_air_aa: 3933.66,
        core_aa: 5.0,
        reach_aa: 18.0,
        least_width_aa: 0.3,
        code: &codes::SCREEN_CALCIUM,
    },
];

/// Equivalent widths this many standard deviations from zero are detections.
const DETECTION_SIGMA: f64 = 5.0;
/// Fewest good pixels of the core, and of the sidebands.
const FEWEST_PIXELS: usize = 4;

/// A measured line.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ForeignStrength {
    /// Equivalent width, A; positive in absorption.
    pub equivalent_width_aa: f64,
    /// Its standard deviation, A.
    pub sigma_aa: f64,
}

impl ForeignLine {
    /// Whether a measured strength is a detection in absorption.
    pub fn is_detected(&self, strength: ForeignStrength) -> bool {
        strength.equivalent_width_aa > self.least_width_aa
            && strength.equivalent_width_aa > DETECTION_SIGMA * strength.sigma_aa
    }

    /// Measures the line beside a solution; `None` where spectrum or model do not cover it.
    pub fn measure(&self, spectrum: &Spectrum, grid: &FluxGrid, at: &Solution) -> Option<ForeignStrength> {
        let velocity_km_s = at.radial_velocity_km_s;
        let centre_aa = air_to_vacuum_aa(self.wave_air_aa) * doppler_factor(velocity_km_s);
        let waves = spectrum.wave_vac_aa();
        if *waves.first()? > centre_aa - self.reach_aa || *waves.last()? < centre_aa + self.reach_aa {
            return None;
        }
        let used = good_pixels(spectrum, centre_aa - self.reach_aa..=centre_aa + self.reach_aa);
        let pixels: Vec<Pixel> = used.iter().map(|(_, pixel)| *pixel).collect();
        let range = model_range(&grid.wave_vac_aa, *pixels.first()?, *pixels.last()?, velocity_km_s.abs())?;
        let stencil = grid.stencil(at.teff_k, at.log_g).ok()?;
        let mut model = vec![0.0; range.len()];
        grid.interpolate(&stencil, range.clone(), &mut model);
        let mut seen = vec![0.0; pixels.len()];
        LineSpread::new(&pixels, &grid.wave_vac_aa[range], velocity_km_s).apply(&model, &mut seen);
        let points: Vec<Point> = used
            .iter()
            .zip(&seen)
            .map(|((i, pixel), seen)| Point {
                x: pixel.wave_vac_aa - centre_aa,
                width_aa: pixel.width_aa,
                ratio: spectrum.flux()[*i] / seen,
                sigma: spectrum.sigma()[*i] / seen,
            })
            .collect();
        summed(&points, self.core_aa)
    }
}

/// Good pixels of a range of wavelengths, by index.
fn good_pixels(spectrum: &Spectrum, range_aa: RangeInclusive<f64>) -> Vec<(usize, Pixel)> {
    let waves = spectrum.wave_vac_aa();
    let inside = |i: &usize| range_aa.contains(&waves[*i]) && spectrum.is_good()[*i];
    // The ends of the spectrum have one neighbour; the caller's range does not reach them.
    (1..waves.len().saturating_sub(1))
        .filter(inside)
        .map(|i| {
            let width_aa = 0.5 * (waves[i + 1] - waves[i - 1]);
            let fwhm_aa = spectrum.resolution().fwhm_aa(i, waves[i]);
            (i, Pixel { wave_vac_aa: waves[i], width_aa, fwhm_aa })
        })
        .collect()
}

struct Point {
    /// Distance from the line's centre, A.
    x: f64,
    width_aa: f64,
    /// Observed over model flux.
    ratio: f64,
    sigma: f64,
}

/// Equivalent width of the points within the core below the weighted straight line through the others.
fn summed(points: &[Point], core_aa: f64) -> Option<ForeignStrength> {
    let (core, sides): (Vec<&Point>, Vec<&Point>) = points.iter().partition(|point| point.x.abs() < core_aa);
    let on_blue = sides.iter().filter(|point| point.x < 0.0).count();
    if core.len() < FEWEST_PIXELS || on_blue < FEWEST_PIXELS || sides.len() - on_blue < FEWEST_PIXELS {
        return None;
    }
    let (mut s, mut sx, mut sxx, mut sy, mut sxy) = (0.0, 0.0, 0.0, 0.0, 0.0);
    for point in &sides {
        let weight = point.sigma.powi(-2);
        s += weight;
        sx += weight * point.x;
        sxx += weight * point.x * point.x;
        sy += weight * point.ratio;
        sxy += weight * point.x * point.ratio;
    }
    let determinant = s * sxx - sx * sx;
    let (level, slope) = ((sxx * sy - sx * sxy) / determinant, (s * sxy - sx * sy) / determinant);
    if level.is_nan() || level <= 0.0 {
        return None;
    }
    let miss = |point: &Point| (point.ratio - level - slope * point.x) / point.sigma;
    let chi2: f64 = sides.iter().map(|point| miss(point).powi(2)).sum();
    let inflation = (chi2 / (sides.len() - 2) as f64).max(1.0);
    let below = |point: &&Point| (1.0 - point.ratio / (level + slope * point.x)) * point.width_aa;
    let equivalent_width_aa = core.iter().map(below).sum();
    let own: f64 = core.iter().map(|point| (point.width_aa * point.sigma / level).powi(2)).sum();
    // The line's level, times the core's width, is as uncertain as the sidebands leave it.
    let width_aa: f64 = core.iter().map(|point| point.width_aa).sum();
    let of_level = sxx / determinant * (width_aa / level).powi(2);
    Some(ForeignStrength { equivalent_width_aa, sigma_aa: (inflation * (own + of_level)).sqrt() })
}

#[cfg(test)]
mod tests {
    use super::*;

    /// A Gaussian of depth 0.1 and sigma 3 A on a tilted continuum has the width 0.1 * 3 * sqrt(2 pi).
    #[test]
    fn verify_width_of_a_gaussian_on_a_slope() {
        let points: Vec<Point> = (-80..=80)
            .map(|i| {
                let x = 0.5 * f64::from(i);
                let line = 1.0 - 0.1 * (-0.5 * (x / 3.0_f64).powi(2)).exp();
                Point { x, width_aa: 0.5, ratio: (2.0 + 0.01 * x) * line, sigma: 0.01 }
            })
            .collect();
        let Some(strength) = summed(&points, 15.0) else { panic!("the points cover core and sidebands") };
        let exact = 0.1 * 3.0 * (2.0 * std::f64::consts::PI).sqrt();
        assert!((strength.equivalent_width_aa / exact - 1.0).abs() < 1e-3, "{strength:?}");
        // 60 pixels of 0.5 A with a relative error of 0.005, and the level from 100 pixels over 30 A.
        let expected = (60.0 * (0.5 * 0.005_f64).powi(2) + (30.0 * 0.005 / 10.0_f64).powi(2)).sqrt();
        assert!((strength.sigma_aa / expected - 1.0).abs() < 0.05, "{} {expected}", strength.sigma_aa);
    }
}
