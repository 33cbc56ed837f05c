//! Attachment and separation points: where a dividing streamline meets a wall or a body.
//!
//! Along a wall the fluid moves with `grad psi` turned clockwise, so its sense is the sign of psi just off the wall minus psi
//! on it.  The strength `f(s) = lim (psi(d) - psi_wall) / d^p` for distance d -> 0 (p = 1 slip, 2 no-slip) is carried from
//! the first rows of valid cells to the wall; where it changes sign along the wall, fluid converges (separation) or
//! diverges (attachment).

use super::sign_changes::{Criteria, Sample, SignChange, sign_changes};
use super::stagnation::{Boundary, StagnationKind, StagnationOptions, StagnationPoint, notes_at};
use super::wall_curve::{Curve, Foot};
use crate::field::{Axis, Domain, Shape, Side, Surface, Thickness};
use crate::numerics::surface::PsiSurface;

/// Settings of the search along walls.
#[derive(Debug, Clone, PartialEq)]
pub struct WallPointOptions {
    /// Samples of the wall strength per node spacing along the wall.
    pub samples: usize,
    /// Distance in node spacings below which two neighboring points, necessarily of opposite kind, cancel: a pair that close
    /// is made by noise or by the extrapolation to the wall.
    pub merge_distance: f64,
    /// Distance in node spacings of notes, as for interior points.
    pub note_distance: f64,
    /// Change of psi, as a share of its range, that is not told from zero.
    pub resolution: f64,
    /// Standard uncertainty of psi one spacing off a wall against psi on it; 0: unknown, nothing is put down to noise.  White
    /// noise sigma of the vectors gives 0.45 (side) to 0.65 (body) sigma h without smoothing.
    pub psi_noise: f64,
    /// A stretch of wall along which the flow goes one way is taken for real when psi somewhere above it, up to three spacings
    /// off, differs from psi on the wall by this many standard uncertainties; weaker stretches join their neighbors.
    pub lobe_sigmas: f64,
}

impl WallPointOptions {
    /// Default samples per spacing.
    pub const SAMPLES: usize = 4;
    /// Default merging distance.
    pub const MERGE_DISTANCE: f64 = 0.5;
    /// Default factor.
    pub const LOBE_SIGMAS: f64 = 3.0;
}

impl Default for WallPointOptions {
    fn default() -> Self {
        Self {
            samples: Self::SAMPLES,
            merge_distance: Self::MERGE_DISTANCE,
            note_distance: StagnationOptions::NOTE_DISTANCE,
            resolution: StagnationOptions::RESOLUTION,
            psi_noise: 0.0,
            lobe_sigmas: Self::LOBE_SIGMAS,
        }
    }
}

/// Length at either end of a side, in node spacings, in which no point is looked for where two walls meet: the corner brings
/// the strength to zero whatever the flow does.
const CORNER_LENGTH: f64 = 1.0;
/// A first row nearer to the wall than this share of the spacing is passed over: dividing by so short a distance only
/// magnifies errors.
const SHORTEST_OFFSET: f64 = 0.4;
/// Distance (share of the spacing) within which a row of nodes lies on the wall.
const ON_NODES: f64 = 1e-6;
/// Stretch of zero strength, in node spacings, that may hide one change of sign.
const LONGEST_ZERO_RUN: f64 = 1.0;
/// Bound of the samples along one wall.
const MAX_SAMPLES: usize = 200_000;
/// Offsets from the wall at which the strength is read: enough for a quadratic.
const OFFSETS: usize = 3;
/// Growth of the uncertainty of psi against the wall from the first offset to the others (white noise, one to three spacings
/// off a side: 0.43, 0.59, 0.63 sigma h).
const NOISE_GROWTH: [f64; OFFSETS] = [1.0, 1.4, 1.5];
/// Distance, in node spacings, within which a change of sign belongs to a vertex of a polygon.
const AT_VERTEX: f64 = 1e-6;

/// Attachment and separation points on the walls and bodies.
///
/// * `body_psi`: psi on every body, NaN where it is free; `wall_psi`: psi on the sides in the order of [`Side::ALL`], NaN
///   where there is no wall (as the fit returns them).
/// * Sign: fluid that diverges along the wall belongs to an attachment, fluid that converges to a separation.
/// * Gaps: stretches of wall without three valid offsets of cells in front of them are left out.
/// * Accuracy: positions O(h^3) for smooth flows (quadratic extrapolation over three offsets); a slip side on the nodes uses
///   the surface's derivative.
/// * Bodies known by covered nodes only, and free ones, have no wall to search.  In an axisymmetric flow the axis is searched
///   like a wall (strength = axial velocity), noted `on_axis`: fluid leaves it at a separation and arrives at an attachment.
pub fn find_wall_points(
    surface: &PsiSurface,
    domain: &Domain,
    body_psi: &[f64],
    wall_psi: &[f64; 4],
    options: &WallPointOptions,
) -> Vec<StagnationPoint> {
    let Some((low, high)) = surface.range() else {
        return Vec::new();
    };
    let resolution = options.resolution * (high - low) + 16.0 * f64::EPSILON * low.abs().max(high.abs());
    let search = Search { surface, domain, resolution, options };
    let mut points = Vec::new();
    for (side, psi) in Side::ALL.into_iter().zip(wall_psi) {
        points.extend(search.side(side, *psi));
    }
    for (k, (body, psi)) in domain.bodies.iter().zip(body_psi).enumerate() {
        if psi.is_finite() && body.surface != Surface::Free {
            points.extend(search.body(k, &body.shape, body.surface, *psi));
        }
    }
    points
}

struct Search<'a> {
    surface: &'a PsiSurface,
    domain: &'a Domain,
    resolution: f64,
    options: &'a WallPointOptions,
}

impl Search<'_> {
    fn side(&self, side: Side, psi: f64) -> Vec<StagnationPoint> {
        let grid = self.surface.grid();
        let on_axis = side == Side::Bottom
            && self.domain.thickness == Thickness::Radius
            && grid.y.first().abs() <= ON_NODES * grid.y.spacing(0);
        let wall = self.domain.walls.get(side);
        let (slip, at) = match wall {
            Some(wall) if !on_axis && psi.is_finite() && wall.surface != Surface::Free => {
                (wall.surface == Surface::Slip, wall.at)
            }
            _ if on_axis => (false, Some(0.0)),
            _ => return Vec::new(),
        };
        let (along, across) = match side {
            Side::Bottom | Side::Top => (&grid.x, &grid.y),
            Side::Left | Side::Right => (&grid.y, &grid.x),
        };
        let n = across.len();
        let row =
            |k: usize| if matches!(side, Side::Bottom | Side::Left) { across.at(k) } else { across.at(n - 1 - k) };
        let at = at.unwrap_or_else(|| row(0));
        let spacing = (row(1) - row(0)).abs();
        let on_nodes = (at - row(0)).abs() <= ON_NODES * spacing;
        let inward = (row(1) - row(0)).signum();
        let offsets: Vec<f64> =
            (0..n).map(|k| inward * (row(k) - at)).filter(|&d| d >= SHORTEST_OFFSET * spacing).take(OFFSETS).collect();

        let (low, high) = (along.first(), along.last());
        let (curve, ends) = match side {
            Side::Bottom => ([[low, at], [high, at]], [Side::Left, Side::Right]),
            Side::Top => ([[high, at], [low, at]], [Side::Right, Side::Left]),
            Side::Left => ([[at, high], [at, low]], [Side::Top, Side::Bottom]),
            Side::Right => ([[at, low], [at, high]], [Side::Bottom, Side::Top]),
        };
        let curve = Curve::path(curve.to_vec());
        let mut nodes: Vec<f64> = along.nodes().iter().map(|p| p - low).collect();
        if matches!(side, Side::Top | Side::Left) {
            nodes = nodes.iter().rev().map(|s| high - low - s).collect();
        }
        let corner = ends.map(|end| if self.domain.walls.get(end).is_some() { CORNER_LENGTH } else { 0.0 });
        let first = nodes[0] + corner[0] * (nodes[1] - nodes[0]);
        let last = nodes[nodes.len() - 1] - corner[1] * (nodes[nodes.len() - 1] - nodes[nodes.len() - 2]);
        let per = self.options.samples.max(1);
        let samples: Vec<f64> = nodes
            .windows(2)
            .flat_map(|pair| (0..per).map(move |k| pair[0] + (pair[1] - pair[0]) * k as f64 / per as f64))
            .chain(nodes.last().copied())
            .filter(|&s| s >= first && s <= last)
            .collect();

        let axis_psi = |foot: &Foot| self.surface.eval(foot.position[0], foot.position[1]).map(|jet| jet.psi);
        let strength = |s: f64| {
            let foot = curve.at(s)?;
            if self.inside_a_body(&foot, None) {
                return None;
            }
            if slip && on_nodes {
                let jet = self.surface.eval(foot.position[0], foot.position[1])?;
                let value = jet.psi_x * foot.normal[0] + jet.psi_y * foot.normal[1];
                return self.extrapolated(&foot, psi, &offsets, slip).map(|sample| Sample { value, ..sample });
            }
            let psi = if on_axis { axis_psi(&foot)? } else { psi };
            self.extrapolated(&foot, psi, &offsets, slip)
        };
        let spacing_along = along.mean_step();
        let criteria = self.criteria(offsets.first().copied().unwrap_or(spacing), slip, spacing_along, spacing_along);
        let changes = sign_changes(&samples, None, &criteria, &strength);
        let mut points = self.points(&changes, &curve, Boundary::Side(side), psi, spacing_along);
        if on_axis {
            for point in &mut points {
                point.psi = self.surface.eval(point.x, point.y).map_or(f64::NAN, |jet| jet.psi);
                point.notes.push("on_axis");
            }
        }
        points
    }

    fn body(&self, number: usize, shape: &Shape, kind: Surface, psi: f64) -> Vec<StagnationPoint> {
        let curve = match shape {
            Shape::Circle { x, y, radius } if *radius > 0.0 => Curve::Circle { center: [*x, *y], radius: *radius },
            Shape::Polygon { vertices } if vertices.len() > 2 => Curve::around_body(vertices),
            _ => return Vec::new(),
        };
        let slip = kind == Surface::Slip;
        let grid = self.surface.grid();
        let length = curve.length();
        let spacing = grid.spacing();
        let wanted = (length / spacing * self.options.samples as f64).ceil();
        if wanted.is_nan() {
            return Vec::new();
        }
        let count = (wanted as usize).clamp(16, MAX_SAMPLES);
        // Half a step off, so that a symmetric body is not sampled exactly at its stagnation points.
        let samples: Vec<f64> = (0..count).map(|k| length * (k as f64 + 0.5) / count as f64).collect();
        let strength = |s: f64| {
            let foot = curve.at(s.rem_euclid(length))?;
            if self.inside_a_body(&foot, Some(number)) {
                return None;
            }
            let [x, y] = foot.position;
            // Cells whose corners all lie beyond the tangent begin within this distance.
            let (i, j) = (grid.x.locate(x)?.0, grid.y.locate(y)?.0);
            let step = foot.normal[0].abs() * grid.x.spacing(i) + foot.normal[1].abs() * grid.y.spacing(j);
            self.extrapolated(&foot, psi, &[step, 2.0 * step, 3.0 * step], slip)
        };
        let criteria = self.criteria(spacing, slip, spacing, length / count as f64);
        let changes = sign_changes(&samples, Some(length), &criteria, &strength);
        self.points(&changes, &curve, Boundary::Body(number), psi, spacing)
    }

    /// Whether a foot lies inside a body other than its own.
    fn inside_a_body(&self, foot: &Foot, own: Option<usize>) -> bool {
        let [x, y] = foot.position;
        self.domain.bodies.iter().enumerate().any(|(k, body)| Some(k) != own && body.shape.contains(x, y))
    }

    /// Strength at the wall by the polynomial through its values at the offsets that can be evaluated (at least two).
    fn extrapolated(&self, foot: &Foot, psi: f64, offsets: &[f64], slip: bool) -> Option<Sample> {
        let mut rises = [0.0; OFFSETS];
        let mut count = 0;
        for (rise, &d) in rises.iter_mut().zip(offsets) {
            let [x, y] = [0, 1].map(|k| foot.position[k] + d * foot.normal[k]);
            let Some(jet) = self.surface.eval(x, y) else { break };
            *rise = jet.psi - psi;
            count += 1;
        }
        if count < 2 {
            return None;
        }
        let offsets = &offsets[..count];
        let (mut value, mut evidence) = (0.0, [f64::NEG_INFINITY; 2]);
        for (k, (&d, &rise)) in offsets.iter().zip(&rises).enumerate() {
            value += lagrange_at_wall(offsets, k) * rise / if slip { d } else { d * d };
            let rise = rise / NOISE_GROWTH[k];
            evidence = [evidence[0].max(-rise), evidence[1].max(rise)];
        }
        Some(Sample { value, evidence })
    }

    /// What counts as a change of sign; lengths along the wall.
    fn criteria(&self, nearest: f64, slip: bool, spacing: f64, sampling: f64) -> Criteria {
        let noise = self.options.psi_noise;
        Criteria {
            zero: self.resolution / if slip { nearest } else { nearest * nearest },
            weak: if noise > 0.0 { self.options.lobe_sigmas * noise } else { f64::NEG_INFINITY },
            shortest: self.options.merge_distance * spacing,
            longest_gap: LONGEST_ZERO_RUN * spacing + sampling,
        }
    }

    fn points(
        &self,
        changes: &[SignChange],
        curve: &Curve,
        boundary: Boundary,
        psi: f64,
        spacing: f64,
    ) -> Vec<StagnationPoint> {
        let length = curve.length();
        let closed = matches!(boundary, Boundary::Body(_));
        let grid = self.surface.grid();
        let index =
            |axis: &Axis, p: f64| axis.locate(p.clamp(axis.first(), axis.last())).map_or(0.0, |(k, t)| k as f64 + t);
        changes
            .iter()
            .filter_map(|change| {
                let s = if closed { change.at.rem_euclid(length) } else { change.at };
                let mut foot = curve.at(s)?;
                if closed && let Some(normal) = curve.vertex_normal(s, AT_VERTEX * spacing) {
                    foot.normal = normal;
                }
                let [x, y] = foot.position;
                let (row, column) = (index(&grid.y, y), index(&grid.x, x));
                let notes = notes_at(self.surface, self.domain, row, column, self.options.note_distance, false);
                Some(StagnationPoint {
                    id: 0,
                    kind: if change.rising { StagnationKind::Attachment } else { StagnationKind::Separation },
                    x,
                    y,
                    psi,
                    rate: f64::NAN,
                    directions: None,
                    index: 0,
                    boundary: Some(boundary),
                    normal: Some(foot.normal),
                    notes,
                })
            })
            .collect()
    }
}

/// Weight of offset `k` in the polynomial through all offsets, at the wall.
fn lagrange_at_wall(offsets: &[f64], k: usize) -> f64 {
    let d = offsets[k];
    offsets.iter().enumerate().filter(|&(l, _)| l != k).map(|(_, &other)| other / (other - d)).product()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::field::{Body, Grid, Wall, Walls};
    use ndarray::Array2;
    use std::f64::consts::PI;

    fn square(n: usize) -> Grid {
        let axis = Axis::uniform(0.0, 1.0 / (n - 1) as f64, n).unwrap();
        Grid::new(axis.clone(), axis)
    }

    fn nodal(domain: &Domain, psi: impl Fn(f64, f64) -> f64) -> PsiSurface {
        let grid = &domain.grid;
        let values = Array2::from_shape_fn(grid.shape(), |(j, i)| {
            if domain.is_solid(j, i) { f64::NAN } else { psi(grid.x.at(i), grid.y.at(j)) }
        });
        PsiSurface::new(grid, &values)
    }

    const NO_WALLS: [f64; 4] = [f64::NAN; 4];

    /// Uniform stream past a circle of radius `a` at the center of the unit square with clockwise circulation `gamma`.
    fn stream_past_circle(a: f64, gamma: f64) -> impl Fn(f64, f64) -> f64 {
        move |x, y| {
            let (x, y) = (x - 0.5, y - 0.5);
            let r2 = x * x + y * y;
            y * (1.0 - a * a / r2) + gamma / (4.0 * PI) * (r2 / (a * a)).ln()
        }
    }

    fn circle_points(n: usize, gamma_over_pi_a: f64) -> Vec<StagnationPoint> {
        let a = 0.17;
        let body = Body { shape: Shape::Circle { x: 0.5, y: 0.5, radius: a }, surface: Surface::Slip };
        let domain = Domain::open(square(n)).with_body(body);
        let surface = nodal(&domain, stream_past_circle(a, gamma_over_pi_a * PI * a));
        find_wall_points(&surface, &domain, &[0.0], &NO_WALLS, &WallPointOptions::default())
    }

    #[test] // closed form: stream from the left arrives at the front and leaves at the back
    fn the_front_of_a_circle_is_an_attachment_and_its_back_a_separation() {
        let points = circle_points(65, 0.0);
        assert_eq!(points.len(), 2);
        for point in points {
            let front = point.x < 0.5;
            assert_eq!(point.kind == StagnationKind::Attachment, front);
            assert_eq!(point.normal.map(|n| n[0] < 0.0), Some(front));
            approx::assert_abs_diff_eq!(point.y, 0.5, epsilon = 1e-9);
            approx::assert_abs_diff_eq!((point.x - 0.5).abs(), 0.17, epsilon = 1e-12);
        }
    }

    #[test] // sin theta = -Gamma / (4 pi U a): -14.47751, -30, -48.59038 degrees (Batchelor 1967 sec. 6.6, from memory)
    fn circulation_moves_the_points_of_a_circle_by_the_known_angle() {
        for (gamma, degrees) in [(1.0, -14.477_512_2), (2.0, -30.0), (3.0, -48.590_377_9)] {
            for (n, allowed) in [(33, 0.045), (65, 0.02), (129, 0.01)] {
                let points = circle_points(n, gamma);
                assert_eq!(points.len(), 2, "{gamma} {n}");
                for point in &points {
                    assert_eq!(point.kind == StagnationKind::Attachment, point.x < 0.5);
                    let angle = (point.y - 0.5).atan2((point.x - 0.5).abs()).to_degrees();
                    let spacings = (angle - degrees).abs().to_radians() * 0.17 * (n - 1) as f64;
                    assert!(spacings < allowed, "{gamma} {n}: off by {spacings} spacings");
                }
            }
        }
    }

    #[test] // cells of sin(pi x) sin(pi y) meet slip walls at every whole x: alternating attachment and separation
    fn slip_walls_of_a_row_of_cells_carry_alternating_points() {
        let grid = Grid::new(Axis::uniform(0.0, 0.05, 61).unwrap(), Axis::uniform(0.0, 0.05, 21).unwrap());
        let wall = Some(Wall { surface: Surface::Slip, at: None });
        let domain = Domain::open(grid).with_walls(Walls { bottom: wall, top: wall, left: wall, right: wall });
        let surface = nodal(&domain, |x, y| (PI * x).sin() * (PI * y).sin());
        let points = find_wall_points(&surface, &domain, &[], &[0.0; 4], &WallPointOptions::default());
        let mut found: Vec<_> = points.iter().map(|p| (p.y > 0.5, p.x.round() as i32, p.kind)).collect();
        found.sort_by_key(|&(top, x, _)| (top, x));
        // psi > 0 in the first cell: counter-clockwise, along the bottom to the right.
        use StagnationKind::{Attachment, Separation};
        assert_eq!(
            found,
            [(false, 1, Separation), (false, 2, Attachment), (true, 1, Attachment), (true, 2, Separation)]
        );
        for point in &points {
            approx::assert_abs_diff_eq!(point.x, point.x.round(), epsilon = 1e-6);
        }
    }

    #[test] // no-slip wall half a spacing outside the first nodes; psi = y^2 cos(pi x) separates where cos changes sign
    fn no_slip_wall_between_nodes_gives_points_where_the_shear_changes_sign() {
        let grid = Grid::new(Axis::uniform(0.0, 0.05, 61).unwrap(), Axis::uniform(0.025, 0.05, 20).unwrap());
        let bottom = Some(Wall { surface: Surface::NoSlip, at: Some(0.0) });
        let domain = Domain::open(grid).with_walls(Walls { bottom, ..Walls::default() });
        let surface = nodal(&domain, |x, y| y * y * (1.0 - y) * (PI * x).cos());
        let points = find_wall_points(
            &surface,
            &domain,
            &[],
            &[0.0, f64::NAN, f64::NAN, f64::NAN],
            &WallPointOptions::default(),
        );
        let at: Vec<f64> = points.iter().map(|p| p.x).collect();
        assert_eq!(at.len(), 3);
        for (x, expected) in at.iter().zip([0.5, 1.5, 2.5]) {
            approx::assert_abs_diff_eq!(*x, expected, epsilon = 1e-5);
        }
        assert_eq!(points[0].kind, StagnationKind::Separation);
        assert_eq!(points[1].kind, StagnationKind::Attachment);
    }

    #[test] // stream past a square set on edge: it divides at the front vertex and joins at the rear one
    fn vertices_of_a_polygon_are_attachment_and_separation() {
        let diamond = vec![[0.3, 0.5], [0.5, 0.3], [0.7, 0.5], [0.5, 0.7]];
        for vertices in [diamond.clone(), diamond.into_iter().rev().collect()] {
            let body = Body { shape: Shape::Polygon { vertices }, surface: Surface::Slip };
            let domain = Domain::open(square(65)).with_body(body);
            // zero on the diamond, odd in y - 0.5, stream-like outside
            let surface = nodal(&domain, |x, y| {
                let (x, y) = ((x - 0.5).abs(), y - 0.5);
                y.signum() * (x + y.abs() - 0.2).max(0.0) * (1.0 - (-8.0 * y.abs()).exp())
            });
            let points = find_wall_points(&surface, &domain, &[0.0], &NO_WALLS, &WallPointOptions::default());
            assert_eq!(points.len(), 2);
            for point in &points {
                approx::assert_abs_diff_eq!((point.x - 0.5).abs(), 0.2, epsilon = 1e-6);
                approx::assert_abs_diff_eq!(point.y, 0.5, epsilon = 1e-6);
                assert_eq!(point.kind == StagnationKind::Attachment, point.x < 0.5);
                let normal = point.normal.unwrap();
                approx::assert_abs_diff_eq!(normal[0].abs(), 1.0, epsilon = 1e-9);
            }
        }
    }

    #[test] // Hill's spherical vortex, radius a: the axis is a dividing streamline with zeros at both poles
    fn the_axis_of_an_axisymmetric_flow_carries_the_poles_of_hills_vortex() {
        let a = 1.0;
        let grid = Grid::new(Axis::uniform(-2.0, 0.05, 81).unwrap(), Axis::uniform(0.0, 0.05, 41).unwrap());
        let domain = Domain::open(grid).with_thickness(Thickness::Radius);
        let psi = |x: f64, r: f64| {
            let rho2 = x * x + r * r;
            if rho2 < a * a {
                -0.75 * r * r * (1.0 - rho2 / (a * a))
            } else {
                0.5 * r * r * (1.0 - (a * a / rho2).powf(1.5))
            }
        };
        let surface = nodal(&domain, psi);
        let points = find_wall_points(&surface, &domain, &[], &NO_WALLS, &WallPointOptions::default());
        assert_eq!(points.len(), 2);
        // The stream along the axis leaves it at the front pole and comes back to it at the rear one.
        assert_eq!(points[0].kind, StagnationKind::Separation);
        assert_eq!(points[1].kind, StagnationKind::Attachment);
        for (point, x) in points.iter().zip([-a, a]) {
            assert!((point.x - x).abs() < 0.02, "{}", point.x);
            assert!(point.notes.contains(&"on_axis"));
        }
    }
}
