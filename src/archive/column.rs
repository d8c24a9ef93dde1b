//! The columns of the catalogue: one table from which SQL, exports and their descriptions are made.
//!
//! A column names the place in the report (a JSON pointer) that it is filled from. Names are the
//! report's keys with their unit suffixes; a name never changes its meaning.

use std::sync::LazyLock;

use serde_json::Value;

/// What a column holds.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    /// UTF-8 text.
    Text,
    /// 64-bit integer.
    Integer,
    /// 64-bit float.
    Float,
}

/// One column.
#[derive(Debug, Clone)]
pub struct Column {
    /// Name in SQL and in every export.
    pub name: String,
    /// What it holds.
    pub kind: Kind,
    /// Unit in VOUnit notation; empty for none.
    pub unit: &'static str,
    /// Unified content descriptor, UCD 1+.
    pub ucd: String,
    /// One line of description.
    pub description: String,
    /// Where it comes from.
    pub origin: Origin,
}

/// Where a column's value comes from.
#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Origin {
    /// A place in the report.
    Report(String),
    /// The codes of all flags, separated by spaces.
    FlagCodes,
    /// HEALPix cell of the position.
    Healpix,
    /// The catalogue itself.
    Catalogue,
}

/// One value of a row.
#[derive(Debug, Clone, PartialEq)]
pub enum Cell {
    /// Nothing is known.
    Null,
    /// Text.
    Text(String),
    /// Integer.
    Integer(i64),
    /// Float, finite.
    Float(f64),
}

/// Column that identifies a row: the report's path below the folder of reports.
pub const REPORT: &str = "report";
/// Column of the pointer to the report in force: the rows of one spectrum share it.
pub const POINTER: &str = "pointer";
/// Column that tells whether a row is in force.
pub const IS_CURRENT: &str = "is_current";
/// Order of the HEALPix index: cells of 0.8 arcsec.
pub const HEALPIX_ORDER: u8 = 18;

/// All columns, in the order of every export.
pub fn columns() -> &'static [Column] {
    static COLUMNS: LazyLock<Vec<Column>> = LazyLock::new(make);
    &COLUMNS
}

type Plain = (&'static str, &'static str, Kind, &'static str, &'static str, &'static str);

/// Name, place, kind, unit, UCD, description.
const PLAIN: [Plain; 26] = [
    ("schema_version", "/schema_version", Kind::Integer, "", "meta.version", "Version of the report's keys"),
    (
        "object_name",
        "/object/name",
        Kind::Text,
        "",
        "meta.id;meta.main",
        "Name of the star as the file gives it",
    ),
    ("ra_deg", "/object/ra_deg", Kind::Float, "deg", "pos.eq.ra;meta.main", "Right ascension, ICRS or J2000"),
    ("dec_deg", "/object/dec_deg", Kind::Float, "deg", "pos.eq.dec;meta.main", "Declination, ICRS or J2000"),
    ("survey_id", "/object/survey_id", Kind::Text, "", "meta.id", "Identifiers of the survey"),
    (
        "observed_at",
        "/object/observed_at",
        Kind::Text,
        "",
        "time.start;obs",
        "Start of the observation as the file gives it",
    ),
    ("exposure_s", "/object/exposure_s", Kind::Float, "s", "time.duration;obs.exposure", "Exposure time"),
    ("airmass", "/object/airmass", Kind::Float, "", "obs.airMass", "Airmass"),
    ("instrument", "/object/instrument", Kind::Text, "", "meta.id;instr", "Telescope and instrument"),
    ("program", "/object/program", Kind::Text, "", "meta.id;obs.proposal", "Observing programme"),
    ("source_path", "/source/path", Kind::Text, "", "meta.id;meta.file", "Path of the spectrum"),
    (
        "source_blake3",
        "/source/blake3",
        Kind::Text,
        "",
        "meta.checksum",
        "BLAKE3 hash of the spectrum's file",
    ),
    ("source_hdu", "/source/hdu", Kind::Integer, "", "meta.number", "HDU of the fluxes, from 0"),
    ("source_row", "/source/row", Kind::Integer, "", "meta.number", "Row, fibre or aperture, from 0"),
    ("layout", "/source/layout", Kind::Text, "", "meta.note", "Recognised layout of the file"),
    (
        "velocity_frame",
        "/source/velocity_frame",
        Kind::Text,
        "",
        "meta.note",
        "Rest frame of the wavelengths",
    ),
    ("verdict", "/verdict", Kind::Text, "", "meta.code.qual", "accepted, review or rejected"),
    ("branch", "/solutions/0/branch", Kind::Text, "", "meta.code", "Side of the Balmer maximum: hot or cold"),
    ("chi2", "/solutions/0/chi2", Kind::Float, "", "stat.fit.chi2", "Chi-square of the chosen solution"),
    ("dof", "/solutions/0/dof", Kind::Integer, "", "stat.fit.dof", "Degrees of freedom"),
    (
        "probability",
        "/solutions/0/probability",
        Kind::Float,
        "",
        "stat.probability",
        "Probability of the chosen solution",
    ),
    (
        "software_version",
        "/provenance/version",
        Kind::Text,
        "",
        "meta.version;meta.software",
        "Version of Emberline",
    ),
    (
        "config_fingerprint",
        "/provenance/config_fingerprint",
        Kind::Text,
        "",
        "meta.id",
        "Fingerprint of the configuration",
    ),
    (
        "grid_blake3",
        "/provenance/grid_blake3",
        Kind::Text,
        "",
        "meta.checksum",
        "BLAKE3 hash of the model spectra",
    ),
    ("tracks", "/provenance/tracks", Kind::Text, "", "meta.checksum", "Checksum of the evolutionary tracks"),
    ("fitted_at", "/provenance/fitted_at", Kind::Text, "", "time.processing", "When it was fitted, UTC"),
];

/// Fitted parameters: key, unit, UCD, description.
const PARAMETERS: [(&str, &str, &str, &str); 3] = [
    ("teff_k", "K", "phys.temperature.effective", "Effective temperature"),
    ("log_g", "", "phys.gravity", "Surface gravity, log10 of cm s**-2"),
    ("radial_velocity_km_s", "km.s**-1", "spect.dopplerVeloc", "Radial velocity, positive receding"),
];

/// What follows for the star: key, name, unit, UCD, description.
const STAR: [(&str, &str, &str, &str, &str); 17] = [
    ("mass_msun", "mass_msun", "solMass", "phys.mass", "Mass"),
    ("radius_rsun", "radius_rsun", "solRad", "phys.size.radius", "Radius"),
    ("luminosity_lsun", "luminosity_lsun", "solLum", "phys.luminosity", "Luminosity"),
    (
        "gravitational_redshift_km_s",
        "gravitational_redshift_km_s",
        "km.s**-1",
        "spect.dopplerVeloc",
        "Gravitational redshift",
    ),
    ("cooling_age_gyr", "cooling_age_gyr", "Gyr", "time.age", "Cooling age"),
    ("progenitor_mass_msun", "progenitor_mass_msun", "solMass", "phys.mass", "Mass on the main sequence"),
    ("mean_density_g_cm3", "mean_density_g_cm3", "g.cm**-3", "phys.density", "Mean density"),
    (
        "absolute_magnitude/gaia_g",
        "abs_mag_gaia_g",
        "mag",
        "phys.magAbs;em.opt",
        "Absolute magnitude, Gaia DR3 G",
    ),
    (
        "absolute_magnitude/gaia_bp",
        "abs_mag_gaia_bp",
        "mag",
        "phys.magAbs;em.opt.B",
        "Absolute magnitude, Gaia DR3 BP",
    ),
    (
        "absolute_magnitude/gaia_rp",
        "abs_mag_gaia_rp",
        "mag",
        "phys.magAbs;em.opt.R",
        "Absolute magnitude, Gaia DR3 RP",
    ),
    (
        "absolute_magnitude/sdss_u",
        "abs_mag_sdss_u",
        "mag",
        "phys.magAbs;em.opt.U",
        "Absolute magnitude, SDSS u, AB",
    ),
    (
        "absolute_magnitude/sdss_g",
        "abs_mag_sdss_g",
        "mag",
        "phys.magAbs;em.opt.B",
        "Absolute magnitude, SDSS g, AB",
    ),
    (
        "absolute_magnitude/sdss_r",
        "abs_mag_sdss_r",
        "mag",
        "phys.magAbs;em.opt.R",
        "Absolute magnitude, SDSS r, AB",
    ),
    (
        "absolute_magnitude/sdss_i",
        "abs_mag_sdss_i",
        "mag",
        "phys.magAbs;em.opt.I",
        "Absolute magnitude, SDSS i, AB",
    ),
    (
        "absolute_magnitude/sdss_z",
        "abs_mag_sdss_z",
        "mag",
        "phys.magAbs;em.opt.I",
        "Absolute magnitude, SDSS z, AB",
    ),
    (
        "absolute_magnitude/johnson_v",
        "abs_mag_johnson_v",
        "mag",
        "phys.magAbs;em.opt.V",
        "Absolute magnitude, Johnson V",
    ),
    ("distance_pc", "distance_pc", "pc", "pos.distance", "Spectroscopic distance"),
];

fn make() -> Vec<Column> {
    let text = |name: &str, ucd: &str, description: &str, origin: Origin| Column {
        name: name.to_owned(),
        kind: Kind::Text,
        unit: "",
        ucd: ucd.to_owned(),
        description: description.to_owned(),
        origin,
    };
    let mut columns = vec![
        text(REPORT, "meta.id;meta.file", "Path of the report, which identifies the row", Origin::Catalogue),
        text(POINTER, "meta.ref", "Pointer that all rows of one spectrum share", Origin::Catalogue),
        Column {
            kind: Kind::Integer,
            ..text(IS_CURRENT, "meta.code", "1 if the row is in force, 0 if superseded", Origin::Catalogue)
        },
    ];
    columns.extend(PLAIN.map(|(name, place, kind, unit, ucd, description)| Column {
        name: name.to_owned(),
        kind,
        unit,
        ucd: ucd.to_owned(),
        description: description.to_owned(),
        origin: Origin::Report(place.to_owned()),
    }));
    columns.push(text("flags", "meta.code", "Codes of all flags, separated by spaces", Origin::FlagCodes));
    columns.push(Column {
        kind: Kind::Integer,
        ..text("healpix_18", "pos.healpix", "HEALPix cell of the position, order 18, nested", Origin::Healpix)
    });
    for (key, unit, ucd, description) in PARAMETERS {
        let parts = [
            ("value", "", "", ""),
            ("err_stat", "_err_stat", "stat.error;", ", error from the noise"),
            ("err_external", "_err_external", "stat.error.sys;", ", external error"),
            ("err_total", "_err_total", "stat.error;", ", total error"),
        ];
        columns.extend(
            parts.map(|part| float(key, &format!("/parameters/{key}"), unit, ucd, description, part)),
        );
    }
    for (key, name, unit, ucd, description) in STAR {
        let parts = [
            ("value", "", "", ""),
            ("err_minus", "_err_minus", "stat.error;", ", down to the 16th percentile"),
            ("err_plus", "_err_plus", "stat.error;", ", up to the 84th percentile"),
        ];
        columns.extend(parts.map(|part| float(name, &format!("/star/{key}"), unit, ucd, description, part)));
    }
    columns
}

/// One part (key, suffix of the name, head of the UCD, tail of the description) of a value.
fn float(
    name: &str,
    place: &str,
    unit: &'static str,
    ucd: &str,
    description: &str,
    (key, suffix, ucd_head, tail): (&str, &str, &str, &str),
) -> Column {
    Column {
        name: format!("{name}{suffix}"),
        kind: Kind::Float,
        unit,
        // A primary word is followed by at most what it applies to.
        ucd: format!("{ucd_head}{ucd}"),
        description: format!("{description}{tail}"),
        origin: Origin::Report(format!("{place}/{key}")),
    }
}

/// The cells of a report (any schema version: what it lacks is null), in the order of [`columns`].
pub fn row(report: &Value, report_path: &str, pointer: &str, is_current: bool) -> Vec<Cell> {
    columns()
        .iter()
        .map(|column| match &column.origin {
            Origin::Report(place) => {
                report.pointer(place).map_or(Cell::Null, |value| cell(value, column.kind))
            }
            Origin::FlagCodes => Cell::Text(flag_codes(report)),
            Origin::Healpix => healpix(report).map_or(Cell::Null, Cell::Integer),
            Origin::Catalogue => match column.name.as_str() {
                REPORT => Cell::Text(report_path.to_owned()),
                POINTER => Cell::Text(pointer.to_owned()),
                _ => Cell::Integer(i64::from(is_current)),
            },
        })
        .collect()
}

fn cell(value: &Value, kind: Kind) -> Cell {
    match kind {
        Kind::Text => value.as_str().map_or(Cell::Null, |text| Cell::Text(printable(text))),
        Kind::Integer => value.as_i64().map_or(Cell::Null, Cell::Integer),
        Kind::Float => value.as_f64().filter(|number| number.is_finite()).map_or(Cell::Null, Cell::Float),
    }
}

/// Control characters become the replacement character: XML has none, NUL ends a string in C and in FITS, and
/// PostgreSQL refuses it, and readers of text change CR. Line feeds and tabs stay.
fn printable(text: &str) -> String {
    let is_illegal =
        |c: char| (c.is_control() && !matches!(c, '\t' | '\n')) || matches!(c, '\u{fffe}' | '\u{ffff}');
    text.replace(is_illegal, "\u{fffd}")
}

fn flag_codes(report: &Value) -> String {
    let flags = report.get("flags").and_then(Value::as_array);
    let codes = flags.into_iter().flatten().filter_map(|flag| flag.get("code")?.as_str());
    codes.collect::<Vec<_>>().join(" ")
}

fn healpix(report: &Value) -> Option<i64> {
    let degrees = |place: &str| report.pointer(place).and_then(Value::as_f64);
    let (ra_deg, dec_deg) = (degrees("/object/ra_deg")?, degrees("/object/dec_deg")?);
    let is_position = (-360.0..=360.0).contains(&ra_deg) && (-90.0..=90.0).contains(&dec_deg);
    is_position.then(|| {
        let cell = cdshealpix::nested::hash(HEALPIX_ORDER, ra_deg.to_radians(), dec_deg.to_radians());
        // 12 * 4^18 cells: far below 2^63.
        cell as i64
    })
}
