//! What the readers hand over: a spectrum, whose it is, where it came from, and how everything
//! that files leave open was settled.

use schemars::JsonSchema;
use serde::{Deserialize, Serialize};

use super::axis::{Medium, VelocityFrame};
use super::instrument::InstrumentRecord;
use super::{ReadFault, Spectrum};
use crate::codes::Flag;

/// One spectrum of one object.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
pub struct Observation {
    /// The checked values.
    pub spectrum: Spectrum,
    /// Whose light it is.
    pub object: ObjectRecord,
    /// Where it came from.
    pub source: SourceRecord,
    /// What had to be settled and is worth telling.
    pub flags: Vec<Flag>,
}

/// One object, or one whole file, that could not be read.
#[derive(Debug)]
pub struct Refusal {
    /// As much as is known.
    pub object: ObjectRecord,
    /// As much as is known; the path always.
    pub source: SourceRecord,
    /// Why.
    pub fault: ReadFault,
}

impl Refusal {
    /// The refusal of a file of which only the path is known.
    pub fn of_file(path: String, fault: ReadFault) -> Box<Self> {
        let source = SourceRecord { path, ..SourceRecord::default() };
        Box::new(Refusal { object: ObjectRecord::default(), source, fault })
    }
}

/// Whose light it is, as the file says; unknown is `null`.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct ObjectRecord {
    /// Name of the star.
    pub name: Option<String>,
    /// Right ascension of the object (not of the telescope), degrees, ICRS or J2000.
    pub ra_deg: Option<f64>,
    /// Declination of the object, degrees.
    pub dec_deg: Option<f64>,
    /// Epoch of the position, Julian year, where the file gives one.
    pub position_epoch_yr: Option<f64>,
    /// Identifiers of the survey (plate, fibre, target id ...), in one line.
    pub survey_id: Option<String>,
    /// Start of the observation as the file gives it, or its modified Julian date.
    pub observed_at: Option<String>,
    /// Exposure time, s.
    pub exposure_s: Option<f64>,
    /// Airmass, 1 or more.
    pub airmass: Option<f64>,
    /// Telescope and instrument.
    pub instrument: Option<String>,
    /// Where the telescope stands: name, or geographic coordinates.
    pub site: Option<String>,
    /// Observing programme.
    pub program: Option<String>,
}

/// Where a spectrum came from.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct SourceRecord {
    /// Path as it was given.
    pub path: String,
    /// BLAKE3 of the file's bytes as they lie on disk.
    pub blake3: Option<String>,
    /// HDU of the fluxes, from 0.
    pub hdu: Option<usize>,
    /// Row, fibre or aperture within the HDU, from 0.
    pub row: Option<usize>,
    /// Name of the recognised layout.
    pub layout: Option<String>,
    /// Medium of the file's wavelengths (inside the program all are vacuum).
    pub medium: Option<Medium>,
    /// Observer to whom the wavelengths refer.
    pub velocity_frame: Option<VelocityFrame>,
    /// Pixels handed to the fit.
    pub pixels: Option<usize>,
    /// Shortest vacuum wavelength, A.
    pub wave_min_vac_aa: Option<f64>,
    /// Longest vacuum wavelength, A.
    pub wave_max_vac_aa: Option<f64>,
    /// Median FWHM of the instrument, A.
    pub fwhm_median_aa: Option<f64>,
    /// Whether fluxes are in erg s^-1 cm^-2 A^-1.
    pub is_flux_calibrated: Option<bool>,
    /// The section of the configuration that was used for this instrument, and what it did.
    pub instrument_section: Option<InstrumentRecord>,
    /// How each of these was known.
    pub decided_by: Decisions,
}

/// For each thing that files may leave open: what was used and who said so.
#[derive(Debug, Clone, Default, PartialEq, Eq, Serialize, Deserialize, JsonSchema)]
#[serde(deny_unknown_fields)]
pub struct Decisions {
    /// Unit of the wavelengths.
    pub wave_unit: Option<String>,
    /// Air or vacuum.
    pub medium: Option<String>,
    /// Scale of the fluxes.
    pub flux_scale: Option<String>,
    /// Kind of the errors.
    pub error_kind: Option<String>,
    /// Spectral resolution.
    pub resolution: Option<String>,
    /// Velocity frame.
    pub velocity_frame: Option<String>,
}
