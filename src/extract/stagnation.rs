//! Interior stagnation points of the fitted field: centers and saddles.

use rayon::prelude::*;

use super::patch_zeros::{Limits, Part, gradient_zeros};
use crate::field::{Domain, Remark, RemarkKind, Side, Surface, Thickness};
use crate::numerics::surface::{Jet, PsiSurface};

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

/// Settings of the search.
#[derive(Debug, Clone, PartialEq)]
pub struct StagnationOptions {
    /// Times a cell is halved before it is reported as undecided.
    pub max_depth: usize,
    /// Change of psi across a cell, as a share of the range of psi, below which the velocity is not told from zero; well
    /// above the rounding and the tolerance of the fit, well below any measurement.
    pub resolution: f64,
    /// Distance in node spacings within which two zeros of one kind are the same point, found from two cells.
    pub merge_distance: f64,
    /// Distance in node spacings within which a point is noted as near a gap, an edge of the data or a solid.
    pub note_distance: f64,
}

impl StagnationOptions {
    /// Default depth: 1/4096 of a cell.
    pub const MAX_DEPTH: usize = 12;
    /// Default resolution.
    pub const RESOLUTION: f64 = 1e-10;
    /// Default merging distance.
    pub const MERGE_DISTANCE: f64 = 1e-5;
    /// Default distance of notes: the spline between a point and a rim nearer than this is one-sided.
    pub const NOTE_DISTANCE: f64 = 1.5;
}

impl Default for StagnationOptions {
    fn default() -> Self {
        Self {
            max_depth: Self::MAX_DEPTH,
            resolution: Self::RESOLUTION,
            merge_distance: Self::MERGE_DISTANCE,
            note_distance: Self::NOTE_DISTANCE,
        }
    }
}

/// A cell in which the search could not tell how many stagnation points there are.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct UndecidedCell {
    /// Row of the cell.
    pub j: usize,
    /// Column of the cell.
    pub i: usize,
    /// Position of the undecided part.
    pub x: f64,
    /// Position of the undecided part.
    pub y: f64,
}

/// What the search found.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct StagnationSearch {
    /// Centers and saddles, numbered (see [`number_points`]).
    pub points: Vec<StagnationPoint>,
    /// Cells with a line, an area or a multiple zero of the velocity.
    pub undecided: Vec<UndecidedCell>,
    /// Zeros left out because they lie on a wall (see [`find_stagnation_points`]).
    pub on_walls: usize,
}

impl StagnationSearch {
    /// One remark about all undecided cells, `None` when there are none.
    pub fn remark(&self) -> Option<Remark> {
        let first = self.undecided.first()?;
        let (mut low, mut high) = ([first.x, first.y], [first.x, first.y]);
        for cell in &self.undecided {
            low = [low[0].min(cell.x), low[1].min(cell.y)];
            high = [high[0].max(cell.x), high[1].max(cell.y)];
        }
        let n = self.undecided.len();
        let (cells, within) = if n == 1 { ("cell", "at") } else { ("cells", "within") };
        let place = if n == 1 {
            format!("x = {:.6}, y = {:.6}", low[0], low[1])
        } else {
            format!("x = {:.6} to {:.6}, y = {:.6} to {:.6}", low[0], high[0], low[1], high[1])
        };
        Some(Remark::new(
            RemarkKind::Undecided,
            format!(
                "stagnation points could not be told apart in {n} {cells} {within} {place}: the velocity vanishes there \
                 along a line, over an area or to second order; look whether the data hold a resting or masked patch"
            ),
        ))
    }
}

/// Sum of the Poincare indices: number of centers minus number of saddles.
///
/// Equals the turning number of the velocity along the rim of the data ([`super::turning::turning_number`]).
pub fn index_sum(points: &[StagnationPoint]) -> i32 {
    points.iter().map(|point| point.index).sum()
}

/// Centers minus saddles minus half the attachment and separation points (half-saddles).
///
/// 1 in a simply connected region bounded by a no-slip wall (Hunt, Abell, Peterka & Woo 1978, J. Fluid Mech. 86, 179, from
/// memory); every body inside lowers it by 1.
pub fn half_index_sum(points: &[StagnationPoint]) -> f64 {
    let halves = points.iter().filter(|point| point.boundary.is_some()).count();
    f64::from(index_sum(points)) - 0.5 * halves as f64
}

/// Orders points by y, then x, and numbers them from 1; call it after interior and wall points are joined.
pub fn number_points(mut points: Vec<StagnationPoint>) -> Vec<StagnationPoint> {
    points.sort_by(|a, b| a.y.total_cmp(&b.y).then(a.x.total_cmp(&b.x)).then(a.index.cmp(&b.index)));
    for (k, point) in points.iter_mut().enumerate() {
        point.id = k + 1;
    }
    points
}

/// Width of the strip along a no-slip wall in which a zero is put down to the wall, in node spacings.  The velocity is zero
/// all along such a wall; how far from it the zero of the fitted field lies is decided by truncation and noise.
const NO_SLIP_STRIP: f64 = 0.5;
/// The same along a slip wall, where only its attachment and separation points are zeros, on the wall up to rounding.
const SLIP_STRIP: f64 = 0.05;
/// Half-width of the strip about the axis of an axisymmetric flow, where grad psi = r (u, v) is zero all along.
const AXIS_STRIP: f64 = 0.5;
/// Circle around zeros that coincide but differ in kind, in node spacings; its turning number says what they are.
const CLUSTER_RADIUS: f64 = 1e-3;

/// All centers and saddles of the fitted field.
///
/// * Zeros of grad psi in every valid cell: Bernstein exclusion, proof of uniqueness, damped Newton, halving of what is left;
///   none is missed and none counted twice, also on cell borders and nodes.
/// * Units: rates are divided by the thickness, 1/time.
/// * Gaps: only valid cells are searched; a zero on their outer rim belongs to the fluid.
/// * Walls: a zero within half a node spacing of a no-slip wall (on which the velocity vanishes everywhere), within 1/20 of
///   a slip wall, or within half a spacing of the axis of an axisymmetric flow is not an interior point;
///   [`super::wall_points::find_wall_points`] reports what happens there.
/// * Where the velocity vanishes along a line or over an area, cells are returned as undecided, never thousands of points.
/// * Accuracy: that of the surface; O(h^4) for smooth flows.
pub fn find_stagnation_points(surface: &PsiSurface, domain: &Domain, options: &StagnationOptions) -> StagnationSearch {
    let Some((low, high)) = surface.range() else {
        return StagnationSearch::default();
    };
    let limits = Limits {
        cell: options.resolution * (high - low),
        rounding: 16.0 * f64::EPSILON * low.abs().max(high.abs()),
        max_depth: options.max_depth,
    };
    let strips = WallStrips::new(domain);
    let (rows, columns) = surface.cells().dim();
    let found: Vec<RowOfZeros> =
        (0..rows).into_par_iter().map(|j| search_row(surface, &strips, &limits, j, columns)).collect();

    let mut zeros = Vec::new();
    let mut search = StagnationSearch::default();
    for row in found {
        zeros.extend(row.zeros);
        search.undecided.extend(row.undecided);
        search.on_walls += row.on_walls;
    }
    let points = merged(surface, zeros, options.merge_distance)
        .into_iter()
        .filter_map(|zero| point_of(surface, domain, &zero, options))
        .collect();
    search.points = number_points(points);
    search
}

/// A zero of grad psi in index coordinates.
#[derive(Debug, Clone, Copy)]
struct Zero {
    cell: (usize, usize),
    local: [f64; 2],
    jet: Jet,
}

impl Zero {
    fn row(&self) -> f64 {
        self.cell.0 as f64 + self.local[0]
    }

    fn column(&self) -> f64 {
        self.cell.1 as f64 + self.local[1]
    }

    fn index(&self) -> i32 {
        if self.jet.hessian_det() > 0.0 { 1 } else { -1 }
    }

    fn distance(&self, other: &Zero) -> f64 {
        (self.row() - other.row()).hypot(self.column() - other.column())
    }
}

#[derive(Debug, Default)]
struct RowOfZeros {
    zeros: Vec<Zero>,
    undecided: Vec<UndecidedCell>,
    on_walls: usize,
}

fn search_row(surface: &PsiSurface, strips: &WallStrips, limits: &Limits, j: usize, columns: usize) -> RowOfZeros {
    let mut row = RowOfZeros::default();
    let grid = surface.grid();
    for i in (0..columns).filter(|&i| surface.cells()[[j, i]]) {
        let (x0, dx) = (grid.x.at(i), grid.x.spacing(i));
        let (y0, dy) = (grid.y.at(j), grid.y.spacing(j));
        let in_strip = |part: &Part| {
            let x = [x0 + part.t * dx, x0 + (part.t + part.size) * dx];
            let y = [y0 + part.s * dy, y0 + (part.s + part.size) * dy];
            strips.hold(x, y)
        };
        let found = gradient_zeros(&surface.bezier(j, i), limits, &in_strip);
        for [s, t] in found.zeros {
            let local = [s.clamp(0.0, 1.0), t.clamp(0.0, 1.0)];
            let (x, y) = (x0 + local[1] * dx, y0 + local[0] * dy);
            if strips.hold([x, x], [y, y]) {
                row.on_walls += 1;
                continue;
            }
            row.zeros.push(Zero { cell: (j, i), local, jet: surface.eval_in_cell(j, i, local[0], local[1]) });
        }
        if let Some([s, t]) = found.undecided {
            row.undecided.push(UndecidedCell { j, i, x: x0 + t * dx, y: y0 + s * dy });
        }
    }
    row
}

/// One zero for every group found from several cells.
fn merged(surface: &PsiSurface, mut zeros: Vec<Zero>, distance: f64) -> Vec<Zero> {
    zeros.sort_by(|a, b| a.row().total_cmp(&b.row()).then(a.column().total_cmp(&b.column())));
    let mut taken = vec![false; zeros.len()];
    let mut kept = Vec::with_capacity(zeros.len());
    for a in 0..zeros.len() {
        if taken[a] {
            continue;
        }
        let mut group = vec![zeros[a]];
        for b in a + 1..zeros.len() {
            if zeros[b].row() - zeros[a].row() > distance {
                break;
            }
            if !taken[b] && zeros[b].distance(&zeros[a]) <= distance {
                taken[b] = true;
                group.push(zeros[b]);
            }
        }
        let index = group[0].index();
        if group.iter().all(|zero| zero.index() == index) {
            kept.push(group[0]);
        } else {
            // The Hessian jumps across the border: only the field around it can say what the point is.
            let net = super::turning::turning_around(surface, group[0].row(), group[0].column(), CLUSTER_RADIUS);
            kept.extend(group.iter().find(|zero| net == Some(zero.index())));
        }
    }
    kept
}

fn point_of(
    surface: &PsiSurface,
    domain: &Domain,
    zero: &Zero,
    options: &StagnationOptions,
) -> Option<StagnationPoint> {
    let Zero { cell: (j, i), local: [s, t], jet } = *zero;
    let grid = surface.grid();
    let (x, y) = (grid.x.at(i) + t * grid.x.spacing(i), grid.y.at(j) + s * grid.y.spacing(j));
    let det = jet.hessian_det();
    if det == 0.0 || !det.is_finite() {
        return None;
    }
    let strength = det.abs().sqrt();
    let thickness = thickness_in_cell(domain, j, i, s, t);
    let center = det > 0.0;
    let sense = if jet.psi_xx < 0.0 { 1.0 } else { -1.0 };
    Some(StagnationPoint {
        id: 0,
        kind: if center { StagnationKind::Center } else { StagnationKind::Saddle },
        x,
        y,
        psi: jet.psi,
        rate: if center { sense * strength / thickness } else { strength / thickness },
        directions: (!center).then(|| [direction(&jet, strength), direction(&jet, -strength)]),
        index: zero.index(),
        boundary: None,
        normal: None,
        notes: notes_at(surface, domain, zero.row(), zero.column(), options.note_distance, true),
    })
}

/// Unit eigenvector of the velocity gradient `[[psi_xy, psi_yy], [-psi_xx, -psi_xy]]` to the eigenvalue, pointing to +x (or
/// to +y where it is vertical).
fn direction(jet: &Jet, eigenvalue: f64) -> [f64; 2] {
    let from_first = [jet.psi_yy, eigenvalue - jet.psi_xy];
    let from_second = [jet.psi_xy + eigenvalue, -jet.psi_xx];
    let length = |e: [f64; 2]| e[0].hypot(e[1]);
    let e = if length(from_first) >= length(from_second) { from_first } else { from_second };
    let sign = if e[0] < 0.0 || (e[0] == 0.0 && e[1] < 0.0) { -1.0 } else { 1.0 };
    let scale = sign / length(e);
    [e[0] * scale, e[1] * scale]
}

/// Thickness inside cell `(j, i)`, bilinear between its nodes.
fn thickness_in_cell(domain: &Domain, j: usize, i: usize, s: f64, t: f64) -> f64 {
    let at = |j, i| domain.thickness.at_node(&domain.grid, j, i);
    let low = (1.0 - t) * at(j, i) + t * at(j, i + 1);
    let high = (1.0 - t) * at(j + 1, i) + t * at(j + 1, i + 1);
    (1.0 - s) * low + s * high
}

/// Notes on what lies within `distance` node spacings of a point in index coordinates.
pub(super) fn notes_at(
    surface: &PsiSurface,
    domain: &Domain,
    row: f64,
    column: f64,
    distance: f64,
    mention_solids: bool,
) -> Vec<&'static str> {
    let (ny, nx) = surface.psi().dim();
    let window = |p: f64, n: usize| {
        let low = (p - distance).ceil().max(0.0) as usize;
        let high = (p + distance).floor().clamp(0.0, (n - 1) as f64) as usize;
        low..=high
    };
    let (mut gap, mut solid, mut edge) = (false, false, false);
    for j in window(row, ny) {
        for i in window(column, nx) {
            if (j as f64 - row).hypot(i as f64 - column) > distance {
                continue;
            }
            if domain.is_solid(j, i) {
                solid = true;
            } else if !surface.psi()[[j, i]].is_finite() {
                gap = true;
            }
        }
    }
    for side in Side::ALL {
        let from_side = match side {
            Side::Bottom => row,
            Side::Top => (ny - 1) as f64 - row,
            Side::Left => column,
            Side::Right => (nx - 1) as f64 - column,
        };
        if from_side <= distance {
            let wall = domain.walls.get(side).is_some();
            solid |= wall;
            edge |= !wall;
        }
    }
    let notes = [(gap, "near_gap"), (edge, "near_edge"), (solid && mention_solids, "near_solid")];
    notes.into_iter().filter_map(|(here, note)| here.then_some(note)).collect()
}

/// Strips along walls in which zeros of the velocity are not interior points, as half-open intervals of x and y.
struct WallStrips {
    bottom: f64,
    top: f64,
    left: f64,
    right: f64,
    axis: f64,
}

impl WallStrips {
    fn new(domain: &Domain) -> Self {
        let grid = &domain.grid;
        let reach = |side: Side, spacing: f64| {
            domain.walls.get(side).map(|wall| {
                spacing
                    * match wall.surface {
                        Surface::NoSlip => NO_SLIP_STRIP,
                        Surface::Slip => SLIP_STRIP,
                        Surface::Free => 0.0,
                    }
            })
        };
        let at = |side: Side, node: f64| domain.walls.get(side).and_then(|wall| wall.at).unwrap_or(node);
        let (last_x, last_y) = (grid.nx() - 2, grid.ny() - 2);
        let below = |side, node, spacing| reach(side, spacing).map_or(f64::NEG_INFINITY, |r| at(side, node) + r);
        let above = |side, node, spacing| reach(side, spacing).map_or(f64::INFINITY, |r| at(side, node) - r);
        Self {
            bottom: below(Side::Bottom, grid.y.first(), grid.y.spacing(0)),
            top: above(Side::Top, grid.y.last(), grid.y.spacing(last_y)),
            left: below(Side::Left, grid.x.first(), grid.x.spacing(0)),
            right: above(Side::Right, grid.x.last(), grid.x.spacing(last_x)),
            axis: if domain.thickness == Thickness::Radius { AXIS_STRIP * grid.y.mean_step() } else { 0.0 },
        }
    }

    /// Whether a box lies entirely in one strip.
    fn hold(&self, x: [f64; 2], y: [f64; 2]) -> bool {
        y[1] <= self.bottom
            || y[0] >= self.top
            || x[1] <= self.left
            || x[0] >= self.right
            || (self.axis > 0.0 && y[0].abs().max(y[1].abs()) <= self.axis)
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::field::{Axis, Grid, Wall, Walls};
    use ndarray::Array2;
    use std::f64::consts::PI;

    fn search(domain: &Domain, psi: impl Fn(f64, f64) -> f64) -> StagnationSearch {
        let grid = &domain.grid;
        let values = Array2::from_shape_fn(grid.shape(), |(j, i)| psi(grid.x.at(i), grid.y.at(j)));
        find_stagnation_points(&PsiSurface::new(grid, &values), domain, &StagnationOptions::default())
    }

    fn square(n: usize) -> Grid {
        let axis = Axis::uniform(0.0, 1.0 / (n - 1) as f64, n).unwrap();
        Grid::new(axis.clone(), axis)
    }

    #[test] // quadratics are reproduced exactly: position, rate and directions to rounding, on stretched axes
    fn planted_saddle_and_center_come_back_with_rates_and_directions() {
        let x = Axis::from_nodes((0..20).map(|i| 0.1 * f64::from(i) + 0.003 * f64::from(i * i)).collect()).unwrap();
        let y = Axis::from_nodes((0..15).map(|j| 0.13 * f64::from(j) + 0.002 * f64::from(j * j)).collect()).unwrap();
        let domain = Domain::open(Grid::new(x, y));
        let found = search(&domain, |x, y| 3.0 * (x - 0.71) * (y - 0.9));
        assert_eq!(found.points.len(), 1);
        let saddle = &found.points[0];
        assert_eq!((saddle.kind, saddle.index, saddle.id), (StagnationKind::Saddle, -1, 1));
        approx::assert_abs_diff_eq!(saddle.x, 0.71, epsilon = 1e-12);
        approx::assert_abs_diff_eq!(saddle.y, 0.9, epsilon = 1e-12);
        approx::assert_abs_diff_eq!(saddle.rate, 3.0, epsilon = 1e-10);
        // u = 3 (x - 0.71), v = -3 (y - 0.9): out along x, in along y
        let [out, inward] = saddle.directions.unwrap();
        approx::assert_abs_diff_eq!(out[0], 1.0, epsilon = 1e-12);
        approx::assert_abs_diff_eq!(inward[1], 1.0, epsilon = 1e-12);
        // u = -(y - 0.9), v = 4 (x - 0.71): counter-clockwise, frequency 2
        let found = search(&domain, |x, y| -2.0 * (x - 0.71).powi(2) - 0.5 * (y - 0.9).powi(2));
        let center = &found.points[0];
        assert_eq!((center.kind, center.index), (StagnationKind::Center, 1));
        approx::assert_abs_diff_eq!(center.rate, 2.0, epsilon = 1e-10);
        approx::assert_abs_diff_eq!(center.period().unwrap(), PI, epsilon = 1e-10);
    }

    #[test]
    fn oblique_saddle_has_the_directions_of_its_streamlines() {
        // psi = 0 along y = x / 2 and y = -2 x about the point; flow goes out along the first.
        let domain = Domain::open(square(9));
        let found = search(&domain, |x, y| ((y - 0.4) - 0.5 * (x - 0.6)) * (-(y - 0.4) - 2.0 * (x - 0.6)));
        let [out, inward] = found.points[0].directions.unwrap();
        let (u, v) = (|x: f64, y: f64| -2.0 * y - 1.5 * x, |x: f64, y: f64| 2.0 * -x + 1.5 * y);
        for (d, sign) in [(out, 1.0), (inward, -1.0)] {
            let stretch = d[0] * u(d[0], d[1]) + d[1] * v(d[0], d[1]);
            approx::assert_abs_diff_eq!(stretch, sign * 2.5, epsilon = 1e-10);
        }
    }

    #[test] // zeros on a node, on both kinds of edge, on the rim and on a corner of the grid
    fn a_zero_on_a_border_is_found_once() {
        let domain = Domain::open(square(9));
        for (x0, y0) in [(0.5, 0.5), (0.5, 0.3), (0.3, 0.5), (0.0, 0.3), (0.25, 1.0), (0.0, 0.0), (1.0, 1.0)] {
            for sign in [-1.0, 1.0] {
                let found =
                    search(&domain, |x, y| (x - x0).powi(2) + sign * (y - y0).powi(2) + 0.3 * (x - x0) * (y - y0));
                assert_eq!(found.points.len(), 1, "({x0}, {y0}) sign {sign}");
                approx::assert_abs_diff_eq!(found.points[0].x, x0, epsilon = 1e-12);
                approx::assert_abs_diff_eq!(found.points[0].y, y0, epsilon = 1e-12);
                assert!(found.undecided.is_empty());
            }
        }
    }

    #[test] // cells of a Taylor-Green flow whose zeros all fall on nodes
    fn zeros_on_many_nodes_are_each_found_once() {
        let domain = Domain::open(square(33));
        let found = search(&domain, |x, y| (4.0 * PI * x).sin() * (4.0 * PI * y).sin());
        // 4 x 4 centers between 5 x 5 saddles
        assert_eq!(found.points.iter().filter(|p| p.kind == StagnationKind::Center).count(), 16);
        assert_eq!(found.points.iter().filter(|p| p.kind == StagnationKind::Saddle).count(), 25);
        assert!(found.points.windows(2).all(|p| p[0].id + 1 == p[1].id && p[0].y <= p[1].y));
    }

    #[test]
    fn degenerate_flows_end_as_undecided_cells_without_points() {
        let domain = Domain::open(square(65));
        type Psi<'a> = &'a dyn Fn(f64, f64) -> f64;
        let flows: [(&str, Psi<'_>); 5] = [
            ("rest", &|_, _| 7.0),
            ("shear, zero on nodes", &|_, y| (y - 0.5).powi(2)),
            ("shear, zero between nodes", &|_, y| (y - 0.507).powi(2)),
            ("oblique shear", &|x, y| (y - 0.3 * x - 0.2).powi(2)),
            ("shear beside rest", &|_, y| (y - 0.5).max(0.0).powi(2)),
        ];
        for (name, psi) in flows {
            let found = search(&domain, psi);
            assert!(found.points.is_empty(), "{name}: {} points", found.points.len());
            assert!(!found.undecided.is_empty(), "{name}");
            assert!(found.remark().unwrap().text.contains("cells within"), "{name}");
        }
        let uniform = search(&domain, |x, y| y - 0.3 * x);
        assert!(uniform.points.is_empty() && uniform.undecided.is_empty() && uniform.remark().is_none());
    }

    #[test]
    fn rates_are_divided_by_the_thickness() {
        let psi = |x: f64, y: f64| (x - 0.52).powi(2) + (y - 0.53).powi(2);
        let plain = search(&Domain::open(square(17)), psi).points[0].rate;
        let grid = square(17);
        let depth = Array2::from_shape_fn((17, 17), |(j, i)| 1.0 + grid.x.at(i) + 2.0 * grid.y.at(j));
        let map = search(&Domain::open(grid.clone()).with_thickness(Thickness::Map(depth)), psi);
        approx::assert_abs_diff_eq!(map.points[0].rate, plain / (1.0 + 0.52 + 1.06), epsilon = 1e-9);
        let radius = search(&Domain::open(grid).with_thickness(Thickness::Radius), psi);
        approx::assert_abs_diff_eq!(radius.points[0].rate, plain / 0.53, epsilon = 1e-9);
    }

    #[test]
    fn walls_keep_their_own_zeros() {
        let wall = |surface| Some(Wall { surface, at: None });
        let slip = Walls { bottom: wall(Surface::Slip), top: wall(Surface::Slip), ..Walls::default() };
        let psi = |x: f64, y: f64| (2.0 * PI * (x - 0.1)).sin() * (PI * y).sin();
        let found = search(&Domain::open(square(33)).with_walls(slip), psi);
        assert!(found.points.iter().all(|p| p.kind == StagnationKind::Center), "{:?}", found.points);
        assert_eq!((found.points.len(), found.on_walls), (2, 4));
        let rest = Walls { bottom: wall(Surface::NoSlip), ..Walls::default() };
        let found =
            search(&Domain::open(square(33)).with_walls(rest), |x, y| y * y * (0.6 - y) * (1.3 + (5.0 * x).cos()));
        assert!(found.points.iter().all(|p| p.y > 0.3) && found.undecided.is_empty(), "{found:?}");
    }

    #[test]
    fn the_result_does_not_depend_on_the_number_of_threads() {
        let domain = Domain::open(square(65));
        let with = |threads| {
            let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
            pool.install(|| search(&domain, |x, y| (40.0 * x).sin() * (37.0 * y + x * x).sin() + (y - 0.5).powi(2)))
        };
        let one = with(1);
        assert!(one.points.len() > 50);
        assert_eq!(one, with(3));
    }

    #[test]
    fn notes_name_what_is_near() {
        let grid = square(33);
        let h = 1.0 / 32.0;
        let values = Array2::from_shape_fn((33, 33), |(j, i)| {
            let (x, y) = (grid.x.at(i), grid.y.at(j));
            if (j, i) == (16, 16) { f64::NAN } else { (x - 0.5 + 1.2 * h).powi(2) + (y - 0.5 + 0.3 * h).powi(2) }
        });
        let mut domain = Domain::open(grid.clone());
        let options = StagnationOptions::default();
        let notes = |domain: &Domain| {
            find_stagnation_points(&PsiSurface::new(&grid, &values), domain, &options).points[0].notes.clone()
        };
        assert_eq!(notes(&domain), ["near_gap"]);
        domain.covered[[16, 16]] = 1;
        assert_eq!(notes(&domain), ["near_solid"]);
        let near_edge = search(&Domain::open(grid.clone()), |x, y| (x - 1.1 * h).powi(2) + (y - 0.4).powi(2));
        assert_eq!(near_edge.points[0].notes, ["near_edge"]);
    }
}
