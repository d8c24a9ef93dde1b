//! What came back of an invented night, against the truth.

use serde::Serialize;

use super::night::{Sighting, Truth};
use crate::report::{Report, Verdict};

/// A solution is the wrong one when ln Teff misses by this much and by five standard deviations.
const WRONG_LN_TEFF: f64 = 0.12;
const WRONG_SIGMA: f64 = 5.0;
/// Good stars must be accepted from this signal-to-noise ratio.
const GOOD_SNR: f64 = 15.0;
/// From this signal-to-noise ratio on the wrong choice must be very rare.
const BRIGHT_SNR: f64 = 20.0;

/// The summary of a night; the keys are stable.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Summary {
    /// Objects observed.
    pub stars: usize,
    /// Mean of (fitted - true) / statistical error of Teff.
    pub pull_mean_teff: f64,
    /// Standard deviation of the same.
    pub pull_width_teff: f64,
    /// Mean pull of log g.
    pub pull_mean_log_g: f64,
    /// Width of the pulls of log g.
    pub pull_width_log_g: f64,
    /// Mean pull of the radial velocity.
    pub pull_mean_radial_velocity: f64,
    /// Width of the pulls of the radial velocity.
    pub pull_width_radial_velocity: f64,
    /// White dwarfs for which the wrong one of hot and cold was chosen.
    pub wrong_solution_fraction: f64,
    /// The same among those of S/N 20 or more.
    pub wrong_solution_fraction_bright: f64,
    /// White dwarfs with the wrong solution and the verdict `accepted`.
    pub wrong_solution_accepted_fraction: f64,
    /// Share of all Teff, log g and velocities within one standard deviation of the truth.
    pub coverage_68: f64,
    /// The same within 1.96 standard deviations.
    pub coverage_95: f64,
    /// Objects that are no DA white dwarfs.
    pub contaminants: usize,
    /// Contaminants with the verdict `accepted`.
    pub contaminants_accepted_fraction: f64,
    /// White dwarfs of S/N 15 or more without the verdict `accepted`.
    pub good_not_accepted_fraction: f64,
    /// Speed.
    pub spectra_per_s: f64,
}

/// One row of the printed table: the white dwarfs of a range of temperatures.
#[derive(Debug, Clone, PartialEq)]
pub struct Region {
    /// Range of true temperatures, K.
    pub teff_k: (f64, f64),
    /// White dwarfs in it.
    pub stars: usize,
    /// Mean and standard deviation of (fitted - true) / true for Teff.
    pub teff_relative: (f64, f64),
    /// Mean and standard deviation of fitted - true for log g.
    pub log_g: (f64, f64),
    /// Mean and standard deviation of fitted - true velocity, km/s.
    pub radial_velocity_km_s: (f64, f64),
    /// Widths of the pulls of the three.
    pub pull_widths: [f64; 3],
    /// Shares within 1 and 1.96 standard deviations, over the three.
    pub coverage: (f64, f64),
}

/// Ends of the regions, K: cool, convective, the ridge, hot, hottest.
const REGIONS_K: [f64; 7] = [7000.0, 9000.0, 11_500.0, 15_500.0, 20_000.0, 35_000.0, 60_000.0];

/// Fitted minus true of one white dwarf, with its errors.
pub(super) struct Comparison {
    pub(super) teff_k: f64,
    pub(super) difference: [f64; 3],
    sigma: [f64; 3],
    pub(super) is_wrong: bool,
    pub(super) is_accepted: bool,
    snr: f64,
}

impl Comparison {
    /// One-dimensional parameters are compared, because the truth is of a one-dimensional grid.
    pub(super) fn new(sighting: &Sighting, report: &Report) -> Option<Self> {
        let Truth::Da { teff_k, log_g, radial_velocity_km_s } = sighting.truth else { return None };
        let chosen = report.solutions.iter().find(|solution| solution.is_chosen)?;
        let covariance = chosen.covariance?;
        let difference = [
            chosen.teff_k? - teff_k,
            chosen.log_g? - log_g,
            chosen.radial_velocity_km_s? - radial_velocity_km_s,
        ];
        let sigma = [0, 1, 2].map(|i| f64::sqrt(covariance[i][i]));
        let is_wrong = (chosen.teff_k? / teff_k).ln().abs() > WRONG_LN_TEFF
            && difference[0].abs() > WRONG_SIGMA * sigma[0];
        let is_accepted = report.verdict == Verdict::Accepted;
        Some(Comparison { teff_k, difference, sigma, is_wrong, is_accepted, snr: sighting.snr })
    }

    pub(super) fn pull(&self, parameter: usize) -> f64 {
        self.difference[parameter] / self.sigma[parameter]
    }
}

/// Scores a night that took `seconds`.
pub fn score(night: &[(Sighting, Report)], seconds: f64) -> (Summary, Vec<Region>) {
    let compared: Vec<Comparison> =
        night.iter().filter_map(|(sighting, report)| Comparison::new(sighting, report)).collect();
    let right: Vec<&Comparison> = compared.iter().filter(|comparison| !comparison.is_wrong).collect();
    let pulls = [0, 1, 2].map(|i| mean_and_width(right.iter().map(|comparison| comparison.pull(i))));
    let is_da = |sighting: &Sighting| matches!(sighting.truth, Truth::Da { .. });
    let share = |of: &dyn Fn(&Sighting) -> bool, is: &dyn Fn(&Report) -> bool| {
        let chosen: Vec<_> = night.iter().filter(|(sighting, _)| of(sighting)).collect();
        chosen.iter().filter(|(_, report)| is(report)).count() as f64 / chosen.len().max(1) as f64
    };
    let is_accepted = |report: &Report| report.verdict == Verdict::Accepted;
    let (coverage_68, coverage_95) = coverage(&right);
    let wrong_among = |of: &dyn Fn(&Comparison) -> bool, is: &dyn Fn(&Comparison) -> bool| {
        let all = compared.iter().filter(|comparison| of(comparison));
        let wrong = all.clone().filter(|comparison| comparison.is_wrong && is(comparison)).count();
        wrong as f64 / all.count().max(1) as f64
    };
    let summary = Summary {
        stars: night.len(),
        pull_mean_teff: pulls[0].0,
        pull_width_teff: pulls[0].1,
        pull_mean_log_g: pulls[1].0,
        pull_width_log_g: pulls[1].1,
        pull_mean_radial_velocity: pulls[2].0,
        pull_width_radial_velocity: pulls[2].1,
        wrong_solution_fraction: wrong_among(&|_| true, &|_| true),
        wrong_solution_fraction_bright: wrong_among(&|comparison| comparison.snr >= BRIGHT_SNR, &|_| true),
        wrong_solution_accepted_fraction: wrong_among(&|_| true, &|comparison| comparison.is_accepted),
        coverage_68,
        coverage_95,
        contaminants: night.iter().filter(|(sighting, _)| !is_da(sighting)).count(),
        contaminants_accepted_fraction: share(&|sighting| !is_da(sighting), &is_accepted),
        good_not_accepted_fraction: share(
            &|sighting| is_da(sighting) && sighting.snr >= GOOD_SNR,
            &|report| !is_accepted(report),
        ),
        spectra_per_s: night.len() as f64 / seconds,
    };
    let regions = REGIONS_K.windows(2).map(|ends| region((ends[0], ends[1]), &right)).collect();
    (summary, regions)
}

fn region(teff_k: (f64, f64), compared: &[&Comparison]) -> Region {
    let inside: Vec<&Comparison> = compared
        .iter()
        .copied()
        .filter(|comparison| (teff_k.0..teff_k.1).contains(&comparison.teff_k))
        .collect();
    let of = |value: &dyn Fn(&Comparison) -> f64| mean_and_width(inside.iter().map(|c| value(c)));
    Region {
        teff_k,
        stars: inside.len(),
        teff_relative: of(&|c| c.difference[0] / c.teff_k),
        log_g: of(&|c| c.difference[1]),
        radial_velocity_km_s: of(&|c| c.difference[2]),
        pull_widths: [0, 1, 2].map(|i| of(&|c| c.pull(i)).1),
        coverage: coverage(&inside),
    }
}

/// Shares of all parameters within 1 and 1.96 standard deviations of the truth.
fn coverage(compared: &[&Comparison]) -> (f64, f64) {
    let pulls: Vec<f64> =
        compared.iter().flat_map(|comparison| [0, 1, 2].map(|i| comparison.pull(i).abs())).collect();
    let within =
        |limit: f64| pulls.iter().filter(|pull| **pull < limit).count() as f64 / pulls.len().max(1) as f64;
    (within(1.0), within(1.96))
}

fn mean_and_width(values: impl Iterator<Item = f64>) -> (f64, f64) {
    let values: Vec<f64> = values.collect();
    let count = values.len() as f64;
    let mean = values.iter().sum::<f64>() / count;
    let variance = values.iter().map(|value| (value - mean).powi(2)).sum::<f64>() / (count - 1.0);
    (mean, variance.sqrt())
}
