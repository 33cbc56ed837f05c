//! What a reader found in a file, before units, geometry and screening are applied.

use ndarray::Array2;

use crate::field::Remark;

/// Largest number of nodes of one frame; more would not fit an ordinary machine.
pub const NODE_LIMIT: usize = 1 << 27;

/// Coordinates of one axis as stored.
#[derive(Debug, Clone, PartialEq)]
pub enum RawAxis {
    /// One position per row or column, in the order of the array (may run down).
    Line(Vec<f64>),
    /// A position per node, shape of the arrays; must be rectilinear to be used.
    Mesh(Array2<f64>),
}

/// One frame as found in a file: arrays `(ny, nx)`, rows along y, columns along x, in the order of the file.
///
/// Values are physical (scale_factor and add_offset applied), in the units of the file; NaN = gap (fill value, empty field,
/// absent row).  Nothing is flipped yet.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct RawFrame {
    /// Component along x.
    pub u: Array2<f64>,
    /// Component along y.
    pub v: Array2<f64>,
    /// x coordinates, if the file holds them.
    pub x: Option<RawAxis>,
    /// y coordinates, if the file holds them.
    pub y: Option<RawAxis>,
    /// Printed resolution of the x coordinates (for example 1 when printed as 4, 9, 13), or that of f16 and f32 numbers; `None`: exact.
    pub x_resolution: Option<f64>,
    /// Printed resolution of the y coordinates.
    pub y_resolution: Option<f64>,
    /// Standard uncertainty of u, if the file holds it.
    pub sigma_u: Option<Array2<f64>>,
    /// Standard uncertainty of v.
    pub sigma_v: Option<Array2<f64>>,
    /// Usable vectors, if the file says so.
    pub valid: Option<Array2<bool>>,
    /// Body number of every node (0 fluid), if the file holds it.
    pub solid: Option<Array2<u16>>,
    /// Depth at every node, if asked for and found.
    pub depth: Option<Array2<f64>>,
    /// Time of the frame, in the unit of the file.
    pub time: Option<f64>,
    /// Unit strings found, as written.
    pub units: RawUnits,
    /// Number of frames the file holds.
    pub frames: usize,
    /// Number of the frame taken, counted from 0.
    pub frame: usize,
    /// Format in one phrase, for example `HDF5, gzip chunks`.
    pub format: String,
    /// Role and place of everything used, for example `("u", "/run3/velocity_x, f32 big-endian (3, 40, 60)")`.
    pub found: Vec<(String, String)>,
    /// What the user should know.
    pub remarks: Vec<Remark>,
}

/// Unit strings as written in a file.
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct RawUnits {
    /// Of coordinates.
    pub length: Option<String>,
    /// Of velocities.
    pub velocity: Option<String>,
    /// Of time stamps.
    pub time: Option<String>,
}
