//! Mathematics only, thin over libraries.

pub mod angular;
pub mod cubic;
pub mod quadrature;
