//! Units as files write them.
//!
//! Wavelength units are a closed list. Flux units are recognised by their parts (a length in the
//! denominator makes a flux per wavelength interval), because every survey writes them in its own way;
//! what is not recognised is refused, never taken as something else.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// Unit of a wavelength axis.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
pub enum WaveUnit {
    /// 1e-10 m.
    Angstrom,
    /// 1e-9 m.
    Nm,
    /// 1e-6 m.
    Um,
    /// 1 m.
    M,
}

impl WaveUnit {
    /// Angstroms in one of these.
    pub fn in_aa(self) -> f64 {
        match self {
            WaveUnit::Angstrom => 1.0,
            WaveUnit::Nm => 10.0,
            WaveUnit::Um => 1e4,
            WaveUnit::M => 1e10,
        }
    }

    /// The unit that a file's words name; none if they name no unit of length known here.
    pub fn parse(words: &str) -> Option<Self> {
        let word = words.trim().trim_matches(['[', ']', '(', ')']).to_ascii_lowercase();
        match word.as_str() {
            "a" | "aa" | "ang" | "angs" | "angstrom" | "angstroms" | "0.1 nm" | "0.1nm" | "10**-10 m" => {
                Some(WaveUnit::Angstrom)
            }
            "nm" | "nanometer" | "nanometers" | "nanometre" | "nanometres" => Some(WaveUnit::Nm),
            "um" | "micron" | "microns" | "micrometer" | "micrometers" | "micrometre" | "micrometres" => {
                Some(WaveUnit::Um)
            }
            "m" | "meter" | "meters" | "metre" | "metres" => Some(WaveUnit::M),
            _ => None,
        }
    }

    /// The one unit in which an axis from `first` to `last` covers part of the Balmer region
    /// (3 600 - 7 000 A), if exactly one does.
    pub fn infer(first: f64, last: f64) -> Option<Self> {
        let covers = |unit: &WaveUnit| first * unit.in_aa() < 7000.0 && last * unit.in_aa() > 3600.0;
        let mut units = [WaveUnit::Angstrom, WaveUnit::Nm, WaveUnit::Um].into_iter().filter(covers);
        let unit = units.next()?;
        units.next().is_none().then_some(unit)
    }
}

/// What the numbers of the flux mean.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(rename_all = "snake_case")]
pub enum FluxScale {
    /// Flux per wavelength interval: the shape of the continuum is physical.
    Calibrated,
    /// Counts, or a flux with an unknown response: only the shape of lines is physical.
    Relative,
}

/// A flux unit: its scale, and the factor to erg s^-1 cm^-2 A^-1 (1 for relative fluxes).
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct FluxUnit {
    /// What the numbers mean.
    pub scale: FluxScale,
    /// Factor to erg s^-1 cm^-2 A^-1.
    pub factor: f64,
}

impl FluxUnit {
    /// The unit that a file's words name; none if it is not a flux per wavelength interval, not
    /// counts, or not known here.
    pub fn parse(words: &str) -> Option<Self> {
        let word = words.trim().to_ascii_lowercase();
        const COUNTS: [&str; 16] = [
            "adu",
            "du",
            "du/pixel",
            "adu/pixel",
            "count",
            "counts",
            "count/s",
            "counts/s",
            "counts s-1",
            "electron",
            "electrons",
            "electron/s",
            "electrons/s",
            "relative flux",
            "relative",
            "normalized",
        ];
        if COUNTS.contains(&word.as_str()) {
            return Some(FluxUnit { scale: FluxScale::Relative, factor: 1.0 });
        }
        let calibrated = |factor| Some(FluxUnit { scale: FluxScale::Calibrated, factor });
        if word == "flam" {
            return calibrated(1.0);
        }
        // Flux per frequency interval bends the continuum and is not converted here.
        if word.contains("hz") || word.contains("jy") || word.contains("mag") {
            return None;
        }
        if let Some(rest) = word.strip_prefix("wm-2um-1").or_else(|| word.strip_prefix("w/m2/um")) {
            // 1 W m^-2 um^-1 = 1e7 erg/s / 1e4 cm^2 / 1e4 A.
            return rest.is_empty().then(|| calibrated(0.1)).flatten();
        }
        let (power_of_ten, rest) = split_scale(&word)?;
        if !rest.contains("erg") || !rest.contains("cm") {
            return None;
        }
        // The unit of the interval: what is left when energy, area and time are taken away.
        let interval = rest.replace("erg", " ").replace("cm", " ");
        let parts: Vec<&str> = interval
            .split(|c: char| !c.is_ascii_alphabetic())
            .filter(|part| !part.is_empty() && !matches!(*part, "s" | "sec"))
            .collect();
        let [part] = parts.as_slice() else { return None };
        let per_aa = 1.0 / WaveUnit::parse(part)?.in_aa();
        calibrated(10f64.powi(power_of_ten) * per_aa)
    }
}

/// Splits `1e-17 erg..`, `10**-17 erg..`, `10**(-19).erg..`, `erg..  10^20` into a power of ten and
/// the rest. A power behind the unit (an IRAF habit) says what the numbers were multiplied by.
fn split_scale(word: &str) -> Option<(i32, &str)> {
    if let Some((rest, power)) = word.rsplit_once("10^")
        && rest.contains("erg")
    {
        return Some((-power.trim().parse::<i32>().ok()?, rest));
    }
    let start = word.find("erg")?;
    let (scale, rest) = word.split_at(start);
    let scale = scale.trim_matches([' ', '.', '*', '(', ')', '[', ']']);
    if scale.is_empty() {
        return Some((0, rest));
    }
    let power = scale
        .strip_prefix("10**")
        .or_else(|| scale.strip_prefix("10^"))
        .map(|power| power.trim_matches(['(', ')', ' ']));
    let power = match power {
        Some(power) => power.parse::<i32>().ok()?,
        None => {
            let factor: f64 = scale.parse().ok()?;
            let power = factor.log10().round();
            // Only whole powers of ten are in use; anything else would be misread.
            if (factor / 10f64.powf(power) - 1.0).abs() > 1e-9 {
                return None;
            }
            power as i32
        }
    };
    (-60..=60).contains(&power).then_some((power, rest))
}

#[cfg(test)]
#[allow(clippy::unwrap_used)]
mod tests {
    use super::*;

    #[test]
    fn flux_units_in_use_are_understood() {
        // Spellings found in real files, with the factor to erg s^-1 cm^-2 A^-1.
        for (words, factor) in [
            ("1E-17 erg/cm^2/s/Ang", 1e-17),
            ("1.0E-17 erg/cm/s/Ang", 1e-17),
            ("10**-17 erg/(s cm2 Angstrom)", 1e-17),
            ("erg/cm2/s/A", 1.0),
            ("erg/cm2/s/A  10^20", 1e-20),
            ("erg/s/cm2/Angstrom", 1.0),
            ("erg/s/cm**2/Angstrom", 1.0),
            ("erg/(s*cm**2*Angstrom)", 1.0),
            ("FLAM", 1.0),
            ("erg s**(-1) cm**(-2) nm**(-1)", 0.1),
            ("10**(-19).erg.cm**(-2).s**(-1).angstrom**(-1)", 1e-19),
            ("1e-20 erg / (Angstrom cm2 s)", 1e-20),
            ("Wm-2um-1", 0.1),
        ] {
            let unit = FluxUnit::parse(words).unwrap_or_else(|| panic!("{words}"));
            assert_eq!(unit.scale, FluxScale::Calibrated, "{words}");
            assert!((unit.factor / factor - 1.0).abs() < 1e-12, "{words}: {}", unit.factor);
        }
        for words in ["ADU", "DU/PIXEL", "RELATIVE FLUX", "Relative Flux"] {
            assert_eq!(FluxUnit::parse(words).map(|unit| unit.scale), Some(FluxScale::Relative), "{words}");
        }
        for words in ["Jy", "mJy", "erg/s/cm2/Hz", "mag", "K", "km/s", "3e-17 erg/s/cm2/A", "erg/s/cm2", ""] {
            assert_eq!(FluxUnit::parse(words), None, "{words}");
        }
    }

    #[test]
    fn wavelength_units_are_inferred_only_where_certain() {
        assert_eq!(WaveUnit::infer(3700.0, 6800.0), Some(WaveUnit::Angstrom));
        assert_eq!(WaveUnit::infer(370.0, 680.0), Some(WaveUnit::Nm));
        assert_eq!(WaveUnit::infer(0.37, 0.68), Some(WaveUnit::Um));
        assert_eq!(WaveUnit::infer(300.0, 25_000.0), None, "angstrom and nm both fit");
        assert_eq!(WaveUnit::infer(15_000.0, 18_000.0), None, "nothing fits");
    }
}
