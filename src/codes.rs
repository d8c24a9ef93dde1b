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

/// What a person or the daemon does about a fault.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Disposition {
    /// May go away by itself: try again, a bounded number of times.
    Retry,
    /// Will never work for this input: report it with its code, go on with the next.
    Reject,
    /// Will fail for every input: stop with a non-zero exit code.
    Stop,
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

    // spectrum: opening
    FILE_MISSING = "file.missing", Reject,
        "the file does not exist", "check the name";
    FILE_NOT_REGULAR = "file.not-regular", Reject,
        "the path is a folder, a pipe, a socket or a device", "give the path of an ordinary file";
    FILE_UNREADABLE = "file.unreadable", Reject,
        "the operating system refused to read the file", "check permissions and the disk";
    FILE_EMPTY = "file.empty", Reject,
        "the file holds no bytes", "write the file again; it may have been picked up before it was whole";
    FILE_TOO_LARGE = "file.too-large", Reject,
        "the file, or what it unpacks to, is larger than the limit",
        "raise largest_file_mb if the file is meant to be this large";
    FILE_BAD_GZIP = "file.bad-gzip", Reject,
        "the file starts like gzip but does not unpack", "compress the file again";
    FILE_NOT_FITS = "file.not-fits", Reject,
        "the file does not start like FITS", "give a FITS file, plain or compressed with gzip";
    FILE_BAD_HEADER = "file.bad-header", Reject,
        "a FITS header breaks the standard in a way that makes the data unsafe to read",
        "write the file with a standard library";
    FILE_TRUNCATED = "file.truncated", Reject,
        "the file ends before the data that its headers declare", "copy the file again";
    EXTENSIONS_MISSING = "file.extensions-missing", Note,
        "the first header announces more extensions than the file has",
        "copy the file again, unless the keyword NEXTEND is left over from the file's origin";
    FILE_BAD_DATA = "file.bad-data", Reject,
        "the FITS library could not read the data of an extension", "write the file with a standard library";

    // spectrum: what the file means
    LAYOUT_UNKNOWN = "spectrum.layout-unknown", Reject,
        "no known layout of a reduced one-dimensional spectrum fits the file",
        "reduce the data to one dimension, or convert the file to a table with wavelength, flux and error";
    NO_SUCH_ROW = "spectrum.no-such-row", Reject,
        "the selected row, aperture or object is not in the file", "choose another row, or none for all";
    LAYOUT_BROKEN = "spectrum.layout-broken", Reject,
        "the file announces a layout but lacks a part of it", "write the file again with the pipeline that makes this layout";
    WAVELENGTH_UNIT_UNKNOWN = "spectrum.wavelength-unit-unknown", Reject,
        "the unit of the wavelengths is missing, not a unit of length, or not known here",
        "set wave_unit to angstrom, nm or um";
    FLUX_UNIT_UNKNOWN = "spectrum.flux-unit-unknown", Reject,
        "the unit of the fluxes is not a flux per wavelength interval, not counts, or not known here",
        "convert to flux per angstrom, or set flux_scale to calibrated or relative";
    MEDIUM_UNKNOWN = "spectrum.medium-unknown", Reject,
        "the file does not say whether its wavelengths are in air or in vacuum",
        "set medium to air or vacuum";
    ERRORS_MISSING = "spectrum.errors-missing", Reject,
        "the file has no errors of the fluxes", "set assume_snr, or give a file with errors";
    ERROR_KIND_UNKNOWN = "spectrum.error-kind-unknown", Reject,
        "the file has a column of errors but does not say of which kind",
        "set error_kind to sigma, variance or inverse_variance";
    RESOLUTION_UNKNOWN = "spectrum.resolution-unknown", Reject,
        "the file does not give its spectral resolution", "set resolution_fwhm_aa or resolving_power";
    UNIT_INFERRED = "spectrum.unit-inferred", Note,
        "the unit of the wavelengths was inferred from their range", "set wave_unit to make it certain";
    FRAME_UNKNOWN = "spectrum.velocity-frame-unknown", Note,
        "the file does not say whether the Earth's motion is taken out of the wavelengths",
        "read the radial velocity as relative to the telescope, or set velocity_frame";
    SETTING_DIFFERS_FROM_FILE = "spectrum.setting-differs-from-file", Note,
        "the configuration and the file state different things; the detail says which was used",
        "remove the setting if the file is right; set overrule_file if it is not";
    ERRORS_ASSUMED = "spectrum.errors-assumed", Note,
        "the file has no errors; they were made from assume_snr", "do not read absolute values of chi-square";
    ARMS_JOINED = "spectrum.arms-joined", Note,
        "several arms or orders of one object were joined, each up to the middle of their overlap", "none needed";
    EXPOSURES_COMBINED = "spectrum.exposures-combined", Note,
        "several exposures of one object were averaged, as configured", "set exposures to apart to have each fitted";
    EXPOSURES_APART = "spectrum.exposures-apart", Note,
        "exposures of one object were not combined, although configured, because their wavelengths differ",
        "rebin them to common wavelengths";
    REST_FRAME = "spectrum.rest-frame", Review,
        "the survey shifted the wavelengths to the star's rest frame; the detail says whether they were shifted back",
        "check the radial velocity against a spectrum that was not shifted";
    FIBRE_WARNING = "spectrum.fibre-warning", Review,
        "the survey raised a warning for this fibre", "look the status up in the survey's documentation";
    MASK_NOT_READ = "spectrum.mask-not-read", Note,
        "the file has a mask in a form that is not read here", "none needed where errors mark bad pixels as well";
    HEADER_CONTRADICTS_ITSELF = "spectrum.header-contradicts-itself", Note,
        "two header entries about the same thing differ; the detail says which was used",
        "check the recorded decision";
    RESOLUTION_COLUMN_IMPLAUSIBLE = "spectrum.resolution-column-implausible", Note,
        "the file's column of widths cannot be widths; it was not used", "check the recorded resolution";
    PADDING_TRIMMED = "spectrum.padding-trimmed", Note,
        "pixels without wavelength or flux at the ends were cut off", "none needed";

    // spectrum: the values
    UNEQUAL_LENGTHS = "spectrum.unequal-lengths", Reject,
        "wavelengths, fluxes, errors and mask differ in length", "write the file again";
    TOO_SHORT = "spectrum.too-short", Reject,
        "too few pixels to hold Balmer lines", "give the whole spectrum";
    WAVELENGTH_NOT_FINITE = "spectrum.wavelength-not-finite", Reject,
        "a wavelength is not a number", "write the file again";
    WAVELENGTH_NOT_ASCENDING = "spectrum.wavelength-not-ascending", Reject,
        "wavelengths repeat or turn back", "sort or rebin the spectrum";
    WAVELENGTH_IMPLAUSIBLE = "spectrum.wavelength-implausible", Reject,
        "wavelengths are outside 100 A to 100 micrometres", "check the unit of the wavelengths";
    TOO_FEW_GOOD_PIXELS = "spectrum.too-few-good-pixels", Reject,
        "masks, missing fluxes and missing errors leave too few pixels", "check the reduction of this object";
    FLUX_ALL_ZERO = "spectrum.flux-all-zero", Reject,
        "every flux is exactly zero", "check the reduction of this object";
    BAD_RESOLUTION = "spectrum.bad-resolution", Reject,
        "the spectral resolution is not positive or not believable", "check resolution_fwhm_aa or resolving_power";

    // reader process
    READER_CRASHED = "reader.crashed", Reject,
        "the process that read the file died",
        "report it with the input file; `emberline refit --failed` tries again";
    READER_MEMORY = "reader.memory-limit", Reject,
        "reading the file needs more memory than there is; for the daemon that is reader.memory_mb",
        "raise reader.memory_mb if the file is meant to be this large, then run `emberline refit --failed`";
    READER_TIME_LIMIT = "reader.time-limit", Reject,
        "reading took longer than reader.time_limit_s, so the process was ended",
        "raise reader.time_limit_s and run `emberline refit --failed`, or report it with the input file";
    READER_BAD_ANSWER = "reader.bad-answer", Reject,
        "the process that read the file answered something that is no answer, so it was ended",
        "report it with the input file";
    READER_NOT_STARTED = "reader.not-started", Reject,
        "no process could be started to read the file",
        "look at the limits of processes and memory of the service, then run `emberline refit --failed`";

    // report
    NO_PARAMETERS = "report.no-parameters", Reject,
        "the fit gave no temperature or no gravity", "see the other flags of this report";
    VALUES_MISSING = "report.values-missing", Review,
        "some values could not be had and are null", "see the other flags of this report";
    REPORT_NOT_WRITTEN = "report.not-written", Reject,
        "a report could not be written to disk", "check that the output folder exists, is writable and has space";
    // fit
    FIT_TOO_FEW_LINES = "fit.too-few-lines", Reject,
        "the spectrum covers too few Balmer line windows to be fitted",
        "give a spectrum of 3 860 - 5 020 A, or choose other lines in the configuration";
    FIT_FAILED = "fit.failed", Reject,
        "the model could not be evaluated", "check the grid with `emberline grid check`";
    FIT_TOO_NOISY = "fit.too-noisy", Reject,
        "the spectrum is too noisy for any statement", "add exposures";
    FIT_LOW_SNR = "fit.low-snr", Note,
        "the spectrum is noisy; errors are large and the screening is weak", "add exposures";
    FIT_POOR = "fit.poor", Review,
        "the best model differs from the data by more than the noise and more than calibration can",
        "look at the figure: a companion, metals, a magnetic field or a bad reduction";
    FIT_ERRORS_TOO_SMALL = "fit.errors-too-small", Note,
        "the model fits within a few per cent, but the errors of the file are smaller than that",
        "check the error column; the reported errors have been scaled up";
    FIT_AT_EDGE = "fit.at-edge", Review,
        "the best solution lies on an edge of the grid", "treat the value as a limit";
    FIT_NOT_CONVERGED = "fit.not-converged", Review,
        "the refinement stopped before gradient and step vanished", "look at the spectrum";
    FIT_WEAK_CHOICE = "fit.weak-choice", Review,
        "a hot and a cold solution explain the spectrum almost equally well",
        "add photometry or a flux-calibrated spectrum";
    FIT_WAVELENGTHS_DISAGREE = "fit.wavelengths-disagree", Review,
        "the lines disagree on the radial velocity: the wavelength scale is wrong, or the star is not single",
        "check the wavelength calibration; Teff and log g were fitted with an offset per line, the velocity is not to be used";
    FIT_THREE_D = "fit.three-d", Note,
        "parameters of one-dimensional models were corrected for three-dimensional convection, or could not be",
        "none needed; both values are in `solutions`";
    FIT_BEYOND_LTE = "fit.beyond-lte", Review,
        "hotter than 60 000 K, where hydrogen lines can no longer be fitted in local thermodynamic equilibrium",
        "the star is hot and hydrogen-rich; take its parameters from models without that assumption";
    FIT_NLTE = "fit.nlte", Note,
        "so hot that line cores depart from LTE: Teff comes out a few per cent too high",
        "use the value with an error of 5 %";
    FIT_UNCERTAIN = "fit.uncertain", Review,
        "the statistical errors are too large for a measurement", "add exposures";
    FIT_PIXELS_SET_ASIDE = "fit.pixels-set-aside", Note,
        "single pixels that no model explains were given no weight", "none needed; see the count";
    // screen
    SCREEN_NO_BALMER = "screen.no-balmer-lines", Reject,
        "no Balmer absorption was detected", "not a DA white dwarf, or too noisy to tell";
    SCREEN_EMISSION = "screen.emission", Reject,
        "the Balmer windows show emission, not absorption", "not a single DA white dwarf";
    SCREEN_NARROW_LINES = "screen.narrow-lines", Reject,
        "the Balmer lines are narrower than those of a white dwarf",
        "probably an A or B star or a hot subdwarf";
    SCREEN_NOT_EXPLAINED = "screen.not-explained", Reject,
        "no DA model comes near the data", "not a DA white dwarf, or a failed reduction";
    SCREEN_CONTINUUM = "screen.continuum-disagrees", Review,
        "the slope of the calibrated continuum contradicts the temperature of the lines",
        "not a DA white dwarf, strong reddening, or a wrong flux calibration";
    SCREEN_HELIUM = "screen.helium-lines", Review,
        "helium absorption beside the Balmer lines", "a DAB, DAO or hot subdwarf candidate: pure-hydrogen values are biased";
    SCREEN_CALCIUM = "screen.calcium-line", Note,
        "calcium K absorption", "a DAZ candidate, or calcium between the stars";

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
    INSTABILITY_STRIP = "star.instability-strip", Note,
        "the star lies where DA white dwarfs pulsate (ZZ Ceti candidate)",
        "time-series photometry would tell; the spectrum is a mean over the pulsation";
    ERRORS_TRUNCATED = "star.errors-truncated", Note,
        "part of the error ellipse lies outside the cooling tracks, so the intervals are too narrow",
        "quote the intervals as lower limits";
    NO_MAGNITUDES = "star.no-magnitudes", Note,
        "the magnitudes, and with them the distance, are null: the model spectra do not reach there, or are missing",
        "none needed within the grid; `emberline grid check` verifies the model spectra";
    COVARIANCE_UNUSABLE = "star.covariance-unusable", Review,
        "the covariance of temperature and gravity is not one, so the values have no errors",
        "look at the fit";
    SERVICE_TABLES = "service.cannot-read-tables", Reject,
        "the model spectra or the evolutionary tracks could not be read",
        "check them with `emberline grid check` and `emberline tracks check`, then start the daemon again";
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
    SERVICE_CATALOGUE = "service.cannot-use-catalogue", Reject,
        "the catalogue could not be read or written",
        "make room on the disk, or make the folder of output.catalogue writable, then start the daemon again";
    SERVICE_LEDGER = "service.cannot-use-ledger", Reject,
        "the ledger could not be read or written",
        "make room on the disk, or make the folder of output.ledger writable, then start the daemon again";
}

/// Finds a code by its identifier.
pub fn find(id: &str) -> Option<&'static Code> {
    TABLE.iter().copied().find(|code| code.id == id)
}
