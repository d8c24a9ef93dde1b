//! Findings of the layers below, put into the document.

use std::collections::BTreeMap;

use super::document::{
    LineRow, Parameter, Parameters, Provenance, Report, SCHEMA_VERSION, SolutionRow, Verdict,
};
use crate::codes::{self, Effect, Flag};
use crate::spectrum::{ObjectRecord, SourceRecord};
use crate::star::{Star, StarValue};

/// Values of the chosen solution with their errors, one standard deviation each.
#[derive(Debug, Clone, PartialEq)]
pub struct FittedParameters {
    /// Effective temperature, K: value, statistical error, external error.
    pub teff_k: [f64; 3],
    /// Surface gravity: value, statistical error, external error.
    pub log_g: [f64; 3],
    /// Radial velocity, km/s: value, statistical error, external error.
    pub radial_velocity_km_s: [f64; 3],
}

/// Everything that was found out about one object; what was not reached stays empty.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Findings {
    /// Flags of all steps, in order.
    pub flags: Vec<Flag>,
    /// The chosen solution, if a fit was made.
    pub parameters: Option<FittedParameters>,
    /// All solutions, the chosen one first.
    pub solutions: Vec<SolutionRow>,
    /// The lines of the chosen solution.
    pub lines: Vec<LineRow>,
    /// What follows for the star.
    pub star: Option<Star>,
    /// What made the findings.
    pub provenance: Provenance,
    /// Time spent by step, milliseconds.
    pub timing_ms: BTreeMap<String, f64>,
}

impl Report {
    /// Makes the document and decides its verdict: the worst effect among the flags.
    ///
    /// A value that is missing or not finite becomes `null`. Where no flag explains that (a rejection,
    /// or for values of the star any `star.` flag), one is added that names the missing values.
    pub fn assemble(object: ObjectRecord, source: SourceRecord, findings: Findings) -> Report {
        let Findings { mut flags, parameters, solutions, lines, star, provenance, timing_ms } = findings;
        let parameters = parameters.map_or_else(Parameters::default, |fitted| Parameters {
            teff_k: parameter(fitted.teff_k),
            log_g: parameter(fitted.log_g),
            radial_velocity_km_s: parameter(fitted.radial_velocity_km_s),
        });
        let star = star.unwrap_or_default();
        let mut missing = missing_parameters(&parameters);
        if !flags.iter().any(|flag| flag.code.starts_with("star.")) {
            missing.extend(missing_star_values(&star));
        }
        if !missing.is_empty() && verdict(&flags) != Verdict::Rejected {
            let code = if parameters.teff_k.value.is_none() || parameters.log_g.value.is_none() {
                &codes::NO_PARAMETERS
            } else {
                &codes::VALUES_MISSING
            };
            flags.push(Flag::new(code, missing.join(", ")));
        }
        Report {
            schema_version: SCHEMA_VERSION,
            verdict: verdict(&flags),
            object,
            source,
            flags,
            parameters,
            solutions,
            lines,
            star,
            provenance,
            timing_ms,
        }
    }
}

fn parameter([value, err_stat, err_external]: [f64; 3]) -> Parameter {
    Parameter {
        value: finite(value),
        err_stat: finite(err_stat),
        err_external: finite(err_external),
        err_total: finite(err_stat.hypot(err_external)),
    }
}

fn finite(value: f64) -> Option<f64> {
    value.is_finite().then_some(value)
}

/// The worst effect decides; a code that the table does not know counts as a rejection, because
/// nobody can say that the result may be used.
fn verdict(flags: &[Flag]) -> Verdict {
    let of = |flag: &Flag| match codes::find(&flag.code).map(|code| code.effect) {
        Some(Effect::Note) => Verdict::Accepted,
        Some(Effect::Review) => Verdict::Review,
        Some(Effect::Reject) | None => Verdict::Rejected,
    };
    flags.iter().map(of).max().unwrap_or(Verdict::Accepted)
}

fn missing_parameters(parameters: &Parameters) -> Vec<&'static str> {
    let missing = |name, parameter: &Parameter| parameter.value.is_none().then_some(name);
    [
        missing("teff_k", &parameters.teff_k),
        missing("log_g", &parameters.log_g),
        missing("radial_velocity_km_s", &parameters.radial_velocity_km_s),
    ]
    .into_iter()
    .flatten()
    .collect()
}

fn missing_star_values(star: &Star) -> impl Iterator<Item = &'static str> {
    let missing = |name, value: &StarValue| value.value.is_none().then_some(name);
    [
        missing("mass_msun", &star.mass_msun),
        missing("radius_rsun", &star.radius_rsun),
        missing("luminosity_lsun", &star.luminosity_lsun),
        missing("gravitational_redshift_km_s", &star.gravitational_redshift_km_s),
        missing("cooling_age_gyr", &star.cooling_age_gyr),
        missing("progenitor_mass_msun", &star.progenitor_mass_msun),
        missing("mean_density_g_cm3", &star.mean_density_g_cm3),
    ]
    .into_iter()
    .flatten()
}
