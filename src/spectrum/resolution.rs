//! The instrument's line-spread function, taken as Gaussian.

use serde::{Deserialize, Serialize};

/// Spectral resolution as full width at half maximum.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub enum Resolution {
    /// Constant resolving power lambda / FWHM.
    ResolvingPower(f64),
    /// Constant FWHM, A.
    FwhmAa(f64),
    /// FWHM of each pixel, A; same length as the wavelength axis.
    FwhmPerPixelAa(Vec<f64>),
}

impl Resolution {
    /// FWHM at one pixel, A.
    pub fn fwhm_aa(&self, pixel: usize, wave_vac_aa: f64) -> f64 {
        match self {
            Resolution::ResolvingPower(power) => wave_vac_aa / power,
            Resolution::FwhmAa(fwhm_aa) => *fwhm_aa,
            Resolution::FwhmPerPixelAa(fwhm_aa) => fwhm_aa[pixel],
        }
    }
}
