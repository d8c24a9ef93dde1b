//! An invented night of the Kestrel Fell survey: stars with known truth, seen through invented
//! spectrographs, and a few objects that are no DA white dwarfs.

use rand::{RngExt, SeedableRng};
use rand_chacha::ChaCha8Rng;
use rand_distr::{Distribution, Normal, Poisson};

use crate::fit::line_spread::{LineSpread, Pixel, model_range};
use crate::grid::FluxGrid;
use crate::physics::constants::LIGHT_SPEED_CM_S;
use crate::physics::hydrogen::Line;
use crate::physics::planck::planck_per_hz;
use crate::spectrum::{FWHM_PER_SIGMA, Resolution, Spectrum, SpectrumFault};

/// Share of the objects that are not DA white dwarfs.
const CONTAMINANTS: f64 = 0.02;
/// Ends of the invented spectrographs, vacuum A.
const RANGE_AA: (f64, f64) = (3780.0, 5150.0);
/// FWHM of the invented spectrographs, A; pixels are 0.4 of it.
const FWHM_AA: [f64; 4] = [1.5, 3.0, 5.0, 8.0];
const PIXELS_PER_FWHM: f64 = 2.5;
/// Range of the signal-to-noise ratio per pixel at 4 600 A, logarithmically even.
const SNR: (f64, f64) = (12.0, 120.0);
/// Range of the temperatures, K, logarithmically even; inside the grid and below the hottest, where a
/// survey finds almost nothing.
const TEFF_K: (f64, f64) = (7000.0, 60_000.0);
/// Gravities: a narrow peak and a broad high-mass tail, as in any magnitude-limited sample.
const LOG_G: (f64, f64) = (8.0, 0.12);
const LOG_G_TAIL: (f64, f64) = (8.4, 0.3);
const TAIL_SHARE: f64 = 0.2;
const LOG_G_LIMITS: (f64, f64) = (7.2, 9.3);
/// Scatter of the radial velocities, km/s.
const VELOCITY_KM_S: f64 = 60.0;
/// Wavelength at which the signal-to-noise ratio is meant, A.
const SNR_WAVE_AA: f64 = 4600.0;

/// Share of the spectra without flux calibration, and the slope that the spectrograph's response then has
/// over the whole range, one standard deviation of the natural logarithm.
const UNCALIBRATED: f64 = 0.2;
const RESPONSE_SLOPE: f64 = 0.5;
/// Slope and bend that flux calibration leaves over the whole range, one standard deviation of the natural
/// logarithm (common practice: 5 %).
const CALIBRATION_ERROR: f64 = 0.05;
/// Mean colour excess E(B-V) along the invented lines of sight, and the change of ln flux from the red to the
/// blue end of the range per magnitude of it (about 1.3 mag of A per 1 000 A there; common practice).
const MEAN_COLOUR_EXCESS: f64 = 0.02;
const EXTINCTION_SLOPE: f64 = 1.3;
/// Mean number of cosmic rays that the reduction overlooked, and how far they rise, standard deviations.
const COSMIC_RAYS: f64 = 1.0;
const COSMIC_RAY_SIGMA: (f64, f64) = (8.0, 80.0);
/// Share of the spectra with residuals of the sky's mercury lines, their vacuum wavelengths (A; NIST Atomic
/// Spectra Database), and their height, one standard deviation in units of the noise.
const SKY_RESIDUALS: f64 = 0.1;
const SKY_LINES_AA: [f64; 2] = [4047.70, 4359.56];
const SKY_SIGMA: f64 = 4.0;

/// What an object is.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Truth {
    /// A DA white dwarf of the grid.
    Da {
        /// Effective temperature, K.
        teff_k: f64,
        /// Surface gravity.
        log_g: f64,
        /// Radial velocity, km/s.
        radial_velocity_km_s: f64,
    },
    /// A continuum without lines.
    Featureless,
    /// Balmer lines as narrow as a main-sequence star's.
    NarrowLined,
    /// Balmer lines in emission.
    Emission,
}

/// One invented object as observed.
#[derive(Debug, Clone)]
pub struct Sighting {
    /// Its invented name.
    pub name: String,
    /// What it is.
    pub truth: Truth,
    /// FWHM of the spectrograph, A.
    pub fwhm_aa: f64,
    /// Signal-to-noise ratio per pixel at 4 600 A.
    pub snr: f64,
    /// What was recorded.
    pub spectrum: Spectrum,
}

/// Observes the object with a running number in the night of a seed.
///
/// Each object has a random stream of its own, so that any of them can be made again alone.
///
/// # Errors
/// Never for grids that cover the spectrographs; else [`SpectrumFault`].
pub fn observe(grid: &FluxGrid, seed: u64, number: u64) -> Result<Sighting, SpectrumFault> {
    let mut random = ChaCha8Rng::seed_from_u64(seed);
    random.set_stream(number);
    let fwhm_aa = FWHM_AA[random.random_range(0..FWHM_AA.len())];
    let snr = log_even(&mut random, SNR);
    let truth = draw_truth(&mut random);
    let pixels = spectrograph(fwhm_aa);
    let clean = match truth {
        Truth::Da { teff_k, log_g, radial_velocity_km_s } => {
            see_star(grid, &pixels, teff_k, log_g, radial_velocity_km_s)
        }
        other => see_contaminant(other, &pixels, log_even(&mut random, (8000.0, 25_000.0))),
    };
    let is_flux_calibrated = random.random::<f64>() >= UNCALIBRATED;
    let clean = respond(&clean, is_flux_calibrated, &mut random);
    let at = pixels.partition_point(|pixel| pixel.wave_vac_aa < SNR_WAVE_AA);
    // Photon noise: the variance follows the flux.
    let reference = clean[at];
    let sigma: Vec<f64> =
        clean.iter().map(|flux| reference / snr * (flux.max(0.0) / reference).sqrt().max(0.05)).collect();
    let mut flux: Vec<f64> =
        clean.iter().zip(&sigma).map(|(flux, sigma)| flux + sigma * unit_normal(&mut random)).collect();
    spoil(&mut flux, &sigma, &pixels, &mut random);
    let waves: Vec<f64> = pixels.iter().map(|pixel| pixel.wave_vac_aa).collect();
    let good = vec![true; waves.len()];
    let spectrum = Spectrum::new(waves, flux, sigma, good, Resolution::FwhmAa(fwhm_aa), is_flux_calibrated)?;
    Ok(Sighting { name: format!("KF {seed:04}-{number:05}"), truth, fwhm_aa, snr, spectrum })
}

/// Reddening and the spectrograph's response: smooth factors over the whole range.
fn respond(clean: &[f64], is_flux_calibrated: bool, random: &mut ChaCha8Rng) -> Vec<f64> {
    let excess = -MEAN_COLOUR_EXCESS * (1.0 - random.random::<f64>()).ln();
    let width = if is_flux_calibrated { CALIBRATION_ERROR } else { RESPONSE_SLOPE };
    let slope = width * unit_normal(random) + EXTINCTION_SLOPE * excess;
    let bend = CALIBRATION_ERROR * unit_normal(random);
    let last = (clean.len() - 1) as f64;
    clean
        .iter()
        .enumerate()
        .map(|(i, flux)| {
            let x = i as f64 / last - 0.5;
            flux * (slope * x + 4.0 * bend * x * x).exp()
        })
        .collect()
}

/// Cosmic rays and sky residuals, which the errors know nothing of.
fn spoil(flux: &mut [f64], sigma: &[f64], pixels: &[Pixel], random: &mut ChaCha8Rng) {
    let rays = Poisson::new(COSMIC_RAYS).map_or(0.0, |poisson| poisson.sample(random)) as usize;
    for _ in 0..rays {
        let at = random.random_range(0..flux.len());
        let height = log_even(random, COSMIC_RAY_SIGMA);
        flux[at] += height * sigma[at];
        if let Some(next) = flux.get_mut(at + 1) {
            *next += 0.3 * height * sigma[at];
        }
    }
    if random.random::<f64>() >= SKY_RESIDUALS {
        return;
    }
    for line_aa in SKY_LINES_AA {
        let height = SKY_SIGMA * unit_normal(random);
        for (i, pixel) in pixels.iter().enumerate() {
            let x = (pixel.wave_vac_aa - line_aa) / (pixel.fwhm_aa / FWHM_PER_SIGMA);
            flux[i] += height * sigma[i] * (-0.5 * x * x).exp();
        }
    }
}

/// The truth of a night as comma-separated values, one line per object; parameters only of DA white dwarfs.
pub fn truth_table<'s>(night: impl Iterator<Item = &'s Sighting>) -> String {
    let mut table = "name,kind,teff_k,log_g,radial_velocity_km_s,fwhm_aa,snr\n".to_owned();
    for Sighting { name, truth, fwhm_aa, snr, .. } in night {
        let what = match truth {
            Truth::Da { teff_k, log_g, radial_velocity_km_s } => {
                format!("da,{teff_k:.1},{log_g:.4},{radial_velocity_km_s:.2}")
            }
            Truth::Featureless => "featureless,,,".to_owned(),
            Truth::NarrowLined => "narrow-lined,,,".to_owned(),
            Truth::Emission => "emission,,,".to_owned(),
        };
        table.push_str(&format!("{name},{what},{fwhm_aa},{snr:.2}\n"));
    }
    table
}

fn draw_truth(random: &mut ChaCha8Rng) -> Truth {
    if random.random::<f64>() < CONTAMINANTS {
        return match random.random_range(0..3) {
            0 => Truth::Featureless,
            1 => Truth::NarrowLined,
            _ => Truth::Emission,
        };
    }
    let (mean, scatter) = if random.random::<f64>() < TAIL_SHARE { LOG_G_TAIL } else { LOG_G };
    Truth::Da {
        teff_k: log_even(random, TEFF_K),
        log_g: (mean + scatter * unit_normal(random)).clamp(LOG_G_LIMITS.0, LOG_G_LIMITS.1),
        radial_velocity_km_s: VELOCITY_KM_S * unit_normal(random),
    }
}

fn spectrograph(fwhm_aa: f64) -> Vec<Pixel> {
    let width_aa = fwhm_aa / PIXELS_PER_FWHM;
    let count = ((RANGE_AA.1 - RANGE_AA.0) / width_aa) as usize;
    (0..count).map(|i| Pixel { wave_vac_aa: RANGE_AA.0 + width_aa * i as f64, width_aa, fwhm_aa }).collect()
}

fn see_star(grid: &FluxGrid, pixels: &[Pixel], teff_k: f64, log_g: f64, velocity_km_s: f64) -> Vec<f64> {
    let mut seen = vec![0.0; pixels.len()];
    let (Some(first), Some(last)) = (pixels.first(), pixels.last()) else { return seen };
    let range = model_range(&grid.wave_vac_aa, *first, *last, velocity_km_s.abs());
    if let (Ok(stencil), Some(range)) = (grid.stencil(teff_k, log_g), range) {
        let mut model = vec![0.0; range.len()];
        grid.interpolate(&stencil, range.clone(), &mut model);
        LineSpread::new(pixels, &grid.wave_vac_aa[range], velocity_km_s).apply(&model, &mut seen);
    }
    seen
}

/// Planck continuum with no lines, or Gaussian Balmer lines of 12 A FWHM in absorption or emission.
fn see_contaminant(kind: Truth, pixels: &[Pixel], temperature_k: f64) -> Vec<f64> {
    const LINE_SIGMA_AA: f64 = 5.0;
    let depth = match kind {
        Truth::NarrowLined => 0.6,
        Truth::Emission => -0.8,
        _ => 0.0,
    };
    let centres: Vec<f64> = (4..=10).map(|upper| Line { lower: 2, upper }.wave_vac_aa()).collect();
    pixels
        .iter()
        .map(|pixel| {
            let wave = pixel.wave_vac_aa;
            let hz = 1e8 * LIGHT_SPEED_CM_S / wave;
            let lines: f64 =
                centres.iter().map(|centre| (-0.5 * ((wave - centre) / LINE_SIGMA_AA).powi(2)).exp()).sum();
            planck_per_hz(hz, temperature_k) / (wave * wave) * (1.0 - depth * lines)
        })
        .collect()
}

fn log_even(random: &mut ChaCha8Rng, (low, high): (f64, f64)) -> f64 {
    low * (high / low).powf(random.random::<f64>())
}

fn unit_normal(random: &mut ChaCha8Rng) -> f64 {
    // A standard normal always exists; the fallback satisfies the type.
    Normal::new(0.0, 1.0).map_or(0.0, |normal| normal.sample(random))
}
