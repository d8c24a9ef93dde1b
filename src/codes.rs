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

    SERVICE_TIME_LIMIT = "service.time-limit", Reject,
        "the file took longer than workers.time_limit_s, so its thread was given up",
        "raise workers.time_limit_s and run `emberline refit --failed`, or report it with the input file";
    SERVICE_INTERRUPTED = "service.interrupted-too-often", Reject,
        "the daemon died each time while it worked on the file",
        "look for out-of-memory kills in the system log, then run `emberline refit --failed`";
    SERVICE_NO_WORKERS = "service.no-workers-left", Reject,
        "so many threads were given up that none is left",
        "look at the files with service.time-limit in `emberline status`, then restart the daemon";
    SERVICE_OUTPUT = "service.cannot-write-output", Reject,
        "a report could not be written",
        "make room on the disk, or make the folder output.reports writable, then start the daemon again";
    SERVICE_LEDGER = "service.cannot-use-ledger", Reject,
        "the ledger could not be read or written",
        "make room on the disk, or make the folder of output.ledger writable, then start the daemon again";
}

/// Finds a code by its identifier.
pub fn find(id: &str) -> Option<&'static Code> {
    TABLE.iter().copied().find(|code| code.id == id)
}
