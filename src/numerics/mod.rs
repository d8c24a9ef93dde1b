//! Mathematics only, thin over libraries.
