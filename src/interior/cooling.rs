//! Cooling: the age at which a star of given mass has cooled to each effective temperature.
//!
//! In: a sequence of models of one mass, hot to cool. Out: age (s) per model. Between neighbours the
//! heat given up is minus the sum of T dS over the mass, with the entropy of the same mass
//! shell in both models: this holds heat capacities of ions and electrons, the release of
//! gravitational and radiative energy, and the latent heat of crystallisation, which is the entropy
//! jump of the equation of state (0.75 kT per ion). It pays for photons and neutrinos. Envelope heat is counted down to
//! an outer mass of 1e-6. Left out: residual hydrogen burning, phase separation, heating by
//! gravitational settling of neon.
//! Age zero: the hottest model of the sequence, at most [`START_TEFF_K`], where a star of 0.6 Msun is younger
//! than 0.5 Myr.

use super::core::Core;
use super::envelope::{EnvelopePoint, HELIUM_FRACTION};
use super::evolution::evolve;
use super::structure::{Guess, HydrogenLayer, StarModel, isothermal_star};
use crate::physics::constants::SOLAR_MASS_G;

/// Effective temperature at which ages begin, K.
pub const START_TEFF_K: f64 = 120_000.0;
/// Outer mass fraction above which the envelope's heat is ignored.
const SHALLOWEST_FRACTION: f64 = 1e-6;
const ENVELOPE_NODES: usize = 40;

/// One mass cooling.
#[derive(Debug, Clone)]
pub struct CoolingTrack {
    /// Models, hot to cool.
    pub models: Vec<StarModel>,
    /// Age of each, s.
    pub age_s: Vec<f64>,
}

/// ln T and entropy of the envelope at an outer mass fraction, linear in its logarithm.
fn envelope_at(points: &[EnvelopePoint], ln_fraction: f64) -> Option<(f64, f64)> {
    let upper = points.partition_point(|p| p.ln_outer_fraction < ln_fraction);
    let (a, b) = (points.get(upper.checked_sub(1)?)?, points.get(upper.min(points.len() - 1))?);
    let width = b.ln_outer_fraction - a.ln_outer_fraction;
    let share = if width > 0.0 { (ln_fraction - a.ln_outer_fraction) / width } else { 0.0 };
    Some((
        a.ln_temperature + share * (b.ln_temperature - a.ln_temperature),
        a.entropy_erg_g_k + share * (b.entropy_erg_g_k - a.entropy_erg_g_k),
    ))
}

/// Heat given up between two models, erg (positive when the second has less entropy).
fn heat_between(hot: &StarModel, cool: &StarModel) -> Option<f64> {
    let mut heat = 0.0;
    for (h, c) in hot.core.windows(2).zip(cool.core.windows(2)) {
        let shell_g = h[1].mass_g - h[0].mass_g;
        let loss = |k: usize| {
            0.5 * (h[k].matter.temperature_k + c[k].matter.temperature_k)
                * (h[k].matter.entropy_erg_g_k - c[k].matter.entropy_erg_g_k)
        };
        heat += 0.5 * (loss(0) + loss(1)) * shell_g;
    }
    let (first, last) = (HELIUM_FRACTION.ln(), SHALLOWEST_FRACTION.ln());
    let mass_g = hot.mass_msun * SOLAR_MASS_G;
    let mut previous: Option<(f64, f64)> = None;
    for i in 0..=ENVELOPE_NODES {
        let ln_fraction = first + (last - first) * i as f64 / ENVELOPE_NODES as f64;
        let (ln_t_hot, s_hot) = envelope_at(&hot.envelope, ln_fraction)?;
        let (ln_t_cool, s_cool) = envelope_at(&cool.envelope, ln_fraction)?;
        let per_gram = 0.5 * (ln_t_hot.exp() + ln_t_cool.exp()) * (s_hot - s_cool);
        let outer_g = ln_fraction.exp() * mass_g;
        if let Some((previous_per_gram, previous_g)) = previous {
            heat += 0.5 * (per_gram + previous_per_gram) * (previous_g - outer_g);
        }
        previous = Some((per_gram, outer_g));
    }
    Some(heat)
}

/// Mean of a quantity that falls exponentially between two values.
fn logarithmic_mean(a: f64, b: f64) -> f64 {
    if (a / b - 1.0).abs() < 1e-6 { 0.5 * (a + b) } else { (a - b) / (a / b).ln() }
}

/// Time between two models, s.
fn time_between(hot: &StarModel, cool: &StarModel) -> Option<f64> {
    let loss = |m: &StarModel| m.luminosity_erg_s + m.neutrino_luminosity_erg_s;
    Some(heat_between(hot, cool)? / logarithmic_mean(loss(hot), loss(cool)))
}

/// The isothermal star a mass starts from: at [`START_TEFF_K`], or a little below the hottest there is.
///
/// Found by warming a cold star until there is no solution, then halving the last stride: the start must
/// change smoothly with mass, because light stars remember it for a million years.
fn starting_model(mass_msun: f64, layer: HydrogenLayer, core: Core) -> Option<StarModel> {
    const LOWEST_K: f64 = 6000.0;
    const STEPS: i32 = 50;
    const HALVINGS: i32 = 9;
    /// At the hottest model itself the core temperature changes without bound with Teff.
    const BELOW_HOTTEST: f64 = 0.97;
    let mut models: Vec<StarModel> = Vec::new();
    let warmer = |models: &[StarModel], teff_k: f64| {
        let guess = match models {
            [.., older, newer] => Guess::continued(older, newer, teff_k),
            [only] => Guess::from_model(only),
            [] => Guess::cold(mass_msun, core)?,
        };
        let model = isothermal_star(mass_msun, teff_k, layer, core, guess)?;
        // Where a hotter surface would need a cooler core, the star never was that hot.
        let is_warmer =
            models.last().is_none_or(|cooler| model.central_temperature_k > cooler.central_temperature_k);
        is_warmer.then_some(model)
    };
    let at_step = |i: i32| LOWEST_K * (START_TEFF_K / LOWEST_K).powf(f64::from(i) / f64::from(STEPS));
    let mut limit_k = None;
    for i in 0..=STEPS {
        match warmer(&models, at_step(i)) {
            Some(model) => models.push(model),
            // The cold guess may be too far from the first star, nearer to the next.
            None if models.is_empty() => continue,
            None => {
                limit_k = Some(at_step(i));
                break;
            }
        }
    }
    if let Some(mut fails_k) = limit_k {
        let mut hottest_k = models.last()?.teff_k;
        for _ in 0..HALVINGS {
            let middle_k = 0.5 * (hottest_k + fails_k);
            match warmer(&models, middle_k) {
                Some(model) => {
                    models.push(model);
                    hottest_k = middle_k;
                }
                None => fails_k = middle_k,
            }
        }
        let start_k = BELOW_HOTTEST * hottest_k;
        let cooler = models.iter().rfind(|m| m.teff_k <= start_k)?;
        return isothermal_star(mass_msun, start_k, layer, core, Guess::from_model(cooler));
    }
    models.pop()
}

/// A star cooling from the hottest isothermal model of its mass to `coolest_teff_k`.
///
/// `None` if not even the start can be built; a track that fails on the way ends there.
pub fn cooling_track(
    mass_msun: f64,
    coolest_teff_k: f64,
    layer: HydrogenLayer,
    core: Core,
) -> Option<CoolingTrack> {
    /// Wanted change of ln Teff in a step, and the least time step as a share of the first one.
    const STRIDE: f64 = 0.025;
    const MOST_STEPS: usize = 600;
    const MOST_HALVINGS: usize = 12;
    let start = starting_model(mass_msun, layer, core)?;
    let thermal_erg: f64 = start
        .core
        .windows(2)
        .map(|w| {
            let m = &w[1].matter;
            (w[1].mass_g - w[0].mass_g) * m.heat_capacity_v_erg_g_k * m.temperature_k
        })
        .sum();
    let mut step_s = 3e-3 * thermal_erg / (start.luminosity_erg_s + start.neutrino_luminosity_erg_s);
    let mut track = CoolingTrack { models: vec![start], age_s: vec![0.0] };
    for _ in 0..MOST_STEPS {
        let (now, age_s) = (track.models.last()?, *track.age_s.last()?);
        if now.teff_k < coolest_teff_k {
            break;
        }
        let mut next = None;
        for _ in 0..MOST_HALVINGS {
            next = evolve(now, layer, core, step_s);
            if next.is_some() {
                break;
            }
            step_s *= 0.5;
        }
        let Some(next) = next else { break };
        let change = (now.teff_k / next.teff_k).ln().abs().max(1e-4);
        step_s *= (STRIDE / change).clamp(0.3, 1.6);
        let age_s = age_s + time_between(now, &next)?;
        track.models.push(next);
        track.age_s.push(age_s);
    }
    Some(track)
}
