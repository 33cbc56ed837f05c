//! The graph behind the fit: unknowns, edges between them, weights.

use ndarray::{Array2, Zip};

use super::flux::EdgeRules;
use super::walls::{Extras, Tie, tie_bodies, tie_walls};
use crate::field::{Axis, Domain, Sigma, Thickness};

/// Smallest variance of a nodal flux density relative to the mean one: where the layer is thinner (the axis of an axisymmetric flow, a
/// dry bank) weights stop growing, so that the equations stay solvable.
pub const LEAST_VARIANCE: f64 = 1e-6;

/// Marks a node without unknown.
pub const NONE: u32 = u32::MAX;

/// Unknowns, weights and ties of a domain with given usable vectors.
#[derive(Debug, Clone)]
pub struct Graph {
    /// Unknown of every node: its own number, or `nodes + extra` on a wall, or [`NONE`].
    pub unknown: Array2<u32>,
    /// Weight of y edges, 0 where there is none; shape `(ny - 1, nx)`.
    pub weight_y: Array2<f64>,
    /// Weight of x edges, shape `(ny, nx - 1)`.
    pub weight_x: Array2<f64>,
    /// Ties to walls and bodies.
    pub ties: Vec<Tie>,
    /// Number of nodes with an unknown of their own; extra unknown `k` has number `nodes + k`.
    pub nodes: usize,
    /// Number of extra unknowns.
    pub extras: usize,
    /// Extra unknown of every body, `None` when free.
    pub body_extra: Vec<Option<u32>>,
    /// Extra unknown of every side, order of [`crate::field::Side::ALL`].
    pub wall_extra: [Option<u32>; 4],
    /// Extra unknown of the axis of an axisymmetric flow, when the grid reaches it.
    pub axis_extra: Option<u32>,
}

impl Graph {
    /// Builds the graph.
    ///
    /// Weights `c / var`: `c` the dual width of the edge (half the width of every adjoining valid cell, a quarter of the neighboring
    /// steps where there is none) over its length; with sigma per node, or a thickness, divided by the variance of the edge
    /// flux relative to a field of rms sigma.
    pub fn new(domain: &Domain, valid: &Array2<bool>, sigma: &Sigma) -> Self {
        let shape = valid.dim();
        let extras = Extras::new(domain, shape);
        let variance = NodeVariance::new(domain, valid, sigma);
        // Beside a tied body or wall the graph goes on to its surface: the cells cut by it count as present.
        let present = Array2::from_shape_fn(shape, |(j, i)| {
            valid[[j, i]]
                || extras.of_node(j, i, shape).is_some()
                || matches!(domain.covered[[j, i]], label if label > 0 && extras.bodies[label as usize - 1].is_some())
        });
        let cell = Array2::from_shape_fn((shape.0 - 1, shape.1 - 1), |(j, i)| {
            present[[j, i]] && present[[j, i + 1]] && present[[j + 1, i]] && present[[j + 1, i + 1]]
        });
        let mut unknown = Array2::from_elem(shape, NONE);
        let (weight_y, weight_x) = edge_weights(domain, valid, &cell, &variance);
        let mut count = 0u32;
        for ((j, i), slot) in unknown.indexed_iter_mut() {
            if valid[[j, i]] && extras.of_node(j, i, shape).is_none() {
                *slot = count;
                count += 1;
            }
        }
        for ((j, i), slot) in unknown.indexed_iter_mut() {
            if valid[[j, i]]
                && let Some(extra) = extras.of_node(j, i, shape)
            {
                *slot = count + extra;
            }
        }
        let mut ties = Vec::new();
        tie_bodies(domain, valid, &extras, &variance, &mut ties);
        tie_walls(domain, valid, &extras, &variance, &mut ties);
        Self {
            unknown,
            weight_y,
            weight_x,
            ties,
            nodes: count as usize,
            extras: extras.count,
            body_extra: extras.bodies,
            wall_extra: extras.walls,
            axis_extra: extras.axis,
        }
    }

    /// All edges and ties as pairs of unknowns with weight; edges within one unknown are left out.
    pub fn edges(&self) -> impl Iterator<Item = (u32, u32, f64)> + '_ {
        let graph = self;
        let pair = |a: u32, b: u32, w: f64| (w != 0.0 && a != b && a != NONE && b != NONE).then_some((a, b, w));
        let along_y = graph
            .weight_y
            .indexed_iter()
            .filter_map(move |((j, i), &w)| pair(graph.unknown[[j, i]], graph.unknown[[j + 1, i]], w));
        let along_x = graph
            .weight_x
            .indexed_iter()
            .filter_map(move |((j, i), &w)| pair(graph.unknown[[j, i]], graph.unknown[[j, i + 1]], w));
        let ties =
            graph.ties.iter().filter_map(move |t| pair(graph.nodes as u32 + t.extra, graph.unknown[t.node], t.weight));
        along_y.chain(along_x).chain(ties)
    }
}

/// Relative variance of nodal velocities times the thickness squared; `None` entries mean 1 everywhere.
pub struct NodeVariance {
    u: Option<Array2<f64>>,
    v: Option<Array2<f64>>,
}

impl NodeVariance {
    fn new(domain: &Domain, valid: &Array2<bool>, sigma: &Sigma) -> Self {
        let uniform = matches!(sigma, Sigma::Unknown | Sigma::Uniform { .. });
        let equal = match sigma {
            Sigma::Uniform { u, v } => u == v,
            Sigma::Unknown => true,
            Sigma::PerNode { .. } => false,
        };
        if uniform && equal && domain.thickness == Thickness::Uniform {
            return Self { u: None, v: None };
        }
        let reference = sigma.rms(valid).unwrap_or(1.0).powi(2);
        let build = |of_u: bool| {
            let mut out = Array2::from_elem(valid.dim(), 1.0);
            Zip::indexed(&mut out).par_for_each(|(j, i), value| {
                let s = sigma.at(j, i).map_or(1.0, |(su, sv)| if of_u { su } else { sv }.powi(2) / reference);
                let h = domain.thickness.at_node(&domain.grid, j, i);
                *value = s * h * h;
            });
            let (mut sum, mut count) = (0.0, 0.0);
            for (value, ok) in out.iter().zip(valid) {
                if *ok && value.is_finite() {
                    (sum, count) = (sum + value, count + 1.0);
                }
            }
            let least = LEAST_VARIANCE * sum / f64::max(count, 1.0);
            // NaN stays NaN: such a node has no flux.
            out.mapv_inplace(|value| if value < least { least } else { value });
            Some(out)
        };
        Self { u: build(true), v: build(false) }
    }

    /// Variance factor of a weighted sum relative to the same sum of unit variances.
    pub fn factor(&self, of_u: bool, terms: impl Iterator<Item = ((usize, usize), f64)>) -> f64 {
        match if of_u { &self.u } else { &self.v } {
            None => 1.0,
            Some(variance) => {
                let (mut sum, mut norm) = (0.0, 0.0);
                for (node, c) in terms {
                    sum += c * c * variance[node];
                    norm += c * c;
                }
                sum / norm
            }
        }
    }
}

fn edge_weights(
    domain: &Domain,
    valid: &Array2<bool>,
    cell: &Array2<bool>,
    variance: &NodeVariance,
) -> (Array2<f64>, Array2<f64>) {
    let (ny, nx) = valid.dim();
    let (x, y) = (&domain.grid.x, &domain.grid.y);
    let (rules_x, rules_y) = (EdgeRules::new(x), EdgeRules::new(y));
    let dual = |axis: &Axis, k: usize, before: bool, after: bool| -> f64 {
        let low = if k > 0 { axis.spacing(k - 1) } else { axis.spacing(0) };
        let high = if k + 1 < axis.len() { axis.spacing(k) } else { low };
        match (before, after) {
            (false, false) => 0.125 * (low + high),
            (a, b) => 0.5 * (if a { low } else { 0.0 } + if b { high } else { 0.0 }),
        }
    };
    let mut weight_y = Array2::zeros((ny - 1, nx));
    Zip::indexed(&mut weight_y).par_for_each(|(j, i), w: &mut f64| {
        if valid[[j, i]] && valid[[j + 1, i]] {
            let width = dual(x, i, i > 0 && cell[[j, i - 1]], i + 1 < nx && cell[[j, i]]);
            let rule = rules_y.of(j, j > 0 && valid[[j - 1, i]], j + 2 < ny && valid[[j + 2, i]]);
            *w = width / y.spacing(j) / variance.factor(true, rule.terms().map(|(m, c)| ((m, i), c)));
        }
    });
    let mut weight_x = Array2::zeros((ny, nx - 1));
    Zip::indexed(&mut weight_x).par_for_each(|(j, i), w: &mut f64| {
        if valid[[j, i]] && valid[[j, i + 1]] {
            let width = dual(y, j, j > 0 && cell[[j - 1, i]], j + 1 < ny && cell[[j, i]]);
            let rule = rules_x.of(i, i > 0 && valid[[j, i - 1]], i + 2 < nx && valid[[j, i + 2]]);
            *w = width / x.spacing(i) / variance.factor(false, rule.terms().map(|(m, c)| ((j, m), c)));
        }
    });
    for weights in [&mut weight_y, &mut weight_x] {
        // No thickness at a node, or none anywhere: no edge.
        weights.mapv_inplace(|w| if w.is_finite() { w } else { 0.0 });
    }
    (weight_y, weight_x)
}
