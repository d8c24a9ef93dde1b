//! What a fit found.

use nalgebra::Vector3;

use super::fitter::equivalent_width_aa;
use super::objective::{Seen, WindowData};
use crate::codes::{self, Code, Flag};

/// Solutions closer than this are one: relative in Teff, absolute in log g.
const SAME_SOLUTION: (f64, f64) = (0.01, 0.05);

/// Side of the ridge where Balmer lines are strongest.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Branch {
    /// Hotter than the ridge.
    Hot,
    /// Cooler than the ridge.
    Cold,
}

impl Branch {
    /// The word in reports.
    pub fn name(self) -> &'static str {
        match self {
            Branch::Hot => "hot",
            Branch::Cold => "cold",
        }
    }
}

/// One minimum of chi-square.
#[derive(Debug, Clone, PartialEq)]
pub struct Solution {
    /// Effective temperature, K (1-D models).
    pub teff_k: f64,
    /// Surface gravity (1-D models).
    pub log_g: f64,
    /// Radial velocity in the frame of the spectrum, km/s.
    pub radial_velocity_km_s: f64,
    /// Statistical covariance of the three, in this order.
    pub covariance: [[f64; 3]; 3],
    /// By how much the covariance was scaled up for large or correlated residuals, at least 1.
    pub inflation: f64,
    /// Chi-square.
    pub chi2: f64,
    /// Degrees of freedom.
    pub dof: u64,
    /// Probability among all solutions.
    pub probability: f64,
    /// Change of data over model from H-beta to H8, natural logarithm; only for calibrated flux.
    pub tilt: Option<f64>,
    /// Side of the ridge.
    pub branch: Branch,
    /// Iterations used.
    pub iterations: u64,
    /// Whether gradient and step vanish there.
    pub is_converged: bool,
    /// Whether it lies on an edge of the grid.
    pub is_at_edge: bool,
}

impl Solution {
    /// (Teff, log g, velocity).
    pub fn vector(&self) -> Vector3<f64> {
        Vector3::new(self.teff_k, self.log_g, self.radial_velocity_km_s)
    }

    /// Whether both are one minimum.
    pub fn is_same(&self, other: &Solution) -> bool {
        (self.teff_k / other.teff_k - 1.0).abs() < SAME_SOLUTION.0
            && (self.log_g - other.log_g).abs() < SAME_SOLUTION.1
    }

    /// Standard deviation of parameter 0, 1 or 2.
    pub fn sigma(&self, parameter: usize) -> f64 {
        self.covariance[parameter][parameter].sqrt()
    }

    /// Chi-square per degree of freedom.
    pub fn reduced_chi2(&self) -> f64 {
        self.chi2 / self.dof as f64
    }
}

/// One line of the chosen solution.
#[derive(Debug, Clone, PartialEq)]
pub struct LineResult {
    /// Name, `H-beta` ...
    pub name: &'static str,
    /// Rest wavelength, vacuum A.
    pub rest_wave_vac_aa: f64,
    /// Pixels used.
    pub pixels: usize,
    /// Pixels masked in the file or set aside by the fit.
    pub bad_pixels: usize,
    /// Chi-square of the window.
    pub chi2: f64,
    /// Root mean square of (data - model) / model over the used pixels.
    pub rms_residual: f64,
    /// Median signal-to-noise ratio per pixel.
    pub snr: f64,
    /// Equivalent width of the data, A, below the line through the window's ends.
    pub equivalent_width_aa: f64,
}

impl LineResult {
    /// Measures one window.
    pub fn new(data: &WindowData, seen: &Seen) -> Self {
        let used: Vec<usize> = (0..data.pixels.len()).filter(|i| data.inverse_sigma[*i] > 0.0).collect();
        let mut ratios: Vec<f64> = used.iter().map(|i| data.flux[*i] * data.inverse_sigma[*i]).collect();
        let middle = ratios.len() / 2;
        let snr =
            if ratios.is_empty() { 0.0 } else { *ratios.select_nth_unstable_by(middle, f64::total_cmp).1 };
        let squares: f64 = used.iter().map(|i| (data.flux[*i] / seen.model[*i] - 1.0).powi(2)).sum();
        let waves: Vec<f64> = used.iter().map(|i| data.pixels[*i].wave_vac_aa).collect();
        let flux: Vec<f64> = used.iter().map(|i| data.flux[*i]).collect();
        LineResult {
            name: data.window.name,
            rest_wave_vac_aa: data.window.centre_vac_aa(),
            pixels: used.len(),
            bad_pixels: data.masked + data.pixels.len() - used.len(),
            chi2: seen.residual.iter().map(|r| r * r).sum(),
            rms_residual: (squares / used.len() as f64).sqrt(),
            snr,
            equivalent_width_aa: if used.len() > 2 { equivalent_width_aa(&waves, &flux) } else { f64::NAN },
        }
    }
}

/// The fit of one spectrum.
#[derive(Debug, Clone)]
pub struct Fit {
    /// Every distinct solution, the chosen one first.
    pub solutions: Vec<Solution>,
    /// The lines of the chosen solution.
    pub lines: Vec<LineResult>,
    /// How far to trust it.
    pub flags: Vec<Flag>,
    /// Pixels set aside as outliers.
    pub rejected_pixels: usize,
    /// Largest wavelength offset between lines that had to be allowed, km/s.
    pub largest_offset_km_s: Option<f64>,
    /// Chi-square of polynomials without lines.
    pub chi2_without_lines: f64,
    /// Model, normalisation and residuals per window of the chosen solution.
    pub views: Vec<Seen>,
    /// Wavelengths of the windows' pixels, vacuum A.
    pub wave_vac_aa: Vec<Vec<f64>>,
}

impl Fit {
    /// The chosen solution.
    pub fn chosen(&self) -> &Solution {
        &self.solutions[0]
    }

    /// Median signal-to-noise ratio per pixel over the lines.
    pub fn snr(&self) -> f64 {
        let mut ratios: Vec<f64> = self.lines.iter().map(|line| line.snr).collect();
        ratios.sort_by(f64::total_cmp);
        ratios.get(ratios.len() / 2).copied().unwrap_or(0.0)
    }
}

/// Why a spectrum could not be fitted at all.
#[derive(Debug, thiserror::Error)]
pub enum FitFault {
    /// The spectrum does not cover enough Balmer lines.
    #[error("cannot fit the spectrum: it covers {found} of the wanted Balmer line windows, need {need}")]
    TooFewWindows {
        /// Windows covered.
        found: usize,
        /// Windows needed.
        need: usize,
    },
    /// The model could not be evaluated.
    #[error("cannot evaluate the model")]
    Model(#[source] argmin::core::Error),
}

impl FitFault {
    /// The stable code.
    pub fn code(&self) -> &'static Code {
        match self {
            FitFault::TooFewWindows { .. } => &codes::FIT_TOO_FEW_LINES,
            FitFault::Model(_) => &codes::FIT_FAILED,
        }
    }
}
