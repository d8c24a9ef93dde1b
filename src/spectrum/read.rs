//! A path in, observations out: open, recognise, read, settle.

use std::fs::File;
use std::path::Path;

use super::SpectrumFault;
use super::exposures::{self, Exposures};
use super::fits::{self, FileFault, FitsFile, Header};
use super::instrument::Instrument;
use super::observation::{ObjectRecord, Observation, Refusal, SourceRecord};
use super::readers::{self, Layout};
use super::settings::ReadSettings;
use super::settle::{RawSpectrum, settle};
use crate::codes::{self, Code, Disposition, Flag};

/// Reads every object of a file. Never empty: a file that cannot be read at all is one refusal.
pub fn read_file(path: &Path, settings: &ReadSettings) -> Outcomes {
    let shown_path = path.display().to_string();
    match fits::open_regular_file(path) {
        Ok(file) => read_open_file(file, shown_path, settings),
        Err(fault) => vec![Err(Refusal::of_file(shown_path, fault.into()))],
    }
}

/// The same for a file that is open already; `shown_path` is only written into the records.
pub fn read_open_file(file: File, shown_path: String, settings: &ReadSettings) -> Outcomes {
    match fits::read_unpacked(file, settings.largest_bytes()) {
        Ok((bytes, blake3)) => read_unpacked(bytes, blake3, shown_path, settings),
        Err(fault) => vec![Err(Refusal::of_file(shown_path, fault.into()))],
    }
}

/// Reads every object of bytes that were unpacked already; `blake3` is that of the file.
pub fn read_unpacked(
    bytes: Vec<u8>,
    blake3: String,
    shown_path: String,
    settings: &ReadSettings,
) -> Outcomes {
    let source = SourceRecord { path: shown_path, blake3: Some(blake3), ..SourceRecord::default() };
    let outcomes = if let Some((layout, read)) = readers::recognise_text(&bytes) {
        read_layout(layout, || read(&bytes), None, source, settings)
    } else {
        match FitsFile::of_unpacked(bytes) {
            Ok(fits) => read_fits(&fits, source, settings),
            Err(fault) => Err(refuse(source, fault.into())),
        }
    };
    outcomes.unwrap_or_else(|refusal| vec![Err(refusal)])
}

/// The instrument sections that hold for the extensions of a file, each once: what of `settings.instruments`
/// can change what is read from it. None for a file that never can be read; `None` where it cannot be told now.
pub fn instruments_of<'s>(path: &Path, settings: &'s ReadSettings) -> Option<Vec<&'s Instrument>> {
    if settings.instruments.is_empty() {
        return Some(Vec::new());
    }
    let fits = match FitsFile::read(path, settings.largest_bytes()) {
        Ok(fits) => fits,
        Err(fault) => return (fault.disposition() == Disposition::Reject).then(Vec::new),
    };
    let mut found: Vec<&Instrument> = Vec::new();
    for hdu in 0..fits.hdus().len() {
        if let Some(instrument) = settings.layers(&headers(&fits, hdu)).instrument
            && !found.contains(&instrument)
        {
            found.push(instrument);
        }
    }
    Some(found)
}

/// The header of an extension, then the primary one.
fn headers(fits: &FitsFile, hdu: usize) -> Vec<&Header> {
    let hdus = fits.hdus();
    hdus.get(hdu).into_iter().chain(hdus.first()).map(|hdu| &hdu.header).collect()
}

fn refuse(source: SourceRecord, fault: ReadFault) -> Box<Refusal> {
    Box::new(Refusal { object: ObjectRecord::default(), source, fault })
}

/// One entry per object, in the file's order; never empty.
pub type Outcomes = Vec<Result<Observation, Box<Refusal>>>;

/// Reads every object of an opened file; `source` holds path and hash already.
///
/// # Errors
/// What makes the whole file useless, with what is known of its source.
pub fn read_fits(
    fits: &FitsFile,
    source: SourceRecord,
    settings: &ReadSettings,
) -> Result<Outcomes, Box<Refusal>> {
    let missing = fits.missing_extensions();
    let Some((layout, read)) = readers::recognise(fits) else {
        let fault = if missing > 0 {
            let found = fits.hdus().len() as u64 - 1;
            FileFault::Truncated { hdu: 0, what: "announced extensions", found, needed: found + missing }
                .into()
        } else {
            ReadFault::LayoutUnknown { found: readers::describe(fits) }
        };
        return Err(refuse(source, fault));
    };
    read_layout(layout, || read(fits), Some(fits), source, settings)
}

/// Reads and settles every object by the rules of one layout; `fits` is the file, if it is FITS.
fn read_layout(
    layout: &'static Layout,
    read: impl FnOnce() -> Result<Vec<RawSpectrum>, ReadFault>,
    fits: Option<&FitsFile>,
    mut source: SourceRecord,
    settings: &ReadSettings,
) -> Result<Outcomes, Box<Refusal>> {
    source.layout = Some(layout.name.to_owned());
    let mut raws = match read() {
        Ok(raws) => raws,
        Err(fault) => return Err(refuse(source, fault)),
    };
    let found = raws.len();
    if let Some(row) = settings.row {
        // A file with one object and no row number is its own row 0.
        raws.retain(|raw| raw.row.unwrap_or(0) == row);
        if raws.is_empty() {
            return Err(refuse(source, ReadFault::NoSuchRow { row, found }));
        }
    }
    if raws.is_empty() {
        let detail = "found no object in it, need one".to_owned();
        return Err(refuse(source, ReadFault::LayoutBroken { layout: layout.name, detail }));
    }
    let missing = fits.map_or(0, FitsFile::missing_extensions);
    let settle = |mut raw: RawSpectrum| {
        if missing > 0 {
            raw.flags.push(Flag::new(&codes::EXTENSIONS_MISSING, format!("{missing} missing")));
        }
        let headers = fits.map_or_else(Vec::new, |fits| headers(fits, raw.hdu));
        settle(raw, source.clone(), &settings.layers(&headers))
    };
    let keys: Vec<Option<String>> = raws.iter().map(|raw| raw.exposure_of.clone()).collect();
    let outcomes = raws.into_iter().map(settle).collect();
    Ok(match settings.exposures {
        Exposures::Apart => outcomes,
        Exposures::Combine => exposures::combine(outcomes, &keys),
    })
}

/// Why a file or an object in it cannot be read.
#[derive(Debug, thiserror::Error)]
pub enum ReadFault {
    /// The file itself.
    #[error(transparent)]
    File(#[from] FileFault),
    /// No layout fits.
    #[error("cannot recognise the layout: found {found}, need a reduced one-dimensional spectrum")]
    LayoutUnknown {
        /// What is in the file, in one line.
        found: String,
    },
    /// The layout is announced but incomplete.
    #[error("cannot read the {layout} layout: {detail}")]
    LayoutBroken {
        /// Which layout.
        layout: &'static str,
        /// What was found and what was needed.
        detail: String,
    },
    /// A selected row that is not there.
    #[error(
        "cannot select row {row}: found {found} objects that can be used (their rows are in the reports without --row)"
    )]
    NoSuchRow {
        /// The row asked for.
        row: usize,
        /// How many objects the file has.
        found: usize,
    },
    /// No unit of the wavelengths.
    #[error(
        "cannot tell the unit of the wavelengths: found {}, need a unit of length (set wave_unit)",
        or_nothing(found)
    )]
    WaveUnitUnknown {
        /// What the file says.
        found: Option<String>,
    },
    /// No usable unit of the fluxes.
    #[error(
        "cannot use the unit of the fluxes: found {found}, need a flux per wavelength interval or counts (set flux_scale)"
    )]
    FluxUnitUnknown {
        /// What the file says.
        found: String,
    },
    /// Air or vacuum.
    #[error(
        "cannot tell whether the wavelengths are in air or in vacuum: found nothing in the file (set medium)"
    )]
    MediumUnknown,
    /// No errors.
    #[error("cannot weigh the fluxes: found no errors in the file (set assume_snr)")]
    ErrorsMissing,
    /// Errors of an unknown kind.
    #[error("cannot tell what the errors are: found no statement in the file (set error_kind)")]
    ErrorKindUnknown,
    /// No resolution.
    #[error(
        "cannot broaden models to the instrument: found no believable resolution in the file (set resolution_fwhm_aa or resolving_power)"
    )]
    ResolutionUnknown,
    /// Values that the fit may not trust.
    #[error(transparent)]
    Values(#[from] SpectrumFault),
    /// A fault of another process that read for this one, or of that process itself.
    #[error("{detail}")]
    Told {
        /// The row of the table of codes.
        code: &'static Code,
        /// What the daemon does about it.
        disposition: Disposition,
        /// The whole chain of causes.
        detail: String,
    },
}

fn or_nothing(found: &Option<String>) -> &str {
    found.as_deref().unwrap_or("nothing")
}

impl ReadFault {
    /// The row of the table of codes.
    pub fn code(&self) -> &'static Code {
        match self {
            ReadFault::File(fault) => fault.code(),
            ReadFault::LayoutUnknown { .. } => &codes::LAYOUT_UNKNOWN,
            ReadFault::LayoutBroken { .. } => &codes::LAYOUT_BROKEN,
            ReadFault::NoSuchRow { .. } => &codes::NO_SUCH_ROW,
            ReadFault::WaveUnitUnknown { .. } => &codes::WAVELENGTH_UNIT_UNKNOWN,
            ReadFault::FluxUnitUnknown { .. } => &codes::FLUX_UNIT_UNKNOWN,
            ReadFault::MediumUnknown => &codes::MEDIUM_UNKNOWN,
            ReadFault::ErrorsMissing => &codes::ERRORS_MISSING,
            ReadFault::ErrorKindUnknown => &codes::ERROR_KIND_UNKNOWN,
            ReadFault::ResolutionUnknown => &codes::RESOLUTION_UNKNOWN,
            ReadFault::Values(fault) => fault.code(),
            ReadFault::Told { code, .. } => code,
        }
    }

    /// What the daemon does about it.
    pub fn disposition(&self) -> Disposition {
        match self {
            ReadFault::File(fault) => fault.disposition(),
            ReadFault::Values(fault) => fault.disposition(),
            ReadFault::Told { disposition, .. } => *disposition,
            ReadFault::LayoutUnknown { .. }
            | ReadFault::LayoutBroken { .. }
            | ReadFault::NoSuchRow { .. }
            | ReadFault::WaveUnitUnknown { .. }
            | ReadFault::FluxUnitUnknown { .. }
            | ReadFault::MediumUnknown
            | ReadFault::ErrorsMissing
            | ReadFault::ErrorKindUnknown
            | ReadFault::ResolutionUnknown => Disposition::Reject,
        }
    }
}
