//! Recirculation cells: regions of closed streamlines bounded by a separatrix.

/// Sense of rotation.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Sense {
    /// Counter-clockwise, psi maximum.
    CounterClockwise,
    /// Clockwise, psi minimum.
    Clockwise,
}

impl Sense {
    /// Name as written to tables.
    pub fn name(self) -> &'static str {
        match self {
            Sense::CounterClockwise => "counter-clockwise",
            Sense::Clockwise => "clockwise",
        }
    }
}

/// A recirculation cell around one center.
#[derive(Debug, Clone, PartialEq)]
pub struct Cell {
    /// Number in the table, counted from 1.
    pub id: usize,
    /// Id of its center.
    pub center_id: usize,
    /// Id of the saddle or wall point on its boundary; `None` when the edge of the data bounds what can be seen.
    pub bound_id: Option<usize>,
    /// Sense of rotation.
    pub sense: Sense,
    /// Enclosed area.
    pub area: f64,
    /// Flux carried round the center, |psi(center) - psi(boundary)|.
    pub flux: f64,
    /// Turnover time of the level line midway between center and boundary.
    pub period_mid: f64,
    /// Position of the center.
    pub x: f64,
    /// Position of the center.
    pub y: f64,
    /// Boundary polyline, closed.
    pub boundary: Vec<[f64; 2]>,
    /// Length from separation to attachment when two wall points bound the cell.
    pub wall_length: Option<f64>,
    /// Ids of the separation and attachment points in that case.
    pub wall_points: Option<(usize, usize)>,
    /// Notes for the table, for example `open_at_edge`.
    pub notes: Vec<&'static str>,
}
