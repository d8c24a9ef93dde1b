//! Mathematics only, thin over libraries.

pub mod angular;
pub mod bessel;
pub mod cubic;
pub mod quadrature;
