//! Several arms or orders of one object, joined into one spectrum.
//!
//! Arms are put in order of wavelength; where two overlap, each is used up to the middle of the
//! overlap. Fluxes are neither scaled nor averaged: that would correlate pixels and hide a bad join.

use crate::codes::{self, Flag};
use crate::spectrum::resolution::Resolution;
use crate::spectrum::settle::{RawSpectrum, Stated};

/// One arm; all lists have the same length, wavelengths ascend.
#[derive(Debug, Clone, Default)]
pub struct Arm {
    /// Wavelength of each pixel.
    pub wave: Vec<f64>,
    /// Flux of each pixel.
    pub flux: Vec<f64>,
    /// Error of each pixel.
    pub errors: Vec<f64>,
    /// Whether each pixel is good.
    pub is_good: Vec<bool>,
    /// FWHM of each pixel, A; empty if unknown.
    pub widths: Vec<f64>,
}

impl Arm {
    fn first(&self) -> f64 {
        self.wave.first().copied().unwrap_or(f64::NAN)
    }

    fn last(&self) -> f64 {
        self.wave.last().copied().unwrap_or(f64::NAN)
    }

    fn push(&mut self, other: &Arm, pixel: usize) {
        self.wave.push(other.wave[pixel]);
        self.flux.push(other.flux[pixel]);
        self.errors.push(other.errors[pixel]);
        self.is_good.push(other.is_good[pixel]);
        if let Some(width) = other.widths.get(pixel) {
            self.widths.push(*width);
        }
    }
}

/// Joins arms into the spectrum lists of `raw`; more than one arm is told by a flag.
pub fn join(mut arms: Vec<Arm>, widths_by: &str, raw: &mut RawSpectrum) {
    arms.retain(|arm| !arm.wave.is_empty());
    for arm in &mut arms {
        if arm.first() > arm.last() {
            arm.wave.reverse();
            arm.flux.reverse();
            arm.errors.reverse();
            arm.is_good.reverse();
            arm.widths.reverse();
        }
    }
    arms.sort_by(|a, b| a.first().total_cmp(&b.first()));
    // Where one arm ends and the next takes over: the middle of overlap or gap.
    let seams: Vec<f64> = arms.windows(2).map(|pair| 0.5 * (pair[0].last() + pair[1].first())).collect();
    let mut joined = Arm::default();
    for (index, arm) in arms.iter().enumerate() {
        let from = index.checked_sub(1).map_or(f64::NEG_INFINITY, |before| seams[before]);
        let to = seams.get(index).copied().unwrap_or(f64::INFINITY);
        for pixel in 0..arm.wave.len() {
            // A wavelength that is not a number belongs to no side; it stays, to be refused later.
            if !(arm.wave[pixel] <= from || arm.wave[pixel] > to) {
                joined.push(arm, pixel);
            }
        }
    }
    if !seams.is_empty() {
        let words: Vec<String> = seams.iter().take(4).map(|seam| format!("{seam:.1}")).collect();
        let more = if seams.len() > 4 { " ..." } else { "" };
        let detail = format!("{} arms, seams at {}{more}", arms.len(), words.join(", "));
        raw.flags.push(Flag::new(&codes::ARMS_JOINED, detail));
    }
    if joined.widths.len() == joined.wave.len() && !joined.wave.is_empty() {
        raw.resolution = Some(Stated::new(Resolution::FwhmPerPixelAa(joined.widths), widths_by));
    }
    raw.wave = joined.wave;
    raw.flux = joined.flux;
    raw.errors = Some(joined.errors);
    raw.is_good = Some(joined.is_good);
}
