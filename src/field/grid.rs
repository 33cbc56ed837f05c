//! Rectilinear grid: an x axis and a y axis.

use super::Axis;

/// Rectilinear grid; arrays on it have shape `(ny, nx)`, index `[[j, i]]`, `j` along +y and `i` along +x.
#[derive(Debug, Clone, PartialEq)]
pub struct Grid {
    /// Positions along the last array index.
    pub x: Axis,
    /// Positions along the first array index.
    pub y: Axis,
}

impl Grid {
    /// Grid from its axes.
    pub fn new(x: Axis, y: Axis) -> Self {
        Self { x, y }
    }

    /// Number of nodes along x.
    pub fn nx(&self) -> usize {
        self.x.len()
    }

    /// Number of nodes along y.
    pub fn ny(&self) -> usize {
        self.y.len()
    }

    /// Array shape `(ny, nx)`.
    pub fn shape(&self) -> (usize, usize) {
        (self.ny(), self.nx())
    }

    /// Number of nodes.
    pub fn node_count(&self) -> usize {
        self.nx() * self.ny()
    }

    /// Node spacing `h = sqrt(dx dy)` from the mean steps; the natural length of noise and tolerances.
    pub fn spacing(&self) -> f64 {
        (self.x.mean_step() * self.y.mean_step()).sqrt()
    }

    /// Whether both axes are uniform.
    pub fn is_uniform(&self) -> bool {
        self.x.is_uniform() && self.y.is_uniform()
    }
}
