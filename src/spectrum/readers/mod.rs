//! One file per layout of reduced one-dimensional spectra.
