//! VOTable, the virtual observatory's table in XML: columns by name, else by what their `ucd` says they are.
//!
//! Only tables written out as text (`TABLEDATA`) are read; a single row may hold the whole spectrum in each cell.
//! `PARAM` and `INFO` are read like header cards. Documents with their own entities are refused by the XML
//! library, so nothing is fetched and nothing explodes.
//!
//! # Reference
//! Ochsenbein et al. 2019, IVOA Recommendation VOTable 1.4.

use roxmltree::{Document, Node, ParsingOptions};

use super::text::{Column, Contents};
use super::{Layout, broken};
use crate::spectrum::read::ReadFault;
use crate::spectrum::settle::RawSpectrum;

/// The layout.
pub const LAYOUT: Layout = Layout {
    name: "votable",
    title: "VOTable written out as text (TABLEDATA)",
    identified_by: "XML with an element VOTABLE",
    rule: "columns by name, else by ucd (em.wl, phot.flux, stat.error); units from the fields; kind of error and medium from the column's name; PARAM and INFO like header cards",
    reader: super::Reader::Text { identify, read },
};

/// Bytes in which the first element must come.
const LOOKED_AT: usize = 8192;
/// Most XML nodes: a million pixels of a few columns.
const MOST_NODES: u32 = 20_000_000;

fn identify(bytes: &[u8]) -> bool {
    let start = String::from_utf8_lossy(&bytes[..bytes.len().min(LOOKED_AT)]);
    start.trim_start_matches('\u{feff}').trim_start().starts_with('<') && start.contains("<VOTABLE")
}

fn read(bytes: &[u8]) -> Result<Vec<RawSpectrum>, ReadFault> {
    let refuse = |detail: String| broken(LAYOUT.name, detail);
    let text = std::str::from_utf8(bytes).map_err(|error| refuse(error.to_string()))?;
    let options = ParsingOptions { nodes_limit: MOST_NODES, ..ParsingOptions::default() };
    let document = Document::parse_with_options(text, options).map_err(|error| refuse(error.to_string()))?;
    let table = document
        .descendants()
        .find(|node| node.has_tag_name_of("TABLE"))
        .ok_or_else(|| refuse("found no table".to_owned()))?;
    let data = table.descendants().find(|node| node.has_tag_name_of("TABLEDATA")).ok_or_else(|| {
        refuse("found no TABLEDATA (binary tables are not read; write it as text)".to_owned())
    })?;
    let mut contents = Contents::default();
    for node in
        document.descendants().filter(|node| node.has_tag_name_of("PARAM") || node.has_tag_name_of("INFO"))
    {
        if let (Some(key), Some(value)) = (node.attribute("name"), node.attribute("value")) {
            contents.add_card(key, value);
        }
    }
    contents.columns = table.children().filter(|node| node.has_tag_name_of("FIELD")).map(column).collect();
    let rows: Vec<Node<'_, '_>> = data.children().filter(|node| node.has_tag_name_of("TR")).collect();
    let is_one_row = rows.len() == 1;
    contents.values = vec![Vec::new(); contents.columns.len()];
    for (number, row) in rows.iter().enumerate() {
        let cells: Vec<&str> = row
            .children()
            .filter(|node| node.has_tag_name_of("TD"))
            .map(|cell| cell.text().unwrap_or(""))
            .collect();
        if cells.len() != contents.columns.len() {
            let (found, needed) = (cells.len(), contents.columns.len());
            return Err(refuse(format!("found {found} cells in row {number}, need {needed}")));
        }
        for (values, cell) in contents.values.iter_mut().zip(cells) {
            if is_one_row {
                values.extend(cell.split_whitespace().map(number_or_nan));
            } else {
                values.push(number_or_nan(cell));
            }
        }
    }
    Ok(vec![contents.into_raw(LAYOUT.name)?])
}

/// Words, which a table may hold beside its numbers, are missing values.
fn number_or_nan(cell: &str) -> f64 {
    super::text::number(cell.trim()).unwrap_or(f64::NAN)
}

/// A field; where its name says nothing, its ucd may.
fn column(field: Node<'_, '_>) -> Column {
    let ucd = field.attribute("ucd").unwrap_or_default().to_ascii_lowercase();
    let name = field.attribute("name").unwrap_or_default();
    let role = [("stat.error", "sigma"), ("em.wl", "wavelength"), ("phot.flu", "flux")];
    let role = role.into_iter().find(|(start, _)| ucd.starts_with(start)).map(|(_, role)| role);
    let name = if super::text::is_known(name) { name } else { role.unwrap_or(name) };
    Column { name: name.to_owned(), unit: field.attribute("unit").map(str::to_owned) }
}

/// Elements by local name: files differ in their namespaces.
trait LocalName {
    fn has_tag_name_of(&self, name: &str) -> bool;
}

impl LocalName for Node<'_, '_> {
    fn has_tag_name_of(&self, name: &str) -> bool {
        self.is_element() && self.tag_name().name() == name
    }
}
