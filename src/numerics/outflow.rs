//! Outflow of cells and of tiles of cells from the edge fluxes, with its noise and the allowance for its truncation error.

use ndarray::{Array2, Zip};
use rayon::prelude::*;

use super::flux::{EdgeRules, edge_fluxes_of};
use super::noise::{Component, Correlation, NodeSigma, Term, covariance};
use crate::field::{Axis, VelocityField};

/// Factor on the squared difference between the next higher and the used quadrature rule, taken as squared truncation error.
///
/// 4: twice the estimated error.  On exact flows of 17 x 17 to 129 x 129 nodes the mean squared outflow stays below half of the
/// allowance at every scale.
const TRUNCATION_FACTOR: f64 = 4.0;

/// A third difference beyond this many of its own noise standard deviations marks a place the grid does not resolve.
const JUMP_LIMIT: f64 = 6.0;

/// Share of an unresolved step between two nodes that its flux may be wrong by: a jump anywhere between the nodes moves the flux
/// by at most half the step times the spacing.
const JUMP_SHARE: f64 = 0.5;

/// White-noise standard deviation of a third difference for unit sigma, `sqrt(1 + 9 + 9 + 1)`.
const THIRD_DIFFERENCE_NOISE: f64 = 4.472_135_954_999_58;

/// An allowance counts as truncation, not noise, from this many times its expectation from noise.
pub(super) const ALLOWANCE_NOISE: f64 = 4.0;

/// Share of the cells of a tile that must be usable for the tile to count (with its usable cells only).
const TILE_SHARE: f64 = 0.5;

/// Nodes before and after an edge that can enter its rule or its allowance.
const PAD: usize = 2;

/// Difference between a higher-order rule and the used one, on the nodes `k - 2 ..= k + 3` around edge `k`.
type Correction = [f64; 6];

/// Corrections of all edges of an axis by the pattern of usable nodes around the edge.
struct Corrections {
    table: Vec<[Option<Correction>; 16]>,
}

impl Corrections {
    /// Pattern index from the usability of the nodes `k - 2, k - 1, k + 2, k + 3`; the outer ones count only with the inner.
    fn pattern(far_before: bool, before: bool, after: bool, far_after: bool) -> usize {
        usize::from(before) * 8
            + usize::from(after) * 4
            + usize::from(before && far_before) * 2
            + usize::from(after && far_after)
    }

    /// Pattern of an edge with all six nodes usable.
    const FULL: usize = 15;

    fn new(axis: &Axis, rules: &EdgeRules) -> Self {
        let n = axis.len();
        let table = (0..n - 1)
            .map(|k| {
                std::array::from_fn(|pattern| {
                    let (before, after) = (pattern & 8 != 0, pattern & 4 != 0);
                    let (far_before, far_after) = (pattern & 2 != 0, pattern & 1 != 0);
                    let widened = (far_before && before) || (far_after && after);
                    let first = usize::from(before) + usize::from(before && far_before);
                    let last = 1 + usize::from(after) + usize::from(after && far_after);
                    if !widened || first > k || k + last >= n {
                        return None;
                    }
                    let position = |m: usize| match axis.step() {
                        Some(step) => (m as f64 - k as f64) * step,
                        None => axis.at(m) - axis.at(k),
                    };
                    let nodes: Vec<f64> = (k - first..=k + last).map(position).collect();
                    let mut correction = [0.0; 6];
                    for (m, w) in integral_weights(&nodes, axis.spacing(k)).into_iter().enumerate() {
                        correction[m + PAD - first] = w;
                    }
                    for (m, c) in rules.of(k, before, after).terms() {
                        correction[m + PAD - k] -= c;
                    }
                    Some(correction)
                })
            })
            .collect();
        Self { table }
    }
}

/// Weights of the integral from 0 to `b` of the Lagrange polynomial through up to 6 `nodes` (exact, by 3-point Gauss).
fn integral_weights(nodes: &[f64], b: f64) -> Vec<f64> {
    let half = 0.5 * b;
    let spread = half * 0.6_f64.sqrt();
    let gauss = [(half - spread, 5.0 / 9.0), (half, 8.0 / 9.0), (half + spread, 5.0 / 9.0)];
    (0..nodes.len())
        .map(|m| {
            let basis = |x: f64| -> f64 {
                (0..nodes.len()).filter(|&k| k != m).map(|k| (x - nodes[k]) / (nodes[m] - nodes[k])).product()
            };
            half * gauss.iter().map(|&(x, w)| w * basis(x)).sum::<f64>()
        })
        .collect()
}

/// Edges of one component: along y for u, along x for v.  Arrays are as the grid has them; `k` counts along the edges, `c` across.
struct Edges {
    values: Array2<f64>,
    flux: Array2<f64>,
    /// Higher-order flux minus `flux`, NaN where no higher rule fits.
    correction: Array2<f64>,
    /// Allowance for unresolved steps, empty while none is made.
    jump: Array2<f64>,
    pattern: Array2<u8>,
    rules: EdgeRules,
    corrections: Corrections,
    axis: Axis,
    sigma: NodeSigma,
    across_first: bool,
}

impl Edges {
    fn new(
        values: Array2<f64>,
        flux: Array2<f64>,
        axis: &Axis,
        rules: EdgeRules,
        sigma: NodeSigma,
        across_first: bool,
    ) -> Self {
        let corrections = Corrections::new(axis, &rules);
        let mut pattern = Array2::zeros(flux.dim());
        let mut correction = Array2::from_elem(flux.dim(), f64::NAN);
        let turn = |a: usize, b: usize| if across_first { (b, a) } else { (a, b) };
        let count = if across_first { values.ncols() } else { values.nrows() };
        Zip::indexed(pattern.rows_mut()).and(correction.rows_mut()).par_for_each(|row, mut pattern, mut correction| {
            for column in 0..pattern.len() {
                let (k, c) = turn(row, column);
                let value = |m: usize| values[turn(m, c)];
                let usable = |m: Option<usize>| m.is_some_and(|m| m < count && value(m).is_finite());
                let around = [k.checked_sub(2), k.checked_sub(1), Some(k + 2), Some(k + 3)].map(usable);
                let found = Corrections::pattern(around[0], around[1], around[2], around[3]);
                pattern[column] = found as u8;
                if let Some(weights) = &corrections.table[k][found] {
                    correction[column] = correction_terms(k, weights).map(|(n, w)| w * value(n)).sum();
                }
            }
        });
        let jump = Array2::zeros((0, 0));
        Self { values, flux, correction, jump, pattern, rules, corrections, axis: axis.clone(), sigma, across_first }
    }

    /// Array index of edge or node `k` of line `c`.
    fn place(&self, k: usize, c: usize) -> (usize, usize) {
        if self.across_first { (c, k) } else { (k, c) }
    }

    fn sigma_at(&self, k: usize, c: usize) -> f64 {
        let (j, i) = self.place(k, c);
        self.sigma.at(j, i)
    }

    /// Allowance for a step the grid does not resolve: half the step times its length, faded out by the square of the ratio of
    /// third to first difference where the flow is resolved; 0 where the third difference is within `scale` times the noise.
    fn jump_at(&self, k: usize, c: usize, scale: f64) -> f64 {
        let f = |m: usize| self.values[self.place(m, c)];
        let mut third: f64 = 0.0;
        for start in k.saturating_sub(2)..=k {
            if start + 3 < self.axis.len() {
                let d = (f(start + 3) - 3.0 * f(start + 2) + 3.0 * f(start + 1) - f(start)).abs();
                third = third.max(if d.is_finite() { d } else { 0.0 });
            }
        }
        let noise = self.sigma_at(k, c).max(self.sigma_at(k + 1, c)) * scale * THIRD_DIFFERENCE_NOISE;
        let step = (f(k + 1) - f(k)).abs();
        if step > 0.0 && third > JUMP_LIMIT * noise {
            JUMP_SHARE * self.axis.spacing(k) * step * (third / step).powi(2).min(1.0)
        } else {
            0.0
        }
    }

    fn allow_jumps(&mut self, scale: f64) {
        let mut jump = Array2::zeros(self.flux.dim());
        Zip::indexed(jump.rows_mut()).par_for_each(|row, mut jumps| {
            for column in 0..jumps.len() {
                if self.flux[[row, column]].is_finite() {
                    let (k, c) = self.place(row, column);
                    jumps[column] = self.jump_at(k, c, scale);
                }
            }
        });
        self.jump = jump;
    }

    /// Noise variance of the correction by pattern, for equal spacing and sigma; NaN for patterns that do not occur.
    fn noise_by_pattern(&self, rho: &Correlation) -> [f64; 16] {
        let mut table = [f64::NAN; 16];
        for ((row, column), &pattern) in self.pattern.indexed_iter() {
            let slot = &mut table[usize::from(pattern)];
            if slot.is_nan() && self.flux[[row, column]].is_finite() {
                let (k, c) = self.place(row, column);
                *slot = self.correction_noise(k, c, rho);
            }
        }
        table
    }

    /// Noise variance of the correction of an edge.
    fn correction_noise(&self, k: usize, c: usize, rho: &Correlation) -> f64 {
        let Some(weights) = &self.corrections.table[k][usize::from(self.pattern[self.place(k, c)])] else {
            return 0.0;
        };
        let mut sum = 0.0;
        for (a, wa) in correction_terms(k, weights) {
            for (b, wb) in correction_terms(k, weights) {
                sum += wa * wb * self.sigma_at(a, c) * self.sigma_at(b, c) * rho.at(a.abs_diff(b));
            }
        }
        sum
    }
}

/// Nodes of a correction with their weights.
fn correction_terms(k: usize, correction: &Correction) -> impl Iterator<Item = (usize, f64)> + '_ {
    correction.iter().enumerate().filter(|(_, w)| **w != 0.0).map(move |(m, w)| (k + m - PAD, *w))
}

/// Sums over one tile.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Tile {
    /// Index of the tile along y and x.
    pub place: (usize, usize),
    /// Outflow, velocity times length (times thickness).
    pub outflow: f64,
    /// Noise variance of the outflow for the sigma of the field (unit sigma when none is declared).
    pub variance: f64,
    /// Squared allowance for truncation, still containing what noise puts into it.
    pub allowance: f64,
    /// Expected noise part of `allowance` for the sigma of the field.
    pub allowance_noise: f64,
    /// Squared allowance for unresolved steps.
    pub jumps: f64,
}

impl Tile {
    /// Expected squared outflow when noise is `scale` times the sigma of the field: noise plus truncation, right on average over
    /// the noise (single tiles may scatter below the noise variance).
    pub fn expected(&self, scale: f64) -> f64 {
        self.variance * scale * scale + self.jumps + self.allowance - self.allowance_noise * scale * scale
    }

    /// Variance by which the tile is weighted: that of noise, plus truncation where it stands out of what noise puts into its
    /// allowance, so that the weight does not follow the noise.
    pub fn weight_variance(&self, scale: f64) -> f64 {
        self.variance * scale * scale + self.truncation(scale)
    }

    /// Truncation that stands out of the noise in its estimate.
    pub fn truncation(&self, scale: f64) -> f64 {
        self.jumps + (self.allowance - ALLOWANCE_NOISE * self.allowance_noise * scale * scale).max(0.0)
    }
}

/// All cells of a field, ready to be summed over tiles.
///
/// A cell is usable when its four edges carry a flux and each has a node beyond its own rule, from which truncation is judged:
/// on lines of fewer than 4 usable nodes (5 where both neighbors of the edge exist but nothing beyond) there is none.
pub(super) struct Outflows {
    u: Edges,
    v: Edges,
    usable: Array2<bool>,
}

impl Outflows {
    /// Prepares the cells of a field.
    pub fn new(field: &VelocityField) -> Self {
        let grid = field.grid();
        let domain = &field.domain;
        let weighted = |f: &Array2<f64>| {
            Array2::from_shape_fn(grid.shape(), |(j, i)| {
                if field.valid[[j, i]] { f[[j, i]] * domain.thickness.at_node(grid, j, i) } else { f64::NAN }
            })
        };
        let (u, v) = (weighted(&field.u), weighted(&field.v));
        let (rules_x, rules_y) = (EdgeRules::new(&grid.x), EdgeRules::new(&grid.y));
        let fluxes = edge_fluxes_of(&u, &v, &rules_x, &rules_y);
        let u = Edges::new(u, fluxes.along_y, &grid.y, rules_y, NodeSigma::of(field, Component::U), false);
        let flux = fluxes.along_x.mapv_into(|q| -q);
        let v = Edges::new(v, flux, &grid.x, rules_x, NodeSigma::of(field, Component::V), true);
        let ok = |e: &Edges, k: usize, c: usize| {
            e.flux[e.place(k, c)].is_finite() && e.correction[e.place(k, c)].is_finite()
        };
        let (ny, nx) = grid.shape();
        let usable = Array2::from_shape_fn((ny - 1, nx - 1), |(j, i)| {
            ok(&u, j, i) && ok(&u, j, i + 1) && ok(&v, i, j) && ok(&v, i, j + 1)
        });
        Self { u, v, usable }
    }

    /// Allows for steps the grid does not resolve, judged against noise of `scale` times the sigma of the field.
    pub fn allow_jumps(&mut self, scale: f64) {
        self.u.allow_jumps(scale);
        self.v.allow_jumps(scale);
    }

    /// Places of the tiles of `m` by `m` cells that count, row by row: at least half of their cells are usable.  Tiles do not
    /// overlap and sit in the middle of the grid.
    pub fn places(&self, m: usize) -> Vec<(usize, usize)> {
        let (rows, columns) = (self.usable.nrows() / m, self.usable.ncols() / m);
        let mut places = Vec::new();
        for ty in 0..rows {
            for tx in 0..columns {
                let (j0, i0) = self.corner(m, (ty, tx));
                let cells = (j0..j0 + m).flat_map(|j| (i0..i0 + m).map(move |i| (j, i)));
                let count = cells.filter(|&cell| self.usable[cell]).count();
                if count > 0 && count as f64 >= TILE_SHARE * (m * m) as f64 {
                    places.push((ty, tx));
                }
            }
        }
        places
    }

    /// First cell of a tile.
    fn corner(&self, m: usize, place: (usize, usize)) -> (usize, usize) {
        let offset = |n: usize| n % m / 2;
        (offset(self.usable.nrows()) + place.0 * m, offset(self.usable.ncols()) + place.1 * m)
    }

    /// Number of tiles of a size along y and x, and the first node of tile `(0, 0)`.
    pub fn layout(&self, m: usize) -> ((usize, usize), (usize, usize)) {
        ((self.usable.nrows() / m, self.usable.ncols() / m), self.corner(m, (0, 0)))
    }

    /// Calls `visit(k, c, sign)` for every edge of `edges` on the outline of a tile.
    fn outline(&self, edges: &Edges, m: usize, place: (usize, usize), mut visit: impl FnMut(usize, usize, f64)) {
        let (j0, i0) = self.corner(m, place);
        let (k0, c0) = if edges.across_first { (i0, j0) } else { (j0, i0) };
        let inside = |k: usize, c: usize| if edges.across_first { self.usable[[c, k]] } else { self.usable[[k, c]] };
        for k in k0..k0 + m {
            for c in c0..=c0 + m {
                let before = c > c0 && inside(k, c - 1);
                let after = c < c0 + m && inside(k, c);
                if before != after {
                    visit(k, c, if before { 1.0 } else { -1.0 });
                }
            }
        }
    }

    /// Outflow of a tile as a linear combination of the nodes of one component, sorted by row and column.
    fn terms(&self, edges: &Edges, m: usize, place: (usize, usize), buffer: &mut Vec<f64>) -> Vec<Term> {
        let (j0, i0) = self.corner(m, place);
        let (k0, c0) = if edges.across_first { (i0, j0) } else { (j0, i0) };
        let (along, across) = (m + 2 * PAD, m + 1);
        buffer.clear();
        buffer.resize(along * across, 0.0);
        self.outline(edges, m, place, |k, c, sign| {
            let pattern = edges.pattern[edges.place(k, c)];
            for (node, w) in edges.rules.of(k, pattern & 8 != 0, pattern & 4 != 0).terms() {
                buffer[(node + PAD - k0) * across + c - c0] += sign * w;
            }
        });
        let mut terms = Vec::with_capacity(4 * (m + 3));
        let (outer, inner) = if edges.across_first { (across, along) } else { (along, across) };
        for a in 0..outer {
            for b in 0..inner {
                let (n, c) = if edges.across_first { (b, a) } else { (a, b) };
                let weight = buffer[n * across + c];
                if weight != 0.0 {
                    let (k, c) = (n + k0 - PAD.min(n + k0), c + c0);
                    let (j, i) = if edges.across_first { (c, k) } else { (k, c) };
                    terms.push(Term { j, i, weight });
                }
            }
        }
        terms
    }

    /// The nodes a tile depends on, of u and of v.
    pub fn tile_terms(&self, m: usize, place: (usize, usize)) -> [Vec<Term>; 2] {
        self.tile_terms_in(m, place, &mut Vec::new())
    }

    fn tile_terms_in(&self, m: usize, place: (usize, usize), buffer: &mut Vec<f64>) -> [Vec<Term>; 2] {
        [self.terms(&self.u, m, place, buffer), self.terms(&self.v, m, place, buffer)]
    }

    /// Covariance of the outflows of two tiles from their terms.
    pub fn tile_covariance(&self, a: &[Vec<Term>; 2], b: &[Vec<Term>; 2], rho: &Correlation) -> f64 {
        covariance(&a[0], &b[0], &self.u.sigma, rho) + covariance(&a[1], &b[1], &self.v.sigma, rho)
    }

    /// Product of sigmas behind a pair of terms of component `part` (0 u, 1 v).
    pub fn sigma_of(&self, part: usize, term: &Term) -> f64 {
        if part == 0 { self.u.sigma.at(term.j, term.i) } else { self.v.sigma.at(term.j, term.i) }
    }

    /// Whether a tile is complete and all its rules are the regular ones: on an even grid all such tiles have the same noise.
    fn is_regular(&self, m: usize, place: (usize, usize)) -> bool {
        let (j0, i0) = self.corner(m, place);
        if !(j0..j0 + m).all(|j| (i0..i0 + m).all(|i| self.usable[[j, i]])) {
            return false;
        }
        let mut regular = true;
        for edges in [&self.u, &self.v] {
            self.outline(edges, m, place, |k, c, _| {
                regular &= usize::from(edges.pattern[edges.place(k, c)]) == Corrections::FULL
            });
        }
        regular
    }

    /// Sums over the given tiles of a size.
    pub fn tiles(&self, m: usize, places: &[(usize, usize)], rho: &Correlation) -> Vec<Tile> {
        let exact = |place: (usize, usize), buffer: &mut Vec<f64>| {
            let terms = self.tile_terms_in(m, place, buffer);
            self.tile_covariance(&terms, &terms, rho)
        };
        let even = self.is_even();
        // On even grids the noise of an edge rule depends on its pattern alone, that of a single cell on the four rules around it.
        let noise_tables = even.then(|| [self.u.noise_by_pattern(rho), self.v.noise_by_pattern(rho)]);
        let cells = (even && m == 1).then(|| self.cell_variances(places, rho));
        let regular: Vec<bool> = if cells.is_some() {
            Vec::new()
        } else {
            places.par_iter().map(|&place| even && self.is_regular(m, place)).collect()
        };
        let shared = regular.iter().position(|r| *r).map_or(f64::NAN, |k| exact(places[k], &mut Vec::new()));
        places
            .par_iter()
            .enumerate()
            .map_init(Vec::new, |buffer, (index, &place)| {
                let (mut outflow, mut signed, mut squares, mut noise, mut jumps) = (0.0, 0.0, 0.0, 0.0, 0.0);
                for (part, edges) in [&self.u, &self.v].into_iter().enumerate() {
                    let with_jumps = !edges.jump.is_empty();
                    self.outline(edges, m, place, |k, c, sign| {
                        let correction = edges.correction[edges.place(k, c)];
                        outflow += sign * edges.flux[edges.place(k, c)];
                        signed += sign * correction;
                        squares += correction * correction;
                        noise += match &noise_tables {
                            Some(tables) => tables[part][usize::from(edges.pattern[edges.place(k, c)])],
                            None => edges.correction_noise(k, c, rho),
                        };
                        if with_jumps {
                            jumps += edges.jump[edges.place(k, c)].powi(2);
                        }
                    });
                }
                let variance = match &cells {
                    Some(table) => table[self.cell_key(place)],
                    None if regular[index] => shared,
                    None => exact(place, buffer),
                };
                Tile {
                    place,
                    outflow,
                    variance,
                    allowance: TRUNCATION_FACTOR * (signed * signed + squares),
                    // Noise of the signed sum and of the sum of squares is the same for independent edges.
                    allowance_noise: 2.0 * TRUNCATION_FACTOR * noise,
                    jumps,
                }
            })
            .collect()
    }

    /// Whether spacing and sigma are the same everywhere.
    fn is_even(&self) -> bool {
        [&self.u, &self.v].iter().all(|e| e.axis.is_uniform() && e.sigma.uniform().is_some())
    }

    /// Which of the four rules each of the edges around a cell has, as one number below 256.
    fn cell_key(&self, (j, i): (usize, usize)) -> usize {
        let rule = |e: &Edges, k: usize, c: usize| usize::from(e.pattern[e.place(k, c)] >> 2);
        rule(&self.u, j, i) + 4 * rule(&self.u, j, i + 1) + 16 * rule(&self.v, i, j) + 64 * rule(&self.v, i, j + 1)
    }

    /// Noise variances of single cells by [`Self::cell_key`], for the keys that occur.
    fn cell_variances(&self, places: &[(usize, usize)], rho: &Correlation) -> Vec<f64> {
        let mut table = vec![f64::NAN; 256];
        for &place in places {
            let key = self.cell_key(place);
            if table[key].is_nan() {
                let terms = self.tile_terms(1, place);
                table[key] = self.tile_covariance(&terms, &terms, rho);
            }
        }
        table
    }
}
