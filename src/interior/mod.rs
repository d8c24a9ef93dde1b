//! Degenerate stars: (mass, Teff) to radius, luminosity, age.

pub mod cold;
pub mod conduction;
pub mod electrons;
pub mod ions;
pub mod jet;
pub mod layer;
pub mod matter;
pub mod opacity;
