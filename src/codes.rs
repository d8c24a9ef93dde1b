//! Stable machine codes of every fault and flag: one table from which reports, status pages, help
//! and documentation read. Codes never change meaning; new ones are added.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

/// What a code does to the verdict of a report.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Effect {
    /// Told, but the result may still be accepted.
    Note,
    /// The result needs a person: at most `review`.
    Review,
    /// No result may be used: `rejected`.
    Reject,
}

/// One row of the table of codes.
#[derive(Debug)]
pub struct Code {
    /// Stable identifier, `area.words-with-dashes`.
    pub id: &'static str,
    /// What it means, one sentence.
    pub meaning: &'static str,
    /// What a person can do about it.
    pub remedy: &'static str,
    /// Its effect on the verdict.
    pub effect: Effect,
}

/// A flag raised for one object: the code and what was measured.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize, JsonSchema)]
pub struct Flag {
    /// Identifier from [`TABLE`].
    pub code: String,
    /// What was found, with numbers and units.
    pub detail: String,
}

impl Flag {
    /// Makes a flag from a code of the table.
    pub fn new(code: &'static Code, detail: impl Into<String>) -> Self {
        Flag { code: code.id.to_owned(), detail: detail.into() }
    }
}

/// Declares codes as constants and gathers them in [`TABLE`].
macro_rules! codes {
    ($($(#[$doc:meta])* $name:ident = $id:literal, $effect:ident, $meaning:literal, $remedy:literal;)*) => {
        $($(#[$doc])* #[doc = $meaning] pub static $name: Code =
            Code { id: $id, meaning: $meaning, remedy: $remedy, effect: Effect::$effect };)*
        /// All codes, in order of declaration.
        pub static TABLE: &[&Code] = &[$(&$name),*];
    };
}

codes! {
    INTERNAL = "internal.panic", Reject,
        "the program broke one of its own invariants while working on this object",
        "report it with the input file";

    // star
    OUTSIDE_TRACKS = "star.outside-tracks", Review,
        "the fitted temperature and gravity lie outside the cooling tracks, so mass, radius and age are null",
        "look at the fit; for very low gravities the star may not be a white dwarf";
    ABOVE_STABLE_MASS = "star.above-stable-mass", Review,
        "the fitted gravity would need more mass than a stable white dwarf can have",
        "look at the fit: broadened lines (a field, fast rotation, low resolution) imitate high gravity";
    BELOW_SINGLE_STAR_MASS = "star.below-single-star-mass", Note,
        "the mass is lower than single-star evolution makes within the age of the universe",
        "look for a companion or variable velocity; an unresolved pair of white dwarfs also looks like this";
    CORE_AMBIGUOUS = "star.core-composition-ambiguous", Note,
        "the mass allows two kinds of core; the age depends on which it is",
        "quote the age with care";
    OUTSIDE_INITIAL_FINAL_RELATION = "star.outside-initial-final-relation", Note,
        "the mass, or part of its error, lies outside the initial-final mass relation, so the progenitor mass or its error is null", "none needed";
    VELOCITY_IMPLAUSIBLE = "star.velocity-implausible", Review,
        "the radial velocity less the gravitational redshift is faster than escape from the Galaxy",
        "check the wavelength calibration and whether the wavelengths are in air or vacuum";
    ERRORS_TRUNCATED = "star.errors-truncated", Note,
        "part of the error ellipse lies outside the cooling tracks, so the intervals are too narrow",
        "quote the intervals as lower limits";
    COVARIANCE_UNUSABLE = "star.covariance-unusable", Review,
        "the covariance of temperature and gravity is not one, so the values have no errors",
        "look at the fit";
}

/// Finds a code by its identifier.
pub fn find(id: &str) -> Option<&'static Code> {
    TABLE.iter().copied().find(|code| code.id == id)
}
