//! How far a fit may be trusted, and whether the object is a DA white dwarf at all.
//!
//! Each test states what it measured; the table of codes says what it does to the verdict. Thresholds
//! are common practice unless a source is named; `rehearse` measures what they cost.

use super::foreign_lines::FOREIGN_LINES;
use super::objective::Objective;
use super::solution::Fit;
use crate::codes::{self, Flag};
use crate::grid::FluxGrid;
use crate::spectrum::Spectrum;

/// Significance (chi-square gained by the lines) below which there are none.
const LEAST_LINE_GAIN: f64 = 49.0;
/// The lines' gain must also be this share of what the polynomials alone leave, or it may be chance.
const SNR_REVIEW: f64 = 8.0;
const SNR_REJECT: f64 = 3.0;
/// Reduced chi-square from which a fit is poor, and from which it explains nothing.
const POOR_CHI2: f64 = 2.5;
const HOPELESS_CHI2: f64 = 8.0;
/// Residuals of a good fit of bright stars are limited by calibration, not noise: below this rms a high
/// chi-square says that the errors are too small, not that the model is wrong.
const CALIBRATION_RMS: f64 = 0.02;
/// Probability of the chosen solution below which the choice is weak.
const WEAK_CHOICE: f64 = 0.9;
/// Hotter than this, line cores depart from LTE (Napiwotzki 1997, A&A 322, 256).
const NLTE_TEFF_K: f64 = 45_000.0;
/// Hotter than this, the wings do as well (same source).
const LTE_LIMIT_K: f64 = 60_000.0;
/// Below this gravity the lines are narrower than a white dwarf's: hot subdwarfs reach 6.4 (common practice).
const NARROW_LOG_G: f64 = 6.5;
/// Statistical error of Teff (relative) and log g beyond which the parameters say nothing.
const LARGEST_ERROR: (f64, f64) = (0.15, 0.5);

/// Tilt of data against model, natural logarithm between H-beta and H8, beyond which a calibrated continuum
/// contradicts the lines. Bluer than the model: three times the 0.08 that calibration is trusted to. Redder:
/// E(B-V) = 0.3 more, which reddens that range by 0.3 (common practice).
const TILT_BLUE: f64 = 0.24;
const TILT_RED: f64 = -0.54;

/// All flags of a fit.
pub fn screen(fit: &Fit, objective: &Objective<'_>, spectrum: &Spectrum, grid: &FluxGrid) -> Vec<Flag> {
    let mut flags = Vec::new();
    let chosen = fit.chosen();
    let snr = fit.snr();
    if snr < SNR_REJECT {
        flags.push(Flag::new(
            &codes::FIT_TOO_NOISY,
            format!("median S/N per pixel {snr:.1}, need {SNR_REJECT}"),
        ));
    } else if snr < SNR_REVIEW {
        flags.push(Flag::new(
            &codes::FIT_LOW_SNR,
            format!("median S/N per pixel {snr:.1}, below {SNR_REVIEW}"),
        ));
    }
    let rms = fit.lines.iter().map(|line| line.rms_residual.powi(2)).sum::<f64>() / fit.lines.len() as f64;
    let (rms, reduced) = (rms.sqrt(), chosen.reduced_chi2());
    let gain = (fit.chi2_without_lines - chosen.chi2) / reduced.max(1.0);
    if gain < LEAST_LINE_GAIN {
        let detail = format!("Balmer lines lower chi-square by {gain:.0}, need {LEAST_LINE_GAIN}");
        flags.push(Flag::new(&codes::SCREEN_NO_BALMER, detail));
    }
    let weakest = fit.lines.iter().map(|line| line.equivalent_width_aa).fold(f64::INFINITY, f64::min);
    let strongest = fit.lines.iter().map(|line| line.equivalent_width_aa).fold(0.0, f64::max);
    if strongest <= 0.0 {
        let detail = format!("largest equivalent width among the lines {weakest:.1} A");
        flags.push(Flag::new(&codes::SCREEN_EMISSION, detail));
    }
    if reduced > HOPELESS_CHI2 && rms > CALIBRATION_RMS {
        let detail = format!("reduced chi-square {reduced:.1}, rms residual {:.1} %", 100.0 * rms);
        flags.push(Flag::new(&codes::SCREEN_NOT_EXPLAINED, detail));
    } else if reduced > POOR_CHI2 {
        let detail = format!("reduced chi-square {reduced:.1}, rms residual {:.1} %", 100.0 * rms);
        let code = if rms > CALIBRATION_RMS { &codes::FIT_POOR } else { &codes::FIT_ERRORS_TOO_SMALL };
        flags.push(Flag::new(code, detail));
    }
    if chosen.log_g < NARROW_LOG_G {
        let detail = format!("log g {:.2}, below {NARROW_LOG_G}", chosen.log_g);
        flags.push(Flag::new(&codes::SCREEN_NARROW_LINES, detail));
    } else if chosen.is_at_edge {
        let detail = format!("Teff {:.0} K, log g {:.2}", chosen.teff_k, chosen.log_g);
        flags.push(Flag::new(&codes::FIT_AT_EDGE, detail));
    }
    if !chosen.is_converged {
        let detail = format!("{} iterations", chosen.iterations);
        flags.push(Flag::new(&codes::FIT_NOT_CONVERGED, detail));
    }
    if fit.solutions.len() > 1 && chosen.probability < WEAK_CHOICE {
        let other = &fit.solutions[1];
        let detail = format!(
            "{:.0} K with probability {:.2} against {:.0} K with {:.2}",
            chosen.teff_k, chosen.probability, other.teff_k, other.probability
        );
        flags.push(Flag::new(&codes::FIT_WEAK_CHOICE, detail));
    }
    if let Some(tilt) = chosen.tilt.filter(|tilt| !(TILT_RED..=TILT_BLUE).contains(tilt)) {
        let colour = if tilt > 0.0 { "bluer" } else { "redder" };
        let detail =
            format!("data {colour} than the model by {:.0} % between H-beta and H8", 100.0 * tilt.abs());
        flags.push(Flag::new(&codes::SCREEN_CONTINUUM, detail));
    }
    for line in &FOREIGN_LINES {
        let Some(strength) = line.measure(spectrum, grid, chosen) else { continue };
        if line.is_detected(strength) {
            let detail = format!(
                "{} with an equivalent width of {:.2} +- {:.2} A",
                line.name, strength.equivalent_width_aa, strength.sigma_aa
            );
            flags.push(Flag::new(line.code, detail));
        }
    }
    if chosen.teff_k > LTE_LIMIT_K {
        flags.push(Flag::new(&codes::FIT_BEYOND_LTE, format!("Teff {:.0} K", chosen.teff_k)));
    } else if chosen.teff_k > NLTE_TEFF_K {
        flags.push(Flag::new(&codes::FIT_NLTE, format!("Teff {:.0} K", chosen.teff_k)));
    }
    let (teff_error, log_g_error) = (chosen.sigma(0) / chosen.teff_k, chosen.sigma(1));
    if !(teff_error < LARGEST_ERROR.0 && log_g_error < LARGEST_ERROR.1) {
        let detail =
            format!("statistical errors {:.0} % in Teff, {log_g_error:.2} in log g", 100.0 * teff_error);
        flags.push(Flag::new(&codes::FIT_UNCERTAIN, detail));
    }
    if let Some(offset_km_s) = fit.largest_offset_km_s {
        let detail = format!("lines were shifted against each other by up to {offset_km_s:.0} km/s");
        flags.push(Flag::new(&codes::FIT_WAVELENGTHS_DISAGREE, detail));
    }
    if fit.rejected_pixels > 0 {
        let detail =
            format!("{} of {} pixels", fit.rejected_pixels, objective.counts().0 + fit.rejected_pixels);
        flags.push(Flag::new(&codes::FIT_PIXELS_SET_ASIDE, detail));
    }
    flags
}
