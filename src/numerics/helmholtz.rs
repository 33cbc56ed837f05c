//! How much of the measured flux no stream function can explain.

use ndarray::Array2;

use super::flux::EdgeRules;
use super::noise::correlation;
use super::stream_function::EdgeResidual;
use crate::field::{Sigma, VelocityField};

/// Share of the flux energy in the residual of the fit.
///
/// The residual `r = q - D psi` satisfies `D' W r = 0`: it is the discretely curl-free part with no tangential component on the
/// rim, `grad chi`; harmonic parts (uniform flow, strain) belong to psi.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ResidualShare {
    /// `|r|^2 / |q|^2` with the weights of the fit, 0 to 1.
    pub share: f64,
    /// What the declared noise alone leaves there; `None` when sigma is not declared.
    pub expected: Option<f64>,
}

/// Share of the energy of edge noise that ends in the residual, for overlaps 0, 0.5 and 0.75 (65 x 65 nodes, 400 noise fields;
/// interpolated between, within 0.02).
const NOISE_IN_RESIDUAL: [(f64, f64); 3] = [(0.0, 0.597), (0.5, 0.527), (0.75, 0.493)];

/// Residual share of a fit, with its noise expectation from the declared sigma and overlap.
pub fn residual_share(field: &VelocityField, residual: &EdgeResidual, overlap: f64) -> ResidualShare {
    let energy = |q: &Array2<f64>, w: &Array2<f64>| -> f64 {
        q.iter().zip(w).filter(|(q, w)| **w > 0.0 && q.is_finite()).map(|(q, w)| w * q * q).sum()
    };
    let total = energy(&residual.flux_y, &residual.weight_y) + energy(&residual.flux_x, &residual.weight_x);
    let left = energy(&residual.along_y, &residual.weight_y) + energy(&residual.along_x, &residual.weight_x);
    let share = if total > 0.0 { left / total } else { 0.0 };
    let expected = (field.sigma != Sigma::Unknown && total > 0.0)
        .then(|| interpolated(overlap) * noise_energy(field, residual, overlap) / total);
    ResidualShare { share, expected }
}

fn interpolated(overlap: f64) -> f64 {
    let [(a, fa), (b, fb), (c, fc)] = NOISE_IN_RESIDUAL;
    let t = overlap.clamp(0.0, 0.95);
    // Quadratic through the three measured values.
    fa * (t - b) * (t - c) / ((a - b) * (a - c))
        + fb * (t - a) * (t - c) / ((b - a) * (b - c))
        + fc * (t - a) * (t - b) / ((c - a) * (c - b))
}

/// Expected energy of the noise in the edge fluxes, `sum w var(q)`.
fn noise_energy(field: &VelocityField, residual: &EdgeResidual, overlap: f64) -> f64 {
    let grid = field.grid();
    let (ny, nx) = grid.shape();
    let (rules_x, rules_y) = (EdgeRules::new(&grid.x), EdgeRules::new(&grid.y));
    let h = |j: usize, i: usize| field.domain.thickness.at_node(grid, j, i);
    let variance = |terms: &[((usize, usize), f64)], of_u: bool| -> f64 {
        let mut sum = 0.0;
        for (m, (a, ca)) in terms.iter().enumerate() {
            for (n, (b, cb)) in terms.iter().enumerate() {
                let (Some(sa), Some(sb)) = (field.sigma.at(a.0, a.1), field.sigma.at(b.0, b.1)) else { continue };
                let (sa, sb) = if of_u { (sa.0, sb.0) } else { (sa.1, sb.1) };
                sum += ca * cb * sa * sb * h(a.0, a.1) * h(b.0, b.1) * correlation(m.abs_diff(n), overlap);
            }
        }
        sum
    };
    let valid = &field.valid;
    let mut total = 0.0;
    for ((j, i), &w) in residual.weight_y.indexed_iter() {
        if w > 0.0 {
            let rule = rules_y.of(j, j > 0 && valid[[j - 1, i]], j + 2 < ny && valid[[j + 2, i]]);
            let terms: Vec<_> = rule.terms().map(|(m, c)| ((m, i), c)).collect();
            total += w * variance(&terms, true);
        }
    }
    for ((j, i), &w) in residual.weight_x.indexed_iter() {
        if w > 0.0 {
            let rule = rules_x.of(i, i > 0 && valid[[j, i - 1]], i + 2 < nx && valid[[j, i + 2]]);
            let terms: Vec<_> = rule.terms().map(|(m, c)| ((j, m), c)).collect();
            total += w * variance(&terms, false);
        }
    }
    total
}
