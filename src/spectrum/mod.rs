//! Observed data, made safe.
//!
//! In goes a FITS file that nobody checked; out comes a `Spectrum`, which can only be made from
//! values that the fit may trust, or a fault that says in one line what was found, what was expected
//! and what to do. Wavelengths are vacuum angstroms from here on. `fits` opens files so that the C
//! library never sees a name to parse or a size to believe, `readers` knows one file layout per
//! file, `settle` decides what the file leaves open (unit, medium, error kind, resolution, velocity
//! frame) from the configuration and records how, and never guesses.

mod axis;
mod bits;
mod exposures;
pub mod fits;
mod instrument;
mod observation;
mod read;
pub mod readers;
mod resolution;
mod settings;
mod settle;
mod units;

pub use axis::{Medium, VelocityFrame};
pub use exposures::Exposures;
pub use instrument::{Instrument, InstrumentFault, InstrumentRecord};
pub use observation::{Decisions, ObjectRecord, Observation, Refusal, SourceRecord};
pub use read::{Outcomes, ReadFault, instruments_of, read_file, read_fits, read_open_file, read_unpacked};
pub use resolution::{FWHM_PER_SIGMA, Resolution};
pub use settings::{Assumptions, ErrorKind, ReadSettings};
pub use units::{FluxScale, WaveUnit};

use serde::{Deserialize, Serialize};

use crate::codes::{self, Code, Disposition};

/// Fewest pixels of a spectrum: five windows of ten pixels, fewer cannot hold Balmer lines.
pub const FEWEST_PIXELS: usize = 50;
/// Fewest usable pixels: three parameters and one straight line per window need more than this.
pub const FEWEST_GOOD_PIXELS: usize = 20;
/// Shortest believable wavelength, A: below the Lyman limit a white dwarf's light does not reach us.
pub const SHORTEST_WAVE_AA: f64 = 100.0;
/// Longest believable wavelength, A: 100 micrometres, beyond any file that also covers Balmer lines.
pub const LONGEST_WAVE_AA: f64 = 1e6;
/// Flux or error values beyond this are fill values, not data (1.6e38 and 1e30 are in use).
pub const LARGEST_VALUE: f64 = 1e30;

/// Why pixels of a spectrum are not used, counted once each in this order.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize, schemars::JsonSchema)]
pub struct BadPixels {
    /// Marked bad by the file.
    pub masked: usize,
    /// Flux is NaN, infinite or a fill value.
    pub flux_unusable: usize,
    /// Error is NaN, infinite, zero or negative (also: inverse variance zero or negative).
    pub sigma_unusable: usize,
}

/// A one-dimensional spectrum that the fit may trust: equal lengths, ascending vacuum wavelengths,
/// finite fluxes, positive errors, enough good pixels. What comes from another process is checked again.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(try_from = "UncheckedSpectrum")]
pub struct Spectrum {
    #[serde(with = "bits")]
    wave_vac_aa: Vec<f64>,
    #[serde(with = "bits")]
    flux: Vec<f64>,
    #[serde(with = "bits")]
    sigma: Vec<f64>,
    is_good: Vec<bool>,
    bad_pixels: BadPixels,
    resolution: Resolution,
    is_flux_calibrated: bool,
}

impl Spectrum {
    /// Checks the values and makes a spectrum of them.
    ///
    /// All four lists have one entry per pixel; wavelengths ascend strictly. A pixel whose flux or
    /// error cannot be used becomes bad and is counted; its flux is then 0 and its error infinite, so
    /// that a weight of 1/sigma^2 is 0 even where the mask is forgotten.
    ///
    /// # Units
    /// Wavelengths in vacuum angstroms; flux and error in the same unit, per angstrom.
    ///
    /// # Errors
    /// [`SpectrumFault`], naming the first thing that the fit could not trust.
    pub fn new(
        wave_vac_aa: Vec<f64>,
        mut flux: Vec<f64>,
        mut sigma: Vec<f64>,
        mut is_good: Vec<bool>,
        resolution: Resolution,
        is_flux_calibrated: bool,
    ) -> Result<Self, SpectrumFault> {
        let pixels = wave_vac_aa.len();
        for (name, found) in [("flux", flux.len()), ("error", sigma.len()), ("mask", is_good.len())] {
            if found != pixels {
                return Err(SpectrumFault::UnequalLengths { name, found, expected: pixels });
            }
        }
        if pixels < FEWEST_PIXELS {
            return Err(SpectrumFault::TooShort { pixels });
        }
        check_wavelengths(&wave_vac_aa)?;
        resolution.check(&wave_vac_aa)?;

        let mut bad_pixels = BadPixels::default();
        for pixel in 0..pixels {
            let is_flux_usable = flux[pixel].abs() < LARGEST_VALUE;
            let is_sigma_usable = sigma[pixel] > 0.0 && sigma[pixel] < LARGEST_VALUE;
            if !is_good[pixel] {
                bad_pixels.masked += 1;
            } else if !is_flux_usable {
                bad_pixels.flux_unusable += 1;
            } else if !is_sigma_usable {
                bad_pixels.sigma_unusable += 1;
            }
            if !is_flux_usable || !is_sigma_usable {
                is_good[pixel] = false;
                flux[pixel] = if is_flux_usable { flux[pixel] } else { 0.0 };
                sigma[pixel] = f64::INFINITY;
            }
        }
        let good = is_good.iter().filter(|good| **good).count();
        if good < FEWEST_GOOD_PIXELS {
            return Err(SpectrumFault::TooFewGoodPixels { good, pixels, bad_pixels });
        }
        let is_flat = |value: &f64| *value == 0.0;
        if flux.iter().zip(&is_good).filter(|(_, good)| **good).all(|(value, _)| is_flat(value)) {
            return Err(SpectrumFault::FluxAllZero { good });
        }
        Ok(Spectrum { wave_vac_aa, flux, sigma, is_good, bad_pixels, resolution, is_flux_calibrated })
    }

    /// Vacuum wavelength of each pixel, A, strictly ascending.
    pub fn wave_vac_aa(&self) -> &[f64] {
        &self.wave_vac_aa
    }

    /// Flux of each pixel, per angstrom; finite everywhere, meaningful where [`Self::is_good`].
    pub fn flux(&self) -> &[f64] {
        &self.flux
    }

    /// Standard deviation of each flux, same unit; positive, infinite where nothing is known.
    pub fn sigma(&self) -> &[f64] {
        &self.sigma
    }

    /// Whether each pixel may be used.
    pub fn is_good(&self) -> &[bool] {
        &self.is_good
    }

    /// How many pixels may not be used, by reason.
    pub fn bad_pixels(&self) -> BadPixels {
        self.bad_pixels
    }

    /// The instrument's line-spread function.
    pub fn resolution(&self) -> &Resolution {
        &self.resolution
    }

    /// Whether the shape of the continuum is physical: fluxes in erg s^-1 cm^-2 A^-1, not counts.
    pub fn is_flux_calibrated(&self) -> bool {
        self.is_flux_calibrated
    }
}

/// The fields of a [`Spectrum`] as they come from outside.
#[derive(Deserialize)]
struct UncheckedSpectrum {
    #[serde(with = "bits")]
    wave_vac_aa: Vec<f64>,
    #[serde(with = "bits")]
    flux: Vec<f64>,
    #[serde(with = "bits")]
    sigma: Vec<f64>,
    is_good: Vec<bool>,
    bad_pixels: BadPixels,
    resolution: Resolution,
    is_flux_calibrated: bool,
}

impl TryFrom<UncheckedSpectrum> for Spectrum {
    type Error = SpectrumFault;

    fn try_from(values: UncheckedSpectrum) -> Result<Self, SpectrumFault> {
        let UncheckedSpectrum { wave_vac_aa, flux, sigma, is_good, .. } = values;
        let mut spectrum =
            Spectrum::new(wave_vac_aa, flux, sigma, is_good, values.resolution, values.is_flux_calibrated)?;
        // Why a pixel is bad was counted where the file was read; here all bad ones look masked.
        spectrum.bad_pixels = values.bad_pixels;
        Ok(spectrum)
    }
}

fn check_wavelengths(wave_vac_aa: &[f64]) -> Result<(), SpectrumFault> {
    if let Some(pixel) = wave_vac_aa.iter().position(|wave| !wave.is_finite()) {
        return Err(SpectrumFault::WavelengthNotFinite { pixel });
    }
    for (pixel, pair) in wave_vac_aa.windows(2).enumerate() {
        if pair[1] <= pair[0] {
            let pixel = pixel + 1;
            return Err(SpectrumFault::WavelengthNotAscending {
                pixel,
                before_aa: pair[0],
                found_aa: pair[1],
            });
        }
    }
    for &found_aa in [wave_vac_aa.first(), wave_vac_aa.last()].into_iter().flatten() {
        if !(SHORTEST_WAVE_AA..=LONGEST_WAVE_AA).contains(&found_aa) {
            return Err(SpectrumFault::WavelengthImplausible { found_aa });
        }
    }
    Ok(())
}

/// Why values cannot become a [`Spectrum`].
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
pub enum SpectrumFault {
    /// Lists that belong together differ in length.
    #[error("cannot use the {name} values: found {found}, need {expected}, one per wavelength")]
    UnequalLengths {
        /// Which list.
        name: &'static str,
        /// Its length.
        found: usize,
        /// The number of wavelengths.
        expected: usize,
    },
    /// Fewer than [`FEWEST_PIXELS`] pixels.
    #[error("cannot use the spectrum: found {pixels} pixels, need at least {FEWEST_PIXELS}")]
    TooShort {
        /// Pixels found.
        pixels: usize,
    },
    /// A wavelength is NaN or infinite.
    #[error("cannot use the wavelengths: found a value that is not finite at pixel {pixel}")]
    WavelengthNotFinite {
        /// Index from 0.
        pixel: usize,
    },
    /// Wavelengths repeat or turn back.
    #[error(
        "cannot use the wavelengths: found {found_aa} A after {before_aa} A at pixel {pixel}, need ascending values"
    )]
    WavelengthNotAscending {
        /// Index from 0 of the later pixel.
        pixel: usize,
        /// Wavelength of the pixel before, A.
        before_aa: f64,
        /// Wavelength found, A.
        found_aa: f64,
    },
    /// Wavelengths outside anything that could be a Balmer spectrum: a wrong unit.
    #[error(
        "cannot use the wavelengths: found {found_aa} A, need {SHORTEST_WAVE_AA} to {LONGEST_WAVE_AA} A (is the unit right?)"
    )]
    WavelengthImplausible {
        /// Wavelength found, A.
        found_aa: f64,
    },
    /// Nothing is left after masking.
    #[error(
        "cannot use the spectrum: found {good} good pixels of {pixels} ({} masked by the file, {} with unusable flux, {} with unusable error), need at least {FEWEST_GOOD_PIXELS}",
        bad_pixels.masked, bad_pixels.flux_unusable, bad_pixels.sigma_unusable
    )]
    TooFewGoodPixels {
        /// Good pixels.
        good: usize,
        /// All pixels.
        pixels: usize,
        /// Why the others are bad.
        bad_pixels: BadPixels,
    },
    /// Every good flux is exactly zero: a placeholder.
    #[error("cannot use the fluxes: all {good} good pixels are exactly zero, need a spectrum")]
    FluxAllZero {
        /// Good pixels.
        good: usize,
    },
    /// A resolution that is not positive, not finite or not one per pixel.
    #[error("cannot use the resolution: {detail}")]
    BadResolution {
        /// What was found and what was needed.
        detail: String,
    },
}

impl SpectrumFault {
    /// The row of the table of codes.
    pub fn code(&self) -> &'static Code {
        match self {
            SpectrumFault::UnequalLengths { .. } => &codes::UNEQUAL_LENGTHS,
            SpectrumFault::TooShort { .. } => &codes::TOO_SHORT,
            SpectrumFault::WavelengthNotFinite { .. } => &codes::WAVELENGTH_NOT_FINITE,
            SpectrumFault::WavelengthNotAscending { .. } => &codes::WAVELENGTH_NOT_ASCENDING,
            SpectrumFault::WavelengthImplausible { .. } => &codes::WAVELENGTH_IMPLAUSIBLE,
            SpectrumFault::TooFewGoodPixels { .. } => &codes::TOO_FEW_GOOD_PIXELS,
            SpectrumFault::FluxAllZero { .. } => &codes::FLUX_ALL_ZERO,
            SpectrumFault::BadResolution { .. } => &codes::BAD_RESOLUTION,
        }
    }

    /// Values do not get better by waiting.
    pub fn disposition(&self) -> Disposition {
        match self {
            SpectrumFault::UnequalLengths { .. }
            | SpectrumFault::TooShort { .. }
            | SpectrumFault::WavelengthNotFinite { .. }
            | SpectrumFault::WavelengthNotAscending { .. }
            | SpectrumFault::WavelengthImplausible { .. }
            | SpectrumFault::TooFewGoodPixels { .. }
            | SpectrumFault::FluxAllZero { .. }
            | SpectrumFault::BadResolution { .. } => Disposition::Reject,
        }
    }
}
