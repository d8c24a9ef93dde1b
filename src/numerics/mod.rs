//! Mathematics only, thin over libraries.

pub mod angular;
pub mod bessel;
pub mod cubic;
pub mod dot;
pub mod least_squares;
pub mod quadrature;
