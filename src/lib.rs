//! Stream function, stagnation points, streamlines and recirculation cells from measured planar velocity vectors.
//!
//! # Conventions
//! * Arrays are `(ny, nx)`, index `[[j, i]]`: `j` along +y, `i` along +x, x to the right, y up.
//! * Sign: `u = d psi/dy`, `v = -d psi/dx`; the velocity is grad psi turned 90 degrees clockwise.  psi(B) - psi(A) is the flux
//!   per unit depth that crosses any path from A to B from its left to its right hand side; a counter-clockwise vortex is a
//!   psi maximum.  Vorticity `dv/dx - du/dy` is positive counter-clockwise, divergence `du/dx + dv/dy` positive for outflow.
//! * Units: one length unit and one time unit throughout; nothing undeclared is assumed to be SI.
//! * Gaps: `valid` is false and the value NaN; missing data are never zero.
//! * `sigma` is a standard uncertainty (k = 1).
//!
//! Data flow one way: [`field`] -> [`io`] and [`field`] -> [`numerics`] -> [`extract`] -> [`analysis`] -> [`figure`], [`report`].

pub mod analysis;
pub mod extract;
pub mod field;
#[cfg(feature = "figure")]
pub mod figure;
pub mod io;
pub mod numerics;
pub mod report;
