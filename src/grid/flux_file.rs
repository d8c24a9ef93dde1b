//! The FITS file of the flux grid.
//!
//! Primary header: layout version, physics version and switches, program version, build time and
//! checksum. Image extensions: WAVE and SEDWAVE (vacuum A), TEFF (K), LOGG, LNFLUX and LNSED (Teff
//! slowest, wavelength fastest), NODES (seven convergence numbers per node). The checksum covers all
//! numbers but not the header, so that two builds of the same physics have the same one.

use std::fs::{self, File};
use std::io::Write;
use std::os::fd::AsRawFd;
use std::path::{Path, PathBuf};

use fitsio::FitsFile;
use fitsio::images::{ImageDescription, ImageType, ReadImage, WriteImage};
use ndarray::Array3;

use super::build::PHYSICS_VERSION;
use super::{FluxGrid, GridHeader, NodeRecord};

/// Version of the file layout.
pub const FORMAT_VERSION: u32 = 1;

/// Header cards that carry the physics switches.
const SWITCHES: [&str; 8] = ["COMPOS", "THERMO", "CONVEC", "NEUTRAD", "OCCUP", "STARK", "SELFBR", "LYAQUASI"];

const NODE_COLUMNS: usize = 7;

/// Why a grid cannot be used or written.
#[derive(Debug, thiserror::Error)]
pub enum GridFault {
    /// The file cannot be opened or written at all.
    #[error("cannot {verb} the grid {path}")]
    Io {
        /// What was attempted.
        verb: &'static str,
        /// The file.
        path: PathBuf,
        /// What the system said.
        source: std::io::Error,
    },
    /// Not a grid, or a damaged one.
    #[error("cannot use the grid {path}: {found} (build it again with `emberline grid build`)")]
    Damaged {
        /// The file.
        path: PathBuf,
        /// What was found and what was expected.
        found: String,
    },
    /// A grid of another layout or physics.
    #[error(
        "cannot use the grid {path}: found {what} version {found}, need {need} (build it again with `emberline grid build`)"
    )]
    OtherVersion {
        /// The file.
        path: PathBuf,
        /// Which version.
        what: &'static str,
        /// The version in the file.
        found: u32,
        /// The version this program reads.
        need: u32,
    },
}

impl GridHeader {
    /// Header of a grid that is made now; the checksum is filled in by [`FluxGrid::new`].
    pub fn now(physics: Vec<(String, String)>, built_at: String) -> Self {
        GridHeader {
            format_version: FORMAT_VERSION,
            physics_version: PHYSICS_VERSION,
            physics,
            program_version: env!("CARGO_PKG_VERSION").to_owned(),
            built_at,
            blake3: String::new(),
        }
    }
}

impl FluxGrid {
    /// Hash of all numbers, hexadecimal.
    pub fn compute_blake3(&self) -> String {
        let mut hasher = blake3::Hasher::new();
        for axis in [&self.teff_k, &self.log_g, &self.wave_vac_aa, &self.sed_wave_vac_aa] {
            hash_numbers(&mut hasher, axis.iter().flat_map(|value| value.to_le_bytes()));
        }
        hash_numbers(&mut hasher, self.node_numbers().iter().flat_map(|value| value.to_le_bytes()));
        for values in [&self.ln_flux, &self.ln_sed] {
            hash_numbers(&mut hasher, values.iter().flat_map(|value| value.to_le_bytes()));
        }
        hasher.finalize().to_hex().to_string()
    }

    /// Reads a grid and verifies its versions, its shape and its checksum.
    ///
    /// # Errors
    /// [`GridFault`], naming the file, what was found and what was expected.
    pub fn read(path: &Path) -> Result<FluxGrid, GridFault> {
        let io = |source| GridFault::Io { verb: "open", path: path.to_owned(), source };
        let file = File::open(path).map_err(io)?;
        if !file.metadata().map_err(io)?.is_file() {
            return Err(damaged(path, "it is not a regular file"));
        }
        // By descriptor: cfitsio would parse brackets and schemes in a name.
        let mut fits = FitsFile::open(format!("/proc/self/fd/{}", file.as_raw_fd()))
            .map_err(|fault| damaged(path, format!("it is not a FITS file: {fault}")))?;
        let header = read_header(&mut fits, path)?;
        let axis = |fits: &mut FitsFile, name: &str| read_image::<f64>(fits, name, path);
        let teff_k = axis(&mut fits, "TEFF")?;
        let log_g = axis(&mut fits, "LOGG")?;
        let wave_vac_aa = axis(&mut fits, "WAVE")?;
        let sed_wave_vac_aa = axis(&mut fits, "SEDWAVE")?;
        let numbers = axis(&mut fits, "NODES")?;
        let spectra = |fits: &mut FitsFile, name: &str, waves: usize| {
            let values = read_image::<f32>(fits, name, path)?;
            let found = values.len();
            let shape = (teff_k.len(), log_g.len(), waves);
            Array3::from_shape_vec(shape, values).map_err(|_| {
                damaged(
                    path,
                    format!("{name} holds {found} values, expected {} x {} x {}", shape.0, shape.1, shape.2),
                )
            })
        };
        let ln_flux = spectra(&mut fits, "LNFLUX", wave_vac_aa.len())?;
        let ln_sed = spectra(&mut fits, "LNSED", sed_wave_vac_aa.len())?;
        if numbers.len() != teff_k.len() * log_g.len() * NODE_COLUMNS {
            return Err(damaged(path, "its node records do not fit its axes"));
        }
        let nodes = numbers.chunks_exact(NODE_COLUMNS).map(NodeRecord::from_numbers).collect();
        let grid = FluxGrid { teff_k, log_g, wave_vac_aa, ln_flux, sed_wave_vac_aa, ln_sed, nodes, header };
        grid.check_axes().map_err(|found| damaged(path, found))?;
        let found = grid.compute_blake3();
        if found != grid.header.blake3 {
            let text =
                format!("its numbers have the checksum {found}, its header says {}", grid.header.blake3);
            return Err(damaged(path, text));
        }
        Ok(grid)
    }

    /// Writes the grid: a temporary file beside the target, synced, then renamed.
    ///
    /// # Errors
    /// [`GridFault::Io`] or, for what cfitsio refuses, [`GridFault::Damaged`].
    pub fn write(&self, path: &Path) -> Result<(), GridFault> {
        let io = |source| GridFault::Io { verb: "write", path: path.to_owned(), source };
        let folder = path.parent().filter(|folder| !folder.as_os_str().is_empty()).unwrap_or(Path::new("."));
        let scratch = std::env::temp_dir().join(format!("emberline-grid-{}.fits", std::process::id()));
        self.write_fits(&scratch)
            .map_err(|fault| damaged(path, format!("cfitsio refused to write it: {fault}")))?;
        let temporary = path.with_extension("writing");
        let bytes = fs::read(&scratch).map_err(io)?;
        fs::remove_file(&scratch).map_err(io)?;
        let mut file = File::create(&temporary).map_err(io)?;
        file.write_all(&bytes).and_then(|()| file.sync_all()).map_err(io)?;
        fs::rename(&temporary, path).map_err(io)?;
        File::open(folder).and_then(|folder| folder.sync_all()).map_err(io)
    }

    fn write_fits(&self, scratch: &Path) -> Result<(), fitsio::errors::Error> {
        let mut fits = FitsFile::create(scratch).overwrite().open()?;
        let primary = fits.primary_hdu()?;
        let header = &self.header;
        primary.write_key(&mut fits, "GRIDFMT", i64::from(header.format_version))?;
        primary.write_key(&mut fits, "PHYSVER", i64::from(header.physics_version))?;
        primary.write_key(&mut fits, "CREATOR", format!("emberline {}", header.program_version))?;
        primary.write_key(&mut fits, "DATE", header.built_at.clone())?;
        primary.write_key(&mut fits, "BLAKE3A", header.blake3[..32].to_owned())?;
        primary.write_key(&mut fits, "BLAKE3B", header.blake3[32..].to_owned())?;
        for (key, value) in &header.physics {
            primary.write_key(&mut fits, key, value.clone())?;
        }
        let (temperatures, gravities) = (self.teff_k.len(), self.log_g.len());
        write_image(&mut fits, "TEFF", "K", &[temperatures], ImageType::Double, &self.teff_k)?;
        write_image(&mut fits, "LOGG", "log(cm/s**2)", &[gravities], ImageType::Double, &self.log_g)?;
        write_image(
            &mut fits,
            "WAVE",
            "Angstrom",
            &[self.wave_vac_aa.len()],
            ImageType::Double,
            &self.wave_vac_aa,
        )?;
        let sed = &self.sed_wave_vac_aa;
        write_image(&mut fits, "SEDWAVE", "Angstrom", &[sed.len()], ImageType::Double, sed)?;
        let numbers = self.node_numbers();
        let node_shape = [temperatures * gravities, NODE_COLUMNS];
        write_image(&mut fits, "NODES", "", &node_shape, ImageType::Double, &numbers)?;
        let unit = "ln(erg s-1 cm-2 Angstrom-1)";
        for (name, values) in [("LNFLUX", &self.ln_flux), ("LNSED", &self.ln_sed)] {
            let flat: Vec<f32> = values.iter().copied().collect();
            write_image(&mut fits, name, unit, values.shape(), ImageType::Float, &flat)?;
        }
        Ok(())
    }

    fn node_numbers(&self) -> Vec<f64> {
        self.nodes.iter().flat_map(NodeRecord::to_numbers).collect()
    }

    fn check_axes(&self) -> Result<(), String> {
        for (name, axis) in [
            ("TEFF", &self.teff_k),
            ("LOGG", &self.log_g),
            ("WAVE", &self.wave_vac_aa),
            ("SEDWAVE", &self.sed_wave_vac_aa),
        ] {
            if axis.len() < 4 || !axis.windows(2).all(|pair| pair[0] < pair[1]) {
                return Err(format!(
                    "its axis {name} has {} values that do not all ascend, need at least 4",
                    axis.len()
                ));
            }
        }
        Ok(())
    }
}

impl NodeRecord {
    fn to_numbers(&self) -> [f64; NODE_COLUMNS] {
        [
            self.teff_k,
            self.log_g,
            f64::from(self.iterations),
            self.flux_error_max,
            self.flux_error_surface,
            self.temperature_change,
            self.convective_flux_max_fraction,
        ]
    }

    fn from_numbers(numbers: &[f64]) -> Self {
        NodeRecord {
            teff_k: numbers[0],
            log_g: numbers[1],
            iterations: numbers[2] as u32,
            flux_error_max: numbers[3],
            flux_error_surface: numbers[4],
            temperature_change: numbers[5],
            convective_flux_max_fraction: numbers[6],
        }
    }
}

fn damaged(path: &Path, found: impl Into<String>) -> GridFault {
    GridFault::Damaged { path: path.to_owned(), found: found.into() }
}

fn hash_numbers(hasher: &mut blake3::Hasher, bytes: impl Iterator<Item = u8>) {
    let bytes: Vec<u8> = bytes.collect();
    hasher.update(&bytes);
}

fn read_header(fits: &mut FitsFile, path: &Path) -> Result<GridHeader, GridFault> {
    let primary =
        fits.primary_hdu().map_err(|fault| damaged(path, format!("it has no primary header: {fault}")))?;
    let mut text = |key: &str| -> Result<String, GridFault> {
        primary
            .read_key::<String>(fits, key)
            .map_err(|_| damaged(path, format!("its header has no card {key}; it is not a flux grid")))
    };
    let number = |value: String, key: &str| {
        value
            .trim()
            .parse::<u32>()
            .map_err(|_| damaged(path, format!("its card {key} is not a number: {value}")))
    };
    let format_version = number(text("GRIDFMT")?, "GRIDFMT")?;
    let physics_version = number(text("PHYSVER")?, "PHYSVER")?;
    for (what, found, need) in
        [("layout", format_version, FORMAT_VERSION), ("physics", physics_version, PHYSICS_VERSION)]
    {
        if found != need {
            return Err(GridFault::OtherVersion { path: path.to_owned(), what, found, need });
        }
    }
    let physics = SWITCHES.iter().filter_map(|key| Some(((*key).to_owned(), text(key).ok()?))).collect();
    Ok(GridHeader {
        format_version,
        physics_version,
        physics,
        program_version: text("CREATOR")?.trim_start_matches("emberline ").to_owned(),
        built_at: text("DATE")?,
        blake3: text("BLAKE3A")? + &text("BLAKE3B")?,
    })
}

fn read_image<T>(fits: &mut FitsFile, name: &str, path: &Path) -> Result<Vec<T>, GridFault>
where
    Vec<T>: ReadImage,
{
    let hdu =
        fits.hdu(name).map_err(|fault| damaged(path, format!("it has no extension {name}: {fault}")))?;
    hdu.read_image(fits)
        .map_err(|fault| damaged(path, format!("its extension {name} cannot be read: {fault}")))
}

fn write_image<T: WriteImage>(
    fits: &mut FitsFile,
    name: &str,
    unit: &str,
    dimensions: &[usize],
    data_type: ImageType,
    values: &[T],
) -> Result<(), fitsio::errors::Error> {
    let hdu = fits.create_image(name, &ImageDescription { data_type, dimensions })?;
    if !unit.is_empty() {
        hdu.write_key(fits, "BUNIT", unit.to_owned())?;
    }
    hdu.write_image(fits, values)
}
