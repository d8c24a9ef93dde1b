//! An invented night with known truth.
