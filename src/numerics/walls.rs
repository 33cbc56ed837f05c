//! Walls, bodies and the axis of an axisymmetric flow: which share one unknown, and the ties of the fluid to them.

use std::collections::BTreeMap;

use ndarray::Array2;

use super::flux::lagrange_weights;
use super::graph::NodeVariance;
use crate::field::{Axis, Domain, Shape, Side, Surface, Thickness};

/// A wall farther from the outermost nodes than this many steps cannot be tied: its flux would be an extrapolation.
pub const WALL_REACH: f64 = 1.0 + 1e-6;

/// Distance, in steps, below which a wall counts as lying on the outermost nodes.
pub const ON_NODES: f64 = 1e-6;

/// A flux between a node and a wall or body: `psi(node) - psi(extra) = sum coefficient * component`.
#[derive(Debug, Clone, PartialEq)]
pub struct Tie {
    /// Node.
    pub node: (usize, usize),
    /// Number of the extra unknown, counted from 0.
    pub extra: u32,
    /// Whether u (else v) is integrated.
    pub uses_u: bool,
    /// Nodes and signed coefficients.
    pub terms: Vec<((usize, usize), f64)>,
    /// Weight.
    pub weight: f64,
}

/// Distance from the outermost nodes of a side to its wall in steps, and the step; negative inside the grid.
pub fn wall_distance(domain: &Domain, side: Side, at: f64) -> (f64, f64) {
    let (axis, low): (&Axis, bool) = match side {
        Side::Bottom => (&domain.grid.y, true),
        Side::Top => (&domain.grid.y, false),
        Side::Left => (&domain.grid.x, true),
        Side::Right => (&domain.grid.x, false),
    };
    if low {
        let step = axis.spacing(0);
        ((axis.first() - at) / step, step)
    } else {
        let step = axis.spacing(axis.len() - 2);
        ((at - axis.last()) / step, step)
    }
}

/// Nodes of a side, from the outermost one inwards: `node(k, depth)` is the k-th node along the side.
fn side_node(side: Side, k: usize, depth: usize, shape: (usize, usize)) -> (usize, usize) {
    match side {
        Side::Bottom => (depth, k),
        Side::Top => (shape.0 - 1 - depth, k),
        Side::Left => (k, depth),
        Side::Right => (k, shape.1 - 1 - depth),
    }
}

fn side_len(side: Side, shape: (usize, usize)) -> usize {
    if matches!(side, Side::Bottom | Side::Top) { shape.1 } else { shape.0 }
}

/// Extra unknowns: walls and bodies that touch share one.
pub struct Extras {
    /// How many.
    pub count: usize,
    /// Of every body, `None` when free.
    pub bodies: Vec<Option<u32>>,
    /// Of every side, order of [`Side::ALL`].
    pub walls: [Option<u32>; 4],
    /// Of the axis of an axisymmetric flow.
    pub axis: Option<u32>,
    /// Sides whose outermost nodes lie on the wall.
    on_nodes: [bool; 4],
    /// Row of nodes on the axis.
    axis_row: Option<usize>,
}

impl Extras {
    /// Numbers the extra unknowns of a domain.
    pub fn new(domain: &Domain, shape: (usize, usize)) -> Self {
        let bodies = domain.bodies.len();
        // Slots: bodies, then the four sides, then the axis; joined where they touch.
        let mut parent: Vec<usize> = (0..bodies + 5).collect();
        let tied = |k: usize| domain.bodies[k].surface != Surface::Free;
        let mut on_nodes = [false; 4];
        for (s, side) in Side::ALL.into_iter().enumerate() {
            let Some(wall) = domain.walls.get(side) else { continue };
            let distance = wall.at.map_or(0.0, |at| wall_distance(domain, side, at).0);
            on_nodes[s] = distance.abs() <= ON_NODES;
            for (t, other) in Side::ALL.into_iter().enumerate() {
                let parallel = matches!(side, Side::Bottom | Side::Top) == matches!(other, Side::Bottom | Side::Top);
                if !parallel && domain.walls.get(other).is_some() {
                    join(&mut parent, bodies + s, bodies + t);
                }
            }
            for k in 0..side_len(side, shape) {
                let node = side_node(side, k, 0, shape);
                let label = domain.covered[node] as usize;
                if label > 0 && tied(label - 1) && body_meets_wall(domain, label - 1, side, wall.at, node) {
                    join(&mut parent, bodies + s, label - 1);
                }
            }
        }
        for ((j, i), &label) in domain.covered.indexed_iter() {
            for (jj, ii) in [(j + 1, i), (j, i + 1)] {
                if jj < shape.0 && ii < shape.1 {
                    let (a, b) = (label as usize, domain.covered[[jj, ii]] as usize);
                    if a > 0 && b > 0 && a != b && tied(a - 1) && tied(b - 1) {
                        let (shape_a, shape_b) = (&domain.bodies[a - 1].shape, &domain.bodies[b - 1].shape);
                        if outlines_meet(shape_a, place(domain, (j, i)), shape_b, place(domain, (jj, ii))) {
                            join(&mut parent, a - 1, b - 1);
                        }
                    }
                }
            }
        }
        let axis_row = (domain.thickness == Thickness::Radius)
            .then(|| domain.grid.y.nodes().iter().position(|&r| r.abs() <= ON_NODES * domain.grid.y.mean_step()))
            .flatten();
        if let Some(row) = axis_row {
            // The axis is a streamline: walls that cross it and bodies that sit on it belong to it.
            for (s, side) in Side::ALL.into_iter().enumerate() {
                let meets = match side {
                    Side::Bottom => row == 0 && on_nodes[s],
                    Side::Top => row + 1 == shape.0 && on_nodes[s],
                    Side::Left | Side::Right => true,
                };
                if domain.walls.get(side).is_some() && meets {
                    join(&mut parent, bodies + s, bodies + 4);
                }
            }
            for i in 0..shape.1 {
                let label = domain.covered[[row, i]] as usize;
                if label > 0 && tied(label - 1) {
                    join(&mut parent, label - 1, bodies + 4);
                }
            }
        }
        let mut numbers = BTreeMap::new();
        let mut number = |slot: usize, parent: &mut Vec<usize>| {
            let root = root_of(parent, slot);
            let next = numbers.len() as u32;
            *numbers.entry(root).or_insert(next)
        };
        let body_extra = (0..bodies).map(|k| tied(k).then(|| number(k, &mut parent))).collect();
        let mut walls = [None; 4];
        for (s, side) in Side::ALL.into_iter().enumerate() {
            if domain.walls.get(side).is_some() {
                walls[s] = Some(number(bodies + s, &mut parent));
            }
        }
        let axis = axis_row.map(|_| number(bodies + 4, &mut parent));
        Self { count: numbers.len(), bodies: body_extra, walls, axis, on_nodes, axis_row }
    }

    /// Extra unknown that a node on a wall or on the axis belongs to.
    pub fn of_node(&self, j: usize, i: usize, shape: (usize, usize)) -> Option<u32> {
        let sides = [j == 0, j + 1 == shape.0, i == 0, i + 1 == shape.1];
        (0..4)
            .find(|&s| sides[s] && self.on_nodes[s])
            .and_then(|s| self.walls[s])
            .or_else(|| (self.axis_row == Some(j)).then_some(self.axis).flatten())
    }
}

/// Whether a body that covers the outermost node reaches the wall beyond it.
fn body_meets_wall(domain: &Domain, body: usize, side: Side, at: Option<f64>, node: (usize, usize)) -> bool {
    let shape = &domain.bodies[body].shape;
    let (x, y) = (domain.grid.x.at(node.1), domain.grid.y.at(node.0));
    match (at, side) {
        (None, _) => true,
        _ if matches!(shape, Shape::Nodes) => true,
        (Some(at), Side::Bottom | Side::Top) => shape.contains(x, at),
        (Some(at), Side::Left | Side::Right) => shape.contains(at, y),
    }
}

/// Whether two bodies touch between the neighboring nodes `a` and `b` that they cover; masks touch when their nodes are neighbors.
fn outlines_meet(shape_a: &Shape, a: [f64; 2], shape_b: &Shape, b: [f64; 2]) -> bool {
    if matches!(shape_a, Shape::Nodes) || matches!(shape_b, Shape::Nodes) {
        return true;
    }
    if shape_a.contains(b[0], b[1]) || shape_b.contains(a[0], a[1]) {
        return true;
    }
    // Shares of the segment from b to the outline of the one, from a to the outline of the other.
    match (shape_a.crossing(b, a), shape_b.crossing(a, b)) {
        (Some(to_a), Some(to_b)) => to_a + to_b <= 1.0,
        _ => true,
    }
}

/// Position of a node.
fn place(domain: &Domain, (j, i): (usize, usize)) -> [f64; 2] {
    [domain.grid.x.at(i), domain.grid.y.at(j)]
}

fn root_of(parent: &mut [usize], mut k: usize) -> usize {
    while parent[k] != k {
        parent[k] = parent[parent[k]];
        k = parent[k];
    }
    k
}

fn join(parent: &mut [usize], a: usize, b: usize) {
    let (a, b) = (root_of(parent, a), root_of(parent, b));
    parent[a.max(b)] = a.min(b);
}

/// Coefficients of `int f ds` from the wall (s = 0) to the first of `nodes` (distances from the wall, increasing).
///
/// Slip: Lagrange polynomial through up to 3 nodes, extrapolated to the wall.  No-slip: through the wall value 0 as well.
pub fn wall_weights(distances: &[f64], surface: Surface) -> Vec<f64> {
    let nodes = &distances[..distances.len().min(3)];
    if surface == Surface::NoSlip {
        let mut with_wall = vec![0.0];
        with_wall.extend_from_slice(nodes);
        lagrange_weights(&with_wall, 0.0, nodes[0]).split_off(1)
    } else {
        lagrange_weights(nodes, 0.0, nodes[0])
    }
}

/// Ties every fluid node with a covered axis neighbor to that body.
pub fn tie_bodies(
    domain: &Domain,
    valid: &Array2<bool>,
    extras: &Extras,
    variance: &NodeVariance,
    ties: &mut Vec<Tie>,
) {
    let shape = valid.dim();
    for ((j, i), &ok) in valid.indexed_iter() {
        if !ok || extras.of_node(j, i, shape).is_some() {
            continue;
        }
        for (dj, di) in [(-1isize, 0isize), (1, 0), (0, -1), (0, 1)] {
            let (jj, ii) = (j as isize + dj, i as isize + di);
            if jj < 0 || ii < 0 || jj as usize >= shape.0 || ii as usize >= shape.1 {
                continue;
            }
            let inside = (jj as usize, ii as usize);
            let label = domain.covered[inside] as usize;
            if label == 0 {
                continue;
            }
            let Some(extra) = extras.bodies[label - 1] else { continue };
            let body = &domain.bodies[label - 1];
            let (a, b) = (place(domain, (j, i)), place(domain, inside));
            let step = (a[0] - b[0]).abs() + (a[1] - b[1]).abs();
            let theta = body.shape.crossing(a, b).unwrap_or(1.0).max(f64::MIN_POSITIVE);
            let line = inward_line(valid, (j, i), (-dj, -di));
            push_tie(domain, &line, (theta * step, step), (dj, di), extra, body.surface, variance, ties);
        }
    }
}

/// Ties the outermost nodes of a side to a wall beyond them; the second node of a line to a wall whose own node has no vector.
pub fn tie_walls(domain: &Domain, valid: &Array2<bool>, extras: &Extras, variance: &NodeVariance, ties: &mut Vec<Tie>) {
    let shape = valid.dim();
    for (s, side) in Side::ALL.into_iter().enumerate() {
        let (Some(wall), Some(extra)) = (domain.walls.get(side), extras.walls[s]) else { continue };
        let (theta, step) =
            wall.at.map_or_else(|| (0.0, wall_distance(domain, side, 0.0).1), |at| wall_distance(domain, side, at));
        let (depth, theta) = if extras.on_nodes[s] { (1, 1.0) } else { (0, theta) };
        let outward = match side {
            Side::Bottom => (-1, 0),
            Side::Top => (1, 0),
            Side::Left => (0, -1),
            Side::Right => (0, 1),
        };
        for k in 0..side_len(side, shape) {
            let first = side_node(side, k, 0, shape);
            if depth == 1 && (valid[first] || domain.is_solid(first.0, first.1)) {
                continue;
            }
            let node = side_node(side, k, depth, shape);
            if valid[node] && extras.of_node(node.0, node.1, shape).is_none() {
                let line = inward_line(valid, node, (-outward.0, -outward.1));
                push_tie(domain, &line, (theta * step, step), outward, extra, wall.surface, variance, ties);
            }
        }
    }
}

/// Up to 3 valid nodes from `node` in a direction.
fn inward_line(valid: &Array2<bool>, node: (usize, usize), (dj, di): (isize, isize)) -> Vec<(usize, usize)> {
    let mut line = vec![node];
    for k in 1..3 {
        let (j, i) = (node.0 as isize + k * dj, node.1 as isize + k * di);
        if j < 0 || i < 0 || !valid.get([j as usize, i as usize]).copied().unwrap_or(false) {
            break;
        }
        line.push((j as usize, i as usize));
    }
    line
}

fn push_tie(
    domain: &Domain,
    line: &[(usize, usize)],
    (distance, step): (f64, f64),
    outward: (isize, isize),
    extra: u32,
    surface: Surface,
    variance: &NodeVariance,
    ties: &mut Vec<Tie>,
) {
    let grid = &domain.grid;
    let place = |(j, i): (usize, usize)| if outward.0 != 0 { grid.y.at(j) } else { grid.x.at(i) };
    let distances: Vec<f64> = line.iter().map(|&node| distance + (place(node) - place(line[0])).abs()).collect();
    let weights = wall_weights(&distances, surface);
    let uses_u = outward.0 != 0;
    // psi(node) - psi(wall): node above the wall + int u, below - int u; right of it - int v, left + int v.
    let sign = match outward {
        (-1, _) | (_, 1) => 1.0,
        _ => -1.0,
    };
    let terms: Vec<((usize, usize), f64)> =
        line.iter().copied().zip(weights).map(|(node, w)| (node, sign * w)).collect();
    // Weight 1 on a square grid; on others dual width over step, as for the edges of the same direction.
    let (j, i) = line[0];
    let dual = if uses_u { grid.x.node_width(i) } else { grid.y.node_width(j) };
    let factor = variance.factor(uses_u, terms.iter().copied());
    let weight = dual / step / factor;
    if weight.is_finite() && weight > 0.0 {
        ties.push(Tie { node: (j, i), extra, uses_u, terms, weight });
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test] // the closed forms of the wall integrals for equal steps, theta = 0.3
    fn wall_weights_reduce_to_the_closed_forms() {
        let th: f64 = 0.3;
        let nodes = [th, 1.0 + th, 2.0 + th];
        let slip =
            [th + 0.75 * th * th + th.powi(3) / 6.0, -(th * th + th.powi(3) / 3.0), th * th / 4.0 + th.powi(3) / 6.0];
        let no_slip = [
            th / 2.0 + th * th / 4.0 + th.powi(3) / 24.0,
            -(th.powi(3) / 3.0 + th.powi(4) / 12.0) / (1.0 + th),
            (th.powi(3) / 12.0 + th.powi(4) / 24.0) / (2.0 + th),
        ];
        for (surface, expected) in [(Surface::Slip, slip), (Surface::NoSlip, no_slip)] {
            let got = wall_weights(&nodes, surface);
            for (g, e) in got.iter().zip(expected) {
                approx::assert_abs_diff_eq!(*g, e, epsilon = 1e-14);
            }
        }
        approx::assert_abs_diff_eq!(wall_weights(&[th], Surface::Slip)[0], th, epsilon = 1e-15);
        approx::assert_abs_diff_eq!(wall_weights(&[th], Surface::NoSlip)[0], th / 2.0, epsilon = 1e-15);
        approx::assert_abs_diff_eq!(wall_weights(&[th, 1.0 + th], Surface::Slip)[1], -th * th / 2.0, epsilon = 1e-15);
    }
}
