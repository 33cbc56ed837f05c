//! Outflow of cells and of tiles of cells from the edge fluxes, with its noise and the allowance for its truncation error.

use ndarray::{Array2, ArrayView2};

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

/// Edges of one component: along y for u, along x for v.  Arrays are indexed `[[k, c]]`: `k` along the edges, `c` across.
struct Edges {
    values: Array2<f64>,
    flux: Array2<f64>,
    rules: EdgeRules,
    corrections: Corrections,
    uniform_axis: bool,
    sigma: NodeSigma,
    across_first: bool,
}

impl Edges {
    fn pattern(&self, k: usize, c: usize) -> usize {
        let usable = |m: Option<usize>| m.is_some_and(|m| m < self.values.nrows() && self.values[[m, c]].is_finite());
        Corrections::pattern(
            usable(k.checked_sub(2)),
            usable(k.checked_sub(1)),
            usable(Some(k + 2)),
            usable(Some(k + 3)),
        )
    }

    fn correction(&self, k: usize, c: usize) -> Option<&Correction> {
        self.corrections.table[k][self.pattern(k, c)].as_ref()
    }

    /// Nodes of a correction with their weights.
    fn correction_terms<'a>(&self, k: usize, correction: &'a Correction) -> impl Iterator<Item = (usize, f64)> + 'a {
        correction.iter().enumerate().filter(|(_, w)| **w != 0.0).map(move |(m, w)| (k + m - PAD, *w))
    }

    fn sigma_at(&self, k: usize, c: usize) -> f64 {
        if self.across_first { self.sigma.at(c, k) } else { self.sigma.at(k, c) }
    }

    /// Allowance for a step the grid does not resolve: half the step times its length, faded out by the square of the ratio of
    /// third to first difference where the flow is resolved; 0 where the third difference is within `scale` times the noise.
    fn jump(&self, k: usize, c: usize, length: f64, scale: f64) -> f64 {
        let f = |m: usize| self.values[[m, c]];
        let mut third: f64 = 0.0;
        for start in k.saturating_sub(2)..=k {
            if start + 3 < self.values.nrows() {
                let d = (f(start + 3) - 3.0 * f(start + 2) + 3.0 * f(start + 1) - f(start)).abs();
                third = third.max(if d.is_finite() { d } else { 0.0 });
            }
        }
        let noise = self.sigma_at(k, c).max(self.sigma_at(k + 1, c)) * scale * THIRD_DIFFERENCE_NOISE;
        let step = (f(k + 1) - f(k)).abs();
        if step > 0.0 && third > JUMP_LIMIT * noise {
            JUMP_SHARE * length * step * (third / step).powi(2).min(1.0)
        } else {
            0.0
        }
    }
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
    /// Variance of the outflow when noise is `scale` times the sigma of the field: noise plus truncation.
    pub fn total_variance(&self, scale: f64) -> f64 {
        let noise = self.variance * scale * scale;
        // Keep the noise part of the allowance out, but never more than a tenth of the variance.
        noise + self.jumps + (self.allowance - self.allowance_noise * scale * scale).max(-0.1 * noise)
    }

    /// Truncation part of [`Self::total_variance`], not negative.
    pub fn truncation(&self, scale: f64) -> f64 {
        self.jumps + (self.allowance - self.allowance_noise * scale * scale).max(0.0)
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
        let u = Edges {
            values: u,
            flux: fluxes.along_y,
            corrections: Corrections::new(&grid.y, &rules_y),
            rules: rules_y,
            uniform_axis: grid.y.is_uniform(),
            sigma: NodeSigma::of(field, Component::U),
            across_first: false,
        };
        let v = Edges {
            values: turned(v.view()),
            flux: turned(fluxes.along_x.view()).mapv_into(|q| -q),
            corrections: Corrections::new(&grid.x, &rules_x),
            rules: rules_x,
            uniform_axis: grid.x.is_uniform(),
            sigma: NodeSigma::of(field, Component::V),
            across_first: true,
        };
        let ok = |e: &Edges, k: usize, c: usize| e.flux[[k, c]].is_finite() && e.correction(k, c).is_some();
        let (ny, nx) = grid.shape();
        let usable = Array2::from_shape_fn((ny - 1, nx - 1), |(j, i)| {
            ok(&u, j, i) && ok(&u, j, i + 1) && ok(&v, i, j) && ok(&v, i, j + 1)
        });
        Self { u, v, usable }
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
            let pattern = edges.pattern(k, c);
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
        let mut buffer = Vec::new();
        [self.terms(&self.u, m, place, &mut buffer), self.terms(&self.v, m, place, &mut buffer)]
    }

    /// Covariance of the outflows of two tiles from their terms.
    pub fn tile_covariance(&self, a: &[Vec<Term>; 2], b: &[Vec<Term>; 2], rho: &Correlation) -> f64 {
        covariance(&a[0], &b[0], &self.u.sigma, rho) + covariance(&a[1], &b[1], &self.v.sigma, rho)
    }

    /// Product of sigmas behind a pair of terms of component `part` (0 u, 1 v).
    pub fn sigma_of(&self, part: usize, term: &Term) -> f64 {
        if part == 0 { self.u.sigma.at(term.j, term.i) } else { self.v.sigma.at(term.j, term.i) }
    }

    /// Whether the noise of a tile is that of any other complete tile of its size: equal spacing and sigma, every cell usable,
    /// every rule the regular one.
    fn is_regular(&self, m: usize, place: (usize, usize)) -> bool {
        let even = |e: &Edges| e.uniform_axis && e.sigma.uniform().is_some();
        if !(even(&self.u) && even(&self.v)) {
            return false;
        }
        let (j0, i0) = self.corner(m, place);
        if !(j0..j0 + m).all(|j| (i0..i0 + m).all(|i| self.usable[[j, i]])) {
            return false;
        }
        let mut regular = true;
        for edges in [&self.u, &self.v] {
            self.outline(edges, m, place, |k, c, _| regular &= edges.pattern(k, c) == Corrections::FULL);
        }
        regular
    }

    /// Sums over all tiles of a size; `scale` as in [`Tile::total_variance`], for the judgment of unresolved steps.
    pub fn tiles(&self, m: usize, places: &[(usize, usize)], rho: &Correlation, scale: f64) -> Vec<Tile> {
        use rayon::prelude::*;
        let exact = |place: (usize, usize)| {
            let terms = self.tile_terms(m, place);
            self.tile_covariance(&terms, &terms, rho)
        };
        let regular: Vec<bool> = places.par_iter().map(|&place| self.is_regular(m, place)).collect();
        let shared = regular.iter().position(|r| *r).map_or(f64::NAN, |k| exact(places[k]));
        let correction_noise = |edges: &Edges, k: usize, c: usize, correction: &Correction| {
            let terms = || edges.correction_terms(k, correction);
            let mut sum = 0.0;
            for (a, wa) in terms() {
                for (b, wb) in terms() {
                    sum += wa * wb * edges.sigma_at(a, c) * edges.sigma_at(b, c) * rho.at(a.abs_diff(b));
                }
            }
            sum
        };
        let regular_noise: [f64; 2] = [&self.u, &self.v].map(|e| {
            let k = e.corrections.table.len() / 2;
            let correction = e.corrections.table[k][Corrections::FULL];
            correction.filter(|_| e.sigma.uniform().is_some()).map_or(f64::NAN, |c| correction_noise(e, k, 0, &c))
        });
        places
            .par_iter()
            .zip(&regular)
            .map(|(&place, &is_regular)| {
                let (mut outflow, mut signed, mut squares, mut noise, mut jumps) = (0.0, 0.0, 0.0, 0.0, 0.0);
                for (edges, regular_noise) in [&self.u, &self.v].into_iter().zip(regular_noise) {
                    self.outline(edges, m, place, |k, c, sign| {
                        outflow += sign * edges.flux[[k, c]];
                        if let Some(correction) = edges.correction(k, c) {
                            let sum: f64 =
                                edges.correction_terms(k, correction).map(|(n, w)| w * edges.values[[n, c]]).sum();
                            signed += sign * sum;
                            squares += sum * sum;
                            noise += if is_regular { regular_noise } else { correction_noise(edges, k, c, correction) };
                            let rule = edges.rules.of(k, false, false);
                            let length = 2.0 * rule.coefficient[0];
                            jumps += edges.jump(k, c, length, scale).powi(2);
                        }
                    });
                }
                Tile {
                    place,
                    outflow,
                    variance: if is_regular { shared } else { exact(place) },
                    allowance: TRUNCATION_FACTOR * (signed * signed + squares),
                    // Noise of the signed sum and of the sum of squares is the same for independent edges.
                    allowance_noise: 2.0 * TRUNCATION_FACTOR * noise,
                    jumps,
                }
            })
            .collect()
    }
}

/// Copy with the axes exchanged, in standard layout.
fn turned(a: ArrayView2<'_, f64>) -> Array2<f64> {
    a.t().as_standard_layout().into_owned()
}
