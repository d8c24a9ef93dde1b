//! Stark broadening of hydrogen lines.

pub mod broadened;
pub mod microfield;
pub mod self_broadening;
pub mod shell;
pub mod static_line;
pub mod table;

pub use broadened::Broadened;
pub use self_broadening::self_broadening_hwhm_aa;
pub use static_line::StaticLine;
pub use table::{LineTable, ProfileTable, TableNodes};
