//! Degenerate stars: (mass, Teff) to radius, luminosity, age.
//!
//! Read from top to bottom: free energy of matter, transport of heat, envelope and core, whole stars, their
//! cooling. Runs offline to make `grids/tracks.fits`; the daemon only looks things up there. Nothing is taken
//! from published tables of stars: they are the tests.

/// A function of density and temperature with its derivatives.
pub mod jet;

/// Ideal electrons, any degeneracy and relativity.
pub mod electrons;

/// One-component plasma: liquid, crystal; electron exchange.
pub mod ions;

/// Fully ionised mixtures: the equation of state of cores.
pub mod matter;

/// Partly ionised hydrogen and helium: the equation of state of envelopes.
pub mod layer;

/// Rosseland mean opacities.
pub mod opacity;

/// Conduction by electrons.
pub mod conduction;

/// Neutrino losses.
pub mod neutrinos;

/// Stars of zero temperature, and the two laws of gravity.
pub mod cold;

/// Mixing-length convection.
pub mod convection;

/// Tables of hydrogen and helium that envelopes are integrated with.
pub mod material;

/// Envelope, from the atmosphere to the base of the helium layer.
pub mod envelope;

/// Core: material, mass grid, isothermal structure.
pub mod core;

/// Whole stars, and isothermal ones to start from.
pub mod structure;

/// One time step of a cooling star.
pub mod evolution;

/// Cooling tracks: models and ages of one mass.
pub mod cooling;
