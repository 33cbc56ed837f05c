//! Nodal maps of divergence and vorticity with their uncertainty, for display; the judgment is [`super::box_test`]'s.

use ndarray::{Array2, Zip};
use rayon::prelude::*;

use super::noise::{Component, Correlation, NodeSigma, Term, covariance};
use crate::field::{Axis, Thickness, VelocityField};

/// Nodal maps, shape `(ny, nx)`, NaN where a neighbor is missing.
#[derive(Debug, Clone, PartialEq)]
pub struct GradientMaps {
    /// `du/dx + dv/dy` (of `h u`, divided by `h`, in a layer of thickness `h`), 1/time, outflow positive.
    pub divergence: Array2<f64>,
    /// `dv/dx - du/dy`, 1/time, counter-clockwise positive.
    pub vorticity: Array2<f64>,
    /// Standard uncertainty of the divergence; for unit sigma when none is declared.
    pub divergence_sigma: Array2<f64>,
    /// Standard uncertainty of the vorticity; for unit sigma when none is declared.
    pub vorticity_sigma: Array2<f64>,
}

impl GradientMaps {
    /// Divergence over its standard uncertainty, for a noise level of `scale` times the sigma behind the maps (1 when sigma
    /// was declared, the estimate when it was not).
    pub fn divergence_z(&self, scale: f64) -> Array2<f64> {
        Zip::from(&self.divergence).and(&self.divergence_sigma).map_collect(|d, s| d / (s * scale))
    }

    /// Root mean square divergence and its expectation from the noise alone (same `scale`); NaN without a node.
    pub fn divergence_rms(&self, scale: f64) -> (f64, f64) {
        let (mut seen, mut expected, mut n) = (0.0, 0.0, 0usize);
        for (d, s) in self.divergence.iter().zip(&self.divergence_sigma) {
            if d.is_finite() && s.is_finite() {
                seen += d * d;
                expected += s * s;
                n += 1;
            }
        }
        ((seen / n as f64).sqrt(), (expected / n as f64).sqrt() * scale)
    }
}

/// Weights of the second-order first derivative at the middle of three nodes.
fn central_weights(axis: &Axis, k: usize) -> [f64; 3] {
    match axis.step() {
        Some(h) => [-0.5 / h, 0.0, 0.5 / h],
        None => {
            let (a, b) = (axis.spacing(k - 1), axis.spacing(k));
            [-b / (a * (a + b)), (b - a) / (a * b), a / (b * (a + b))]
        }
    }
}

/// Divergence and vorticity by central differences, with uncertainties.
///
/// * Shape `(ny, nx)`.  Units 1/time.
/// * Gaps: a node on the rim, in a gap, or beside one gives NaN in every map: one-sided differences are never taken.
/// * Accuracy: order 2 (also on smoothly stretched axes); noise exact for the model of [`super::noise`] with `overlap`.
/// * Thickness: `div = (d(hu)/dx + d(hv)/dy) / h`, NaN where `h` is 0; the vorticity is that of u and v.
pub fn gradient_maps(field: &VelocityField, overlap: f64) -> GradientMaps {
    let grid = field.grid();
    let shape = grid.shape();
    let (ny, nx) = shape;
    let rho = Correlation::new(overlap);
    let thickness = &field.domain.thickness;
    let plain = *thickness == Thickness::Uniform;
    let h = |j: usize, i: usize| if plain { 1.0 } else { thickness.at_node(grid, j, i) };
    let (su, sv) = (NodeSigma::of(field, Component::U), NodeSigma::of(field, Component::V));
    let wx: Vec<[f64; 3]> = (1..nx.max(2) - 1).map(|i| central_weights(&grid.x, i)).collect();
    let wy: Vec<[f64; 3]> = (1..ny.max(2) - 1).map(|j| central_weights(&grid.y, j)).collect();
    let usable = |j: usize, i: usize| field.valid[[j, i]] && h(j, i).is_finite();
    let line = |sigma: &NodeSigma, weights: [f64; 3], j: usize, i: usize, along_x: bool, divide: bool| {
        let terms: [Term; 3] = std::array::from_fn(|k| {
            let (jj, ii) = if along_x { (j, i + k - 1) } else { (j + k - 1, i) };
            // The sigma of the checks carries the thickness; a plain derivative takes it out again.
            let factor = if divide && !plain { 1.0 / h(jj, ii) } else { 1.0 };
            Term { j: jj, i: ii, weight: weights[k] * factor }
        });
        covariance(&terms, &terms, sigma, &rho)
    };
    let same = grid.is_uniform() && su.uniform().is_some() && sv.uniform().is_some();
    let constant = (same && ny > 2 && nx > 2).then(|| {
        let var = |sigma: &NodeSigma, w: [f64; 3], along_x| line(sigma, w, 1, 1, along_x, false);
        (
            (var(&su, wx[0], true) + var(&sv, wy[0], false)).sqrt(),
            (var(&sv, wx[0], true) + var(&su, wy[0], false)).sqrt(),
        )
    });
    let node = |j: usize, i: usize| -> [f64; 4] {
        const NOTHING: [f64; 4] = [f64::NAN; 4];
        if j == 0 || i == 0 || j + 1 >= ny || i + 1 >= nx {
            return NOTHING;
        }
        let needed = [(j, i), (j, i - 1), (j, i + 1), (j - 1, i), (j + 1, i)];
        if !needed.iter().all(|&(j, i)| usable(j, i)) {
            return NOTHING;
        }
        let (cx, cy) = (wx[i - 1], wy[j - 1]);
        let (u, v) = (&field.u, &field.v);
        let at = |f: &Array2<f64>, j: usize, i: usize| f[[j, i]] * h(j, i);
        let here = h(j, i);
        let ux = cx[0] * at(u, j, i - 1) + cx[1] * at(u, j, i) + cx[2] * at(u, j, i + 1);
        let vy = cy[0] * at(v, j - 1, i) + cy[1] * at(v, j, i) + cy[2] * at(v, j + 1, i);
        let vx = cx[0] * v[[j, i - 1]] + cx[1] * v[[j, i]] + cx[2] * v[[j, i + 1]];
        let uy = cy[0] * u[[j - 1, i]] + cy[1] * u[[j, i]] + cy[2] * u[[j + 1, i]];
        let (div_sigma, vort_sigma) = constant.unwrap_or_else(|| {
            let divergence = line(&su, cx, j, i, true, false) + line(&sv, cy, j, i, false, false);
            let vorticity = line(&sv, cx, j, i, true, true) + line(&su, cy, j, i, false, true);
            (divergence.sqrt() / here, vorticity.sqrt())
        });
        let divergence = (ux + vy) / here;
        [if divergence.is_finite() { divergence } else { f64::NAN }, vx - uy, div_sigma, vort_sigma]
    };
    let rows: Vec<Vec<[f64; 4]>> = (0..ny).into_par_iter().map(|j| (0..nx).map(|i| node(j, i)).collect()).collect();
    let map = |k: usize| Array2::from_shape_fn(shape, |(j, i)| rows[j][i][k]);
    GradientMaps { divergence: map(0), vorticity: map(1), divergence_sigma: map(2), vorticity_sigma: map(3) }
}

#[cfg(test)]
mod tests {
    use std::sync::Arc;

    use super::*;
    use crate::field::{Domain, Grid, Sigma};

    fn field(x: Axis, y: Axis, f: impl Fn(f64, f64) -> (f64, f64)) -> VelocityField {
        let grid = Grid::new(x, y);
        let u = Array2::from_shape_fn(grid.shape(), |(j, i)| f(grid.x.at(i), grid.y.at(j)).0);
        let v = Array2::from_shape_fn(grid.shape(), |(j, i)| f(grid.x.at(i), grid.y.at(j)).1);
        VelocityField::new(Arc::new(Domain::open(grid)), u, v).unwrap()
    }

    fn stretched(n: usize) -> Axis {
        Axis::from_nodes((0..n).map(|k| k as f64 / (n - 1) as f64).map(|t| t + 0.1 * (3.0 * t).sin()).collect())
            .unwrap()
    }

    #[test] // u = sin x, v = sin y: divergence cos x + cos y
    fn divergence_is_second_order_on_uniform_and_stretched_axes() {
        let error = |axis: fn(usize) -> Axis, n: usize| {
            let f = field(axis(n), axis(n + 6), |x, y| (x.sin(), y.sin()));
            let maps = gradient_maps(&f, 0.0);
            let grid = f.grid();
            maps.divergence
                .indexed_iter()
                .filter(|(_, d)| d.is_finite())
                .map(|((j, i), d)| (d - grid.x.at(i).cos() - grid.y.at(j).cos()).abs())
                .fold(0.0, f64::max)
        };
        let uniform: fn(usize) -> Axis = |n| Axis::uniform(0.0, 1.0 / (n - 1) as f64, n).unwrap();
        for axis in [uniform, stretched] {
            let order = (error(axis, 33) / error(axis, 65)).log2();
            approx::assert_abs_diff_eq!(order, 2.0, epsilon = 0.15);
        }
    }

    #[test]
    fn gaps_and_rims_stay_nan_and_rigid_rotation_has_vorticity_two() {
        let axis = Axis::uniform(-1.0, 0.25, 9).unwrap();
        let f = field(axis.clone(), axis, |x, y| (-y, x)).without(|j, i| (j, i) == (4, 4));
        let maps = gradient_maps(&f, 0.0);
        for node in [(0, 3), (8, 3), (3, 0), (4, 4), (3, 4), (5, 4), (4, 3), (4, 5)] {
            assert!(
                maps.divergence[node].is_nan() && maps.vorticity[node].is_nan() && maps.divergence_sigma[node].is_nan()
            );
        }
        approx::assert_abs_diff_eq!(maps.vorticity[[3, 3]], 2.0, epsilon = 1e-12);
        approx::assert_abs_diff_eq!(maps.divergence[[3, 3]], 0.0, epsilon = 1e-12);
    }

    #[test] // sigma_div = sigma / h at overlap 0 and 0.5, 0.707 of it at 0.75 (central difference, u and v together)
    fn noise_of_the_map_follows_the_overlap() {
        let axis = Axis::uniform(0.0, 0.5, 7).unwrap();
        for sigma in [
            Sigma::Uniform { u: 0.2, v: 0.2 },
            Sigma::PerNode { u: Array2::from_elem((7, 7), 0.2), v: Array2::from_elem((7, 7), 0.2) },
        ] {
            let f = field(axis.clone(), axis.clone(), |x, y| (x, -y)).with_sigma(sigma);
            for (overlap, factor) in [(0.0, 1.0), (0.5, 1.0), (0.75, 0.5_f64.sqrt())] {
                let maps = gradient_maps(&f, overlap);
                approx::assert_abs_diff_eq!(maps.divergence_sigma[[3, 3]], factor * 0.2 / 0.5, epsilon = 1e-12);
                approx::assert_abs_diff_eq!(maps.vorticity_sigma[[3, 3]], factor * 0.2 / 0.5, epsilon = 1e-12);
            }
        }
    }

    #[test] // Stokes flow toward a plate, u = x^2 ... : axisymmetric stagnation flow u_x = -2 x, u_r = r
    fn axisymmetric_stagnation_flow_is_free_of_divergence_with_the_radius_as_thickness() {
        let grid = Grid::new(Axis::uniform(0.0, 0.1, 9).unwrap(), Axis::uniform(0.0, 0.1, 9).unwrap());
        let u = Array2::from_shape_fn((9, 9), |(_, i)| -2.0 * grid.x.at(i));
        let v = Array2::from_shape_fn((9, 9), |(j, _)| grid.y.at(j));
        let domain = Domain::open(grid).with_thickness(Thickness::Radius);
        let f = VelocityField::new(Arc::new(domain), u, v).unwrap().with_sigma(Sigma::Uniform { u: 0.1, v: 0.1 });
        let maps = gradient_maps(&f, 0.0);
        // d(r v)/dr of r^2 by central differences is exact.
        assert!(maps.divergence.iter().filter(|d| d.is_finite()).all(|d| d.abs() < 1e-12));
        // Row 4: u enters with its own radius, v with 5/4 and 3/4 of it.
        let expected = 0.1 / 0.2 * (2.0_f64 + 1.25 * 1.25 + 0.75 * 0.75).sqrt();
        approx::assert_relative_eq!(maps.divergence_sigma[[4, 4]], expected, epsilon = 1e-12);
        approx::assert_relative_eq!(maps.vorticity_sigma[[4, 4]], 1.0, epsilon = 1e-12);
    }
}
