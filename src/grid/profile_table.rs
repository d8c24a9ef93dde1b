//! The file of tabulated Stark profiles: format, checksum, and the build that fills it.
//!
//! Layout: the magic line, the length of a JSON header (u32, little endian), the header with nodes,
//! lines and provenance, the values (f32, little endian; fastest over alpha, then density, then
//! temperature, then line), and the blake3 hash of all that. The build writes the whole file anew after
//! each line (temporary file, sync, rename) and continues a file of the same physics and nodes. The table of
//! `grids/` has 0.9 MB and took 6 CPU minutes; `verify_bundled_table` computes some of it anew.

use crate::physics::hydrogen::Line;
use crate::physics::stark::{DENSITY_STEP, LineTable, ProfileTable, TableNodes, UnifiedLine};
use rayon::prelude::*;
use serde::{Deserialize, Serialize};
use std::io::Write;
use std::path::{Path, PathBuf};

const MAGIC: &[u8] = b"emberline stark profiles\n";
/// Changes whenever the numbers in the file would.
pub const PHYSICS_VERSION: &str = "unified-2";
/// Largest file that is read, bytes.
const LARGEST_FILE: u64 = 64 << 20;
const HASH_BYTES: usize = 32;
/// Rounding of node values (logarithms of order 10) by the header's decimal numbers.
const NODE_ROUNDING: f64 = 1e-9;

/// Why a profile table could not be read or written.
#[derive(Debug, thiserror::Error)]
pub enum ProfileTableError {
    /// The file system refused.
    #[error("cannot {verb} the profile table {path}")]
    Io {
        /// What was attempted.
        verb: &'static str,
        /// The file.
        path: PathBuf,
        /// Why.
        source: std::io::Error,
    },
    /// The content is not a whole profile table.
    #[error("cannot use the profile table {path}: {found} (build it again with `emberline grid build`)")]
    Damaged {
        /// The file.
        path: PathBuf,
        /// What was found.
        found: String,
    },
    /// The table was made by other physics.
    #[error(
        "cannot use the profile table {path}: found physics {found}, need {PHYSICS_VERSION} \
         (build it again with `emberline grid build`)"
    )]
    OtherPhysics {
        /// The file.
        path: PathBuf,
        /// Version in the file.
        found: String,
    },
}

#[derive(Debug, Serialize, Deserialize)]
struct Header {
    physics: String,
    software: String,
    method: String,
    log_temperature: Vec<f64>,
    log_density: Vec<f64>,
    lines: Vec<LineHeader>,
}

#[derive(Debug, Serialize, Deserialize)]
struct LineHeader {
    lower: u32,
    upper: u32,
    ln_alpha_first: f64,
    alpha_count: usize,
}

impl ProfileTable {
    /// Reads and checks a table.
    ///
    /// # Errors
    /// If the file cannot be read, is damaged or was made by other physics.
    pub fn read(path: &Path) -> Result<Self, ProfileTableError> {
        let io = |source| ProfileTableError::Io { verb: "read", path: path.to_owned(), source };
        let damaged = |found: String| ProfileTableError::Damaged { path: path.to_owned(), found };
        let size = std::fs::metadata(path).map_err(io)?.len();
        if size > LARGEST_FILE {
            return Err(damaged(format!("found {size} bytes, expected at most {LARGEST_FILE}")));
        }
        let bytes = std::fs::read(path).map_err(io)?;
        let (content, hash) = bytes
            .split_last_chunk::<HASH_BYTES>()
            .ok_or_else(|| damaged(format!("found {size} bytes, too few for a table")))?;
        if blake3::hash(content).as_bytes() != hash {
            return Err(damaged("its checksum does not match its content".to_owned()));
        }
        parse_table(content).map_err(|fault| match fault {
            ParseFault::Damaged(found) => damaged(found),
            ParseFault::OtherPhysics(found) => {
                ProfileTableError::OtherPhysics { path: path.to_owned(), found }
            }
        })
    }

    /// Writes the table: temporary file, sync, rename.
    ///
    /// # Errors
    /// If the file system refuses.
    pub fn write(&self, path: &Path) -> Result<(), ProfileTableError> {
        let io = |source| ProfileTableError::Io { verb: "write", path: path.to_owned(), source };
        let bytes = self.to_bytes();
        let partial = path.with_extension("partial");
        let mut file = std::fs::File::create(&partial).map_err(io)?;
        file.write_all(&bytes).map_err(io)?;
        file.sync_all().map_err(io)?;
        std::fs::rename(&partial, path).map_err(io)?;
        if let Some(folder) = path.parent().filter(|folder| !folder.as_os_str().is_empty()) {
            std::fs::File::open(folder).and_then(|folder| folder.sync_all()).map_err(io)?;
        }
        Ok(())
    }

    fn to_bytes(&self) -> Vec<u8> {
        let nodes = self.lines.first().map(LineTable::nodes);
        let header = Header {
            physics: PHYSICS_VERSION.to_owned(),
            software: format!("emberline {}", env!("CARGO_PKG_VERSION")),
            method: METHOD.to_owned(),
            log_temperature: nodes.map(|nodes| nodes.log_temperature.clone()).unwrap_or_default(),
            log_density: nodes.map(|nodes| nodes.log_density.clone()).unwrap_or_default(),
            lines: self
                .lines
                .iter()
                .map(|table| LineHeader {
                    lower: table.line().lower,
                    upper: table.line().upper,
                    ln_alpha_first: table.nodes().ln_alpha_first,
                    alpha_count: table.nodes().alpha_count,
                })
                .collect(),
        };
        // Plain numbers and strings always serialise.
        let header = serde_json::to_vec(&header).unwrap_or_default();
        let mut bytes = MAGIC.to_vec();
        bytes.extend((header.len() as u32).to_le_bytes());
        bytes.extend(&header);
        for table in &self.lines {
            bytes.extend(table.ln_s().iter().flat_map(|value| value.to_le_bytes()));
        }
        let hash = blake3::hash(&bytes);
        bytes.extend(hash.as_bytes());
        bytes
    }
}

enum ParseFault {
    Damaged(String),
    OtherPhysics(String),
}

fn parse_table(content: &[u8]) -> Result<ProfileTable, ParseFault> {
    let damaged = |found: &str| ParseFault::Damaged(found.to_owned());
    let rest = content.strip_prefix(MAGIC).ok_or_else(|| damaged("it does not begin with the magic line"))?;
    let (length, rest) = rest.split_first_chunk::<4>().ok_or_else(|| damaged("its header is cut off"))?;
    let length = u32::from_le_bytes(*length) as usize;
    let (header, values) = rest.split_at_checked(length).ok_or_else(|| damaged("its header is cut off"))?;
    let header: Header = serde_json::from_slice(header)
        .map_err(|fault| ParseFault::Damaged(format!("its header cannot be parsed: {fault}")))?;
    if header.physics != PHYSICS_VERSION {
        return Err(ParseFault::OtherPhysics(header.physics));
    }
    let per_alpha = header.log_temperature.len() * header.log_density.len();
    let wanted: usize = header
        .lines
        .iter()
        .map(|line| per_alpha.saturating_mul(line.alpha_count))
        .fold(0, usize::saturating_add);
    let is_ascending = |nodes: &[f64]| !nodes.is_empty() && nodes.windows(2).all(|pair| pair[0] < pair[1]);
    if !is_ascending(&header.log_temperature) || !is_ascending(&header.log_density) {
        return Err(damaged("its nodes do not ascend"));
    }
    if values.len() != wanted.saturating_mul(size_of::<f32>()) {
        return Err(damaged("its values do not fill the nodes of its header"));
    }
    let values: Vec<f32> = values.as_chunks::<4>().0.iter().map(|bytes| f32::from_le_bytes(*bytes)).collect();
    if values.iter().any(|value| !value.is_finite()) {
        return Err(damaged("it holds values that are not finite"));
    }
    let mut rest = &values[..];
    let mut lines = Vec::new();
    for line in &header.lines {
        let LineHeader { lower, upper, ln_alpha_first, alpha_count } = *line;
        if lower < 1 || upper <= lower || alpha_count < 4 {
            return Err(damaged("it names a line that does not exist, or gives it no profile"));
        }
        let (own, others) = rest.split_at(per_alpha * alpha_count);
        rest = others;
        let nodes = TableNodes {
            log_temperature: header.log_temperature.clone(),
            log_density: header.log_density.clone(),
            ln_alpha_first,
            alpha_count,
        };
        lines.push(LineTable::new(Line { lower, upper }, nodes, own.to_vec()));
    }
    Ok(ProfileTable { lines })
}

const METHOD: &str = "unified theory (Vidal, Cooper & Smith 1971): Baranger-Mozer ion field to second order, \
    one-electron operator on straight classical paths cut at 0.681 Debye lengths, both levels broadened, ion field \
    cut at the critical field of the upper level, integral 1";

/// The lines of the table: Lyman alpha to delta, Balmer alpha to H10.
pub fn tabulated_lines() -> Vec<Line> {
    let lyman = (2..=5).map(|upper| Line { lower: 1, upper });
    let balmer = (3..=10).map(|upper| Line { lower: 2, upper });
    lyman.chain(balmer).collect()
}

/// The nodes of a line's table: log T 3.6 to 5.1, log n_e 12 to 19, alpha up to 100 from where the
/// line's core is flat.
pub fn table_nodes(line: Line) -> TableNodes {
    // Cores without a linear Stark shift are as narrow as electron impacts leave them at log n_e = 12.
    let decades = match (line.lower, line.upper) {
        (1, 2) => 9,
        (1, _) => 7,
        (2, 3) => 6,
        _ => 5,
    };
    TableNodes {
        log_temperature: (0..6).map(|i| 3.6 + 0.3 * f64::from(i)).collect(),
        log_density: (0..29).map(|i| 12.0 + DENSITY_STEP * f64::from(i)).collect(),
        ln_alpha_first: (2.0 - f64::from(decades)) * std::f64::consts::LN_10,
        alpha_count: 18 * decades as usize + 1,
    }
}

/// Builds the whole table, or what is missing in the file, and writes it after each line.
/// `progress` receives the lines done and the total.
///
/// # Errors
/// If the file cannot be written.
pub fn build_profile_table(
    path: &Path,
    progress: &dyn Fn(usize, usize),
) -> Result<ProfileTable, ProfileTableError> {
    let wanted = tabulated_lines();
    // A file that is absent, damaged or from other physics is simply made anew.
    let mut table = ProfileTable::read(path).unwrap_or_default();
    table
        .lines
        .retain(|made| wanted.contains(&made.line()) && is_same(made.nodes(), &table_nodes(made.line())));
    for (done, line) in wanted.iter().enumerate() {
        if table.line(line.lower, line.upper).is_none() {
            table.lines.push(compute_line(*line, &table_nodes(*line)));
            table.write(path)?;
        }
        progress(done + 1, wanted.len());
    }
    Ok(table)
}

/// Equal up to the rounding of a decimal header.
fn is_same(a: &TableNodes, b: &TableNodes) -> bool {
    let close = |a: &[f64], b: &[f64]| {
        a.len() == b.len() && a.iter().zip(b).all(|(a, b)| (a - b).abs() < NODE_ROUNDING)
    };
    a.alpha_count == b.alpha_count
        && close(&a.log_temperature, &b.log_temperature)
        && close(&a.log_density, &b.log_density)
        && close(&[a.ln_alpha_first], &[b.ln_alpha_first])
}

/// Computes the table of one line on all processors.
pub fn compute_line(line: Line, nodes: &TableNodes) -> LineTable {
    let unified = UnifiedLine::new(line);
    let ln_alpha = nodes.ln_alpha();
    let plasmas: Vec<(f64, f64)> = nodes
        .log_temperature
        .iter()
        .flat_map(|log_t| nodes.log_density.iter().map(move |log_density| (*log_t, *log_density)))
        .collect();
    let ln_s = plasmas
        .par_iter()
        .flat_map_iter(|(log_t, log_density)| {
            let s = unified.profile(10f64.powf(*log_t), 10f64.powf(*log_density), true, &ln_alpha);
            s.into_iter().map(|s| s.ln() as f32)
        })
        .collect();
    LineTable::new(line, nodes.clone(), ln_s)
}
