//! Published spectra and parameters of real stars under `tests/data`.

use std::path::PathBuf;
use std::sync::OnceLock;

use emberline::grid::FluxGrid;
use emberline::grid::track_table::TrackTable;
use emberline::spectrum::{Assumptions, FluxScale, Medium, ReadSettings, Spectrum, read_file};

/// The bundled grid.
pub fn bundled_grid() -> &'static FluxGrid {
    static GRID: OnceLock<FluxGrid> = OnceLock::new();
    GRID.get_or_init(|| FluxGrid::read(&root().join("grids/flux.fits")).unwrap())
}

/// The bundled evolutionary tracks.
pub fn bundled_tracks() -> &'static TrackTable {
    static TRACKS: OnceLock<TrackTable> = OnceLock::new();
    TRACKS.get_or_init(|| TrackTable::read(&root().join("grids/tracks.fits")).unwrap())
}

/// The project's folder.
pub fn root() -> PathBuf {
    PathBuf::from(env!("CARGO_MANIFEST_DIR"))
}

/// A model spectrum: no noise (signal-to-noise ratio 200 assumed), resolution as given.
pub fn read_model(name: &str, medium: Medium, fwhm_aa: f64) -> Spectrum {
    let settings = ReadSettings {
        assume: Assumptions {
            medium: Some(medium),
            assume_snr: Some(200.0),
            resolution_fwhm_aa: Some(fwhm_aa),
            flux_scale: Some(FluxScale::Calibrated),
            ..Assumptions::default()
        },
        ..ReadSettings::default()
    };
    read_one(&format!("tests/data/models/{name}.fits.gz"), &settings)
}

/// The first object of a file.
pub fn read_one(path: &str, settings: &ReadSettings) -> Spectrum {
    read_file(&root().join(path), settings)
        .remove(0)
        .unwrap_or_else(|refusal| panic!("{path}: {refusal:?}"))
        .spectrum
}

/// A real DA standard: file, and spectroscopic parameters from the literature.
pub struct Standard {
    /// Name.
    pub name: &'static str,
    /// File under `tests/data`.
    pub file: &'static str,
    /// Effective temperature, K.
    pub teff_k: f64,
    /// Surface gravity.
    pub log_g: f64,
}

/// Parameters mostly of Gianninas, Bergeron & Ruiz (2011, ApJ 743, 138), rounded, from memory (good to
/// 1.5 - 2 % and 0.05); G 93-48 likewise.
pub const STANDARDS: [Standard; 11] = [
    standard("GD 71", "gd71_stisnic_002", 33_590.0, 7.93),
    standard("GD 153", "gd153_stisnic_002", 40_320.0, 7.93),
    standard("G191-B2B", "g191b2b_stisnic_002", 60_920.0, 7.55),
    standard("HZ 43", "hz43_stis_001", 56_800.0, 7.89),
    standard("GD 50", "gd50_004", 42_700.0, 9.20),
    standard("HZ 4", "hz4_stis_002", 14_800.0, 8.2),
    standard("HZ 2", "hz2_005", 22_300.0, 7.95),
    standard("GRW+70 5824", "grw_70d5824_stisnic_002", 21_300.0, 7.95),
    standard("WD 1057+719", "wd1057_719_stisnic_002", 42_000.0, 7.85),
    standard("WD 1657+343", "wd1657_343_stisnic_002", 53_000.0, 7.7),
    standard("G 93-48", "g93_48_004", 18_170.0, 8.01),
];

const fn standard(name: &'static str, file: &'static str, teff_k: f64, log_g: f64) -> Standard {
    Standard { name, file, teff_k, log_g }
}
