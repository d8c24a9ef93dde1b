//! One file per layout of reduced one-dimensional spectra, and the one table of layouts.
//!
//! A reader states what its file says in a `RawSpectrum` per object and decides nothing that the
//! file leaves open; that is the work of `settle`. Layouts are tried in the order of `LAYOUTS`; the
//! first whose `identify` agrees reads the file. The order matters: specific layouts come before
//! general ones, and primary images before tables, because an SDSS image file also carries line lists
//! that look like spectra in tables.

mod arms;
mod calspec;
mod desi;
mod eso_sdp;
mod hst_x1d;
mod image;
mod image_set;
mod iraf_multispec;
mod lamost;
mod object;
mod pypeit;
mod row_stack;
mod sdss_image;
mod sdss_mwm;
mod sdss_plate;
mod sdss_table;
mod table;
mod text;
mod two_df;
mod votable;
mod weave;

use super::axis::{Medium, VelocityFrame};
use super::fits::{FitsFile, Hdu, Header, Kind};
use super::read::ReadFault;
use super::resolution::Resolution;
use super::settle::{RawSpectrum, Stated};

/// One layout: how it is recognised and read.
pub struct Layout {
    /// Stable name, as in the report's `source.layout`.
    pub name: &'static str,
    /// What writes it, one sentence.
    pub title: &'static str,
    /// What in the headers it is recognised by, one sentence.
    pub identified_by: &'static str,
    /// How wavelengths, errors, mask and resolution are known, one sentence.
    pub rule: &'static str,
    /// How it is recognised and read.
    pub reader: Reader,
}

/// What a layout's files are made of.
#[derive(Clone, Copy)]
pub enum Reader {
    /// FITS.
    Fits {
        /// Whether a file has this layout; looks at headers only.
        identify: fn(&FitsFile) -> bool,
        /// Every object in the file.
        read: fn(&FitsFile) -> Result<Vec<RawSpectrum>, ReadFault>,
    },
    /// Lines of text.
    Text {
        /// Whether bytes that are no FITS have this layout.
        identify: fn(&[u8]) -> bool,
        /// Every object in the file.
        read: fn(&[u8]) -> Result<Vec<RawSpectrum>, ReadFault>,
    },
}

/// All layouts in the order in which they are tried.
pub static LAYOUTS: &[Layout] = &[
    eso_sdp::LAYOUT,
    desi::LAYOUT,
    weave::LAYOUT,
    sdss_mwm::LAYOUT,
    sdss_table::LAYOUT,
    sdss_image::LAYOUT,
    sdss_plate::LAYOUT,
    lamost::LAYOUT,
    hst_x1d::LAYOUT,
    pypeit::LAYOUT,
    two_df::LAYOUT,
    calspec::LAYOUT,
    iraf_multispec::LAYOUT,
    image_set::LAYOUT,
    image::LAYOUT,
    table::LAYOUT,
    row_stack::LAYOUT,
    votable::LAYOUT,
    text::LAYOUT,
];

/// A function from a file to every object in it.
type ReadAll<F> = fn(&F) -> Result<Vec<RawSpectrum>, ReadFault>;

/// The layout of a FITS file, if it is a known one, and its reader.
pub fn recognise(fits: &FitsFile) -> Option<(&'static Layout, ReadAll<FitsFile>)> {
    LAYOUTS.iter().find_map(|layout| match layout.reader {
        Reader::Fits { identify, read } if identify(fits) => Some((layout, read)),
        Reader::Fits { .. } | Reader::Text { .. } => None,
    })
}

/// The layout of bytes that are no FITS, if it is a known one, and its reader.
pub fn recognise_text(bytes: &[u8]) -> Option<(&'static Layout, ReadAll<[u8]>)> {
    LAYOUTS.iter().find_map(|layout| match layout.reader {
        Reader::Text { identify, read } if identify(bytes) => Some((layout, read)),
        Reader::Text { .. } | Reader::Fits { .. } => None,
    })
}

/// All layouts in words, as Markdown: for `emberline check --layouts` and the documentation.
pub fn describe_layouts() -> String {
    let mut words =
        String::from("| layout | written by | recognised by | what is taken from it |\n|---|---|---|---|\n");
    for Layout { name, title, identified_by, rule, .. } in LAYOUTS {
        words.push_str(&format!("| `{name}` | {title} | {identified_by} | {rule} |\n"));
    }
    words
}

/// What is in a file, in one line, for the message that refuses it.
pub fn describe(fits: &FitsFile) -> String {
    const MOST_SHOWN: usize = 6;
    let mut parts: Vec<String> = fits.hdus().iter().take(MOST_SHOWN).map(describe_hdu).collect();
    if fits.hdus().len() > MOST_SHOWN {
        parts.push(format!("and {} more", fits.hdus().len() - MOST_SHOWN));
    }
    parts.join(", ")
}

fn describe_hdu(hdu: &Hdu) -> String {
    match &hdu.kind {
        Kind::Empty => "no data".to_owned(),
        Kind::Image(image) => {
            let axes: Vec<String> = image.axes.iter().map(u64::to_string).collect();
            format!("an image of {}", axes.join(" x "))
        }
        Kind::Table(table) => {
            let names: Vec<&str> = table.columns.iter().take(8).map(|column| column.name.as_str()).collect();
            format!("a table of {} rows ({})", table.rows, names.join(" "))
        }
        Kind::Unsupported(reason) => reason.clone(),
    }
}

/// The first table that has all these columns.
fn table_with<'a>(fits: &'a FitsFile, columns: &[&str]) -> Option<&'a Hdu> {
    fits.hdus().iter().find(|hdu| hdu.table().is_some_and(|table| table.has_columns(columns)))
}

/// A fault of a layout that announced itself but lacks a part.
fn broken(layout: &'static str, detail: impl Into<String>) -> ReadFault {
    ReadFault::LayoutBroken { layout, detail: detail.into() }
}

/// The unit that a table gives for a column, with its place.
fn column_unit<'a>(hdu: &'a Hdu, name: &str) -> (String, Option<&'a str>) {
    match hdu.table().and_then(|table| table.column(name)) {
        Some(column) => (format!("TUNIT{}", column.position), column.unit.as_deref()),
        None => ("TUNIT".to_owned(), None),
    }
}

/// What headers say about the medium, in the keywords that say it.
fn stated_medium(headers: &[&Header]) -> Option<Stated<Medium>> {
    headers.iter().find_map(|header| {
        if let Some(is_vacuum) = header.logical("VACUUM") {
            let medium = if is_vacuum { Medium::Vacuum } else { Medium::Air };
            return Some(Stated::new(medium, format!("VACUUM = {}", if is_vacuum { 'T' } else { 'F' })));
        }
        let words = header.text("AIRORVAC")?;
        let medium = match words.to_ascii_lowercase().as_str() {
            "vac" | "vacuum" => Medium::Vacuum,
            "air" => Medium::Air,
            _ => return None,
        };
        Some(Stated::new(medium, format!("AIRORVAC = '{words}'")))
    })
}

/// What headers say about the observer, in the keywords of the FITS standard and its relatives.
fn stated_frame(headers: &[&Header]) -> Option<Stated<VelocityFrame>> {
    headers.iter().find_map(|header| {
        if let Some(words) = header.text("SPECSYS") {
            let frame = match words.to_ascii_uppercase().as_str() {
                "TOPOCENT" => VelocityFrame::Topocentric,
                "HELIOCEN" => VelocityFrame::Heliocentric,
                "BARYCENT" => VelocityFrame::Barycentric,
                _ => return None,
            };
            return Some(Stated::new(frame, format!("SPECSYS = '{words}'")));
        }
        (header.logical("HELIO") == Some(true)).then(|| Stated::new(VelocityFrame::Heliocentric, "HELIO = T"))
    })
}

/// Resolving power from the keyword of the ESO data products standard.
fn stated_power(headers: &[&Header]) -> Option<Stated<Resolution>> {
    let power = headers.iter().find_map(|header| header.real("SPEC_RES")).filter(|power| *power > 0.0)?;
    Some(Stated::new(Resolution::ResolvingPower(power), format!("SPEC_RES = {power}")))
}
