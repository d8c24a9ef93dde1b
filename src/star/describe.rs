//! From (Teff, log g) and their covariance to the star, with asymmetric errors and flags.
//!
//! The value is that at the fitted parameters. The interval comes from 512 points that fill the
//! normal distribution of the covariance (and of the given magnitude) evenly (an additive recurrence, the same for every
//! star), each taken through the tracks: 16th, 50th and 84th percentile, so that curvature and correlation are
//! kept. Points outside the tracks are left out and counted. Sampling noise of an error is below 2 %
//! (test `verif_star_errors_linear_limit`).

use std::sync::LazyLock;

use statrs::distribution::{ContinuousCDF, Normal};

use super::models::{ApparentMagnitude, StarModels};
use super::progenitor::{final_mass_range_msun, initial_mass_msun};
use super::values::{AbsoluteMagnitudes, Star, StarReport, StarValue};
use crate::codes::{self, Flag};
use crate::grid::magnitude_table::Magnitudes;
use crate::grid::passband::BANDS;
use crate::grid::track_table::{OutsideTracks, TrackPoint};
use crate::physics::constants::{
    GRAVITATION_CGS, LIGHT_SPEED_CM_S, LIGHT_SPEED_KM_S, SOLAR_LUMINOSITY_ERG_S, SOLAR_MASS_G,
    SOLAR_RADIUS_CM, STEFAN_BOLTZMANN_CGS,
};

const SAMPLES: usize = 512;
/// Share of the sample that may lie outside the tracks before it is said.
const OUTSIDE_SHARE: f64 = 0.02;
/// Single stars leave nothing lighter within a Hubble time: common practice.
const LEAST_SINGLE_STAR_MSUN: f64 = 0.45;
/// Core masses that can be helium or carbon-oxygen, by history (common practice).
const HELIUM_OR_CARBON_MSUN: (f64, f64) = (0.40, 0.50);
/// Above it carbon may have burned to oxygen and neon.
const CARBON_OR_NEON_MSUN: f64 = 1.05;
/// Edges of the instability strip as log g = slope Teff + constant, cool and hot, for parameters corrected for
/// three-dimensional convection (Tremblay et al. 2015, ApJ 809, 148, as written down by Hermes et al. 2017, ApJS
/// 232, 23; from memory): 10 580 - 12 520 K at log g 8.
const STRIP_COOL_EDGE: (f64, f64) = (8.066_30e-4, -0.530_39);
const STRIP_HOT_EDGE: (f64, f64) = (5.969_23e-4, 0.524_31);
/// Speed of escape from the Galaxy near the Sun: 528 km/s (Deason et al. 2019, MNRAS 485, 3514).
const ESCAPE_SPEED_KM_S: f64 = 528.0;

/// Place of the progenitor mass in [`Quantities`], of the first magnitude, and of the distance.
const PROGENITOR: usize = 5;
const FIRST_MAGNITUDE: usize = 7;
const DISTANCE: usize = FIRST_MAGNITUDE + BANDS.len();

/// Everything reported of one place in the tracks, in the order of [`Star`].
type Quantities = [Option<f64>; DISTANCE + 1];

/// Standard normal triples that fill space evenly.
static NORMAL_TRIPLES: LazyLock<Vec<[f64; 3]>> = LazyLock::new(|| {
    // Additive recurrence with the three-dimensional analogue of the golden ratio, x^4 = x + 1.
    const RATIO: f64 = 1.220_744_084_605_759_5;
    let normal = Normal::standard();
    (1..=SAMPLES)
        .map(|i| {
            let at = |step: f64| normal.inverse_cdf((0.5 + i as f64 * step).fract());
            [at(RATIO.powi(-1)), at(RATIO.powi(-2)), at(RATIO.powi(-3))]
        })
        .collect()
});

fn quantities(
    point: &TrackPoint,
    teff_k: f64,
    magnitudes: Option<Magnitudes>,
    apparent: Option<&ApparentMagnitude>,
) -> Quantities {
    let radius_cm = point.radius_rsun * SOLAR_RADIUS_CM;
    let mass_g = point.mass_msun * SOLAR_MASS_G;
    let area = 4.0 * std::f64::consts::PI * radius_cm * radius_cm;
    let compactness = 2.0 * GRAVITATION_CGS * mass_g / (radius_cm * LIGHT_SPEED_CM_S * LIGHT_SPEED_CM_S);
    let mut all = [None; DISTANCE + 1];
    all[..FIRST_MAGNITUDE].copy_from_slice(&[
        Some(point.mass_msun),
        Some(point.radius_rsun),
        Some(area * STEFAN_BOLTZMANN_CGS * teff_k.powi(4) / SOLAR_LUMINOSITY_ERG_S),
        Some(LIGHT_SPEED_KM_S * (1.0 / (1.0 - compactness).sqrt() - 1.0)),
        Some(point.age_gyr),
        initial_mass_msun(point.mass_msun),
        Some(3.0 * mass_g / (area * radius_cm)),
    ]);
    if let Some(magnitudes) = magnitudes {
        all[FIRST_MAGNITUDE..DISTANCE].copy_from_slice(&magnitudes.map(Some));
        all[DISTANCE] = apparent.map(|apparent| apparent.distance_pc(&magnitudes));
    }
    all
}

/// Lower triangle of the square root of a covariance, `None` if it is not one.
fn square_root(covariance: &[[f64; 2]; 2]) -> Option<[f64; 3]> {
    let [[tt, tg], [gt, gg]] = *covariance;
    if !(tt >= 0.0 && gg >= 0.0 && (tg - gt).abs() <= 1e-9 * (tt * gg).sqrt()) {
        return None;
    }
    let a = tt.sqrt();
    let b = if a > 0.0 { tg / a } else { 0.0 };
    let rest = gg - b * b;
    // Full correlation is allowed, up to rounding.
    (rest >= -1e-12 * gg && rest.is_finite() && a.is_finite()).then(|| [a, b, rest.max(0.0).sqrt()])
}

/// 16th, 50th and 84th percentile.
fn percentiles(mut values: Vec<f64>) -> Option<[f64; 3]> {
    if values.len() < SAMPLES / 4 {
        return None;
    }
    values.sort_by(f64::total_cmp);
    let at = |q: f64| {
        let position = q * (values.len() - 1) as f64;
        let low = position as usize;
        let high = (low + 1).min(values.len() - 1);
        values[low] + (position - low as f64) * (values[high] - values[low])
    };
    // Of a normal distribution: one standard deviation each way.
    Some([at(0.158_655), at(0.5), at(0.841_345)])
}

/// Describes the star; see the module's head.
///
/// # Units
/// `covariance` is that of (Teff in K, log g in dex).
pub fn describe(
    teff_k: f64,
    log_g: f64,
    covariance: &[[f64; 2]; 2],
    radial_velocity_km_s: Option<f64>,
    apparent: Option<&ApparentMagnitude>,
    models: &StarModels<'_>,
) -> StarReport {
    let StarModels { tracks, magnitudes, layer } = *models;
    let magnitudes_at = |teff_k: f64, log_g: f64, radius_rsun: f64| {
        magnitudes.and_then(|table| table.at(teff_k, log_g, radius_rsun))
    };
    let mut report = StarReport::default();
    let best = match tracks.at(teff_k, log_g, layer) {
        Ok(best) => best,
        Err(fault) => {
            let code = match fault {
                OutsideTracks::TooHigh { .. } => &codes::ABOVE_STABLE_MASS,
                _ => &codes::OUTSIDE_TRACKS,
            };
            report.flags.push(Flag::new(code, fault.to_string()));
            return report;
        }
    };
    let best_magnitudes = magnitudes_at(teff_k, log_g, best.radius_rsun);
    let values = quantities(&best, teff_k, best_magnitudes, apparent);

    let mut columns: [Vec<f64>; DISTANCE + 1] = Default::default();
    if let Some([a, b, c]) = square_root(covariance) {
        let mut outside = 0;
        for [u, v, w] in NORMAL_TRIPLES.iter() {
            let (t, g) = (teff_k + a * u, log_g + b * u + c * v);
            let Ok(point) = tracks.at(t, g, layer) else {
                outside += 1;
                continue;
            };
            let magnitudes = magnitudes_at(t, g, point.radius_rsun);
            // The noise of the magnitude itself: a third direction, independent of the other two.
            let apparent = apparent.map(|apparent| apparent.moved(*w));
            let all = quantities(&point, t, magnitudes, apparent.as_ref());
            for (column, value) in columns.iter_mut().zip(all) {
                column.extend(value);
            }
        }
        let share = f64::from(outside) / SAMPLES as f64;
        if share > OUTSIDE_SHARE {
            let detail = format!("{:.0} % of the error ellipse lies outside the tracks", 100.0 * share);
            report.flags.push(Flag::new(&codes::ERRORS_TRUNCATED, detail));
        }
    } else {
        let detail = format!("found {covariance:?} (K^2, K dex, dex^2)");
        report.flags.push(Flag::new(&codes::COVARIANCE_UNUSABLE, detail));
    }
    let without_progenitor = 1.0 - columns[PROGENITOR].len() as f64 / columns[0].len().max(1) as f64;
    if values[PROGENITOR].is_some() && without_progenitor > OUTSIDE_SHARE {
        // Percentiles of a sample that is cut off on one side would be wrong, not only narrow.
        columns[PROGENITOR].clear();
        let detail =
            format!("{:.0} % of the error ellipse lies outside the relation", 100.0 * without_progenitor);
        report.flags.push(Flag::new(&codes::OUTSIDE_INITIAL_FINAL_RELATION, detail));
    }
    let mut pairs = values.into_iter().zip(columns);
    let mut next = || {
        let Some((value, column)) = pairs.next() else { return StarValue::default() };
        // Errors without a value would say nothing.
        let interval = value.and_then(|_| percentiles(column));
        StarValue {
            value,
            err_minus: interval.map(|[low, middle, _]| middle - low),
            err_plus: interval.map(|[_, middle, high]| high - middle),
        }
    };
    report.star = Star {
        mass_msun: next(),
        radius_rsun: next(),
        luminosity_lsun: next(),
        gravitational_redshift_km_s: next(),
        cooling_age_gyr: next(),
        progenitor_mass_msun: next(),
        mean_density_g_cm3: next(),
        absolute_magnitude: AbsoluteMagnitudes {
            gaia_g: next(),
            gaia_bp: next(),
            gaia_rp: next(),
            sdss_u: next(),
            sdss_g: next(),
            sdss_r: next(),
            sdss_i: next(),
            sdss_z: next(),
            johnson_v: next(),
        },
        distance_pc: next(),
    };
    if magnitudes.is_some() && best_magnitudes.is_none() {
        let detail = format!("Teff {teff_k:.0} K, log g {log_g:.2} lies outside the grid of model spectra");
        report.flags.push(Flag::new(&codes::NO_MAGNITUDES, detail));
    }
    if is_in_instability_strip(teff_k, log_g) {
        let detail = format!("Teff {teff_k:.0} K, log g {log_g:.2}");
        report.flags.push(Flag::new(&codes::INSTABILITY_STRIP, detail));
    }
    report.flags.extend(flags_of(&report.star, best.mass_msun, radial_velocity_km_s));
    report
}

fn is_in_instability_strip(teff_k: f64, log_g: f64) -> bool {
    let edge = |(slope, constant): (f64, f64)| (log_g - constant) / slope;
    (edge(STRIP_COOL_EDGE)..=edge(STRIP_HOT_EDGE)).contains(&teff_k)
}

/// Flags that a found star earns.
fn flags_of(star: &Star, mass_msun: f64, radial_velocity_km_s: Option<f64>) -> Vec<Flag> {
    let mut flags = Vec::new();
    if mass_msun < LEAST_SINGLE_STAR_MSUN {
        let detail = format!("found {mass_msun:.3} Msun, below {LEAST_SINGLE_STAR_MSUN} Msun");
        flags.push(Flag::new(&codes::BELOW_SINGLE_STAR_MASS, detail));
    }
    let down = star.mass_msun.err_minus.unwrap_or(0.0);
    let up = star.mass_msun.err_plus.unwrap_or(0.0);
    let (low, high) = (mass_msun - down, mass_msun + up);
    if high > HELIUM_OR_CARBON_MSUN.0 && low < HELIUM_OR_CARBON_MSUN.1 {
        let detail = format!("found {mass_msun:.3} Msun: the core may be helium or carbon-oxygen");
        flags.push(Flag::new(&codes::CORE_AMBIGUOUS, detail));
    } else if high > CARBON_OR_NEON_MSUN {
        let detail =
            format!("found {mass_msun:.3} Msun: the core may be carbon-oxygen (assumed) or oxygen-neon");
        flags.push(Flag::new(&codes::CORE_AMBIGUOUS, detail));
    }
    if star.progenitor_mass_msun.value.is_none() {
        let (low, high) = final_mass_range_msun();
        let detail = format!("found {mass_msun:.3} Msun, need {low:.3} .. {high:.3} Msun");
        flags.push(Flag::new(&codes::OUTSIDE_INITIAL_FINAL_RELATION, detail));
    }
    if let (Some(velocity), Some(redshift)) = (radial_velocity_km_s, star.gravitational_redshift_km_s.value) {
        let motion = velocity - redshift;
        if motion.is_nan() || motion.abs() > ESCAPE_SPEED_KM_S {
            let detail = format!(
                "found {velocity:.0} km/s less a gravitational redshift of {redshift:.0} km/s, \
                 faster than escape from the Galaxy ({ESCAPE_SPEED_KM_S} km/s)"
            );
            flags.push(Flag::new(&codes::VELOCITY_IMPLAUSIBLE, detail));
        }
    }
    flags
}
