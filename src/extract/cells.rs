//! Recirculation cells: regions of closed streamlines bounded by a separatrix.

use rayon::prelude::*;

use super::contour::Scene;
use super::stagnation::{Boundary, StagnationKind, StagnationPoint};
use super::trace::{End, Walker, distance, encloses, signed_area};
use crate::field::{Shape, Side};

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

/// Settings of the search for cells.
#[derive(Debug, Clone, PartialEq)]
pub struct CellOptions {
    /// Largest distance of a chord from its line, in node spacings.
    pub tolerance: f64,
}

impl CellOptions {
    /// Default tolerance in node spacings.
    pub const TOLERANCE: f64 = 1e-2;
}

impl Default for CellOptions {
    fn default() -> Self {
        Self { tolerance: Self::TOLERANCE }
    }
}

/// Loops just inside a bounding level lie this share of the flux of the cell from it; area is extrapolated from there.
const INSIDE: f64 = 2e-3;

/// Steps on large smooth loops may be this long, in node spacings; the tolerance of chords holds for them too.
const LONGEST: f64 = 4.0;

/// Levels tried between the last closed loop and the rim of the data.
const RIM_BISECTIONS: usize = 14;

/// A wall point belongs to a cell when it lies this near the outermost loop, in node spacings.
const WALL_REACH: f64 = 3.0;

/// A saddle bounds a cell when it lies this near the outermost loop, in node spacings.
const SADDLE_REACH: f64 = 3.0;

/// Finds for every center the largest region of closed streamlines around it that holds no other stagnation point.
///
/// The region ends at the level of a saddle (`bound_id`), of a wall or body (`wall_points` when a separation and an attachment on
/// one side or body lie on it, note `bounded_by_wall`), or where the data end (note `open_at_edge`: area and flux are lower bounds).  Area unit length^2,
/// flux in the unit of psi.  Area of a bounded cell is that of the bounding line: the loop at 99.8 % of the way plus a linear step.
pub fn find_cells(
    scene: &Scene<'_>,
    points: &[StagnationPoint],
    body_psi: &[f64],
    wall_psi: &[f64; 4],
    options: &CellOptions,
) -> Vec<Cell> {
    let solid: Vec<f64> = body_psi.iter().chain(wall_psi).copied().filter(|p| p.is_finite()).collect();
    let centers: Vec<&StagnationPoint> = points.iter().filter(|p| p.kind == StagnationKind::Center).collect();
    let mut cells: Vec<Cell> =
        centers.par_iter().filter_map(|center| find_cell(scene, center, points, &solid, options)).collect();
    for (k, cell) in cells.iter_mut().enumerate() {
        cell.id = k + 1;
    }
    cells
}

/// Candidate for the level that bounds a cell.
#[derive(Clone, Copy)]
enum Bound {
    Saddle(usize),
    Solid,
    Range,
}

fn find_cell(
    scene: &Scene<'_>,
    center: &StagnationPoint,
    points: &[StagnationPoint],
    solid: &[f64],
    options: &CellOptions,
) -> Option<Cell> {
    let at = [center.x, center.y];
    let mut walker = Walker::new(scene.surface, options.tolerance);
    walker.longest = LONGEST * walker.h;
    let jet = walker.eval(at)?;
    let maximum = jet.psi_xx + jet.psi_yy < 0.0;
    let sign = if maximum { -1.0 } else { 1.0 };
    // Levels as distance from the center: w = sign (psi - psi_c) grows outwards.
    let outward = |psi: f64| sign * (psi - center.psi);
    let (low, high) = scene.surface.range()?;
    let farthest = outward(if maximum { low } else { high });
    let tiny = 1e-9 * (high - low);
    let mut bounds: Vec<(f64, Bound)> = points
        .iter()
        .filter(|p| p.kind == StagnationKind::Saddle)
        .map(|p| (outward(p.psi), Bound::Saddle(p.id)))
        .chain(solid.iter().map(|&p| (outward(p), Bound::Solid)))
        .filter(|(w, _)| *w > tiny)
        .collect();
    bounds.push((farthest, Bound::Range));
    bounds.sort_by(|a, b| a.0.total_cmp(&b.0));
    let others: Vec<[f64; 2]> =
        points.iter().filter(|p| p.id != center.id && p.boundary.is_none()).map(|p| [p.x, p.y]).collect();
    let mut closed_at = |w: f64| closed_loop(scene, &mut walker, at, center.psi + sign * w, &others);
    // Largest k whose interval, from the bound before to bound k, holds closed loops.
    let middle = |k: usize| {
        let below = if k == 0 { 0.0 } else { bounds[k - 1].0 };
        0.5 * (below + bounds[k].0)
    };
    let first = closed_at(middle(0));
    if first.is_none() {
        // Even the first interval ends at the rim.
        return rim_cell(scene, center, maximum, 0.0, middle(0), &mut closed_at);
    }
    let (mut good, mut bad) = (0, bounds.len());
    while bad - good > 1 {
        let k = usize::midpoint(good, bad);
        if closed_at(middle(k)).is_some() { good = k } else { bad = k }
    }
    let (w, bound) = bounds[good];
    let inside = closed_at((1.0 - INSIDE) * w);
    let Some(outer) = inside else {
        return rim_cell(scene, center, maximum, middle(good), w, &mut closed_at);
    };
    if matches!(bound, Bound::Range) {
        return rim_cell(scene, center, maximum, middle(good), w, &mut closed_at);
    }
    let further = closed_at((1.0 - 2.0 * INSIDE) * w);
    let area = signed_area(&outer).abs();
    let area = area + further.map_or(0.0, |f| area - signed_area(&f).abs());
    let mid = closed_at(0.5 * w);
    let h = scene.surface.grid().spacing();
    let near = |p: &StagnationPoint, reach: f64| outer.iter().any(|&v| distance(v, [p.x, p.y]) <= reach * h);
    let mut cell = Cell {
        id: 0,
        center_id: center.id,
        bound_id: None,
        sense: if maximum { Sense::CounterClockwise } else { Sense::Clockwise },
        area,
        flux: w,
        period_mid: mid.as_deref().and_then(|line| scene.period(line)).unwrap_or(f64::NAN),
        x: center.x,
        y: center.y,
        boundary: outer.clone(),
        wall_length: None,
        wall_points: None,
        notes: Vec::new(),
    };
    match bound {
        Bound::Saddle(id) => {
            cell.bound_id = Some(id);
            if !points.iter().any(|p| p.id == id && near(p, SADDLE_REACH)) {
                cell.notes.push("bound_at_a_distance");
            }
        }
        Bound::Solid => {
            cell.notes.push("bounded_by_wall");
            let on_loop = |kind: StagnationKind| {
                points
                    .iter()
                    .filter(|p| p.kind == kind && near(p, WALL_REACH) && outward(p.psi) > (1.0 - 1e-6) * w - tiny)
                    .min_by(|a, b| distance([a.x, a.y], at).total_cmp(&distance([b.x, b.y], at)))
            };
            let (separation, attachment) = (on_loop(StagnationKind::Separation), on_loop(StagnationKind::Attachment));
            cell.bound_id = separation.or(attachment).map(|p| p.id);
            if let (Some(s), Some(a)) = (separation, attachment)
                && s.boundary == a.boundary
            {
                cell.wall_points = Some((s.id, a.id));
                cell.wall_length = Some(length_along(scene, s, a));
            }
        }
        Bound::Range => {}
    }
    Some(cell)
}

/// A cell cut off by the end of the data: the largest closed loop between two levels.
fn rim_cell(
    scene: &Scene<'_>,
    center: &StagnationPoint,
    maximum: bool,
    closed: f64,
    open: f64,
    closed_at: &mut dyn FnMut(f64) -> Option<Vec<[f64; 2]>>,
) -> Option<Cell> {
    let (mut good, mut bad) = (closed, open);
    let mut outer = None;
    for _ in 0..RIM_BISECTIONS {
        let w = 0.5 * (good + bad);
        match closed_at(w) {
            Some(line) => {
                outer = Some(line);
                good = w;
            }
            None => bad = w,
        }
    }
    let outer = match outer {
        Some(line) => line,
        None => closed_at(good)?,
    };
    let mid = closed_at(0.5 * good);
    Some(Cell {
        id: 0,
        center_id: center.id,
        bound_id: None,
        sense: if maximum { Sense::CounterClockwise } else { Sense::Clockwise },
        area: signed_area(&outer).abs(),
        flux: good,
        period_mid: mid.as_deref().and_then(|line| scene.period(line)).unwrap_or(f64::NAN),
        x: center.x,
        y: center.y,
        boundary: outer,
        wall_length: None,
        wall_points: None,
        notes: vec!["open_at_edge"],
    })
}

/// The closed level line around a center that holds none of the other stagnation points; `None` when it is open, broken or absent.
///
/// Found on rays from the center: the first point where psi passes the level.
fn closed_loop(
    scene: &Scene<'_>,
    walker: &mut Walker<'_>,
    center: [f64; 2],
    level: f64,
    others: &[[f64; 2]],
) -> Option<Vec<[f64; 2]>> {
    let grid = scene.surface.grid();
    let reach = grid.x.extent().hypot(grid.y.extent());
    let start_sign = walker.eval(center)?.psi >= level;
    'rays: for ray in [[1.0, 0.0], [0.0, 1.0], [-1.0, 0.0], [0.0, -1.0]] {
        let place = |r: f64| [center[0] + r * ray[0], center[1] + r * ray[1]];
        let mut step = 0.25 * walker.h;
        let (mut low, mut high) = (0.0, None);
        while low + step < reach {
            let p = place(low + step);
            match walker.eval(p) {
                Some(jet) if !scene.inside_body(p) => {
                    if (jet.psi >= level) != start_sign {
                        high = Some(low + step);
                        break;
                    }
                    low += step;
                }
                // At the rim or a body: up to it in ever smaller steps.
                _ if step > 1e-4 * walker.h => step *= 0.5,
                _ => continue 'rays,
            }
        }
        let Some(mut high) = high else { continue };
        for _ in 0..50 {
            let middle = 0.5 * (low + high);
            match walker.eval(place(middle)) {
                Some(jet) if (jet.psi >= level) == start_sign => low = middle,
                _ => high = middle,
            }
        }
        let Some((start, _)) = walker.onto_level(place(high), level) else { continue };
        let (line, end) = walker.walk(start, level, 1.0, &[], 0.0, &|q| scene.inside_body(q));
        if end != End::Closed || !encloses(&line, center) || others.iter().any(|&p| encloses(&line, p)) {
            return None;
        }
        // A loop around a body is no region of fluid.
        let holds_body = scene.domain.bodies.iter().any(|b| match &b.shape {
            Shape::Circle { x, y, .. } => encloses(&line, [*x, *y]),
            Shape::Polygon { vertices } => encloses(&line, vertices[0]),
            Shape::Nodes => false,
        });
        return (!holds_body).then_some(line);
    }
    None
}

/// Distance between two wall points along their wall: straight on a side, along the arc of a circle, along the edges of a polygon.
fn length_along(scene: &Scene<'_>, a: &StagnationPoint, b: &StagnationPoint) -> f64 {
    let straight = distance([a.x, a.y], [b.x, b.y]);
    match (a.boundary, b.boundary) {
        (Some(Boundary::Side(s)), Some(Boundary::Side(t))) if s == t => match s {
            Side::Bottom | Side::Top => (a.x - b.x).abs(),
            Side::Left | Side::Right => (a.y - b.y).abs(),
        },
        (Some(Boundary::Body(s)), Some(Boundary::Body(t))) if s == t => match &scene.domain.bodies[s].shape {
            Shape::Circle { x, y, radius } => {
                let angle = |p: &StagnationPoint| (p.y - y).atan2(p.x - x);
                let turn = (angle(a) - angle(b)).rem_euclid(std::f64::consts::TAU);
                radius * turn.min(std::f64::consts::TAU - turn)
            }
            _ => straight,
        },
        _ => straight,
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::extract::stagnation::{StagnationOptions, find_stagnation_points, number_points};
    use crate::field::{Axis, Domain, Flags, Grid, Surface, Wall, Walls};
    use crate::numerics::surface::PsiSurface;
    use ndarray::Array2;

    fn cells_of(domain: &Domain, psi: &Array2<f64>, wall_psi: &[f64; 4]) -> Vec<Cell> {
        let surface = PsiSurface::new(&domain.grid, psi);
        let flags = Array2::from_elem(psi.dim(), Flags::MEASURED);
        let scene = Scene { surface: &surface, domain, flags: &flags };
        let points = number_points(find_stagnation_points(&surface, domain, &StagnationOptions::default()).points);
        find_cells(&scene, &points, &[], wall_psi, &CellOptions::default())
    }

    #[test] // Stuart 1967: psi_saddle - psi_center = ln((1 + eps) / (1 - eps)), 0.5108256 at eps = 1/4
    fn a_cat_eye_carries_the_flux_of_stuart_and_ends_at_its_saddles() {
        let eps = 0.25;
        let x = Axis::uniform(-4.0, 0.08, 101).unwrap();
        let y = Axis::uniform(-2.4, 0.08, 61).unwrap();
        let grid = Grid::new(x, y);
        let psi = Array2::from_shape_fn(grid.shape(), |(j, i)| (grid.y.at(j).cosh() - eps * grid.x.at(i).cos()).ln());
        let cells = cells_of(&Domain::open(grid), &psi, &[f64::NAN; 4]);
        let eye = cells.iter().find(|c| c.x.abs() < 0.01).unwrap();
        approx::assert_relative_eq!(eye.flux, 0.510_825_623_765_991, max_relative = 1e-4);
        assert!(eye.bound_id.is_some() && eye.sense == Sense::Clockwise && eye.notes.is_empty(), "{:?}", eye.notes);
        // Area inside cosh Y = 1 + eps + eps cos X by quadrature.
        let n = 200_000;
        let area: f64 = (0..n)
            .map(|k| {
                let t = -std::f64::consts::PI + std::f64::consts::TAU * (f64::from(k) + 0.5) / f64::from(n);
                2.0 * (1.0 + eps + eps * t.cos()).acosh() * std::f64::consts::TAU / f64::from(n)
            })
            .sum();
        approx::assert_relative_eq!(eye.area, area, max_relative = 5e-3);
    }

    #[test] // cellular flow in a box: psi = sin x sin y, one cell bounded by all four walls, flux 1
    fn a_cell_in_a_box_is_bounded_by_its_walls() {
        let axis = Axis::uniform(0.0, std::f64::consts::PI / 40.0, 41).unwrap();
        let wall = Some(Wall { surface: Surface::Slip, at: None });
        let walls = Walls { bottom: wall, top: wall, left: wall, right: wall };
        let domain = Domain::open(Grid::new(axis.clone(), axis)).with_walls(walls);
        let psi = Array2::from_shape_fn((41, 41), |(j, i)| domain.grid.x.at(i).sin() * domain.grid.y.at(j).sin());
        let cells = cells_of(&domain, &psi, &[0.0; 4]);
        assert_eq!(cells.len(), 1);
        approx::assert_relative_eq!(cells[0].flux, 1.0, max_relative = 1e-5);
        approx::assert_relative_eq!(cells[0].area, std::f64::consts::PI.powi(2), max_relative = 2e-2);
        assert_eq!(cells[0].notes, ["bounded_by_wall"]);
        // Period at half the flux, 4 K(sqrt(1 - 1/4)) with K = 2.156515647 (Abramowitz & Stegun 17.2).
        approx::assert_relative_eq!(cells[0].period_mid, 4.0 * 2.156_515_647_5, max_relative = 1e-3);
    }

    #[test]
    fn a_vortex_cut_by_the_edge_of_the_data_is_open_there() {
        let axis = Axis::uniform(-1.0, 0.1, 21).unwrap();
        let grid = Grid::new(axis.clone(), axis);
        let psi = Array2::from_shape_fn((21, 21), |(j, i)| -(grid.x.at(i).powi(2) + grid.y.at(j).powi(2)));
        let cells = cells_of(&Domain::open(grid), &psi, &[f64::NAN; 4]);
        assert_eq!((cells.len(), cells[0].notes.as_slice()), (1, ["open_at_edge"].as_slice()));
        approx::assert_relative_eq!(cells[0].area, std::f64::consts::PI, max_relative = 1e-2);
        // Rigid rotation psi = -r^2: angular velocity 2, period pi.
        approx::assert_relative_eq!(cells[0].period_mid, std::f64::consts::PI, max_relative = 1e-3);
    }
}
