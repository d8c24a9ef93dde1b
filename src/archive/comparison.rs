//! How the results of two runs differ.
