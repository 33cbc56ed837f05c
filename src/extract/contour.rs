//! Level lines of psi, traced to a promised tolerance.

/// What a line is.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Role {
    /// A streamline at a chosen level.
    Level,
    /// The level line through a saddle or wall point.
    Separatrix,
    /// The outline of a wall or body that is itself a streamline.
    Wall,
}

impl Role {
    /// Name as written to tables.
    pub fn name(self) -> &'static str {
        match self {
            Role::Level => "level",
            Role::Separatrix => "separatrix",
            Role::Wall => "wall",
        }
    }
}

/// Where a vertex lies.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum VertexFlag {
    /// In a cell whose four corners were measured and kept.
    Measured,
    /// In a cell with a filled corner.
    Filled,
}

/// A level set of psi: an open or closed polyline, directed with the flow.
#[derive(Debug, Clone, PartialEq)]
pub struct Contour {
    /// What it is.
    pub role: Role,
    /// Its psi.
    pub psi: f64,
    /// Whether it closes (the first vertex is then not repeated).
    pub closed: bool,
    /// Vertices `[x, y]`, directed with the flow (fluid moves from vertex to vertex).
    pub vertices: Vec<[f64; 2]>,
    /// Flag of every vertex.
    pub flags: Vec<VertexFlag>,
    /// Length of the polyline.
    pub length: f64,
    /// Enclosed area, positive; `None` for open lines.
    pub area: Option<f64>,
    /// Turnover time `oint ds/|u|` of a closed line; `None` for open lines and lines through a stagnation point.
    pub period: Option<f64>,
    /// The same period from `dA/dpsi`, the cross-check; `None` where the neighbouring levels do not close.
    pub period_by_area: Option<f64>,
    /// Share of the length that runs through measured cells.
    pub measured_share: f64,
    /// Id of the stagnation point a separatrix starts from.
    pub from_point: Option<usize>,
}
