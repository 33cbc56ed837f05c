//! Layer 2, field -> field: screening, edge fluxes, fit of psi, surface, divergence.  May use: field.

pub mod box_test;
mod cholesky;
mod dct;
pub mod divergence;
pub mod extend;
pub mod fill;
pub mod flux;
mod graph;
pub mod helmholtz;
mod multigrid;
pub mod noise;
pub mod operator;
mod outflow;
mod parts;
pub mod screening;
pub mod solver;
pub mod stream_function;
pub mod surface;
mod walls;
