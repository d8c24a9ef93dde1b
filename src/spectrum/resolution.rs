//! The instrument's line-spread function, taken as Gaussian.

use serde::{Deserialize, Serialize};

use super::SpectrumFault;

/// FWHM of a Gaussian in units of its standard deviation: sqrt(8 ln 2).
pub const FWHM_PER_SIGMA: f64 = 2.354_820_045_030_949_3;

/// Spectral resolution as full width at half maximum.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub enum Resolution {
    /// Constant resolving power lambda / FWHM.
    ResolvingPower(f64),
    /// Constant FWHM, A.
    FwhmAa(f64),
    /// FWHM of each pixel, A; same length as the wavelength axis.
    FwhmPerPixelAa(#[serde(with = "super::bits")] Vec<f64>),
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

    /// Whether every width is positive, finite and believable: narrower than a tenth of its wavelength.
    ///
    /// # Errors
    /// [`SpectrumFault::BadResolution`].
    pub fn check(&self, wave_vac_aa: &[f64]) -> Result<(), SpectrumFault> {
        let fault = |detail: String| Err(SpectrumFault::BadResolution { detail });
        if let Resolution::FwhmPerPixelAa(fwhm_aa) = self
            && fwhm_aa.len() != wave_vac_aa.len()
        {
            return fault(format!(
                "found {} widths, need {}, one per pixel",
                fwhm_aa.len(),
                wave_vac_aa.len()
            ));
        }
        for (pixel, &wave) in wave_vac_aa.iter().enumerate() {
            let fwhm_aa = self.fwhm_aa(pixel, wave);
            if !(fwhm_aa > 0.0 && fwhm_aa < WIDEST_FWHM * wave) {
                return fault(format!(
                    "found a FWHM of {fwhm_aa} A at {wave} A, need more than 0 and less than a tenth of the wavelength"
                ));
            }
        }
        Ok(())
    }
}

/// Widest FWHM that still shows Balmer lines, as a fraction of the wavelength (R = 10).
const WIDEST_FWHM: f64 = 0.1;
