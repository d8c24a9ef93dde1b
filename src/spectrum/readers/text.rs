//! Text: ECSV, CSV, and plain columns of numbers.
//!
//! Columns come from the ECSV header, from a line of names, or from their order (wavelength, flux, error).
//! Units are taken from the ECSV header alone. Lines of comment `KEY = value` or `KEY: value` are read like
//! header cards, so that OBJECT, VACUUM or SPEC_RES work as in FITS. What a third column without a name holds is
//! left open. Anything that is not numbers in every line is refused; empty fields, `nan` and `--` are
//! missing values.

use super::{Layout, broken, object, table};
use crate::spectrum::fits::Header;
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::{RawSpectrum, Stated, UnitWords};

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "text",
    title: "text: ECSV, CSV or columns of numbers: wavelength, flux, error",
    identified_by: "no FITS; lines of two or more numbers, perhaps behind comments and one line of names",
    rule: "units from ECSV; kind of error and medium from the column's name; comments KEY = value like header cards; a third column without name needs error_kind",
    reader: super::Reader::Text { identify, read },
};

/// Bytes that are looked at to tell text from everything else.
const LOOKED_AT: usize = 65_536;
/// Lines of numbers that make text a table.
const FEWEST_LINES: usize = 3;
/// Longest line that is no accident.
const LONGEST_LINE: usize = 4096;

fn identify(bytes: &[u8]) -> bool {
    let start = &bytes[..bytes.len().min(LOOKED_AT)];
    // A character may be cut at the end.
    let text = match std::str::from_utf8(start) {
        Ok(text) => text,
        Err(error) if start.len() == LOOKED_AT && error.valid_up_to() + 4 > LOOKED_AT => {
            std::str::from_utf8(&start[..error.valid_up_to()]).unwrap_or_default()
        }
        Err(_) => return false,
    };
    let is_numbers = |line: &&str| {
        let fields = split(line);
        line.len() <= LONGEST_LINE && fields.len() >= 2 && fields.iter().all(|field| number(field).is_some())
    };
    let mut lines =
        text.lines().filter(|line| !line.trim().is_empty() && !line.trim_start().starts_with('#'));
    // One line may hold names.
    let first = lines.next();
    let numbers =
        lines.take(FEWEST_LINES).filter(is_numbers).count() + usize::from(first.iter().any(is_numbers));
    numbers >= FEWEST_LINES
}

/// Fields of one line, separated by commas, semicolons, or blanks where there is neither.
fn split(line: &str) -> Vec<&str> {
    match [',', ';'].into_iter().find(|separator| line.contains(*separator)) {
        Some(separator) => line.split(separator).map(|field| field.trim().trim_matches('"')).collect(),
        None => line.split_whitespace().map(|field| field.trim_matches('"')).collect(),
    }
}

/// A number, NaN for a missing value, none for words.
pub fn number(field: &str) -> Option<f64> {
    match field.to_ascii_lowercase().as_str() {
        "" | "nan" | "na" | "n/a" | "--" | "null" | "none" => Some(f64::NAN),
        "true" => Some(1.0),
        "false" => Some(0.0),
        word => word.replace('d', "e").parse().ok(),
    }
}

/// A column as the file describes it.
#[derive(Debug, Default, Clone)]
pub struct Column {
    /// Its name.
    pub name: String,
    /// Its unit, in the file's words.
    pub unit: Option<String>,
}

/// What a table in text holds.
#[derive(Default)]
pub struct Contents {
    /// One per column; empty if the file names none.
    pub columns: Vec<Column>,
    /// The values of each column.
    pub values: Vec<Vec<f64>>,
    /// Keys and values that stand beside the table, as header cards.
    cards: String,
}

fn read(bytes: &[u8]) -> Result<Vec<RawSpectrum>, ReadFault> {
    let text = std::str::from_utf8(bytes).map_err(|error| {
        broken(LAYOUT.name, format!("found bytes that are no text at {}", error.valid_up_to()))
    })?;
    Ok(vec![parse(text)?.into_raw(LAYOUT.name)?])
}

/// Whether a column of this name has a role in a spectrum.
pub fn is_known(name: &str) -> bool {
    let mut names = table::WAVE_NAMES.iter().chain(table::FLUX_NAMES);
    names.any(|known| known.eq_ignore_ascii_case(name))
        || table::ERROR_KINDS
            .iter()
            .any(|(names, _)| names.iter().any(|known| known.eq_ignore_ascii_case(name)))
}

impl Contents {
    /// The spectrum that the columns make.
    ///
    /// # Errors
    /// There is no column of wavelengths or of fluxes.
    pub fn into_raw(self, layout: &'static str) -> Result<RawSpectrum, ReadFault> {
        let header = Header::parse(self.cards.as_bytes());
        let headers = [&header];
        let find = |names: &[&str]| {
            names.iter().find_map(|name| self.columns.iter().position(|c| c.name.eq_ignore_ascii_case(name)))
        };
        let is_named = !self.columns.is_empty();
        let (wave, flux) = if is_named {
            find(table::WAVE_NAMES)
                .zip(find(table::FLUX_NAMES))
                .ok_or_else(|| broken(layout, "found no columns of wavelength and flux by name"))?
        } else {
            (0, 1)
        };
        let error = if is_named {
            table::ERROR_KINDS.into_iter().find_map(|(names, kind)| find(names).map(|column| (column, kind)))
        } else {
            (self.values.len() > 2).then_some((2, None))
        };
        let is_good = find(table::GOOD_NAMES)
            .map(|column| (column, 1.0))
            .or_else(|| find(table::BAD_NAMES).map(|column| (column, 0.0)))
            .map(|(column, good)| self.values[column].iter().map(|value| *value == good).collect());
        let name = |column: usize| self.columns.get(column).map_or("", |column| column.name.as_str());
        let unit = |column: usize| self.columns.get(column).and_then(|column| column.unit.as_deref());
        let is_log = name(wave).eq_ignore_ascii_case("loglam");
        let values = |column: usize| self.values[column].clone();
        Ok(RawSpectrum {
            object: object::from_headers(&headers),
            wave: if is_log {
                values(wave).iter().map(|log| 10f64.powf(*log)).collect()
            } else {
                values(wave)
            },
            flux: values(flux),
            errors: error.map(|(column, _)| values(column)),
            is_good,
            wave_unit: UnitWords::of_wavelength("unit of the column", unit(wave)),
            flux_unit: UnitWords::of_flux("unit of the column", unit(flux)),
            error_kind: error
                .and_then(|(column, kind)| Some(Stated::new(kind?, format!("column {}", name(column))))),
            medium: table::medium_of_name(name(wave)).or_else(|| super::stated_medium(&headers)),
            resolution: super::stated_power(&headers),
            velocity_frame: super::stated_frame(&headers),
            ..RawSpectrum::default()
        })
    }

    /// Writes a key and a value as a header card, if the key could stand in one.
    pub fn add_card(&mut self, key: &str, value: &str) {
        let key = key.trim().to_ascii_uppercase();
        let value = value.trim().trim_matches(['\'', '"']);
        let is_key = |c: char| c.is_ascii_uppercase() || c.is_ascii_digit() || c == '_' || c == '-';
        if key.is_empty() || key.len() > 8 || !key.chars().all(is_key) || value.is_empty() {
            return;
        }
        let is_plain = value.parse::<f64>().is_ok() || value == "T" || value == "F";
        let field = match value {
            "true" => "T".to_owned(),
            "false" => "F".to_owned(),
            _ if is_plain => value.to_owned(),
            _ => format!("'{}'", value.replace('\'', "''")),
        };
        let card = format!("{key:8}= {field}");
        // A card has 80 bytes; what does not fit is not read.
        if card.is_ascii() && card.len() <= 80 {
            self.cards.push_str(&format!("{card:80}"));
        }
    }
}

fn parse(text: &str) -> Result<Contents, ReadFault> {
    let mut contents = Contents::default();
    let mut is_first = true;
    for (number_of_line, line) in text.lines().enumerate() {
        let line = line.trim();
        if let Some(comment) = line.strip_prefix('#') {
            read_comment(comment.trim(), &mut contents);
            continue;
        }
        if line.is_empty() {
            continue;
        }
        let fields = split(line);
        let numbers: Option<Vec<f64>> = fields.iter().map(|field| number(field)).collect();
        let at = number_of_line + 1;
        match numbers {
            Some(numbers) => add_line(&mut contents, &numbers, at)?,
            None if is_first => name_columns(&mut contents, &fields),
            None => return Err(broken(LAYOUT.name, format!("found words instead of numbers in line {at}"))),
        }
        is_first = false;
    }
    if contents.columns.is_empty() && contents.values.len() > 3 {
        let detail = format!("found {} columns without names, need at most 3", contents.values.len());
        return Err(broken(LAYOUT.name, detail));
    }
    if contents.values.len() < 2
        || !(contents.columns.is_empty() || contents.columns.len() == contents.values.len())
    {
        let detail = format!("found {} names for {} columns", contents.columns.len(), contents.values.len());
        return Err(broken(LAYOUT.name, detail));
    }
    Ok(contents)
}

fn add_line(contents: &mut Contents, numbers: &[f64], at: usize) -> Result<(), ReadFault> {
    if contents.values.is_empty() {
        contents.values = vec![Vec::new(); numbers.len()];
    }
    if contents.values.len() != numbers.len() {
        let detail = format!("found {} numbers in line {at}, need {}", numbers.len(), contents.values.len());
        return Err(broken(LAYOUT.name, detail));
    }
    for (column, value) in contents.values.iter_mut().zip(numbers) {
        column.push(*value);
    }
    Ok(())
}

/// The line of names; the ECSV header may have told the same columns with their units.
fn name_columns(contents: &mut Contents, names: &[&str]) {
    let described = std::mem::take(&mut contents.columns);
    let with_unit = |name: &&str| {
        let known = described.iter().find(|column| column.name == *name).cloned();
        known.unwrap_or_else(|| Column { name: (*name).to_owned(), unit: None })
    };
    contents.columns = names.iter().map(with_unit).collect();
}

/// A column of an ECSV header, or a key and a value.
fn read_comment(comment: &str, contents: &mut Contents) {
    let inner = comment.strip_prefix("- ").unwrap_or(comment);
    if let Some(flow) = inner.strip_prefix('{').and_then(|rest| rest.strip_suffix('}')) {
        let pairs: Vec<(&str, &str)> = flow.split(", ").filter_map(|pair| pair.split_once(':')).collect();
        let value = |key: &str| {
            let found = pairs.iter().find(|(name, _)| name.trim() == key);
            found.map(|(_, value)| value.trim().trim_matches(['\'', '"']).to_owned())
        };
        match value("name") {
            Some(name) => contents.columns.push(Column { name, unit: value("unit") }),
            None => pairs.iter().for_each(|(key, value)| contents.add_card(key, value)),
        }
        return;
    }
    if let Some((key, value)) = inner.split_once('=').or_else(|| inner.split_once(": ")) {
        contents.add_card(key, value);
    }
}
