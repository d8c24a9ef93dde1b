//! What is known of an instrument, and which files it is of.
//!
//! A section of the configuration names header keywords with patterns; it holds for a spectrum when all of
//! them match the header of the spectrum's own extension or, where that lacks the keyword, the
//! primary header. In patterns `*` stands for anything, and letter case does not matter. A number is
//! matched by its value (`1200` and `1.2e3` are the same), a logical value by `T` or `F`. Of several
//! sections that match the first is used, and the report names it.

use std::collections::BTreeMap;

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::axis::{Medium, VelocityFrame};
use super::fits::{Header, Value};
use super::settings::{Assumptions, ErrorKind};
use super::units::{FluxScale, WaveUnit};

/// One section; what it leaves out is believed of the file.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(default)]
pub struct Instrument {
    /// Name, for reports.
    pub name: String,
    /// Header keywords and the pattern that each value must match.
    #[serde(rename = "match")]
    pub keywords: BTreeMap<String, String>,
    /// Whether the values below hold even where a file states something else.
    pub overrule_file: bool,
    /// Resolving power lambda / FWHM.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub resolving_power: Option<f64>,
    /// FWHM, A.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub resolution_fwhm_aa: Option<f64>,
    /// Air or vacuum.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub medium: Option<Medium>,
    /// Observer to whom the wavelengths refer.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub velocity_frame: Option<VelocityFrame>,
    /// Unit of the wavelengths.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub wave_unit: Option<WaveUnit>,
    /// Calibrated or relative fluxes.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub flux_scale: Option<FluxScale>,
    /// What the errors are.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub error_kind: Option<ErrorKind>,
    /// Signal-to-noise ratio per pixel, for files without errors.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub assume_snr: Option<f64>,
    /// Ranges never used, vacuum A, low before high, ends included.
    pub masks_vac_aa: Vec<[f64; 2]>,
    /// Factor on the errors of the file; errors made from `assume_snr` are not changed.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub error_scale: Option<f64>,
}

impl Default for Instrument {
    fn default() -> Self {
        Instrument {
            name: String::new(),
            keywords: BTreeMap::new(),
            overrule_file: true,
            resolving_power: None,
            resolution_fwhm_aa: None,
            medium: None,
            velocity_frame: None,
            wave_unit: None,
            flux_scale: None,
            error_kind: None,
            assume_snr: None,
            masks_vac_aa: Vec::new(),
            error_scale: None,
        }
    }
}

/// What a section did to a spectrum; part of the report's `source`.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct InstrumentRecord {
    /// Name of the section.
    pub name: String,
    /// Ranges that it masks, vacuum A.
    pub masks_vac_aa: Vec<[f64; 2]>,
    /// Pixels that it masked and that the file had not.
    pub masked_pixels: usize,
    /// Factor on the errors of the file; `null` where they stayed as they are.
    pub error_scale: Option<f64>,
}

impl Instrument {
    /// Whether the section holds for a spectrum; `headers` go from the spectrum's own to the general one.
    pub fn is_match(&self, headers: &[&Header]) -> bool {
        self.keywords.iter().all(|(keyword, pattern)| {
            let value = headers.iter().find_map(|header| header.value(keyword));
            value.is_some_and(|value| is_value_match(pattern.trim(), value))
        })
    }

    /// The values that settle what a file leaves open.
    pub fn assumptions(&self) -> Assumptions {
        Assumptions {
            medium: self.medium,
            wave_unit: self.wave_unit,
            flux_scale: self.flux_scale,
            error_kind: self.error_kind,
            assume_snr: self.assume_snr,
            resolution_fwhm_aa: self.resolution_fwhm_aa,
            resolving_power: self.resolving_power,
            velocity_frame: self.velocity_frame,
            overrule_file: self.overrule_file,
        }
    }

    /// Whether a pixel lies in a masked range.
    pub fn is_masked(&self, wave_vac_aa: f64) -> bool {
        self.masks_vac_aa.iter().any(|[low, high]| (*low..=*high).contains(&wave_vac_aa))
    }

    /// Refuses values that cannot be meant.
    ///
    /// # Errors
    /// The key, what was found, and what would do.
    pub fn check(&self) -> Result<(), InstrumentFault> {
        let refuse =
            |key, found: String, need| Err(InstrumentFault { section: self.name.clone(), key, found, need });
        if self.name.is_empty() {
            return refuse("name", "empty".to_owned(), "a name");
        }
        if self.keywords.is_empty() {
            return refuse("match", "empty".to_owned(), "at least one header keyword");
        }
        if self.resolving_power.is_some() && self.resolution_fwhm_aa.is_some() {
            let need = "only one of resolving_power and resolution_fwhm_aa";
            return refuse("resolution_fwhm_aa", "set twice".to_owned(), need);
        }
        if self.velocity_frame == Some(VelocityFrame::Unknown) {
            let need = "topocentric, heliocentric or barycentric";
            return refuse("velocity_frame", "unknown".to_owned(), need);
        }
        for (key, value) in [
            ("resolving_power", self.resolving_power),
            ("resolution_fwhm_aa", self.resolution_fwhm_aa),
            ("assume_snr", self.assume_snr),
            ("error_scale", self.error_scale),
        ] {
            if let Some(value) = value
                && !(value.is_finite() && value > 0.0)
            {
                return refuse(key, value.to_string(), "a positive number");
            }
        }
        for [low, high] in &self.masks_vac_aa {
            if !(low.is_finite() && high.is_finite() && low < high) {
                return refuse("masks_vac_aa", format!("[{low}, {high}]"), "[low, high]");
            }
        }
        Ok(())
    }
}

/// A value of a section that cannot be meant.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[error("cannot use the instrument section {section:?}: `{key}` is {found}, need {need}")]
pub struct InstrumentFault {
    /// Name of the section.
    pub section: String,
    /// Key within the section.
    pub key: &'static str,
    /// The value.
    pub found: String,
    /// What would do.
    pub need: &'static str,
}

fn is_value_match(pattern: &str, value: &Value) -> bool {
    let is_number = |number: f64| pattern.parse::<f64>().is_ok_and(|wanted| wanted == number);
    match value {
        Value::Text(text) | Value::Other(text) => is_text_match(pattern, text.trim()),
        Value::Integer(integer) => is_number(*integer as f64) || is_text_match(pattern, &integer.to_string()),
        Value::Real(real) => is_number(*real) || is_text_match(pattern, &real.to_string()),
        Value::Logical(logical) => is_text_match(pattern, if *logical { "T" } else { "F" }),
    }
}

/// Whether the text is the pattern, in which each `*` stands for any characters, letter case aside.
fn is_text_match(pattern: &str, text: &str) -> bool {
    let (pattern, text) = (pattern.to_lowercase(), text.to_lowercase());
    let Some((first, others)) = pattern.split_once('*') else { return pattern == text };
    let Some(mut rest) = text.strip_prefix(first) else { return false };
    let (middle, last) = others.rsplit_once('*').unwrap_or(("", others));
    for piece in middle.split('*') {
        // The earliest place is always good enough: it leaves most of the text to the pieces behind it.
        let Some(at) = rest.find(piece) else { return false };
        rest = &rest[at + piece.len()..];
    }
    rest.ends_with(last)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn stars_stand_for_anything_and_case_does_not_matter() {
        for (pattern, text, expected) in [
            ("KFS-1", "kfs-1", true),
            ("KFS-1", "KFS-10", false),
            ("KFS-*", "kfs-1 blue", true),
            ("KFS-*", "KFS-", true),
            ("*blue", "KFS-1 Blue", true),
            ("*blue", "KFS-1 blue arm", false),
            ("K*1*arm", "KFS-1 blue arm", true),
            ("K*1*arm", "KFS-arm 1", false),
            ("a*ab", "ab", false),
            ("*", "", true),
            ("**", "x", true),
            ("[1*?{", "[12?{", true),
        ] {
            assert_eq!(is_text_match(pattern, text), expected, "{pattern} on {text}");
        }
    }

    #[test]
    fn numbers_are_matched_by_value_and_logicals_by_their_letter() {
        assert!(is_value_match("1.2e3", &Value::Integer(1200)));
        assert!(is_value_match("0.50", &Value::Real(0.5)));
        assert!(is_value_match("12*", &Value::Integer(1200)));
        assert!(!is_value_match("12", &Value::Integer(1200)));
        assert!(is_value_match("t", &Value::Logical(true)));
        assert!(!is_value_match("T", &Value::Logical(false)));
    }
}
