//! The tables that most commands need.

use std::error::Error;

use crate::grid::FluxGrid;
use crate::grid::place::{FLUX_FILE, TRACK_FILE, grids_folder};
use crate::grid::track_table::TrackTable;

/// Model spectra and evolutionary tracks.
pub struct Tables {
    /// Model spectra.
    pub grid: FluxGrid,
    /// Evolutionary tracks.
    pub tracks: TrackTable,
}

impl Tables {
    /// Reads both from the folder of tables.
    ///
    /// # Errors
    /// Missing or damaged tables, by name.
    pub fn read() -> Result<Self, Box<dyn Error>> {
        let folder = grids_folder();
        Ok(Tables {
            grid: FluxGrid::read(&folder.join(FLUX_FILE))?,
            tracks: TrackTable::read(&folder.join(TRACK_FILE))?,
        })
    }
}
