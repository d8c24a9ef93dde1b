//! Mathematics only, thin over libraries.

pub mod cubic;
pub mod quadrature;
