//! What the stream function cannot explain: the residual of the fit as the discretely curl-free part of the measured field.
//!
//! `r = q - D psi` with `D'W r = 0` at every node: the residual edge fluxes are those of `grad chi` turned by 90 degrees, chi
//! constant on each rim.  Uniform and straining parts go to psi.

use ndarray::Array2;

use super::flux::EdgeRules;
use super::noise::{Component, Correlation, NodeSigma};
use super::stream_function::{EdgeResidual, StreamFunctionOperator};
use crate::field::{Axis, Sigma, VelocityField};
use crate::numerics::noise::NoiseGenerator;

/// Energies in the edge fluxes, `|q|^2 = sum w q^2` with the weights of the fit.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ResidualReport {
    /// Share of the energy left in the residual, `|q - D psi|^2 / |q|^2`; NaN without edges.
    pub energy_share: f64,
    /// The share noise alone would leave, from the declared sigma times the scale given; `None` when none is declared and no
    /// scale is known.
    pub noise_share: Option<f64>,
    /// Share of the energy of pure noise that goes into the residual (see [`residual_noise_fraction`]).
    pub noise_fraction: f64,
    /// Largest residual over an edge.
    pub peak: Option<PeakResidual>,
    /// Largest violation of `D'W r = 0` over the nodes without tie, relative to the sum of the sizes of its terms' fluxes.
    pub defect: f64,
}

/// Largest residual, by size over its noise where sigma is known, else by size.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct PeakResidual {
    /// Residual psi increment.
    pub value: f64,
    /// Its size over the noise of the flux left in the residual; NaN when sigma is unknown.
    pub z: f64,
    /// Middle of the edge.
    pub x: f64,
    /// Middle of the edge.
    pub y: f64,
}

/// Share of the energy of pure noise that the fit leaves in the residual.
///
/// 0.60, 0.53, 0.49 at overlap 0, 0.5, 0.75 on a full 65 x 65 rectangle; from a table for large grids, a rim correction
/// proportional to the window over the grid size, and the share of edges that are redundant where gaps take some away.
/// Accuracy: 2 % (overlap 0) to 5 % (0.75) on full rectangles of 33 x 33 nodes and more, 10 % with up to 15 % random gaps; see
/// [`drawn_noise_fraction`] for the rest.
pub fn residual_noise_fraction(field: &VelocityField, overlap: f64) -> f64 {
    /// Limit for large full rectangles, measured with noise pools on 33, 65 and 129 nodes a side.
    const TABLE: [(f64, f64); 7] =
        [(0.0, 0.606), (0.25, 0.580), (0.5, 0.543), (0.75, 0.525), (0.875, 0.512), (0.9, 0.507), (0.95, 0.49)];
    let at = overlap.clamp(0.0, 0.95);
    let k = TABLE.partition_point(|p| p.0 < at).clamp(1, TABLE.len() - 1);
    let ((a, fa), (b, fb)) = (TABLE[k - 1], TABLE[k]);
    let limit = fa + (fb - fa) * (at - a) / (b - a);
    let (ny, nx) = field.grid().shape();
    let window = 1.0 / (1.0 - at);
    let rim = (0.2 + 0.53 * window) * 0.5 * (1.0 / ny as f64 + 1.0 / nx as f64);
    let redundant = |edges: usize, nodes: usize, parts: usize| {
        if edges == 0 { 0.0 } else { (edges + parts).saturating_sub(nodes) as f64 / edges as f64 }
    };
    let valid = &field.valid;
    let (mut edges, mut nodes) = (0, 0);
    for j in 0..ny {
        for i in 0..nx {
            let up = valid[[j, i]] && j + 1 < ny && valid[[j + 1, i]];
            let right = valid[[j, i]] && i + 1 < nx && valid[[j, i + 1]];
            let down = valid[[j, i]] && j > 0 && valid[[j - 1, i]];
            let left = valid[[j, i]] && i > 0 && valid[[j, i - 1]];
            edges += usize::from(up) + usize::from(right);
            nodes += usize::from(up || right || down || left);
        }
    }
    let full = redundant(2 * nx * ny - nx - ny, nx * ny, 1);
    let ratio = if full > 0.0 { redundant(edges, nodes, 1) / full } else { 0.0 };
    (limit - rim).max(0.0) * ratio.powf(1.0 + 1.2 * at)
}

/// The same by fitting `members` noise fields: exact up to the scatter, about 2 % of the value for each member at 65 x 65 nodes.
///
/// `None` when a fit fails.  Unit sigma is drawn where none is declared.
pub fn drawn_noise_fraction(
    operator: &StreamFunctionOperator,
    field: &VelocityField,
    overlap: f64,
    members: u64,
    seed: u64,
) -> Option<f64> {
    let source = NoiseGenerator::new(field.grid().shape(), overlap, seed);
    let known = match field.sigma {
        Sigma::Unknown => field.clone().with_sigma(Sigma::Uniform { u: 1.0, v: 1.0 }),
        _ => field.clone(),
    };
    let (mut left, mut all) = (0.0, 0.0);
    for member in 0..members {
        let (u, v) = source.of_field(&known, member);
        let fit = operator.fit(&VelocityField { u, v, ..known.clone() }).ok()?;
        let (residual, total) = energies(&fit.residual);
        left += residual;
        all += total;
    }
    (all > 0.0).then(|| left / all)
}

/// Weighted energies of residual and flux.
fn energies(residual: &EdgeResidual) -> (f64, f64) {
    let mut sums = (0.0, 0.0);
    for (r, q, w) in [
        (&residual.along_y, &residual.flux_y, &residual.weight_y),
        (&residual.along_x, &residual.flux_x, &residual.weight_x),
    ] {
        for ((r, q), w) in r.iter().zip(q).zip(w) {
            if *w > 0.0 && r.is_finite() {
                sums.0 += w * r * r;
                sums.1 += w * q * q;
            }
        }
    }
    sums
}

/// Noise variance of every edge flux for the sigma of the field (unit sigma when undeclared): y edges, x edges.
fn flux_variances(field: &VelocityField, overlap: f64) -> [Array2<f64>; 2] {
    let rho = Correlation::new(overlap);
    let (ny, nx) = field.grid().shape();
    let usable = |j: Option<usize>, i: Option<usize>| match (j, i) {
        (Some(j), Some(i)) => j < ny && i < nx && field.valid[[j, i]],
        _ => false,
    };
    let variance = |axis: &Axis, component: Component, along_y: bool| {
        let rules = EdgeRules::new(axis);
        let sigma = NodeSigma::of(field, component);
        let shape = if along_y { (ny - 1, nx) } else { (ny, nx - 1) };
        Array2::from_shape_fn(shape, |(j, i)| {
            let node = |m: Option<usize>| if along_y { usable(m, Some(i)) } else { usable(Some(j), m) };
            let k = if along_y { j } else { i };
            if !(node(Some(k)) && node(Some(k + 1))) {
                return f64::NAN;
            }
            let rule = rules.of(k, node(k.checked_sub(1)), node(Some(k + 2)));
            let at = |m: usize| if along_y { sigma.at(m, i) } else { sigma.at(j, m) };
            let mut sum = 0.0;
            for (a, ca) in rule.terms() {
                for (b, cb) in rule.terms() {
                    sum += ca * cb * at(a) * at(b) * rho.at(a.abs_diff(b));
                }
            }
            sum
        })
    };
    [variance(&field.grid().y, Component::U, true), variance(&field.grid().x, Component::V, false)]
}

/// Share of the flux energy in the residual beside its expectation: the short form of [`ResidualReport`].
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ResidualShare {
    /// `|r|^2 / |q|^2` with the weights of the fit, 0 to 1; NaN without edges.
    pub share: f64,
    /// What the declared noise alone leaves there; `None` when sigma is not declared.
    pub expected: Option<f64>,
}

/// Residual share of a fit, with its noise expectation from the declared sigma and overlap.
pub fn residual_share(field: &VelocityField, residual: &EdgeResidual, overlap: f64) -> ResidualShare {
    let scale = (field.sigma != Sigma::Unknown).then_some(1.0);
    let report = judge_residual(field, residual, overlap, scale, residual_noise_fraction(field, overlap));
    ResidualShare { share: report.energy_share, expected: report.noise_share }
}

/// Judges the residual of a fit.
///
/// `scale`: noise level as a multiple of the declared sigma (1 to trust it), or sigma itself when none is declared and it was
/// estimated; `None` leaves the noise out.  `noise_fraction`: from [`residual_noise_fraction`] or [`drawn_noise_fraction`].
pub fn judge_residual(
    field: &VelocityField,
    residual: &EdgeResidual,
    overlap: f64,
    scale: Option<f64>,
    noise_fraction: f64,
) -> ResidualReport {
    let (left, all) = energies(residual);
    let variances = flux_variances(field, overlap);
    let parts = [
        (&residual.along_y, &residual.weight_y, &variances[0]),
        (&residual.along_x, &residual.weight_x, &variances[1]),
    ];
    let mut noise = 0.0;
    let mut peak: Option<(f64, PeakResidual)> = None;
    let grid = field.grid();
    for (direction, (r, w, variance)) in parts.into_iter().enumerate() {
        for (((j, i), r), (w, variance)) in r.indexed_iter().zip(w.iter().zip(variance)) {
            if !(*w > 0.0 && r.is_finite()) {
                continue;
            }
            if variance.is_finite() {
                noise += w * variance;
            }
            let sd = scale.map_or(f64::NAN, |s| s * (variance * noise_fraction).sqrt());
            let rank = if sd > 0.0 { r.abs() / sd } else { r.abs() };
            if peak.is_none_or(|(best, _)| rank > best) {
                let (mut x, mut y) = (grid.x.at(i), grid.y.at(j));
                if direction == 0 {
                    y += 0.5 * grid.y.spacing(j);
                } else {
                    x += 0.5 * grid.x.spacing(i);
                }
                let z = if sd > 0.0 { r.abs() / sd } else { f64::NAN };
                peak = Some((rank, PeakResidual { value: *r, z, x, y }));
            }
        }
    }
    ResidualReport {
        energy_share: if all > 0.0 { left / all } else { f64::NAN },
        noise_share: scale.filter(|_| all > 0.0).map(|s| noise_fraction * noise * s * s / all),
        noise_fraction,
        peak: peak.map(|p| p.1),
        defect: defect(field, residual),
    }
}

/// Largest `|D'W r|` over the nodes away from walls and bodies, relative to the root mean square of `w q` over the edges.
fn defect(field: &VelocityField, residual: &EdgeResidual) -> f64 {
    let (ny, nx) = field.grid().shape();
    let flow = |w: f64, r: f64| if w > 0.0 && r.is_finite() { w * r } else { 0.0 };
    let (mut squares, mut count) = (0.0, 0usize);
    for (q, w) in [(&residual.flux_y, &residual.weight_y), (&residual.flux_x, &residual.weight_x)] {
        for (q, w) in q.iter().zip(w) {
            if *w > 0.0 && q.is_finite() {
                squares += (w * q).powi(2);
                count += 1;
            }
        }
    }
    let scale = (squares / count.max(1) as f64).sqrt();
    let walls = !field.domain.walls.is_empty() || field.domain.thickness != crate::field::Thickness::Uniform;
    let tied = |j: usize, i: usize| {
        let rim = j == 0 || i == 0 || j + 1 == ny || i + 1 == nx;
        (rim && walls)
            || (j.saturating_sub(1)..=(j + 1).min(ny - 1))
                .any(|jj| (i.saturating_sub(1)..=(i + 1).min(nx - 1)).any(|ii| field.domain.is_solid(jj, ii)))
    };
    let mut largest = 0.0_f64;
    for j in 0..ny {
        for i in 0..nx {
            if !field.valid[[j, i]] || tied(j, i) {
                continue;
            }
            let (ry, wy) = (&residual.along_y, &residual.weight_y);
            let (rx, wx) = (&residual.along_x, &residual.weight_x);
            let mut sum = 0.0;
            if j > 0 {
                sum += flow(wy[[j - 1, i]], ry[[j - 1, i]]);
            }
            if j + 1 < ny {
                sum -= flow(wy[[j, i]], ry[[j, i]]);
            }
            if i > 0 {
                sum += flow(wx[[j, i - 1]], rx[[j, i - 1]]);
            }
            if i + 1 < nx {
                sum -= flow(wx[[j, i]], rx[[j, i]]);
            }
            largest = largest.max(sum.abs());
        }
    }
    if scale > 0.0 { largest / scale } else { 0.0 }
}

#[cfg(test)]
mod tests {
    use std::f64::consts::{PI, TAU};
    use std::sync::Arc;

    use super::*;
    use crate::field::{Domain, Grid};
    use crate::numerics::stream_function::{FitOptions, solve_stream_function};

    fn sampled(n: usize, f: impl Fn(f64, f64) -> (f64, f64)) -> VelocityField {
        let axis = Axis::uniform(0.0, 1.0 / (n - 1) as f64, n).unwrap();
        let grid = Grid::new(axis.clone(), axis);
        let both = Array2::from_shape_fn((n, n), |(j, i)| f(grid.x.at(i), grid.y.at(j)));
        VelocityField::new(Arc::new(Domain::open(grid)), both.mapv(|p| p.0), both.mapv(|p| p.1)).unwrap()
    }

    fn judge(field: &VelocityField, overlap: f64, scale: Option<f64>) -> ResidualReport {
        let fit = solve_stream_function(field, &FitOptions::default()).unwrap();
        judge_residual(field, &fit.residual, overlap, scale, residual_noise_fraction(field, overlap))
    }

    #[test] // Taylor-Green plus grad chi, chi = 0.05 sin(pi x) sin(2 pi y): share 0.058, measured independently
    fn a_planted_divergent_part_is_found_with_its_share_and_the_residual_is_orthogonal_to_psi() {
        for n in [33, 65, 129] {
            let f = sampled(n, |x, y| {
                let k = TAU * 0.85;
                let (a, b) = (k * (x - 0.13), k * (y - 0.07));
                (
                    a.sin() * b.cos() + 0.05 * PI * (PI * x).cos() * (TAU * y).sin(),
                    -a.cos() * b.sin() + 0.05 * TAU * (PI * x).sin() * (TAU * y).cos(),
                )
            });
            let report = judge(&f, 0.0, None);
            approx::assert_abs_diff_eq!(report.energy_share, 0.058, epsilon = 0.001);
            assert!(report.defect < 1e-9 && report.noise_share.is_none(), "{report:?}");
        }
    }

    #[test]
    fn uniform_and_straining_flow_leave_nothing() {
        let report = judge(&sampled(33, |x, y| (1.0 + x, 0.5 - y)), 0.0, None);
        assert!(report.energy_share < 1e-12, "{report:?}");
    }

    #[test] // noise pools on full rectangles: 0.597, 0.527, 0.493 at 65 x 65 (standard error of 40 members 0.002 to 0.004)
    fn share_of_noise_in_the_residual_is_the_drawn_one() {
        for (overlap, expected) in [(0.0, 0.597), (0.5, 0.527), (0.75, 0.493)] {
            let f = sampled(65, |_, _| (1.0, 0.0));
            let formula = residual_noise_fraction(&f, overlap);
            approx::assert_abs_diff_eq!(formula, expected, epsilon = 0.006);
            let operator = StreamFunctionOperator::new(&f, &FitOptions::default()).unwrap();
            let drawn = drawn_noise_fraction(&operator, &f, overlap, 40, 1).unwrap();
            approx::assert_abs_diff_eq!(drawn, expected, epsilon = 0.012);
            let holes = f.without(|j, i| (j * 31 + i * 17) % 23 < 2);
            let operator = StreamFunctionOperator::new(&holes, &FitOptions::default()).unwrap();
            let drawn = drawn_noise_fraction(&operator, &holes, overlap, 20, 1).unwrap();
            approx::assert_relative_eq!(residual_noise_fraction(&holes, overlap), drawn, max_relative = 0.15);
        }
    }

    #[test]
    fn residual_of_a_noisy_field_is_as_large_as_expected_and_a_wrong_vector_is_its_peak() {
        let f = sampled(65, |_, _| (0.0, 0.0));
        let (u, v) = NoiseGenerator::new((65, 65), 0.5, 8).unit(0);
        let mut noisy =
            VelocityField { u: 0.03 * &u, v: 0.03 * &v, ..f }.with_sigma(Sigma::Uniform { u: 0.03, v: 0.03 });
        let report = judge(&noisy, 0.5, Some(1.0));
        approx::assert_relative_eq!(report.energy_share, report.noise_share.unwrap(), max_relative = 0.1);
        assert!(report.peak.unwrap().z < 6.0);
        noisy.u[[20, 40]] += 1.0;
        let peak = judge(&noisy, 0.5, Some(1.0)).peak.unwrap();
        assert!(peak.z > 8.0 && (peak.x - 40.0 / 64.0).abs() < 0.02 && (peak.y - 20.0 / 64.0).abs() < 0.02, "{peak:?}");
    }
}
