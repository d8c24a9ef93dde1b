//! The table of cooling tracks and its lookup by (Teff, log g).
//!
//! File: sealed FITS ([`super::sealed_fits`]); a primary header with provenance, images `MASS_MSUN` and
//! `LOG_TEFF` (axes), and `THICK` and `THIN` with axes mass x Teff x [`QUANTITIES`], NaN where no such star
//! exists. Lookup: the mass whose log g at this Teff is the wanted one, by bisection over the masses and within a cell,
//! then bilinear in mass and log Teff (`ndarray-interp`). Never extrapolates: outside the tracks the answer
//! is [`OutsideTracks`]. Interpolation error 0.002 Msun, 2 % in age (test `verif_track_interpolation`); a lookup takes
//! 5 us unoptimised for the machine (test `verif_lookup_speed`, bench `track_lookup`).

use std::path::Path;

use fitsio::FitsFile;
use fitsio::images::{ImageDescription, ImageType};
use ndarray::{Array1, Array3, ArrayView1, s};
use ndarray_interp::interp2d::{Bilinear, Interp2D, Interp2DOwned};
use thiserror::Error;

use super::sealed_fits::{SEAL_KEY, SealedFitsError, UNSEALED, open_sealed, write_sealed};
use crate::interior::structure::HydrogenLayer;
use crate::physics::constants::{GRAVITATION_CGS, SOLAR_MASS_G, SOLAR_RADIUS_CM};

/// What the table holds at each node, in this order.
pub const QUANTITIES: [&str; 5] = [
    "LOG_RADIUS_RSUN",
    "LOG_AGE_GYR",
    "LOG_CENTRAL_TEMPERATURE_K",
    "LOG_CENTRAL_DENSITY_G_CM3",
    "CRYSTALLISED_FRACTION",
];
const RADIUS: usize = 0;
/// Version of the layout.
const FORMAT: i64 = 1;
/// Largest file accepted; the table has about 0.7 MB.
const MOST_BYTES: u64 = 32 << 20;

/// Why a table could not be read or made.
#[derive(Debug, Error)]
pub enum TrackTableError {
    /// The file itself.
    #[error("cannot use the track table")]
    File(#[from] SealedFitsError),
    /// Its contents.
    #[error(
        "cannot use the track table: found {found}, need {need} (rebuild it with `emberline tracks build`)"
    )]
    Contents {
        /// What was found.
        found: String,
        /// What was expected.
        need: &'static str,
    },
}

fn contents(found: impl Into<String>, need: &'static str) -> TrackTableError {
    TrackTableError::Contents { found: found.into(), need }
}

/// Nodes of one layer thickness: mass x log Teff x quantity.
pub type Nodes = Array3<f64>;

/// The question lies outside what the tracks cover.
#[derive(Debug, Clone, PartialEq, Error)]
pub enum OutsideTracks {
    /// A question that is no number.
    #[error("found {found}, need finite Teff and log g")]
    NotFinite {
        /// The question.
        found: String,
    },
    /// Teff outside the axis.
    #[error("found Teff {found_k} K, need {low_k:.0} .. {high_k:.0} K")]
    Teff {
        /// Asked for.
        found_k: f64,
        /// Coolest.
        low_k: f64,
        /// Hottest.
        high_k: f64,
    },
    /// Lower gravity than the least massive star that is ever this hot.
    #[error("found log g {found:.3}, need at least {limit:.3} at this Teff, that of {mass_msun:.3} Msun")]
    TooLow {
        /// Asked for.
        found: f64,
        /// Lowest.
        limit: f64,
        /// Its mass.
        mass_msun: f64,
    },
    /// Higher gravity than the most massive star of the table.
    #[error("found log g {found:.3}, need at most {limit:.3} at this Teff, that of {mass_msun:.3} Msun")]
    TooHigh {
        /// Asked for.
        found: f64,
        /// Highest.
        limit: f64,
        /// Its mass.
        mass_msun: f64,
    },
}

/// A star found in the tracks.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TrackPoint {
    /// Mass, solar.
    pub mass_msun: f64,
    /// Radius, nominal solar.
    pub radius_rsun: f64,
    /// Cooling age, Gyr.
    pub age_gyr: f64,
    /// Central temperature, K.
    pub central_temperature_k: f64,
    /// Central density, g/cm3.
    pub central_density_g_cm3: f64,
    /// Crystallised share of the core.
    pub crystallised_fraction: f64,
}

/// Tracks of one layer thickness.
struct Layered {
    nodes: Nodes,
    interpolant: Interp2DOwned<f64, ndarray::Ix3, Bilinear>,
}

/// The whole table.
pub struct TrackTable {
    mass_msun: Array1<f64>,
    log_teff: Array1<f64>,
    thick: Layered,
    thin: Layered,
    checksum: String,
    origin: String,
}

/// log g of a mass and log10 radius (solar units).
fn log_g(mass_msun: f64, log_radius: f64) -> f64 {
    let gm = GRAVITATION_CGS * mass_msun * SOLAR_MASS_G;
    gm.log10() - 2.0 * (log_radius + SOLAR_RADIUS_CM.log10())
}

fn is_ascending(values: &Array1<f64>) -> bool {
    values.len() >= 2 && values.windows(2).into_iter().all(|w| w[0] < w[1])
}

impl Layered {
    fn new(mass: &Array1<f64>, log_teff: &Array1<f64>, nodes: Nodes) -> Result<Self, TrackTableError> {
        let expected = (mass.len(), log_teff.len(), QUANTITIES.len());
        if nodes.dim() != expected {
            return Err(contents(format!("{:?}", nodes.dim()), "masses x temperatures x quantities"));
        }
        let interpolant = Interp2D::builder(nodes.clone())
            .x(mass.clone())
            .y(log_teff.clone())
            .build()
            .map_err(|fault| contents(fault.to_string(), "ascending axes"))?;
        Ok(Layered { nodes, interpolant })
    }
}

impl TrackTable {
    /// Gathers a table from axes and nodes.
    ///
    /// # Errors
    /// [`TrackTableError::Contents`] if axes are not ascending or shapes differ.
    pub fn new(
        mass_msun: Array1<f64>,
        log_teff: Array1<f64>,
        thick: Nodes,
        thin: Nodes,
    ) -> Result<Self, TrackTableError> {
        if !is_ascending(&mass_msun) || !is_ascending(&log_teff) {
            return Err(contents("axes out of order", "ascending masses and temperatures"));
        }
        let thick = Layered::new(&mass_msun, &log_teff, thick)?;
        let thin = Layered::new(&mass_msun, &log_teff, thin)?;
        let origin = format!("emberline {}", env!("CARGO_PKG_VERSION"));
        Ok(TrackTable { mass_msun, log_teff, thick, thin, checksum: String::new(), origin })
    }

    /// Reads a table and verifies its checksum.
    ///
    /// # Errors
    /// [`TrackTableError`].
    pub fn read(path: &Path) -> Result<Self, TrackTableError> {
        let (mut fits, checksum) = open_sealed(path, MOST_BYTES)?;
        let primary = fits.primary_hdu().map_err(SealedFitsError::from)?;
        let format: i64 = primary.read_key(&mut fits, "FORMAT").map_err(SealedFitsError::from)?;
        if format != FORMAT {
            return Err(contents(format!("format {format}"), "format 1"));
        }
        let origin: String = primary.read_key(&mut fits, "CREATOR").map_err(SealedFitsError::from)?;
        let mut image = |name: &str| -> Result<Vec<f64>, TrackTableError> {
            let hdu = fits.hdu(name).map_err(SealedFitsError::from)?;
            Ok(hdu.read_image(&mut fits).map_err(SealedFitsError::from)?)
        };
        let mass = Array1::from(image("MASS_MSUN")?);
        let log_teff = Array1::from(image("LOG_TEFF")?);
        let shape = (mass.len(), log_teff.len(), QUANTITIES.len());
        let mut nodes = |name: &str| {
            let data = image(name)?;
            let found = format!("{} values", data.len());
            Nodes::from_shape_vec(shape, data)
                .map_err(|_| contents(found, "masses x temperatures x quantities"))
        };
        let (thick, thin) = (nodes("THICK")?, nodes("THIN")?);
        let mut table = TrackTable::new(mass, log_teff, thick, thin)?;
        table.checksum = checksum;
        table.origin = origin;
        Ok(table)
    }

    /// Writes the table with its provenance and returns the checksum.
    ///
    /// # Errors
    /// [`TrackTableError::File`].
    pub fn write(&self, path: &Path) -> Result<String, TrackTableError> {
        let image = |fits: &mut FitsFile, name: &str, dimensions: &[usize], data: &[f64]| {
            let description = ImageDescription { data_type: ImageType::Double, dimensions };
            fits.create_image(name, &description)?.write_image(fits, data)
        };
        let checksum = write_sealed(path, |fits| {
            let primary = fits.primary_hdu()?;
            primary.write_key(fits, SEAL_KEY, UNSEALED)?;
            primary.write_key(fits, "CREATOR", self.origin.as_str())?;
            primary.write_key(fits, "FORMAT", FORMAT)?;
            primary.write_key(fits, "METHOD", "own degenerate-star models, emberline tracks build")?;
            primary.write_key(fits, "GRAVITY", "general relativity in the pressure gradient")?;
            primary.write_key(fits, "CONVECT", "ML2, mixing length 0.8")?;
            primary.write_key(fits, "AGEZERO", "hottest isothermal model, at most 120000 K")?;
            primary.write_key(fits, "CORE", "He below 0.45 Msun, C/O 50/50 by mass above")?;
            primary.write_key(fits, "LAYERS", "He 1e-2; H 1e-4 (THICK), 1e-10 (THIN)")?;
            for (i, name) in QUANTITIES.iter().enumerate() {
                primary.write_key(fits, &format!("QUANT{i}"), *name)?;
            }
            let axes = [("MASS_MSUN", &self.mass_msun), ("LOG_TEFF", &self.log_teff)];
            for (name, axis) in axes {
                image(fits, name, &[axis.len()], &axis.to_vec())?;
            }
            let shape = [self.mass_msun.len(), self.log_teff.len(), QUANTITIES.len()];
            for (name, layered) in [("THICK", &self.thick), ("THIN", &self.thin)] {
                let data: Vec<f64> = layered.nodes.iter().copied().collect();
                image(fits, name, &shape, &data)?;
            }
            Ok(())
        })?;
        Ok(checksum)
    }

    /// BLAKE3 of the file it was read from; empty for a table just made.
    pub fn checksum(&self) -> &str {
        &self.checksum
    }

    /// Program and version that made it.
    pub fn origin(&self) -> &str {
        &self.origin
    }

    /// Masses of the nodes, solar, ascending.
    pub fn masses_msun(&self) -> ArrayView1<'_, f64> {
        self.mass_msun.view()
    }

    /// log10 Teff of the nodes, ascending.
    pub fn log_teffs(&self) -> ArrayView1<'_, f64> {
        self.log_teff.view()
    }

    /// Nodes of a layer thickness.
    pub fn nodes(&self, layer: HydrogenLayer) -> &Nodes {
        &self.layered(layer).nodes
    }

    fn layered(&self, layer: HydrogenLayer) -> &Layered {
        match layer {
            HydrogenLayer::Thick => &self.thick,
            HydrogenLayer::Thin => &self.thin,
        }
    }

    /// The quantities of a star of given mass; `None` outside the tracks.
    pub fn at_mass(&self, mass_msun: f64, teff_k: f64, layer: HydrogenLayer) -> Option<TrackPoint> {
        let mut row = Array1::zeros(QUANTITIES.len());
        let interpolant = &self.layered(layer).interpolant;
        interpolant.interp_into(mass_msun, teff_k.log10(), row.view_mut()).ok()?;
        if row.iter().any(|value| !value.is_finite()) {
            return None;
        }
        Some(TrackPoint {
            mass_msun,
            radius_rsun: 10f64.powf(row[RADIUS]),
            age_gyr: 10f64.powf(row[1]),
            central_temperature_k: 10f64.powf(row[2]),
            central_density_g_cm3: 10f64.powf(row[3]),
            crystallised_fraction: row[4],
        })
    }

    /// The star with this effective temperature and surface gravity.
    ///
    /// # Errors
    /// [`OutsideTracks`]; nothing is extrapolated.
    pub fn at(&self, teff_k: f64, log_g_cgs: f64, layer: HydrogenLayer) -> Result<TrackPoint, OutsideTracks> {
        if !(teff_k.is_finite() && log_g_cgs.is_finite()) {
            return Err(OutsideTracks::NotFinite { found: format!("Teff {teff_k} K, log g {log_g_cgs}") });
        }
        let log_teff = teff_k.log10();
        let last = self.log_teff.len() - 1;
        if !(log_teff >= self.log_teff[0] && log_teff <= self.log_teff[last]) {
            return Err(OutsideTracks::Teff {
                found_k: teff_k,
                low_k: 10f64.powf(self.log_teff[0]),
                high_k: 10f64.powf(self.log_teff[last]),
            });
        }
        let cell = self.cell(log_teff);
        let radii = self.layered(layer).nodes.slice(s![.., cell..cell + 2, RADIUS]);
        let share = (log_teff - self.log_teff[cell]) / (self.log_teff[cell + 1] - self.log_teff[cell]);
        let log_radius = |i: usize| radii[[i, 0]] + share * (radii[[i, 1]] - radii[[i, 0]]);
        let gravity = |i: usize| log_g(self.mass_msun[i], log_radius(i));

        // Stars of low mass never are hot: the first mass with a finite radius, by bisection.
        let count = self.mass_msun.len();
        let first = partition(0, count, |i| !log_radius(i).is_finite());
        let limit = |i: usize| (gravity(i), self.mass_msun[i]);
        if first == count || log_g_cgs < gravity(first) {
            let (limit, mass_msun) = if first == count { (f64::NAN, f64::NAN) } else { limit(first) };
            return Err(OutsideTracks::TooLow { found: log_g_cgs, limit, mass_msun });
        }
        if log_g_cgs > gravity(count - 1) {
            let (limit, mass_msun) = limit(count - 1);
            return Err(OutsideTracks::TooHigh { found: log_g_cgs, limit, mass_msun });
        }
        let upper = partition(first, count, |i| gravity(i) < log_g_cgs).clamp(first + 1, count - 1);
        let (a, b) = (upper - 1, upper);
        // Radius is linear in mass within the cell, as the interpolant has it.
        let (mut low, mut high) = (self.mass_msun[a], self.mass_msun[b]);
        let (r_a, r_b) = (log_radius(a), log_radius(b));
        for _ in 0..40 {
            let middle = 0.5 * (low + high);
            let fraction = (middle - self.mass_msun[a]) / (self.mass_msun[b] - self.mass_msun[a]);
            if log_g(middle, r_a + fraction * (r_b - r_a)) < log_g_cgs { low = middle } else { high = middle }
        }
        let mass_msun = 0.5 * (low + high);
        self.at_mass(mass_msun, teff_k, layer).ok_or_else(|| OutsideTracks::TooLow {
            found: log_g_cgs,
            limit: gravity(first),
            mass_msun: self.mass_msun[first],
        })
    }

    fn cell(&self, log_teff: f64) -> usize {
        partition(1, self.log_teff.len() - 1, |i| self.log_teff[i] <= log_teff) - 1
    }
}

/// First index in `low .. high` for which `is_before` fails, `high` if none.
fn partition(mut low: usize, mut high: usize, is_before: impl Fn(usize) -> bool) -> usize {
    while low < high {
        let middle = (low + high) / 2;
        if is_before(middle) { low = middle + 1 } else { high = middle }
    }
    low
}
