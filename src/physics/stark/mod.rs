//! Stark broadening of hydrogen lines, from the states of the atom to a profile per A.
//!
//! Lyman alpha to delta and Balmer alpha to H10 come from tables made by the unified theory ([`unified`],
//! stored by `grid::profile_table`), all other lines from the quasi-static approximation ([`static_line`]); both
//! end in a [`Broadened`] profile that includes heat and a Lorentz width. Profiles integrate to 1: the
//! strength that a dissolved upper level loses is the caller's occupation probability. They are symmetric
//! in frequency: give them `Line::detuning_aa`, not a wavelength difference, in the far wings.
//!
//! Measured against the published tables, cut off and heat included (`validate_against_vcs`,
//! `validate_against_stehle`): centres and near wings agree with Vidal, Cooper & Smith (1973) to 0.6 %
//! in the median, 96 - 98 % of points within 8 %; wings agree with Stehle & Hutcheon (1999) to 1.2 % in the
//! median, 98 - 100 % of points within 8 %. Known departures: (1) in the wings where electrons pass from
//! impact to static ours are up to 27 % below VCS, most at low density, while Stehle & Hutcheon agree with
//! ours there; (2) in line centres Stehle & Hutcheon include moving ions: at log n_e = 15 - 16 ours are up
//! to 30 % higher in H-alpha and 42 % lower in H-beta; (3) Stehle & Hutcheon's Balmer lines above H7 are
//! 6 - 8 % above twice the exact Holtsmark wing even at low density.

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
