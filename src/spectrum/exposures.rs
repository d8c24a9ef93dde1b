//! Several exposures of one object in one file: fitted apart, or combined, by configuration.
//!
//! Combined are settled spectra on the same wavelengths: each is scaled to the deepest exposure by the median
//! ratio of their fluxes, then good pixels are averaged with weights 1/sigma^2. Nothing is resampled, which
//! would correlate pixels: exposures whose wavelengths differ stay apart and say so.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::observation::Observation;
use super::read::Outcomes;
use super::{Resolution, Spectrum};
use crate::codes::{self, Flag};

/// What is done with several exposures of one object in one file.
#[derive(Debug, Clone, Copy, Default, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
pub enum Exposures {
    /// One report for each.
    #[default]
    Apart,
    /// One report for all.
    Combine,
}

/// Largest difference between wavelengths that count as the same, pixels: one twentieth of a pixel broadens a
/// line sampled by two pixels by less than 0.1 %.
const LARGEST_SHIFT_PIXELS: f64 = 0.05;

/// Combines outcomes that are exposures of the same object (`keys`, one per outcome).
pub fn combine(outcomes: Outcomes, keys: &[Option<String>]) -> Outcomes {
    let mut combined: Outcomes = Vec::new();
    let mut groups: Vec<(&str, Vec<Observation>)> = Vec::new();
    for (outcome, key) in outcomes.into_iter().zip(keys) {
        match (outcome, key) {
            (Ok(observation), Some(key)) => match groups.iter_mut().find(|(name, _)| name == key) {
                Some((_, group)) => group.push(observation),
                None => groups.push((key, vec![observation])),
            },
            // An exposure that cannot be read has its own report; the others do without it.
            (other, _) => combined.push(other),
        }
    }
    for (_, group) in groups {
        combined.extend(combine_group(group).into_iter().map(Ok));
    }
    combined
}

fn combine_group(mut group: Vec<Observation>) -> Vec<Observation> {
    if group.len() < 2 {
        return group;
    }
    if !group.windows(2).all(|pair| have_same_wavelengths(&pair[0].spectrum, &pair[1].spectrum)) {
        let flag = Flag::new(
            &codes::EXPOSURES_APART,
            format!(
                "{} exposures whose wavelengths differ by more than {LARGEST_SHIFT_PIXELS} pixels",
                group.len()
            ),
        );
        group.iter_mut().for_each(|one| one.flags.push(flag.clone()));
        return group;
    }
    let Some(spectrum) = average(&group) else { return group };
    let rows: Vec<String> = group.iter().filter_map(|one| Some(one.source.row?.to_string())).collect();
    let detail = format!("{} exposures, rows {}", group.len(), rows.join(", "));
    let exposure_s: Option<f64> = group.iter().map(|one| one.object.exposure_s).sum();
    let mut flags: Vec<Flag> = Vec::new();
    for flag in group.iter().flat_map(|one| &one.flags) {
        if !flags.contains(flag) {
            flags.push(flag.clone());
        }
    }
    flags.push(Flag::new(&codes::EXPOSURES_COMBINED, detail));
    let mut first = group.swap_remove(0);
    first.object.exposure_s = exposure_s;
    vec![Observation { spectrum, flags, ..first }]
}

fn have_same_wavelengths(one: &Spectrum, other: &Spectrum) -> bool {
    let (one, other) = (one.wave_vac_aa(), other.wave_vac_aa());
    let step = |pixel: usize| one[(pixel + 1).min(one.len() - 1)] - one[pixel.min(one.len() - 2)];
    one.len() == other.len()
        && (0..one.len()).all(|pixel| (one[pixel] - other[pixel]).abs() <= LARGEST_SHIFT_PIXELS * step(pixel))
}

/// The weighted mean; none if it is no spectrum, which the first exposure is.
fn average(group: &[Observation]) -> Option<Spectrum> {
    let deepest = group.iter().max_by(|a, b| depth(&a.spectrum).total_cmp(&depth(&b.spectrum)))?;
    let scales: Vec<f64> = group.iter().map(|one| scale_to(&deepest.spectrum, &one.spectrum)).collect();
    let pixels = deepest.spectrum.wave_vac_aa().len();
    let (mut flux, mut sigma, mut is_good) =
        (vec![0.0; pixels], vec![f64::INFINITY; pixels], vec![false; pixels]);
    for pixel in 0..pixels {
        let (mut sum, mut weights) = (0.0, 0.0);
        for (one, scale) in group.iter().zip(&scales) {
            if one.spectrum.is_good()[pixel] {
                let weight = (scale * one.spectrum.sigma()[pixel]).powi(-2);
                sum += weight * scale * one.spectrum.flux()[pixel];
                weights += weight;
            }
        }
        if weights > 0.0 {
            (flux[pixel], sigma[pixel], is_good[pixel]) = (sum / weights, weights.sqrt().recip(), true);
        }
    }
    let wave = deepest.spectrum.wave_vac_aa().to_vec();
    let is_calibrated = group.iter().all(|one| one.spectrum.is_flux_calibrated());
    Spectrum::new(wave, flux, sigma, is_good, mean_resolution(group), is_calibrated).ok()
}

/// Median signal-to-noise ratio of the good pixels.
fn depth(spectrum: &Spectrum) -> f64 {
    median(good(spectrum).map(|pixel| spectrum.flux()[pixel].abs() / spectrum.sigma()[pixel]))
}

/// The factor that brings `other` to the level of `deepest`.
fn scale_to(deepest: &Spectrum, other: &Spectrum) -> f64 {
    let level = |spectrum: &Spectrum, with: &Spectrum| {
        median(good(spectrum).filter(|pixel| with.is_good()[*pixel]).map(|pixel| spectrum.flux()[pixel]))
    };
    let scale = level(deepest, other) / level(other, deepest);
    // Without light in one of them there is nothing to compare.
    if scale.is_finite() && scale > 0.0 { scale } else { 1.0 }
}

fn good(spectrum: &Spectrum) -> impl Iterator<Item = usize> {
    spectrum.is_good().iter().enumerate().filter(|(_, good)| **good).map(|(pixel, _)| pixel)
}

fn mean_resolution(group: &[Observation]) -> Resolution {
    let first = group[0].spectrum.resolution();
    if group.iter().all(|one| one.spectrum.resolution() == first) {
        return first.clone();
    }
    let wave = group[0].spectrum.wave_vac_aa();
    let mean = |(pixel, wave): (usize, &f64)| {
        group.iter().map(|one| one.spectrum.resolution().fwhm_aa(pixel, *wave)).sum::<f64>()
            / group.len() as f64
    };
    Resolution::FwhmPerPixelAa(wave.iter().enumerate().map(mean).collect())
}

/// 0 if there are none.
fn median(values: impl Iterator<Item = f64>) -> f64 {
    let mut values: Vec<f64> = values.collect();
    let middle = values.len() / 2;
    if values.is_empty() {
        return 0.0;
    }
    *values.select_nth_unstable_by(middle, f64::total_cmp).1
}
