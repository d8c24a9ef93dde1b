//! Computes the flux grid: one atmosphere and its spectrum per node.
//!
//! Nodes are independent of each other and start from the same recipe, so that a build gives the
//! same bytes in any order, on any number of threads, and after any number of interruptions: each
//! finished node is kept in a folder beside the grid until the whole is written.

use std::fs;
use std::io::Write;
use std::path::{Path, PathBuf};

use ndarray::Array3;
use rayon::prelude::*;

use super::axis::{balmer_axis, sed_axis};
use super::{FluxGrid, GridFault, GridHeader, NodeRecord};
use crate::atmosphere::{Atmosphere, MIXING_LENGTH, NotConverged, compute_atmosphere, emergent_flux};
use crate::physics::occupation::NEUTRAL_RADIUS_FACTOR;
use crate::physics::stark::ProfileTable;

/// Version of the physics inside the grid: raise it whenever a change of code changes a flux.
pub const PHYSICS_VERSION: u32 = 2;

/// What can stop a build.
#[derive(Debug, thiserror::Error)]
pub enum BuildFault {
    /// A node's atmosphere did not converge.
    #[error("cannot compute a grid node")]
    Node(#[from] NotConverged),
    /// A file of the build could not be written or read.
    #[error("cannot keep the unfinished grid in {path}")]
    Store {
        /// The file or folder.
        path: PathBuf,
        /// What the system said.
        source: std::io::Error,
    },
    /// The finished grid could not be written.
    #[error("cannot write the finished grid")]
    Write(#[from] GridFault),
}

/// The nodes of a grid, both ascending.
#[derive(Debug, Clone)]
pub struct Nodes {
    /// Effective temperatures, K.
    pub teff_k: Vec<f64>,
    /// log10 of gravity in cm s^-2.
    pub log_g: Vec<f64>,
}

impl Nodes {
    /// The bundled grid: 73 x 15 nodes, densest in temperature where convection sets in and the
    /// Balmer lines peak.
    pub fn bundled() -> Self {
        let steps: [(f64, f64); 6] = [
            (16_000.0, 250.0),
            (20_000.0, 500.0),
            (30_000.0, 1000.0),
            (40_000.0, 2000.0),
            (60_000.0, 4000.0),
            (80_000.0, 5000.0),
        ];
        let mut teff_k = vec![6000.0];
        for (last, step) in steps {
            let mut next = teff_k[teff_k.len() - 1] + step;
            while next <= last {
                teff_k.push(next);
                next += step;
            }
        }
        Nodes { teff_k, log_g: (0..15).map(|i| 6.0 + 0.25 * f64::from(i)).collect() }
    }

    fn pairs(&self) -> Vec<(f64, f64)> {
        self.teff_k.iter().flat_map(|teff_k| self.log_g.iter().map(|log_g| (*teff_k, *log_g))).collect()
    }
}

/// Builds a grid and writes it to `path`; `built_at` (UTC, ISO 8601) goes into its header, `on_node` is told of each finished node, from any thread.
///
/// # Errors
/// [`BuildFault`]; what was finished stays in `<path>.partial` and is used by the next build.
pub fn build_flux_grid(
    path: &Path,
    nodes: &Nodes,
    profiles: &ProfileTable,
    built_at: &str,
    on_node: &(dyn Fn() + Sync),
) -> Result<FluxGrid, BuildFault> {
    let store = Store::open(path, profiles)?;
    let (balmer_aa, sed_aa) = (balmer_axis(), sed_axis());
    let spectra: Vec<NodeSpectrum> = nodes
        .pairs()
        .into_par_iter()
        .map(|(teff_k, log_g)| {
            let spectrum = match store.load(teff_k, log_g, balmer_aa.len(), sed_aa.len()) {
                Some(spectrum) => spectrum,
                None => {
                    let atmosphere = compute_atmosphere(teff_k, log_g, profiles)?;
                    let spectrum = NodeSpectrum::compute(&atmosphere, &balmer_aa, &sed_aa, profiles);
                    store.save(&spectrum)?;
                    spectrum
                }
            };
            on_node();
            Ok(spectrum)
        })
        .collect::<Result<_, BuildFault>>()?;
    let grid = assemble(nodes, balmer_aa, sed_aa, &spectra, profiles, built_at);
    grid.write(path)?;
    store.remove()?;
    Ok(grid)
}

struct NodeSpectrum {
    record: NodeRecord,
    ln_flux: Vec<f32>,
    ln_sed: Vec<f32>,
}

impl NodeSpectrum {
    fn compute(atmosphere: &Atmosphere, balmer_aa: &[f64], sed_aa: &[f64], profiles: &ProfileTable) -> Self {
        // One pass over both axes: broadening the lines is most of the work.
        let mut wave_vac_aa: Vec<f64> = balmer_aa.iter().chain(sed_aa).copied().collect();
        wave_vac_aa.sort_by(f64::total_cmp);
        wave_vac_aa.dedup();
        let flux = emergent_flux(atmosphere, &wave_vac_aa, profiles);
        let pick = |wanted: &[f64]| {
            let at = |wave: &f64| wave_vac_aa.partition_point(|have| have < wave);
            wanted.iter().map(|wave| flux[at(wave)].ln() as f32).collect()
        };
        let convergence = &atmosphere.convergence;
        NodeSpectrum {
            record: NodeRecord {
                teff_k: atmosphere.teff_k,
                log_g: atmosphere.log_g,
                iterations: convergence.iterations as u32,
                flux_error_max: convergence.flux_error_max,
                flux_error_surface: convergence.flux_error_surface,
                temperature_change: convergence.temperature_change,
                convective_flux_max_fraction: convergence.convective_fraction_max,
            },
            ln_flux: pick(balmer_aa),
            ln_sed: pick(sed_aa),
        }
    }

    /// The numbers of a node, in a fixed order.
    fn to_bytes(&self) -> Vec<u8> {
        let record = &self.record;
        let mut bytes = Vec::new();
        for value in [
            record.teff_k,
            record.log_g,
            f64::from(record.iterations),
            record.flux_error_max,
            record.flux_error_surface,
            record.temperature_change,
            record.convective_flux_max_fraction,
        ] {
            bytes.extend(value.to_le_bytes());
        }
        for value in self.ln_flux.iter().chain(&self.ln_sed) {
            bytes.extend(value.to_le_bytes());
        }
        bytes
    }

    fn from_bytes(bytes: &[u8], fluxes: usize, seds: usize) -> Option<Self> {
        let (head, tail) = bytes.split_at_checked(7 * 8)?;
        let head: Vec<f64> = head.as_chunks::<8>().0.iter().map(|chunk| f64::from_le_bytes(*chunk)).collect();
        let values: Vec<f32> =
            tail.as_chunks::<4>().0.iter().map(|chunk| f32::from_le_bytes(*chunk)).collect();
        if values.len() != fluxes + seds {
            return None;
        }
        Some(NodeSpectrum {
            record: NodeRecord {
                teff_k: head[0],
                log_g: head[1],
                iterations: head[2] as u32,
                flux_error_max: head[3],
                flux_error_surface: head[4],
                temperature_change: head[5],
                convective_flux_max_fraction: head[6],
            },
            ln_flux: values[..fluxes].to_vec(),
            ln_sed: values[fluxes..].to_vec(),
        })
    }
}

/// Finished nodes of an unfinished grid: one file each, named after the node and everything that
/// could change its content, with a checksum in front.
struct Store {
    folder: PathBuf,
    fingerprint: String,
}

impl Store {
    fn open(grid_path: &Path, profiles: &ProfileTable) -> Result<Self, BuildFault> {
        let folder = grid_path.with_extension("partial");
        fs::create_dir_all(&folder).map_err(|source| store_fault(&folder, source))?;
        let mut hasher = blake3::Hasher::new();
        hasher.update(&PHYSICS_VERSION.to_le_bytes());
        for (key, value) in physics_switches(profiles) {
            hasher.update(key.as_bytes()).update(value.as_bytes());
        }
        for wave in balmer_axis().iter().chain(&sed_axis()) {
            hasher.update(&wave.to_le_bytes());
        }
        Ok(Store { folder, fingerprint: hasher.finalize().to_hex()[..16].to_owned() })
    }

    fn file(&self, teff_k: f64, log_g: f64) -> PathBuf {
        self.folder.join(format!("{}-{teff_k:.1}-{log_g:.3}.node", self.fingerprint))
    }

    fn load(&self, teff_k: f64, log_g: f64, fluxes: usize, seds: usize) -> Option<NodeSpectrum> {
        let bytes = fs::read(self.file(teff_k, log_g)).ok()?;
        let (checksum, content) = bytes.split_at_checked(blake3::OUT_LEN)?;
        if blake3::hash(content).as_bytes() != checksum {
            return None;
        }
        NodeSpectrum::from_bytes(content, fluxes, seds)
    }

    fn save(&self, spectrum: &NodeSpectrum) -> Result<(), BuildFault> {
        let path = self.file(spectrum.record.teff_k, spectrum.record.log_g);
        let content = spectrum.to_bytes();
        let temporary = path.with_extension("writing");
        let write = || -> std::io::Result<()> {
            let mut file = fs::File::create(&temporary)?;
            file.write_all(blake3::hash(&content).as_bytes())?;
            file.write_all(&content)?;
            fs::rename(&temporary, &path)
        };
        write().map_err(|source| store_fault(&path, source))
    }

    fn remove(self) -> Result<(), BuildFault> {
        fs::remove_dir_all(&self.folder).map_err(|source| store_fault(&self.folder, source))
    }
}

fn store_fault(path: &Path, source: std::io::Error) -> BuildFault {
    BuildFault::Store { path: path.to_owned(), source }
}

fn assemble(
    nodes: &Nodes,
    wave_vac_aa: Vec<f64>,
    sed_wave_vac_aa: Vec<f64>,
    spectra: &[NodeSpectrum],
    profiles: &ProfileTable,
    built_at: &str,
) -> FluxGrid {
    let (temperatures, gravities) = (nodes.teff_k.len(), nodes.log_g.len());
    let at = |i: usize, j: usize| &spectra[i * gravities + j];
    let ln_flux =
        Array3::from_shape_fn((temperatures, gravities, wave_vac_aa.len()), |(i, j, k)| at(i, j).ln_flux[k]);
    let ln_sed = Array3::from_shape_fn((temperatures, gravities, sed_wave_vac_aa.len()), |(i, j, k)| {
        at(i, j).ln_sed[k]
    });
    let mut grid = FluxGrid {
        teff_k: nodes.teff_k.clone(),
        log_g: nodes.log_g.clone(),
        wave_vac_aa,
        ln_flux,
        sed_wave_vac_aa,
        ln_sed,
        nodes: spectra.iter().map(|spectrum| spectrum.record.clone()).collect(),
        header: GridHeader::now(physics_switches(profiles), built_at.to_owned()),
    };
    grid.header.blake3 = grid.compute_blake3();
    grid
}

/// The exact physics of the grid, as FITS keyword and value for its header.
fn physics_switches(profiles: &ProfileTable) -> Vec<(String, String)> {
    [
        ("COMPOS", "pure hydrogen".to_owned()),
        ("THERMO", "LTE, coherent scattering exact".to_owned()),
        ("CONVEC", format!("ML2 alpha={MIXING_LENGTH}")),
        ("NEUTRAD", format!("{NEUTRAL_RADIUS_FACTOR} n^2 a0")),
        ("OCCUP", "Hummer & Mihalas 1988".to_owned()),
        ("STARK", profiles.fingerprint()),
        ("SELFBR", "Barklem et al. 2000, Ali & Griem 1966".to_owned()),
        ("LYAQUASI", "no quasi-molecular satellites".to_owned()),
    ]
    .into_iter()
    .map(|(key, value)| (key.to_owned(), value))
    .collect()
}
