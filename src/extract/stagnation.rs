//! Interior stagnation points of the fitted field: centers and saddles.

use crate::field::Side;

/// Kind of a stagnation point.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum StagnationKind {
    /// Extremum of psi, surrounded by closed streamlines.
    Center,
    /// Saddle of psi, where two streamlines cross.
    Saddle,
    /// A dividing streamline arrives at a wall or solid.
    Attachment,
    /// A dividing streamline leaves a wall or solid.
    Separation,
}

impl StagnationKind {
    /// Name as written to tables.
    pub fn name(self) -> &'static str {
        match self {
            StagnationKind::Center => "center",
            StagnationKind::Saddle => "saddle",
            StagnationKind::Attachment => "attachment",
            StagnationKind::Separation => "separation",
        }
    }
}

/// What a wall point lies on.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Boundary {
    /// A wall side of the grid.
    Side(Side),
    /// Body `k`, counted from 0.
    Body(usize),
}

/// A stagnation point of the fitted field.
#[derive(Debug, Clone, PartialEq)]
pub struct StagnationPoint {
    /// Number in the table, counted from 1, in order of position (y, then x) so that it does not depend on the search.
    pub id: usize,
    /// Kind.
    pub kind: StagnationKind,
    /// Position.
    pub x: f64,
    /// Position.
    pub y: f64,
    /// psi there (of the component it lies in).
    pub psi: f64,
    /// Center: local angular frequency, counter-clockwise positive.  Saddle: strain rate, positive.  Wall point: NaN.
    /// Divided by the local thickness.  Unit 1/time.
    pub rate: f64,
    /// Saddle: unit vectors of the outgoing and the incoming direction.
    pub directions: Option<[[f64; 2]; 2]>,
    /// Poincare index: +1 center, -1 saddle, 0 for wall points (they count half in the bookkeeping).
    pub index: i32,
    /// What a wall point lies on.
    pub boundary: Option<Boundary>,
    /// Unit normal into the fluid at a wall point.
    pub normal: Option<[f64; 2]>,
    /// Notes for the table, for example `near_gap`.
    pub notes: Vec<&'static str>,
}

impl StagnationPoint {
    /// Period of a center, `2 pi / |rate|`; `None` for other kinds.
    pub fn period(&self) -> Option<f64> {
        (self.kind == StagnationKind::Center && self.rate != 0.0).then(|| std::f64::consts::TAU / self.rate.abs())
    }
}
