//! Noise model of measured vectors: what window overlap does to every linear quantity, and seeded noise fields.
//!
//! The noise of a component is `sigma(node) g(node)`, `g` of unit variance with the separable correlation
//! `rho(k) = max(0, 1 - |k| (1 - overlap))` along x and along y, that of top-hat measurement windows `W = 1 / (1 - overlap)`
//! nodes wide; u and v are independent.  Variances of linear combinations of nodes follow exactly (Sciacchitano & Wieneke
//! 2016, from memory, on why the correlation must not be left out).

use ndarray::{Array2, Axis as Dim, Zip};
use rand_chacha::ChaCha8Rng;
use rand_chacha::rand_core::SeedableRng;
use rand_distr::{Distribution, StandardNormal};

use crate::field::{Sigma, Thickness, VelocityField};

/// Component of the velocity.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Component {
    /// Along +x.
    U,
    /// Along +y.
    V,
}

/// Correlation of the noise of two nodes `lag` steps apart on a grid line, `max(0, 1 - |lag| (1 - overlap))`.
pub fn correlation(lag: usize, overlap: f64) -> f64 {
    if lag == 0 { 1.0 } else { (1.0 - lag as f64 * (1.0 - overlap)).max(0.0) }
}

/// Correlations of lags 0, 1, 2 ... up to the last that is not zero (at most `MAX_LAGS` of them).
#[derive(Debug, Clone, PartialEq)]
pub struct Correlation {
    rho: Vec<f64>,
}

impl Correlation {
    /// Longest correlation kept, in nodes: an overlap of 0.99.
    pub const MAX_LAGS: usize = 100;

    /// Table for an overlap in `[0, 1)`.
    pub fn new(overlap: f64) -> Self {
        let rho = (0..Self::MAX_LAGS).map(|lag| correlation(lag, overlap)).take_while(|r| *r > 0.0).collect();
        Self { rho }
    }

    /// Number of lags with a correlation, at least 1 (lag 0).
    pub fn reach(&self) -> usize {
        self.rho.len()
    }

    /// Correlation at a lag.
    pub fn at(&self, lag: usize) -> f64 {
        self.rho.get(lag).copied().unwrap_or(0.0)
    }
}

/// Noise of a one-dimensional stencil `sum_k c_k f(node + k)` for unit sigma: `sqrt(sum c_a c_b rho(a - b))`.
///
/// For derivative stencils per unit spacing this is the factor `f` in `sd = f sigma / h`.
pub fn stencil_noise(stencil: &[(isize, f64)], overlap: f64) -> f64 {
    let mut variance = 0.0;
    for &(a, ca) in stencil {
        for &(b, cb) in stencil {
            variance += ca * cb * correlation(a.abs_diff(b), overlap);
        }
    }
    variance.max(0.0).sqrt()
}

/// One term of a linear combination of nodal values.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Term {
    /// Row.
    pub j: usize,
    /// Column.
    pub i: usize,
    /// Coefficient.
    pub weight: f64,
}

/// Covariance of two linear combinations of one component, `sum c_a c_b sigma_a sigma_b rho_y rho_x`.
///
/// Both lists are sorted by row.  Exact for the model; quadratic in the number of terms within reach.
pub fn covariance(a: &[Term], b: &[Term], sigma: &NodeSigma, rho: &Correlation) -> f64 {
    let reach = rho.reach();
    let mut sum = 0.0;
    let mut start = 0;
    for s in a {
        while start < b.len() && b[start].j + reach <= s.j {
            start += 1;
        }
        let mut partial = 0.0;
        for t in b[start..].iter().take_while(|t| t.j < s.j + reach) {
            let lag = s.i.abs_diff(t.i);
            if lag < reach {
                partial += t.weight * sigma.at(t.j, t.i) * rho.rho[s.j.abs_diff(t.j)] * rho.rho[lag];
            }
        }
        sum += s.weight * sigma.at(s.j, s.i) * partial;
    }
    sum
}

/// Standard uncertainty of one component at every node.
#[derive(Debug, Clone, PartialEq)]
pub enum NodeSigma {
    /// The same everywhere.
    Uniform(f64),
    /// One value for each node; NaN in gaps is never read.
    Map(Array2<f64>),
}

impl NodeSigma {
    /// Declared sigma of a component of `field` times the thickness of the layer, 1 in place of an undeclared sigma.
    pub fn of(field: &VelocityField, component: Component) -> Self {
        let pick = |(u, v): (f64, f64)| if component == Component::U { u } else { v };
        let at = |j, i| field.sigma.at(j, i).map_or(1.0, pick);
        match (&field.domain.thickness, &field.sigma) {
            (Thickness::Uniform, Sigma::Unknown | Sigma::Uniform { .. }) => NodeSigma::Uniform(at(0, 0)),
            (thickness, _) => NodeSigma::Map(Array2::from_shape_fn(field.grid().shape(), |(j, i)| {
                at(j, i) * thickness.at_node(field.grid(), j, i)
            })),
        }
    }

    /// Value at a node.
    pub fn at(&self, j: usize, i: usize) -> f64 {
        match self {
            NodeSigma::Uniform(s) => *s,
            NodeSigma::Map(map) => map[[j, i]],
        }
    }

    /// The value, when it is the same everywhere.
    pub fn uniform(&self) -> Option<f64> {
        match self {
            NodeSigma::Uniform(s) => Some(*s),
            NodeSigma::Map(_) => None,
        }
    }
}

/// Banded Cholesky factor of the correlation matrix of a grid line.
#[derive(Debug, Clone)]
struct LineFactor {
    /// `rows[i][k]` multiplies the independent value `i - k`.
    rows: Vec<Vec<f64>>,
}

impl LineFactor {
    /// Added to the diagonal: the triangular correlation of a whole number of nodes is only semidefinite.
    const RIDGE: f64 = 1e-12;

    fn new(n: usize, rho: &Correlation) -> Self {
        let band = rho.reach() - 1;
        let mut rows: Vec<Vec<f64>> = Vec::with_capacity(n);
        for i in 0..n {
            let width = band.min(i);
            let mut row = vec![0.0; width + 1];
            for k in (1..=width).rev() {
                let column = &rows[i - k];
                let mut sum = rho.at(k);
                // Entries of both rows left of the diagonal of `column`.
                for l in k + 1..=width {
                    sum -= row[l] * column.get(l - k).copied().unwrap_or(0.0);
                }
                row[k] = sum / column[0];
            }
            let rest: f64 = row[1..].iter().map(|c| c * c).sum();
            row[0] = (1.0 + Self::RIDGE - rest).max(Self::RIDGE).sqrt();
            rows.push(row);
        }
        Self { rows }
    }

    fn is_identity(&self) -> bool {
        self.rows.iter().all(|row| row.len() == 1)
    }
}

/// Seeded source of noise fields of the model.
///
/// Member `m` has its own random stream, so the fields do not depend on the order or the threads in which they are drawn.
#[derive(Debug, Clone)]
pub struct NoiseGenerator {
    shape: (usize, usize),
    seed: u64,
    along_y: LineFactor,
    along_x: LineFactor,
}

impl NoiseGenerator {
    /// Generator for arrays of `shape` `(ny, nx)`.
    pub fn new(shape: (usize, usize), overlap: f64, seed: u64) -> Self {
        let rho = Correlation::new(overlap);
        Self { shape, seed, along_y: LineFactor::new(shape.0, &rho), along_x: LineFactor::new(shape.1, &rho) }
    }

    /// Unit-variance noise of u and v, member `member`.
    pub fn unit(&self, member: u64) -> (Array2<f64>, Array2<f64>) {
        let mut random = ChaCha8Rng::seed_from_u64(self.seed);
        random.set_stream(member);
        let mut draw = || {
            let mut z = Array2::from_shape_simple_fn(self.shape, || StandardNormal.sample(&mut random));
            self.correlate(&mut z);
            z
        };
        let u = draw();
        (u, draw())
    }

    /// Noise of the declared sigma of `field`, member `member`; NaN in gaps and where no sigma is declared.
    pub fn of_field(&self, field: &VelocityField, member: u64) -> (Array2<f64>, Array2<f64>) {
        let (mut u, mut v) = self.unit(member);
        Zip::indexed(&mut u).and(&mut v).and(&field.valid).for_each(|(j, i), u, v, &ok| {
            let (su, sv) = if ok { field.sigma.at(j, i).unwrap_or((f64::NAN, f64::NAN)) } else { (f64::NAN, f64::NAN) };
            *u *= su;
            *v *= sv;
        });
        (u, v)
    }

    /// Multiplies independent values by the factors of both directions, in place.
    fn correlate(&self, z: &mut Array2<f64>) {
        if !self.along_x.is_identity() {
            for mut line in z.axis_iter_mut(Dim(0)) {
                for (i, row) in self.along_x.rows.iter().enumerate().rev() {
                    line[i] = row.iter().enumerate().map(|(k, c)| c * line[i - k]).sum();
                }
            }
        }
        if !self.along_y.is_identity() {
            for (j, row) in self.along_y.rows.iter().enumerate().rev() {
                let (before, mut rest) = z.view_mut().split_at(Dim(0), j);
                let mut target = rest.row_mut(0);
                target *= row[0];
                for (k, c) in row.iter().enumerate().skip(1) {
                    target.scaled_add(*c, &before.row(j - k));
                }
            }
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test] // exact values for white noise in closed form; the overlapped ones from rho = 1 - |k| (1 - overlap)
    fn derivative_noise_factors_match_the_published_stencils() {
        let forward = [(0, -1.0), (1, 1.0)];
        let central = [(-1, -0.5), (1, 0.5)];
        let fourth = [(-2, 1.0 / 12.0), (-1, -8.0 / 12.0), (1, 8.0 / 12.0), (2, -1.0 / 12.0)];
        let five = [(-2, -0.2), (-1, -0.1), (1, 0.1), (2, 0.2)];
        let seven: Vec<(isize, f64)> = (-3..=3).map(|k| (k, k as f64 / 28.0)).collect();
        let cases: [(&[(isize, f64)], [f64; 3]); 5] = [
            (&forward, [std::f64::consts::SQRT_2, 1.0, 0.5_f64.sqrt()]),
            (&central, [0.5_f64.sqrt(), 0.5_f64.sqrt(), 0.5]),
            (&fourth, [0.950146, 0.8898, 0.5893]),
            (&five, [0.316228, 0.3742, 0.3606]),
            (&seven, [0.1890, 0.2369, 0.2649]),
        ];
        for (stencil, expected) in cases {
            for (overlap, value) in [0.0, 0.5, 0.75].into_iter().zip(expected) {
                approx::assert_abs_diff_eq!(stencil_noise(stencil, overlap), value, epsilon = 1e-4);
            }
        }
    }

    #[test]
    fn vorticity_of_the_eight_point_circulation_has_noise_factor_0_612() {
        // Circulation around the 3 x 3 block over its area 4 h^2: trapezoid sides with weights 1/8, 1/4, 1/8.
        let side = |fixed: usize, weight: f64, along_x: bool| {
            [(0, 0.125), (1, 0.25), (2, 0.125)].map(|(k, w)| {
                if along_x {
                    Term { j: fixed, i: k, weight: w * weight }
                } else {
                    Term { j: k, i: fixed, weight: w * weight }
                }
            })
        };
        let mut u = [side(0, 1.0, true), side(2, -1.0, true)].concat();
        let mut v = [side(0, -1.0, false), side(2, 1.0, false)].concat();
        u.sort_by_key(|t| (t.j, t.i));
        v.sort_by_key(|t| (t.j, t.i));
        let (one, white) = (NodeSigma::Uniform(1.0), Correlation::new(0.0));
        let sd = (covariance(&u, &u, &one, &white) + covariance(&v, &v, &one, &white)).sqrt();
        approx::assert_abs_diff_eq!(sd, 0.612372, epsilon = 1e-6);
    }

    #[test]
    fn covariance_is_the_full_double_sum_whatever_the_sigma_and_overlap() {
        let sigma =
            NodeSigma::Map(Array2::from_shape_fn((9, 8), |(j, i)| 1.0 + 0.1 * j as f64 + 0.03 * (i * i) as f64));
        let terms = |seed: usize| -> Vec<Term> {
            (0..72)
                .filter(|k| k * seed % 5 < 2)
                .map(|k| Term { j: k / 8, i: k % 8, weight: (k * seed) as f64 % 7.0 - 3.0 })
                .collect()
        };
        let (a, b) = (terms(3), terms(7));
        for overlap in [0.0, 0.3, 0.5, 0.75, 0.9] {
            let mut full = 0.0;
            for s in &a {
                for t in &b {
                    full += s.weight
                        * t.weight
                        * sigma.at(s.j, s.i)
                        * sigma.at(t.j, t.i)
                        * correlation(s.j.abs_diff(t.j), overlap)
                        * correlation(s.i.abs_diff(t.i), overlap);
                }
            }
            approx::assert_relative_eq!(covariance(&a, &b, &sigma, &Correlation::new(overlap)), full, epsilon = 1e-10);
        }
    }

    #[test] // 300 members of 24 x 20: standard error of a correlation below 0.005 after averaging over the nodes
    fn drawn_noise_has_the_declared_correlation_in_both_directions() {
        for overlap in [0.0, 0.5, 0.6, 0.75] {
            let source = NoiseGenerator::new((24, 20), overlap, 7);
            let mut sums = [0.0; 7];
            let mut counts = [0.0; 7];
            for member in 0..300 {
                let (u, v) = source.unit(member);
                for g in [&u, &v] {
                    let lags = [(0, 0), (1, 0), (0, 1), (1, 1), (2, 0), (0, 3), (3, 2)];
                    for (slot, (dj, di)) in lags.into_iter().enumerate() {
                        for j in 0..24 - dj {
                            for i in 0..20 - di {
                                sums[slot] += g[[j, i]] * g[[j + dj, i + di]];
                                counts[slot] += 1.0;
                            }
                        }
                    }
                }
            }
            let r = |k| correlation(k, overlap);
            let expected = [1.0, r(1), r(1), r(1) * r(1), r(2), r(3), r(3) * r(2)];
            for slot in 0..7 {
                approx::assert_abs_diff_eq!(sums[slot] / counts[slot], expected[slot], epsilon = 0.025);
            }
        }
    }

    #[test]
    fn members_are_reproducible_and_differ_from_each_other() {
        let source = NoiseGenerator::new((5, 6), 0.5, 11);
        assert_eq!(source.unit(3), source.unit(3));
        assert_ne!(source.unit(3).0, source.unit(4).0);
        let (u, v) = source.unit(3);
        assert_ne!(u, v);
    }
}
