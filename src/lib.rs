//! Emberline turns reduced FITS spectra of hydrogen-atmosphere (DA) white dwarfs into effective
//! temperature, surface gravity, radial velocity, mass, radius and age.
//!
//! The modules stand in layer order: a module may import only those above it, which
//! `tests/architecture` enforces.

/// Stable machine codes of every fault and flag, with meaning, remedy and effect on the verdict.
pub mod codes;

/// Mathematics only: quadrature, interpolation, small solves, statistics, rebinning.
pub mod numerics;

/// Laws of nature: constants, wavelengths, hydrogen, populations, opacities, Stark profiles.
pub mod physics;

/// (Teff, log g) to structure to emergent spectrum.
pub mod atmosphere;

/// (mass, Teff) to radius, luminosity and age.
pub mod interior;

/// Immutable tables made by the layers above: file format, checksum, lookup, build.
pub mod grid;

/// Observed data, made safe.
pub mod spectrum;

/// Windows, normalisation, objective, coarse scan, refinement, solutions, errors, screening.
pub mod fit;

/// Fitted parameters to mass, radius, luminosity, redshift and age with propagated errors.
pub mod star;

/// The JSON document, its schema and its atomic writing.
pub mod report;

/// What is done, and the catalogue rows.
pub mod archive;

/// An invented night: simulated spectra with known truth, and the scoring of what came back.
pub mod rehearsal;

/// The daemon.
pub mod service;

/// One file per command.
pub mod cli;
