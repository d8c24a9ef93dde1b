//! Degenerate stars: (mass, Teff) to radius, luminosity, age.

pub mod cold;
pub mod conduction;
pub mod convection;
pub mod cooling;
pub mod core;
pub mod electrons;
pub mod envelope;
pub mod evolution;
pub mod ions;
pub mod jet;
pub mod layer;
pub mod material;
pub mod matter;
pub mod neutrinos;
pub mod opacity;
pub mod structure;
