//! Layer 3, field -> geometry: stagnation points, level lines, separatrices, cells, fluxes.  May use: field, numerics.

pub mod cells;
pub mod contour;
pub mod flux;
pub mod levels;
mod patch_zeros;
pub mod separatrix;
mod sign_changes;
pub mod stagnation;
pub mod trace;
pub mod turning;
mod wall_curve;
pub mod wall_points;
