//! Stark broadening of hydrogen lines.

pub mod broadened;
pub mod electrons;
pub mod line_space;
pub mod microfield;
pub mod self_broadening;
pub mod shell;
pub mod static_line;
pub mod table;
pub mod unified;

pub use broadened::{Broadened, StarkProfile};
pub use self_broadening::self_broadening_hwhm_aa;
pub use static_line::StaticLine;
pub use table::{DENSITY_STEP, LineTable, ProfileTable, TableNodes};
pub use unified::UnifiedLine;
