//! What is fixed while frames change: grid, solid bodies, walls, thickness of the layer.

use ndarray::Array2;

use super::Grid;

/// How the fluid moves along a solid surface.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Surface {
    /// Impermeable, tangential velocity unknown.
    Slip,
    /// Impermeable and at rest: the velocity is zero on it.
    NoSlip,
    /// A hole in the data without any tie: nothing is assumed about its rim.
    Free,
}

/// Outline of a solid body, in the length unit of the grid.
#[derive(Debug, Clone, PartialEq)]
pub enum Shape {
    /// Circle by center and radius.
    Circle {
        /// Center position.
        x: f64,
        /// Center position.
        y: f64,
        /// Radius, positive.
        radius: f64,
    },
    /// Simple polygon by its vertices `[x, y]`, in either sense, not repeated at the end.
    Polygon {
        /// Vertices in order.
        vertices: Vec<[f64; 2]>,
    },
    /// Only the covered nodes are known, not where between two nodes the surface lies.
    Nodes,
}

impl Shape {
    /// Whether `(x, y)` lies inside or on the outline; `false` for [`Shape::Nodes`].
    pub fn contains(&self, x: f64, y: f64) -> bool {
        match self {
            Shape::Circle { x: cx, y: cy, radius } => (x - cx).hypot(y - cy) <= *radius,
            Shape::Polygon { vertices } => {
                let mut inside = false;
                for (k, &[x1, y1]) in vertices.iter().enumerate() {
                    let [x0, y0] = vertices[(k + vertices.len() - 1) % vertices.len()];
                    let cross = (x1 - x0) * (y - y0) - (y1 - y0) * (x - x0);
                    let within = (x - x0) * (x - x1) + (y - y0) * (y - y1) <= 0.0;
                    if cross == 0.0 && within {
                        return true;
                    }
                    if (y0 > y) != (y1 > y) && x < x0 + (y - y0) / (y1 - y0) * (x1 - x0) {
                        inside = !inside;
                    }
                }
                inside
            }
            Shape::Nodes => false,
        }
    }

    /// Fraction in (0, 1] of the segment from `outside` to `inside` at which it first meets the outline.
    ///
    /// 0.5 for [`Shape::Nodes`], whose outline is not known better than that; `None` when the segment does not cross.
    pub fn crossing(&self, outside: [f64; 2], inside: [f64; 2]) -> Option<f64> {
        let [x0, y0] = outside;
        let (ex, ey) = (inside[0] - x0, inside[1] - y0);
        match self {
            Shape::Circle { x, y, radius } => {
                let (fx, fy) = (x0 - x, y0 - y);
                let a = ex * ex + ey * ey;
                let b = fx * ex + fy * ey;
                let c = fx * fx + fy * fy - radius * radius;
                let disc = b * b - a * c;
                if !(a > 0.0 && disc >= 0.0) {
                    return None;
                }
                let t = (-b - disc.sqrt()) / a;
                (t > 0.0 && t <= 1.0).then_some(t)
            }
            Shape::Polygon { vertices } => {
                let mut best: Option<f64> = None;
                for (k, &[x2, y2]) in vertices.iter().enumerate() {
                    let [x1, y1] = vertices[(k + vertices.len() - 1) % vertices.len()];
                    let (gx, gy) = (x2 - x1, y2 - y1);
                    let det = ex * gy - ey * gx;
                    if det == 0.0 {
                        continue;
                    }
                    let t = ((x1 - x0) * gy - (y1 - y0) * gx) / det;
                    let s = ((x1 - x0) * ey - (y1 - y0) * ex) / det;
                    if t > 0.0 && t <= 1.0 && (0.0..=1.0).contains(&s) {
                        best = Some(best.map_or(t, |b| b.min(t)));
                    }
                }
                best
            }
            Shape::Nodes => Some(0.5),
        }
    }
}

/// One solid body.
#[derive(Debug, Clone, PartialEq)]
pub struct Body {
    /// Its outline.
    pub shape: Shape,
    /// What is assumed on its surface.
    pub surface: Surface,
}

/// A side of the grid.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
pub enum Side {
    /// Smallest y.
    Bottom,
    /// Largest y.
    Top,
    /// Smallest x.
    Left,
    /// Largest x.
    Right,
}

impl Side {
    /// All four, in the order in which tables list them.
    pub const ALL: [Side; 4] = [Side::Bottom, Side::Top, Side::Left, Side::Right];

    /// Name as written in survey files.
    pub fn name(self) -> &'static str {
        match self {
            Side::Bottom => "bottom",
            Side::Top => "top",
            Side::Left => "left",
            Side::Right => "right",
        }
    }
}

/// An impermeable side of the grid.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Wall {
    /// Slip or no-slip; [`Surface::Free`] is not used here.
    pub surface: Surface,
    /// Coordinate of the wall (y of bottom and top, x of left and right); `None`: on the outermost nodes.
    pub at: Option<f64>,
}

/// Walls on the sides of the grid.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Walls {
    /// Wall at the smallest y.
    pub bottom: Option<Wall>,
    /// Wall at the largest y.
    pub top: Option<Wall>,
    /// Wall at the smallest x.
    pub left: Option<Wall>,
    /// Wall at the largest x.
    pub right: Option<Wall>,
}

impl Walls {
    /// Wall on a side, if there is one.
    pub fn get(&self, side: Side) -> Option<Wall> {
        match side {
            Side::Bottom => self.bottom,
            Side::Top => self.top,
            Side::Left => self.left,
            Side::Right => self.right,
        }
    }

    /// Whether no side is a wall.
    pub fn is_empty(&self) -> bool {
        Side::ALL.iter().all(|&side| self.get(side).is_none())
    }
}

/// Thickness `h(x, y)` of the fluid layer: the velocity is multiplied by it before fluxes are formed.
#[derive(Debug, Clone, PartialEq, Default)]
pub enum Thickness {
    /// Plane flow, flux per unit depth.
    #[default]
    Uniform,
    /// Axisymmetric about y = 0: `h = y` is the radius, psi the Stokes stream function, flux `2 pi psi`.
    Radius,
    /// Depth of a shallow channel at every node, shape `(ny, nx)`, in the length unit of the grid; NaN = gap.
    Map(Array2<f64>),
}

impl Thickness {
    /// Thickness at node `(j, i)`: 1, the radius `y`, or the mapped depth.
    pub fn at_node(&self, grid: &Grid, j: usize, i: usize) -> f64 {
        match self {
            Thickness::Uniform => 1.0,
            Thickness::Radius => grid.y.at(j),
            Thickness::Map(depth) => depth[[j, i]],
        }
    }
}

/// Grid, bodies, walls and thickness: everything that frames of one series share.
#[derive(Debug, Clone, PartialEq)]
pub struct Domain {
    /// The nodes.
    pub grid: Grid,
    /// Solid bodies; body `k` covers the nodes where `covered == k + 1`.
    pub bodies: Vec<Body>,
    /// 0 in the fluid, `k + 1` inside body `k`; shape `(ny, nx)`.
    pub covered: Array2<u16>,
    /// Impermeable sides.
    pub walls: Walls,
    /// Thickness of the layer.
    pub thickness: Thickness,
}

impl Domain {
    /// Domain without bodies and walls, of uniform thickness.
    pub fn open(grid: Grid) -> Self {
        let covered = Array2::zeros(grid.shape());
        Self { grid, bodies: Vec::new(), covered, walls: Walls::default(), thickness: Thickness::Uniform }
    }

    /// Adds a body with an outline and marks the nodes it covers (an earlier body keeps its nodes).
    #[must_use]
    pub fn with_body(mut self, body: Body) -> Self {
        self.bodies.push(body);
        let label = self.bodies.len() as u16;
        let shape = &self.bodies[self.bodies.len() - 1].shape;
        for ((j, i), covered) in self.covered.indexed_iter_mut() {
            if *covered == 0 && shape.contains(self.grid.x.at(i), self.grid.y.at(j)) {
                *covered = label;
            }
        }
        self
    }

    /// Sets the walls.
    #[must_use]
    pub fn with_walls(mut self, walls: Walls) -> Self {
        self.walls = walls;
        self
    }

    /// Sets the thickness.
    #[must_use]
    pub fn with_thickness(mut self, thickness: Thickness) -> Self {
        self.thickness = thickness;
        self
    }

    /// Whether node `(j, i)` lies inside a body.
    pub fn is_solid(&self, j: usize, i: usize) -> bool {
        self.covered[[j, i]] != 0
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn polygon_holds_its_inside_edges_and_nothing_else() {
        let square = Shape::Polygon { vertices: vec![[0.0, 0.0], [2.0, 0.0], [2.0, 1.0], [0.0, 1.0]] };
        assert!(square.contains(1.0, 0.5) && square.contains(2.0, 0.5) && square.contains(0.0, 0.0));
        assert!(!square.contains(2.1, 0.5) && !square.contains(-0.1, 1.0));
    }

    #[test]
    fn crossing_is_the_fraction_at_which_the_outline_is_met() {
        let disc = Shape::Circle { x: 0.0, y: 0.0, radius: 1.0 };
        approx::assert_abs_diff_eq!(disc.crossing([2.0, 0.0], [0.0, 0.0]).unwrap(), 0.5, epsilon = 1e-15);
        let square = Shape::Polygon { vertices: vec![[0.0, 0.0], [2.0, 0.0], [2.0, 1.0], [0.0, 1.0]] };
        approx::assert_abs_diff_eq!(square.crossing([3.0, 0.5], [1.0, 0.5]).unwrap(), 0.5, epsilon = 1e-15);
        assert!(square.crossing([3.0, 0.5], [2.5, 0.5]).is_none());
    }
}
