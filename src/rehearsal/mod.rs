//! An invented night with known truth, and the scoring of what came back.
//!
//! Everything belongs to the invented Kestrel Fell survey. Spectra are drawn from the bundled grid, so
//! that the rehearsal proves the fit, its errors and its verdicts, not the physics of the models.

mod fits_table;
mod night;
mod page;
mod score;

pub use fits_table::fits_table;
pub use night::{Sighting, Truth, observe, truth_table};
pub use page::page;
pub use score::{Region, Summary, score};
