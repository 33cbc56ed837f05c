//! Conjugate gradients preconditioned by geometric multigrid, for any pattern of gaps, ties and weights.
//!
//! The preconditioner runs in single precision (half the memory traffic); the iteration around it, its operator and its residual in
//! double precision, so the answer has double precision.

use std::collections::BTreeMap;

use ndarray::Array2;
use rayon::prelude::*;

use super::graph::{Graph, NONE};

/// Levels stop growing coarser below this number of nodes.
const COARSEST: usize = 30;

/// Pairs of sweeps on the coarsest level: enough to solve it far below the error of the smoothing above.
const COARSE_PAIRS: usize = 40;

/// Step factors of the two-step Chebyshev smoother for eigenvalues of `D^-1 A` between 1/2 and 2 (roots of T2 on that interval):
/// `1 / (1.25 -+ 0.75 cos(pi / 4))`.
const SMOOTH: [f32; 2] = [1.389_509, 0.561_664_5];

/// Rows handled by one task; fixed, so that nothing depends on the number of threads.
const ROWS: usize = 8;

/// Elements summed in one piece; fixed for the same reason.
const CHUNK: usize = 8192;

/// Nodes of a rectangle with weighted edges to the right and upper neighbor, and ties to extra unknowns.
struct Level {
    ny: usize,
    nx: usize,
    /// Weight of the edge from node k to its right neighbor, 0 at the end of a row.
    east: Vec<f32>,
    /// Weight of the edge from node k to its upper neighbor, 0 in the last row.
    north: Vec<f32>,
    /// Reciprocal diagonal, 0 where there is no unknown; extra unknowns behind the nodes.
    inverse: Vec<f32>,
    /// Ties sorted by node: node, extra, weight.
    ties: Vec<(u32, u32, f32)>,
    /// 2 where the node and its 24 neighbors, 1 where it and its 8 neighbors all have unknowns, else 0.
    regular: Vec<u8>,
}

/// A multigrid hierarchy; vectors hold `ny * nx` nodes and then the extra unknowns.
pub struct Multigrid {
    east: Vec<f64>,
    north: Vec<f64>,
    ties: Vec<(u32, u32, f64)>,
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

/// Work vectors of one level.
struct Work {
    b: Vec<f32>,
    x: Vec<f32>,
    other: Vec<f32>,
}

impl Level {
    fn nodes(&self) -> usize {
        self.ny * self.nx
    }

    fn finish(
        ny: usize,
        nx: usize,
        east: Vec<f32>,
        north: Vec<f32>,
        ties: Vec<(u32, u32, f32)>,
        extras: usize,
    ) -> Self {
        let nodes = ny * nx;
        let mut diagonal = vec![0.0f32; nodes + extras];
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
        let inverse: Vec<f32> = diagonal.into_iter().map(|d| if d > 0.0 { 1.0 / d } else { 0.0 }).collect();
        let all_around = |flag: &dyn Fn(usize) -> bool| -> Vec<bool> {
            let mut out = vec![false; nodes];
            for j in 1..ny.saturating_sub(1) {
                for i in 1..nx.saturating_sub(1) {
                    out[j * nx + i] = (j - 1..j + 2).all(|jj| (i - 1..i + 2).all(|ii| flag(jj * nx + ii)));
                }
            }
            out
        };
        let once = all_around(&|k| inverse[k] != 0.0);
        let twice = all_around(&|k| once[k]);
        let regular = once.iter().zip(&twice).map(|(&a, &b)| u8::from(a) + u8::from(a && b)).collect();
        Self { ny, nx, east, north, inverse, ties, regular }
    }

    /// Blocks of 2 x 2 nodes become one; edges between blocks add up, halved since the step doubles while the width does too.  Ties
    /// add up without halving: a body stays closer to a coarse node than a coarse step (measured: 14 instead of 21 iterations).
    fn coarser(&self, extras: usize) -> Self {
        let (ny, nx) = (self.ny.div_ceil(2), self.nx.div_ceil(2));
        let (mut east, mut north) = (vec![0.0f32; ny * nx], vec![0.0f32; ny * nx]);
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
        let mut merged = BTreeMap::new();
        for &(k, e, w) in &self.ties {
            let (j, i) = (k as usize / self.nx, k as usize % self.nx);
            *merged.entry(((j / 2 * nx + i / 2) as u32, e)).or_insert(0.0) += w;
        }
        let ties = merged.into_iter().map(|((k, e), w)| (k, e, w)).collect();
        Self::finish(ny, nx, east, north, ties, extras)
    }

    /// `A x` at node k of row j without ties.
    #[inline(always)]
    fn product(&self, x: &[f32], j: usize, i: usize) -> f32 {
        let k = j * self.nx + i;
        let here = x[k];
        let mut sum = 0.0;
        if i + 1 < self.nx {
            sum += self.east[k] * (here - x[k + 1]);
        }
        if i > 0 {
            sum += self.east[k - 1] * (here - x[k - 1]);
        }
        if j + 1 < self.ny {
            sum += self.north[k] * (here - x[k + self.nx]);
        }
        if j > 0 {
            sum += self.north[k - self.nx] * (here - x[k - self.nx]);
        }
        sum
    }

    /// `out = b - A x`.
    fn residual(&self, b: &[f32], x: &[f32], out: &mut [f32]) {
        self.sweep(out, |j, i, k| b[k] - self.product(x, j, i));
        let nodes = self.nodes();
        out[nodes..].copy_from_slice(&b[nodes..]);
        for &(k, e, w) in &self.ties {
            let (k, e) = (k as usize, nodes + e as usize);
            let flow = w * (x[k] - x[e]);
            out[k] -= flow;
            out[e] += flow;
        }
    }

    /// One damped Jacobi step, `out = x + omega D^-1 (b - A x)`.
    fn relax(&self, b: &[f32], x: &[f32], out: &mut [f32], omega: f32) {
        self.sweep(out, |j, i, k| x[k] + omega * self.inverse[k] * (b[k] - self.product(x, j, i)));
        let nodes = self.nodes();
        for e in nodes..out.len() {
            out[e] = x[e] + omega * self.inverse[e] * b[e];
        }
        for &(k, e, w) in &self.ties {
            let (k, e) = (k as usize, nodes + e as usize);
            let flow = omega * w * (x[k] - x[e]);
            out[k] -= self.inverse[k] * flow;
            out[e] += self.inverse[e] * flow;
        }
    }

    /// Sets every node of `out` from row, column and number.
    fn sweep(&self, out: &mut [f32], value: impl Fn(usize, usize, usize) -> f32 + Sync) {
        let (nodes, nx) = (self.nodes(), self.nx);
        out[..nodes].par_chunks_mut(nx * ROWS).enumerate().for_each(|(block, rows)| {
            for (r, row) in rows.chunks_mut(nx).enumerate() {
                let j = block * ROWS + r;
                for (i, slot) in row.iter_mut().enumerate() {
                    *slot = value(j, i, j * nx + i);
                }
            }
        });
    }
}

impl Multigrid {
    /// Hierarchy of a graph.
    pub fn new(graph: &Graph) -> Self {
        let (ny, nx) = graph.unknown.dim();
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
                        (None, None) => *slot = w,
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
        let single = |v: &[f64]| -> Vec<f32> { v.par_iter().map(|&w| w as f32).collect() };
        let single_ties = ties.iter().map(|&(k, e, w)| (k, e, w as f32)).collect();
        let mut levels = vec![Level::finish(ny, nx, single(&east), single(&north), single_ties, graph.extras)];
        while levels[levels.len() - 1].nodes() > COARSEST {
            let next = levels[levels.len() - 1].coarser(graph.extras);
            levels.push(next);
        }
        Self { east, north, ties, levels, extras: graph.extras }
    }

    /// Length of vectors.
    pub fn len(&self) -> usize {
        self.levels[0].nodes() + self.extras
    }

    /// `out = A x` in double precision.
    pub fn multiply(&self, x: &[f64], out: &mut [f64]) {
        let (ny, nx) = (self.levels[0].ny, self.levels[0].nx);
        let nodes = ny * nx;
        let (east, north) = (&self.east, &self.north);
        out[..nodes].par_chunks_mut(nx * ROWS).enumerate().for_each(|(block, rows)| {
            for (r, row) in rows.chunks_mut(nx).enumerate() {
                let j = block * ROWS + r;
                for (i, slot) in row.iter_mut().enumerate() {
                    let k = j * nx + i;
                    let here = x[k];
                    let mut sum = 0.0;
                    if i + 1 < nx {
                        sum += east[k] * (here - x[k + 1]);
                    }
                    if i > 0 {
                        sum += east[k - 1] * (here - x[k - 1]);
                    }
                    if j + 1 < ny {
                        sum += north[k] * (here - x[k + nx]);
                    }
                    if j > 0 {
                        sum += north[k - nx] * (here - x[k - nx]);
                    }
                    *slot = sum;
                }
            }
        });
        out[nodes..].fill(0.0);
        for &(k, e, w) in &self.ties {
            let (k, e) = (k as usize, nodes + e as usize);
            let flow = w * (x[k] - x[e]);
            out[k] += flow;
            out[e] -= flow;
        }
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
                Work { b: vec![0.0; m], x: vec![0.0; m], other: vec![0.0; m] }
            })
            .collect();
        let mut x = vec![0.0; n];
        let mut r = b.to_vec();
        let mut p = vec![0.0; n];
        let mut ap = vec![0.0; n];
        let norm = dot(b, b).sqrt();
        let goal = tolerance * norm;
        let mut rr = norm * norm;
        let mut rz = 0.0;
        for iteration in 0..limit {
            if rr.sqrt() <= goal {
                return CgOutcome { x, iterations: iteration, converged: true };
            }
            // Scaled to unit size, so that single precision neither overflows nor underflows.
            let size = rr.sqrt();
            let scale = 1.0 / size;
            work[0].b.par_iter_mut().zip(&r).with_min_len(CHUNK).for_each(|(b, r)| *b = (scale * r) as f32);
            self.cycle(&mut work, 0);
            let z = &work[0].x;
            let next = size * sum_of(n, |k| r[k] * f64::from(z[k]));
            let beta = if iteration == 0 { 0.0 } else { next / rz };
            rz = next;
            p.par_iter_mut().zip(z).with_min_len(CHUNK).for_each(|(p, z)| *p = size * f64::from(*z) + beta * *p);
            self.multiply(&p, &mut ap);
            let curvature = dot(&p, &ap);
            if !(curvature > 0.0) {
                break;
            }
            let alpha = rz / curvature;
            x.par_iter_mut().zip(&p).with_min_len(CHUNK).for_each(|(x, p)| *x += alpha * p);
            let parts: Vec<f64> = r
                .par_chunks_mut(CHUNK)
                .zip(ap.par_chunks(CHUNK))
                .map(|(r, ap)| {
                    let mut sum = 0.0;
                    for (r, ap) in r.iter_mut().zip(ap) {
                        *r -= alpha * ap;
                        sum += *r * *r;
                    }
                    sum
                })
                .collect();
            rr = parts.iter().sum();
        }
        let converged = rr.sqrt() <= goal;
        CgOutcome { x, iterations: limit, converged }
    }

    /// One symmetric V-cycle: `work[level].x` approximates the solution for `work[level].b`.
    fn cycle(&self, work: &mut [Work], level: usize) {
        let l = &self.levels[level];
        let (here, below) = work.split_at_mut(level + 1);
        let Work { b, x, other } = &mut here[level];
        x.par_iter_mut()
            .zip(&*b)
            .zip(&l.inverse)
            .with_min_len(CHUNK)
            .for_each(|((x, b), inverse)| *x = SMOOTH[0] * inverse * b);
        l.relax(b, x, other, SMOOTH[1]);
        std::mem::swap(x, other);
        if level + 1 == self.levels.len() {
            for _ in 0..COARSE_PAIRS {
                l.relax(b, x, other, SMOOTH[0]);
                l.relax(b, other, x, SMOOTH[1]);
            }
            return;
        }
        l.residual(b, x, other);
        let c = &self.levels[level + 1];
        restrict(l, c, other, &mut below[0].b, self.extras);
        self.cycle(work, level + 1);
        let (here, below) = work.split_at_mut(level + 1);
        let Work { b, x, other } = &mut here[level];
        prolong_add(l, c, &below[0].x, x, self.extras);
        l.relax(b, x, other, SMOOTH[0]);
        l.relax(b, other, x, SMOOTH[1]);
    }
}

/// The up to four coarse nodes around fine node `(j, i)` with bilinear weights 9/16, 3/16, 3/16, 1/16; coarse nodes without an
/// unknown hand their share to the node's own block.
fn parents(c: &Level, j: usize, i: usize) -> ([usize; 4], [f32; 4]) {
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
fn restrict(l: &Level, c: &Level, fine: &[f32], coarse: &mut [f32], extras: usize) {
    const LINE: [f32; 4] = [0.25, 0.75, 0.75, 0.25];
    c.sweep(coarse, |jc, ic, k| {
        if c.regular[k] == 2 && l.ny >= 2 * jc + 3 && l.nx >= 2 * ic + 3 {
            let start = (2 * jc - 1) * l.nx + 2 * ic - 1;
            return (0..4)
                .map(|a| {
                    let row = &fine[start + a * l.nx..start + a * l.nx + 4];
                    LINE[a] * (LINE[0] * (row[0] + row[3]) + LINE[1] * (row[1] + row[2]))
                })
                .sum();
        }
        let mut sum = 0.0;
        for j in (2 * jc).saturating_sub(1)..(2 * jc + 3).min(l.ny) {
            for i in (2 * ic).saturating_sub(1)..(2 * ic + 3).min(l.nx) {
                if l.inverse[j * l.nx + i] != 0.0 {
                    let (node, weight) = parents(c, j, i);
                    for (n, w) in node.into_iter().zip(weight) {
                        if n == k {
                            sum += w * fine[j * l.nx + i];
                        }
                    }
                }
            }
        }
        sum
    });
    coarse[c.nodes()..].copy_from_slice(&fine[l.nodes()..l.nodes() + extras]);
}

fn prolong_add(l: &Level, c: &Level, coarse: &[f32], fine: &mut [f32], extras: usize) {
    let (nodes, nx) = (l.nodes(), l.nx);
    fine[..nodes].par_chunks_mut(nx * ROWS).enumerate().for_each(|(block, rows)| {
        for (r, row) in rows.chunks_mut(nx).enumerate() {
            let j = block * ROWS + r;
            for (i, value) in row.iter_mut().enumerate() {
                let own = (j / 2) * c.nx + i / 2;
                if c.regular[own] > 0 {
                    let beside = if i % 2 == 1 { own + 1 } else { own - 1 };
                    let step = if j % 2 == 1 { c.nx as isize } else { -(c.nx as isize) };
                    let above = |k: usize| coarse[(k as isize + step) as usize];
                    *value += 0.5625 * coarse[own] + 0.1875 * (coarse[beside] + above(own)) + 0.0625 * above(beside);
                } else if l.inverse[j * nx + i] != 0.0 {
                    let (node, weight) = parents(c, j, i);
                    *value += node.into_iter().zip(weight).map(|(n, w)| w * coarse[n]).sum::<f32>();
                }
            }
        }
    });
    for (value, add) in fine[nodes..].iter_mut().zip(&coarse[c.nodes()..c.nodes() + extras]) {
        *value += add;
    }
}

/// Sum over fixed chunks, so that it does not depend on the number of threads.
fn sum_of(n: usize, term: impl Fn(usize) -> f64 + Sync) -> f64 {
    let partial: Vec<f64> = (0..n.div_ceil(CHUNK))
        .into_par_iter()
        .map(|c| (c * CHUNK..((c + 1) * CHUNK).min(n)).map(&term).sum())
        .collect();
    partial.iter().sum()
}

fn dot(a: &[f64], b: &[f64]) -> f64 {
    sum_of(a.len(), |k| a[k] * b[k])
}

/// Grid-shaped copy of the node part of a vector.
pub fn node_part(x: &[f64], shape: (usize, usize)) -> Array2<f64> {
    Array2::from_shape_fn(shape, |(j, i)| x[j * shape.1 + i])
}
