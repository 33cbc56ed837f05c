//! Layer 2, field -> field: screening, edge fluxes, fit of psi, surface, divergence.  May use: field.

pub mod divergence;
pub mod fill;
pub mod helmholtz;
pub mod noise;
pub mod screening;
pub mod solver;
pub mod stream_function;
pub mod surface;
