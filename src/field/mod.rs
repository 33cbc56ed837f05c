//! Layer 0, data only: grids, velocity fields, units, flags.  May use: nothing of this crate.

mod axis;
mod domain;
mod grid;
mod quality;
mod units;
mod velocity;

pub use axis::{Axis, AxisError};
pub use domain::{Body, Domain, Shape, Side, Surface, Thickness, Wall, Walls};
pub use grid::Grid;
pub use quality::{Flags, Remark, RemarkKind};
pub use units::{UnitError, UnitSystem, VelocityUnit, length_in_meters, parse_velocity_unit, time_in_seconds};
pub use velocity::{FieldError, Frame, Sigma, VelocityField};
