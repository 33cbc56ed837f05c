//! Conjugate gradients preconditioned by geometric multigrid, for any pattern of gaps, ties and weights.

use ndarray::Array2;
use rayon::prelude::*;

use super::graph::{Graph, NONE};

/// Levels stop growing coarser below this number of nodes.
const COARSEST: usize = 64;

/// Sweeps on the coarsest level: enough to solve it far below the error of the smoothing above.
const COARSE_SWEEPS: usize = 60;

/// Step factors of the two-step Chebyshev smoother for eigenvalues of `D^-1 A` between 1/2 and 2 (roots of T2 on that interval):
/// `1 / (1.25 -+ 0.75 cos(pi / 4))`.
const SMOOTH: [f64; 2] = [1.389_508_9, 0.561_664_5];

/// Chebyshev step factors in the order in which a symmetric cycle needs them after the correction.
const SMOOTH_BACK: [f64; 2] = [SMOOTH[1], SMOOTH[0]];

/// Nodes of a rectangle with weighted edges to the right and upper neighbor, and ties to extra unknowns.
struct Level {
    ny: usize,
    nx: usize,
    /// Weight of the edge from node k to its right neighbor, 0 at the end of a row.
    east: Vec<f64>,
    /// Weight of the edge from node k to its upper neighbor, 0 in the last row.
    north: Vec<f64>,
    /// Reciprocal diagonal, 0 where there is no unknown; extra unknowns behind the nodes.
    inverse: Vec<f64>,
    /// Ties sorted by node: node, extra, weight.
    ties: Vec<(u32, u32, f64)>,
}

/// A multigrid hierarchy; vectors hold `ny * nx` nodes and then the extra unknowns.
pub struct Multigrid {
    levels: Vec<Level>,
    extras: usize,
}

/// How conjugate gradients ended.
pub struct CgOutcome {
    /// Solution.
    pub x: Vec<f64>,
    /// Iterations done.
    pub iterations: usize,
    /// Whether the residual fell below the tolerance.
    pub converged: bool,
}

impl Level {
    fn nodes(&self) -> usize {
        self.ny * self.nx
    }

    fn finish(
        ny: usize,
        nx: usize,
        east: Vec<f64>,
        north: Vec<f64>,
        ties: Vec<(u32, u32, f64)>,
        extras: usize,
    ) -> Self {
        let nodes = ny * nx;
        let mut diagonal = vec![0.0; nodes + extras];
        for k in 0..nodes {
            diagonal[k] += east[k] + north[k];
            if east[k] != 0.0 {
                diagonal[k + 1] += east[k];
            }
            if north[k] != 0.0 {
                diagonal[k + nx] += north[k];
            }
        }
        for &(k, e, w) in &ties {
            diagonal[k as usize] += w;
            diagonal[nodes + e as usize] += w;
        }
        let inverse = diagonal.into_iter().map(|d| if d > 0.0 { 1.0 / d } else { 0.0 }).collect();
        Self { ny, nx, east, north, inverse, ties }
    }

    /// Blocks of 2 x 2 nodes become one; edges between blocks add up, halved since the step doubles while the width does too.
    fn coarser(&self, extras: usize) -> Self {
        let (ny, nx) = (self.ny.div_ceil(2), self.nx.div_ceil(2));
        let (mut east, mut north) = (vec![0.0; ny * nx], vec![0.0; ny * nx]);
        for j in 0..self.ny {
            for i in 0..self.nx {
                let k = j * self.nx + i;
                let c = (j / 2) * nx + i / 2;
                if i % 2 == 1 {
                    east[c] += 0.5 * self.east[k];
                }
                if j % 2 == 1 {
                    north[c] += 0.5 * self.north[k];
                }
            }
        }
        let mut merged = std::collections::BTreeMap::new();
        for &(k, e, w) in &self.ties {
            let (j, i) = (k as usize / self.nx, k as usize % self.nx);
            *merged.entry(((j / 2 * nx + i / 2) as u32, e)).or_insert(0.0) += 0.5 * w;
        }
        let ties = merged.into_iter().map(|((k, e), w)| (k, e, w)).collect();
        Self::finish(ny, nx, east, north, ties, extras)
    }

    /// Row `j` of `A x` without the extra unknowns.
    fn row_of_product(&self, x: &[f64], j: usize, out: &mut [f64]) {
        let nx = self.nx;
        let row = j * nx;
        for i in 0..nx {
            let k = row + i;
            let mut sum = self.east[k] * (x[k] - if i + 1 < nx { x[k + 1] } else { 0.0 });
            if i > 0 {
                sum += self.east[k - 1] * (x[k] - x[k - 1]);
            }
            if j + 1 < self.ny {
                sum += self.north[k] * (x[k] - x[k + nx]);
            }
            if j > 0 {
                sum += self.north[k - nx] * (x[k] - x[k - nx]);
            }
            out[i] = sum;
        }
    }

    /// `out = A x`.
    fn multiply(&self, x: &[f64], out: &mut [f64]) {
        let nodes = self.nodes();
        let (grid, extra) = out.split_at_mut(nodes);
        grid.par_chunks_mut(self.nx).with_min_len(16).enumerate().for_each(|(j, row)| self.row_of_product(x, j, row));
        extra.fill(0.0);
        for &(k, e, w) in &self.ties {
            let (k, e) = (k as usize, e as usize);
            let flow = w * (x[k] - x[nodes + e]);
            grid[k] += flow;
            extra[e] -= flow;
        }
    }

    /// One damped Jacobi step, `x += omega D^-1 (b - A x)`.
    fn relax(&self, b: &[f64], x: &mut [f64], scratch: &mut [f64], omega: f64) {
        self.multiply(x, scratch);
        let inverse = &self.inverse;
        x.par_chunks_mut(4096).enumerate().for_each(|(c, x)| {
            let start = c * 4096;
            for (m, x) in x.iter_mut().enumerate() {
                let k = start + m;
                *x += omega * inverse[k] * (b[k] - scratch[k]);
            }
        });
    }
}

/// Work vectors of one level.
struct Work {
    b: Vec<f64>,
    x: Vec<f64>,
    scratch: Vec<f64>,
}

impl Multigrid {
    /// Hierarchy of a graph.
    pub fn new(graph: &Graph) -> Self {
        let (ny, nx) = graph.unknown.dim();
        let is_node =
            |j: usize, i: usize| graph.unknown[[j, i]] != NONE && (graph.unknown[[j, i]] as usize) < graph.nodes;
        let extra_of = |j: usize, i: usize| {
            let k = graph.unknown[[j, i]];
            (k != NONE && k as usize >= graph.nodes).then(|| k - graph.nodes as u32)
        };
        let (mut east, mut north) = (vec![0.0; ny * nx], vec![0.0; ny * nx]);
        let mut ties: Vec<(u32, u32, f64)> = Vec::new();
        for j in 0..ny {
            for i in 0..nx {
                let k = j * nx + i;
                let mut edge = |w: f64, (jj, ii): (usize, usize), slot: &mut f64| {
                    if w == 0.0 {
                        return;
                    }
                    match (extra_of(j, i), extra_of(jj, ii)) {
                        (None, None) => {
                            if is_node(j, i) && is_node(jj, ii) {
                                *slot = w;
                            }
                        }
                        (Some(e), None) => ties.push(((jj * nx + ii) as u32, e, w)),
                        (None, Some(e)) => ties.push((k as u32, e, w)),
                        (Some(_), Some(_)) => {}
                    }
                };
                if i + 1 < nx {
                    edge(graph.weight_x[[j, i]], (j, i + 1), &mut east[k]);
                }
                if j + 1 < ny {
                    edge(graph.weight_y[[j, i]], (j + 1, i), &mut north[k]);
                }
            }
        }
        ties.extend(graph.ties.iter().map(|t| ((t.node.0 * nx + t.node.1) as u32, t.extra, t.weight)));
        ties.sort_by_key(|t| (t.0, t.1));
        let mut levels = vec![Level::finish(ny, nx, east, north, ties, graph.extras)];
        while levels[levels.len() - 1].nodes() > COARSEST {
            let next = levels[levels.len() - 1].coarser(graph.extras);
            levels.push(next);
        }
        Self { levels, extras: graph.extras }
    }

    /// Length of vectors on the finest level.
    pub fn len(&self) -> usize {
        self.levels[0].nodes() + self.extras
    }

    /// `A x` on the finest level.
    pub fn multiply(&self, x: &[f64]) -> Vec<f64> {
        let mut out = vec![0.0; self.len()];
        self.levels[0].multiply(x, &mut out);
        out
    }

    /// Solves `A x = b` for a consistent `b` (sum zero on every connected part) from `x = 0`; stops at
    /// `|b - A x| <= tolerance |b|` or after `limit` iterations.  The same result for any number of threads.
    pub fn solve(&self, b: &[f64], tolerance: f64, limit: usize) -> CgOutcome {
        let n = self.len();
        let mut work: Vec<Work> = self
            .levels
            .iter()
            .map(|l| {
                let m = l.nodes() + self.extras;
                Work { b: vec![0.0; m], x: vec![0.0; m], scratch: vec![0.0; m] }
            })
            .collect();
        let mut x = vec![0.0; n];
        let mut r = b.to_vec();
        let mut p = vec![0.0; n];
        let mut ap = vec![0.0; n];
        let goal = tolerance * dot(b, b).sqrt();
        let mut rz = 0.0;
        for iteration in 0..=limit {
            if dot(&r, &r).sqrt() <= goal {
                return CgOutcome { x, iterations: iteration, converged: true };
            }
            if iteration == limit {
                break;
            }
            work[0].b.copy_from_slice(&r);
            self.cycle(&mut work, 0);
            let z = &work[0].x;
            let next = dot(&r, z);
            let beta = if iteration == 0 { 0.0 } else { next / rz };
            rz = next;
            p.par_iter_mut().zip(z).with_min_len(4096).for_each(|(p, z)| *p = z + beta * *p);
            self.levels[0].multiply(&p, &mut ap);
            let curvature = dot(&p, &ap);
            if !(curvature > 0.0) {
                break;
            }
            let alpha = rz / curvature;
            x.par_iter_mut().zip(&p).with_min_len(4096).for_each(|(x, p)| *x += alpha * p);
            r.par_iter_mut().zip(&ap).with_min_len(4096).for_each(|(r, a)| *r -= alpha * a);
        }
        CgOutcome { x, iterations: limit, converged: false }
    }

    /// One symmetric V-cycle: `work[level].x` approximates the solution for `work[level].b`.
    fn cycle(&self, work: &mut [Work], level: usize) {
        let l = &self.levels[level];
        let (here, below) = work.split_at_mut(level + 1);
        let w = &mut here[level];
        w.x.par_iter_mut()
            .zip(&w.b)
            .zip(&l.inverse)
            .with_min_len(4096)
            .for_each(|((x, b), inverse)| *x = SMOOTH[0] * inverse * b);
        if level + 1 == self.levels.len() {
            for sweep in 1..COARSE_SWEEPS {
                l.relax(&w.b, &mut w.x, &mut w.scratch, SMOOTH[sweep % 2]);
            }
            for sweep in 0..COARSE_SWEEPS {
                l.relax(&w.b, &mut w.x, &mut w.scratch, SMOOTH_BACK[sweep % 2]);
            }
            return;
        }
        l.relax(&w.b, &mut w.x, &mut w.scratch, SMOOTH[1]);
        l.multiply(&w.x, &mut w.scratch);
        w.scratch.par_iter_mut().zip(&w.b).with_min_len(4096).for_each(|(s, b)| *s = b - *s);
        let c = &self.levels[level + 1];
        restrict(l, c, &w.scratch, &mut below[0].b, self.extras);
        self.cycle(work, level + 1);
        let (here, below) = work.split_at_mut(level + 1);
        let w = &mut here[level];
        prolong_add(l, c, &below[0].x, &mut w.x, self.extras);
        for omega in SMOOTH_BACK {
            l.relax(&w.b, &mut w.x, &mut w.scratch, omega);
        }
    }
}

/// The up to four coarse nodes around fine node `(j, i)` with bilinear weights 9/16, 3/16, 3/16, 1/16; coarse nodes without an
/// unknown hand their share to the node's own block.
fn parents(c: &Level, j: usize, i: usize) -> ([usize; 4], [f64; 4]) {
    let (jc, ic) = (j / 2, i / 2);
    let own = jc * c.nx + ic;
    let other = |k: usize, odd: bool, n: usize| if odd { (k + 1 < n).then_some(k + 1) } else { k.checked_sub(1) };
    let (ja, ia) = (other(jc, j % 2 == 1, c.ny), other(ic, i % 2 == 1, c.nx));
    let mut node = [own; 4];
    let mut weight = [9.0 / 16.0, 0.0, 0.0, 0.0];
    for (slot, (jj, ii, w)) in
        [(ja, Some(ic), 3.0 / 16.0), (Some(jc), ia, 3.0 / 16.0), (ja, ia, 1.0 / 16.0)].into_iter().enumerate()
    {
        match (jj, ii) {
            (Some(jj), Some(ii)) if c.inverse[jj * c.nx + ii] != 0.0 => {
                node[slot + 1] = jj * c.nx + ii;
                weight[slot + 1] = w;
            }
            _ => weight[0] += w,
        }
    }
    (node, weight)
}

/// Transpose of [`prolong_add`].
fn restrict(l: &Level, c: &Level, fine: &[f64], coarse: &mut [f64], extras: usize) {
    let (grid, extra) = coarse.split_at_mut(c.nodes());
    grid.par_chunks_mut(c.nx).with_min_len(8).enumerate().for_each(|(jc, row)| {
        row.fill(0.0);
        // Fine rows whose parents may lie in this coarse row.
        for j in (2 * jc).saturating_sub(1)..(2 * jc + 3).min(l.ny) {
            for i in 0..l.nx {
                let k = j * l.nx + i;
                if l.inverse[k] == 0.0 {
                    continue;
                }
                let (node, weight) = parents(c, j, i);
                for (n, w) in node.into_iter().zip(weight) {
                    if n / c.nx == jc {
                        row[n % c.nx] += w * fine[k];
                    }
                }
            }
        }
    });
    extra.copy_from_slice(&fine[l.nodes()..l.nodes() + extras]);
}

fn prolong_add(l: &Level, c: &Level, coarse: &[f64], fine: &mut [f64], extras: usize) {
    let nodes = l.nodes();
    let (grid, extra) = fine.split_at_mut(nodes);
    grid.par_chunks_mut(l.nx).with_min_len(16).enumerate().for_each(|(j, row)| {
        for (i, value) in row.iter_mut().enumerate() {
            if l.inverse[j * l.nx + i] == 0.0 {
                continue;
            }
            let (node, weight) = parents(c, j, i);
            *value += node.into_iter().zip(weight).map(|(n, w)| w * coarse[n]).sum::<f64>();
        }
    });
    for (value, add) in extra.iter_mut().zip(&coarse[c.nodes()..c.nodes() + extras]) {
        *value += add;
    }
}

/// Dot product over fixed chunks, so that the sum does not depend on the number of threads.
fn dot(a: &[f64], b: &[f64]) -> f64 {
    let partial: Vec<f64> =
        a.par_chunks(8192).zip(b.par_chunks(8192)).map(|(a, b)| a.iter().zip(b).map(|(a, b)| a * b).sum()).collect();
    partial.iter().sum()
}

/// Grid-shaped copy of the node part of a vector.
pub fn node_part(x: &[f64], shape: (usize, usize)) -> Array2<f64> {
    Array2::from_shape_fn(shape, |(j, i)| x[j * shape.1 + i])
}
