//! Level lines of psi, traced to a promised tolerance.

use std::collections::HashMap;

use ndarray::Array2;
use rayon::prelude::*;

use super::trace::{End, Walker, distance, distance_to_segment, encloses, signed_area};
use crate::field::{Domain, Flags, Shape, Side, Surface, Thickness};
use crate::numerics::surface::PsiSurface;

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
    /// The same period from `dA/dpsi`, the cross-check; `None` where the neighboring levels do not close.
    pub period_by_area: Option<f64>,
    /// Share of the length that runs through measured cells.
    pub measured_share: f64,
    /// Id of the stagnation point a separatrix starts from.
    pub from_point: Option<usize>,
}

/// How lines are traced.
#[derive(Debug, Clone, PartialEq)]
pub struct TraceOptions {
    /// Largest distance of a chord from its line, in node spacings.
    pub tolerance: f64,
    /// Whether the period is also found from `dA/dpsi` (two more loops for every closed line).
    pub both_periods: bool,
}

impl TraceOptions {
    /// Default tolerance in node spacings.
    pub const TOLERANCE: f64 = 1e-3;
}

impl Default for TraceOptions {
    fn default() -> Self {
        Self { tolerance: Self::TOLERANCE, both_periods: true }
    }
}

/// Change of psi for the period from `dA/dpsi`, relative to the range of psi.
const PERIOD_STEP: f64 = 2e-3;

/// Seeds from centers lie this far from the center, in node spacings, at most.
const SEED_REACH: f64 = 1.0;

/// What surrounds the lines: where they end, how thick the layer is, what was measured.
pub struct Scene<'a> {
    /// Surface of psi, reaching walls and bodies.
    pub surface: &'a PsiSurface,
    /// Bodies, thickness, the measured grid.
    pub domain: &'a Domain,
    /// What every node is.
    pub flags: &'a Array2<Flags>,
}

impl Scene<'_> {
    /// Whether a point lies inside a body with an outline.
    pub fn inside_body(&self, p: [f64; 2]) -> bool {
        self.domain.bodies.iter().any(|b| b.shape.contains(p[0], p[1]))
    }

    /// Thickness at a point; 1 for plane flow, interpolated on a map.
    pub fn thickness(&self, p: [f64; 2]) -> f64 {
        match &self.domain.thickness {
            Thickness::Uniform => 1.0,
            Thickness::Radius => p[1],
            Thickness::Map(depth) => {
                let grid = &self.domain.grid;
                let x = p[0].clamp(grid.x.first(), grid.x.last());
                let y = p[1].clamp(grid.y.first(), grid.y.last());
                match (grid.x.locate(x), grid.y.locate(y)) {
                    (Some((i, t)), Some((j, s))) => {
                        (1.0 - s) * ((1.0 - t) * depth[[j, i]] + t * depth[[j, i + 1]])
                            + s * ((1.0 - t) * depth[[j + 1, i]] + t * depth[[j + 1, i + 1]])
                    }
                    _ => f64::NAN,
                }
            }
        }
    }

    /// Flag of a point: filled when a corner of its cell was filled.
    pub fn flag(&self, p: [f64; 2]) -> VertexFlag {
        let grid = &self.domain.grid;
        let x = p[0].clamp(grid.x.first(), grid.x.last());
        let y = p[1].clamp(grid.y.first(), grid.y.last());
        let (Some((i, _)), Some((j, _))) = (grid.x.locate(x), grid.y.locate(y)) else { return VertexFlag::Filled };
        let corners = [[j, i], [j, i + 1], [j + 1, i], [j + 1, i + 1]];
        if corners.iter().any(|&n| self.flags[n].has(Flags::FILLED)) {
            VertexFlag::Filled
        } else {
            VertexFlag::Measured
        }
    }

    /// Contour of a traced line with all its measures.
    pub fn contour(&self, role: Role, psi: f64, closed: bool, vertices: Vec<[f64; 2]>) -> Contour {
        let flags: Vec<VertexFlag> = vertices.iter().map(|&p| self.flag(p)).collect();
        let n = vertices.len();
        let segments = if closed { n } else { n.saturating_sub(1) };
        let (mut length, mut measured) = (0.0, 0.0);
        for k in 0..segments {
            let m = (k + 1) % n;
            let l = distance(vertices[k], vertices[m]);
            length += l;
            if flags[k] == VertexFlag::Measured && flags[m] == VertexFlag::Measured {
                measured += l;
            }
        }
        let period = (closed && role == Role::Level).then(|| self.period(&vertices)).flatten();
        Contour {
            role,
            psi,
            closed,
            area: closed.then(|| signed_area(&vertices).abs()),
            vertices,
            flags,
            length,
            period,
            period_by_area: None,
            measured_share: if length > 0.0 { measured / length } else { 0.0 },
            from_point: None,
        }
    }

    /// Turnover time `oint ds / |u|` by Simpson's rule on every chord.
    pub fn period(&self, line: &[[f64; 2]]) -> Option<f64> {
        let mut walker = Walker::new(self.surface, 1.0);
        let mut slowness = |p: [f64; 2]| -> Option<f64> {
            let speed = walker.eval(p)?.speed() / self.thickness(p);
            (speed > 0.0).then(|| 1.0 / speed)
        };
        let mut sum = 0.0;
        for k in 0..line.len() {
            let (a, b) = (line[k], line[(k + 1) % line.len()]);
            let middle = [0.5 * (a[0] + b[0]), 0.5 * (a[1] + b[1])];
            sum += distance(a, b) / 6.0 * (slowness(a)? + 4.0 * slowness(middle)? + slowness(b)?);
        }
        sum.is_finite().then_some(sum)
    }

    /// Closed loop at `level` next to a point, walked along the gradient; `None` when it does not close.
    pub fn loop_near(&self, p: [f64; 2], level: f64, tolerance: f64) -> Option<Vec<[f64; 2]>> {
        let mut walker = Walker::new(self.surface, tolerance);
        let (start, _) = walker.onto_level(p, level)?;
        let (line, end) = walker.walk(start, level, 1.0, &[], 0.0, &|q| self.inside_body(q));
        (end == End::Closed).then_some(line)
    }

    /// Turnover time from the change of the enclosed area with psi, `|dA/dpsi|`, by central difference.
    pub fn period_by_area(&self, line: &[[f64; 2]], level: f64, tolerance: f64) -> Option<f64> {
        if self.domain.thickness != Thickness::Uniform {
            return None;
        }
        let (low, high) = self.surface.range()?;
        let step = PERIOD_STEP * (high - low);
        let start = *line.first()?;
        let outer = self.loop_near(start, level + step, tolerance)?;
        let inner = self.loop_near(start, level - step, tolerance)?;
        let period = (signed_area(&outer).abs() - signed_area(&inner).abs()).abs() / (2.0 * step);
        period.is_finite().then_some(period)
    }
}

/// All pieces of the given levels, every piece once, directed with the flow, in the order of the levels.
///
/// A piece is found by the grid edges it crosses (psi at the two nodes on different sides of the level), or around one of the
/// `centers` when it is smaller than that.  Lines end at the rim of the valid cells and on bodies.  A level line that enters and leaves
/// through the same edge of the rim is not seen.
pub fn trace_contours(scene: &Scene<'_>, levels: &[f64], centers: &[[f64; 2]], options: &TraceOptions) -> Vec<Contour> {
    levels.par_iter().flat_map_iter(|&level| trace_level(scene, level, centers, options)).collect()
}

fn trace_level(scene: &Scene<'_>, level: f64, centers: &[[f64; 2]], options: &TraceOptions) -> Vec<Contour> {
    let surface = scene.surface;
    let grid = surface.grid();
    let psi = surface.psi();
    let (ny, nx) = grid.shape();
    let mut walker = Walker::new(surface, options.tolerance);
    let mut known = Known { grid, cells: HashMap::new(), nx };
    let mut out = Vec::new();
    let above = |j: usize, i: usize| psi[[j, i]] >= level;
    let mut seed = |p: [f64; 2], walker: &mut Walker<'_>, known: &mut Known<'_>| {
        if scene.inside_body(p) || known.near(p, 1.5 * walker.tolerance + 1e-9 * walker.h) {
            return;
        }
        let Some((start, _)) = walker.onto_level(p, level) else { return };
        let stop = |q: [f64; 2]| scene.inside_body(q);
        let (mut line, end) = walker.walk(start, level, 1.0, &[], 0.0, &stop);
        let closed = end == End::Closed;
        if !closed {
            let (back, _) = walker.walk(start, level, -1.0, &[], 0.0, &stop);
            line.splice(0..0, back.into_iter().skip(1).rev());
        }
        if line.len() < 2 {
            return;
        }
        known.add(&line, closed);
        let mut contour = scene.contour(Role::Level, level, closed, line);
        if closed && options.both_periods {
            contour.period_by_area = scene.period_by_area(&contour.vertices, level, 10.0 * options.tolerance);
        }
        out.push(contour);
    };
    for j in 0..ny {
        for i in 0..nx {
            if !psi[[j, i]].is_finite() {
                continue;
            }
            let here = above(j, i);
            for (jj, ii, cells) in [
                (j, i + 1, [(j as isize, i as isize), (j as isize - 1, i as isize)]),
                (j + 1, i, [(j as isize, i as isize), (j as isize, i as isize - 1)]),
            ] {
                if jj >= ny || ii >= nx || !psi[[jj, ii]].is_finite() || above(jj, ii) == here {
                    continue;
                }
                let Some((cj, ci)) = cells.into_iter().find(|&(cj, ci)| surface.cell_is_valid(cj, ci)) else {
                    continue;
                };
                if let Some(p) = crossing(surface, (j, i), (jj, ii), (cj as usize, ci as usize), level) {
                    seed(p, &mut walker, &mut known);
                }
            }
        }
    }
    for &center in centers {
        if let Some(p) = seed_beside(&mut walker, center, level) {
            seed(p, &mut walker, &mut known);
        }
    }
    out
}

/// Where psi passes the level on a grid edge, by bisection.
fn crossing(
    surface: &PsiSurface,
    a: (usize, usize),
    b: (usize, usize),
    cell: (usize, usize),
    level: f64,
) -> Option<[f64; 2]> {
    let grid = surface.grid();
    let local = |n: (usize, usize)| ((n.0 - cell.0) as f64, (n.1 - cell.1) as f64);
    let ((sa, ta), (sb, tb)) = (local(a), local(b));
    let at = |w: f64| surface.eval_in_cell(cell.0, cell.1, sa + w * (sb - sa), ta + w * (tb - ta)).psi - level;
    let (mut low, mut high) = (0.0, 1.0);
    let first = at(low);
    for _ in 0..50 {
        let middle = 0.5 * (low + high);
        if (at(middle) >= 0.0) == (first >= 0.0) { low = middle } else { high = middle }
    }
    let w = 0.5 * (low + high);
    let place = |n: (usize, usize)| [grid.x.at(n.1), grid.y.at(n.0)];
    let (pa, pb) = (place(a), place(b));
    Some([pa[0] + w * (pb[0] - pa[0]), pa[1] + w * (pb[1] - pa[1])])
}

/// Point at the level close to a center, for loops smaller than a cell.
fn seed_beside(walker: &mut Walker<'_>, center: [f64; 2], level: f64) -> Option<[f64; 2]> {
    let at_center = walker.eval(center)?;
    let sign = |psi: f64| psi >= level;
    let mut low = 0.0;
    let mut high = None;
    for k in 1..=20 {
        let r = SEED_REACH * walker.h * f64::from(k) / 20.0;
        match walker.eval([center[0] + r, center[1]]) {
            Some(jet) if sign(jet.psi) != sign(at_center.psi) => {
                high = Some(r);
                break;
            }
            Some(_) => low = r,
            None => return None,
        }
    }
    let mut high = high?;
    for _ in 0..50 {
        let middle = 0.5 * (low + high);
        match walker.eval([center[0] + middle, center[1]]) {
            Some(jet) if sign(jet.psi) == sign(at_center.psi) => low = middle,
            _ => high = middle,
        }
    }
    Some([center[0] + high, center[1]])
}

/// Segments of the pieces found so far, by cell.
struct Known<'a> {
    grid: &'a crate::field::Grid,
    cells: HashMap<usize, Vec<([f64; 2], [f64; 2])>>,
    nx: usize,
}

impl Known<'_> {
    fn cells_of(&self, p: [f64; 2]) -> Option<(usize, usize)> {
        let (i, _) = self.grid.x.locate(p[0])?;
        let (j, _) = self.grid.y.locate(p[1])?;
        Some((j, i))
    }

    fn add(&mut self, line: &[[f64; 2]], closed: bool) {
        let n = line.len();
        for k in 0..if closed { n } else { n - 1 } {
            let (a, b) = (line[k], line[(k + 1) % n]);
            if let (Some((j0, i0)), Some((j1, i1))) = (self.cells_of(a), self.cells_of(b)) {
                for j in j0.min(j1)..=j0.max(j1) {
                    for i in i0.min(i1)..=i0.max(i1) {
                        self.cells.entry(j * self.nx + i).or_default().push((a, b));
                    }
                }
            }
        }
    }

    /// Whether a known piece passes within `reach` of a point.
    fn near(&self, p: [f64; 2], reach: f64) -> bool {
        let Some((j, i)) = self.cells_of(p) else { return false };
        // The point lies on an edge of the grid: the piece may be filed under the cell on either side.
        (j.saturating_sub(1)..=j + 1).any(|j| {
            (i.saturating_sub(1)..=i + 1).any(|i| {
                self.cells
                    .get(&(j * self.nx + i))
                    .is_some_and(|list| list.iter().any(|&(a, b)| distance_to_segment(p, a, b) <= reach))
            })
        })
    }
}

/// Vertices of a circle drawn as a polygon.
const CIRCLE_VERTICES: usize = 180;

/// Outlines of walls and tied bodies: they are streamlines themselves.
pub fn wall_contours(scene: &Scene<'_>, body_psi: &[f64], wall_psi: &[f64; 4]) -> Vec<Contour> {
    let grid = &scene.domain.grid;
    let mut out = Vec::new();
    for (s, side) in Side::ALL.into_iter().enumerate() {
        let Some(wall) = scene.domain.walls.get(side) else { continue };
        let (x0, x1, y0, y1) = (grid.x.first(), grid.x.last(), grid.y.first(), grid.y.last());
        let line = match side {
            Side::Bottom => [[x0, wall.at.unwrap_or(y0)], [x1, wall.at.unwrap_or(y0)]],
            Side::Top => [[x0, wall.at.unwrap_or(y1)], [x1, wall.at.unwrap_or(y1)]],
            Side::Left => [[wall.at.unwrap_or(x0), y0], [wall.at.unwrap_or(x0), y1]],
            Side::Right => [[wall.at.unwrap_or(x1), y0], [wall.at.unwrap_or(x1), y1]],
        };
        out.push(scene.contour(Role::Wall, wall_psi[s], false, line.to_vec()));
    }
    for (body, &psi) in scene.domain.bodies.iter().zip(body_psi) {
        if body.surface == Surface::Free || !psi.is_finite() {
            continue;
        }
        let line: Vec<[f64; 2]> = match &body.shape {
            Shape::Circle { x, y, radius } => (0..CIRCLE_VERTICES)
                .map(|k| {
                    let t = std::f64::consts::TAU * k as f64 / CIRCLE_VERTICES as f64;
                    [x + radius * t.cos(), y + radius * t.sin()]
                })
                .collect(),
            Shape::Polygon { vertices } => vertices.clone(),
            Shape::Nodes => continue,
        };
        out.push(scene.contour(Role::Wall, psi, true, line));
    }
    out
}

/// Whether a closed line holds a point.
pub fn line_encloses(line: &[[f64; 2]], p: [f64; 2]) -> bool {
    encloses(line, p)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::field::{Axis, Grid};

    fn taylor_green(n: usize) -> (PsiSurface, Domain) {
        let axis = Axis::uniform(0.0, 1.0 / (n - 1) as f64, n).unwrap();
        let grid = Grid::new(axis.clone(), axis);
        let k = std::f64::consts::TAU * 0.85;
        let psi = Array2::from_shape_fn((n, n), |(j, i)| {
            (k * (grid.x.at(i) - 0.13)).sin() * (k * (grid.y.at(j) - 0.07)).sin() / k
        });
        (PsiSurface::new(&grid, &psi), Domain::open(grid))
    }

    #[test] // the promise: chords within the tolerance, vertices on the level
    fn chords_stay_within_the_tolerance_and_vertices_on_the_level() {
        let (surface, domain) = taylor_green(33);
        let flags = Array2::from_elem((33, 33), Flags::MEASURED);
        let scene = Scene { surface: &surface, domain: &domain, flags: &flags };
        let (low, high) = surface.range().unwrap();
        let h = 1.0 / 32.0;
        for tolerance in [1e-2, 1e-3, 1e-4] {
            let levels: Vec<f64> = (1..12).map(|k| low + (high - low) * f64::from(k) / 12.0).collect();
            let lines = trace_contours(&scene, &levels, &[], &TraceOptions { tolerance, both_periods: false });
            assert!(lines.len() > 15);
            let mut worst: f64 = 0.0;
            for line in &lines {
                let n = line.vertices.len();
                for k in 0..if line.closed { n } else { n - 1 } {
                    let (a, b) = (line.vertices[k], line.vertices[(k + 1) % n]);
                    assert!((surface.eval(a[0], a[1]).unwrap().psi - line.psi).abs() < 1e-12 * (high - low));
                    for w in [0.25, 0.5, 0.75] {
                        let p = [a[0] + w * (b[0] - a[0]), a[1] + w * (b[1] - a[1])];
                        let jet = surface.eval(p[0], p[1]).unwrap();
                        worst = worst.max((jet.psi - line.psi).abs() / jet.speed());
                    }
                }
            }
            assert!(worst <= 1.6 * tolerance * h && worst > 0.3 * tolerance * h, "{tolerance}: {worst}");
        }
    }

    #[test] // both periods agree, and near a center they are 2 pi / sqrt(det H)
    fn periods_agree_and_tend_to_the_one_of_the_center() {
        let (surface, domain) = taylor_green(65);
        let flags = Array2::from_elem((65, 65), Flags::MEASURED);
        let scene = Scene { surface: &surface, domain: &domain, flags: &flags };
        let k = std::f64::consts::TAU * 0.85;
        let center = [0.13 + std::f64::consts::FRAC_PI_2 / k, 0.07 + std::f64::consts::FRAC_PI_2 / k];
        let lines = trace_contours(&scene, &[0.999 / k, 0.5 / k], &[center], &TraceOptions::default());
        let small = lines.iter().find(|l| l.closed && encloses(&l.vertices, center)).unwrap();
        approx::assert_relative_eq!(small.period.unwrap(), std::f64::consts::TAU / k, max_relative = 2e-3);
        let middle = lines.iter().find(|l| l.psi == 0.5 / k && l.closed && encloses(&l.vertices, center)).unwrap();
        approx::assert_relative_eq!(middle.period.unwrap(), middle.period_by_area.unwrap(), max_relative = 3e-3);
        // Taylor-Green orbit sin a sin b = c: period 4 K(sqrt(1 - c^2)) / k, K(sqrt(3)/2) = 2.156515647 (Abramowitz & Stegun 17.2).
        approx::assert_relative_eq!(middle.period.unwrap(), 4.0 * 2.156_515_647_5 / k, max_relative = 2e-4);
        // The flow runs along the line: counter-clockwise around a maximum.
        assert!(signed_area(&middle.vertices) > 0.0);
    }

    #[test]
    fn every_piece_is_found_once_in_noise() {
        // A linear congruential sequence is noise enough here.
        let mut state = 7u64;
        let mut random = || {
            state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
            (state >> 11) as f64 / (1u64 << 53) as f64
        };
        let n = 33;
        let axis = Axis::uniform(0.0, 1.0, n).unwrap();
        let grid = Grid::new(axis.clone(), axis);
        for _ in 0..5 {
            let psi = Array2::from_shape_fn((n, n), |_| random() - 0.5);
            let surface = PsiSurface::new(&grid, &psi);
            let domain = Domain::open(grid.clone());
            let flags = Array2::from_elem((n, n), Flags::MEASURED);
            let scene = Scene { surface: &surface, domain: &domain, flags: &flags };
            let lines = trace_contours(&scene, &[0.1], &[], &TraceOptions { tolerance: 1e-3, both_periods: false });
            // Every open piece has two ends on the rim, where psi crosses the level: their number is that of sign changes there
            // (or more by pairs, where the cubic crosses an edge twice).
            let ends = 2 * lines.iter().filter(|l| !l.closed).count();
            let rim: Vec<f64> = (0..n)
                .map(|i| psi[[0, i]])
                .chain((1..n).map(|j| psi[[j, n - 1]]))
                .chain((0..n - 1).rev().map(|i| psi[[n - 1, i]]))
                .chain((1..n - 1).rev().map(|j| psi[[j, 0]]))
                .collect();
            let changes = (0..rim.len()).filter(|&k| (rim[k] >= 0.1) != (rim[(k + 1) % rim.len()] >= 0.1)).count();
            assert!(
                ends >= changes && (ends - changes) % 2 == 0 && ends <= changes + 8,
                "{ends} ends, {changes} changes"
            );
            for line in &lines {
                if !line.closed {
                    for end in [line.vertices[0], line.vertices[line.vertices.len() - 1]] {
                        let d = end[0].min(end[1]).min(32.0 - end[0]).min(32.0 - end[1]);
                        assert!(d < 1e-4, "an open line ends inside, {d} from the rim");
                    }
                }
            }
        }
    }
}
