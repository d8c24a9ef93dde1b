//! Where the tables are.

use std::env;
use std::path::{Path, PathBuf};

/// Environment variable that names the folder of the tables.
pub const GRIDS_VARIABLE: &str = "EMBERLINE_GRIDS";

/// Where a package puts them.
const INSTALLED: &str = "/usr/share/emberline/grids";

/// Folder of the tables: `EMBERLINE_GRIDS` if set, else `grids` in the working folder if it is there,
/// else the installed place.
pub fn grids_folder() -> PathBuf {
    if let Some(folder) = env::var_os(GRIDS_VARIABLE) {
        return PathBuf::from(folder);
    }
    let local = Path::new("grids");
    if local.is_dir() { local.to_owned() } else { PathBuf::from(INSTALLED) }
}

/// File of the model spectra in a folder of tables.
pub const FLUX_FILE: &str = "flux.fits";
/// File of the Stark profiles.
pub const PROFILE_FILE: &str = "stark_profiles.bin";
/// File of the evolutionary tracks.
pub const TRACK_FILE: &str = "tracks.fits";
