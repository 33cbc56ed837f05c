//! Fluxes along grid edges: line integrals of the measured velocity between neighboring nodes.

use ndarray::{Array2, Zip};

use crate::field::{Axis, Thickness, VelocityField};

/// Quadrature of one edge from node `k` to `k + 1` of a line: `sum coefficient[m] f[start + m]`.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct EdgeRule {
    /// First node used.
    pub start: usize,
    /// Number of nodes used, 2 to 4.
    pub len: usize,
    /// Coefficients, in the unit of the axis; the first `len` count.
    pub coefficient: [f64; 4],
}

impl EdgeRule {
    /// Nodes and coefficients.
    pub fn terms(&self) -> impl Iterator<Item = (usize, f64)> + '_ {
        (0..self.len).map(|m| (self.start + m, self.coefficient[m]))
    }
}

/// The four rules of every edge of an axis, by whether the node before and the node after the edge are usable.
///
/// Uniform axis, step h: both `h/24 (-1, 13, 13, -1)`, error `11/720 h^5 f''''`; one `h/12 (5, 8, -1)` or mirrored, error
/// `1/24 h^4 f'''`; none the trapezoid.  Stretched axis: the integral of the Lagrange polynomial through the same nodes.
#[derive(Debug, Clone)]
pub struct EdgeRules {
    rules: Vec<[EdgeRule; 4]>,
}

impl EdgeRules {
    /// Rules of all edges of an axis.
    pub fn new(axis: &Axis) -> Self {
        let n = axis.len();
        let rules = (0..n - 1)
            .map(|k| {
                [(false, false), (false, true), (true, false), (true, true)].map(|(before, after)| {
                    let start = if before && k > 0 { k - 1 } else { k };
                    let end = if after && k + 2 < n { k + 3 } else { k + 2 };
                    let mut coefficient = [0.0; 4];
                    // Positions relative to the first node of the edge: no cancellation far from the origin.
                    let local: Vec<f64> = match axis.step() {
                        Some(step) => (start..end).map(|m| (m as f64 - k as f64) * step).collect(),
                        None => (start..end).map(|m| axis.at(m) - axis.at(k)).collect(),
                    };
                    for (slot, w) in coefficient.iter_mut().zip(lagrange_weights(&local, 0.0, axis.spacing(k))) {
                        *slot = w;
                    }
                    EdgeRule { start, len: end - start, coefficient }
                })
            })
            .collect();
        Self { rules }
    }

    /// Rule of edge `k` given the usability of node `k - 1` and node `k + 2`.
    pub fn of(&self, k: usize, before: bool, after: bool) -> &EdgeRule {
        &self.rules[k][usize::from(before) * 2 + usize::from(after)]
    }
}

/// Weights of the integral from `a` to `b` of the Lagrange polynomial through up to 4 `nodes` (exact, by 2-point Gauss).
pub fn lagrange_weights(nodes: &[f64], a: f64, b: f64) -> Vec<f64> {
    let (middle, half) = (0.5 * (a + b), 0.5 * (b - a));
    let gauss = [middle - half / 3f64.sqrt(), middle + half / 3f64.sqrt()];
    (0..nodes.len())
        .map(|m| {
            let basis = |x: f64| -> f64 {
                (0..nodes.len()).filter(|&k| k != m).map(|k| (x - nodes[k]) / (nodes[m] - nodes[k])).product()
            };
            half * (basis(gauss[0]) + basis(gauss[1]))
        })
        .collect()
}

/// psi increments along the edges of the grid.
///
/// Shapes: `along_y` `(ny - 1, nx)` from `(j, i)` to `(j + 1, i)`, `+ int h u dy`; `along_x` `(ny, nx - 1)` from `(j, i)` to
/// `(j, i + 1)`, `- int h v dx`.  NaN where one of the two nodes has no vector.
#[derive(Debug, Clone, PartialEq)]
pub struct EdgeFluxes {
    /// Increments along +y.
    pub along_y: Array2<f64>,
    /// Increments along +x.
    pub along_x: Array2<f64>,
}

/// Edge fluxes of a field, the thickness multiplied in first; fourth order where lines are long enough.
pub fn edge_fluxes(field: &VelocityField) -> EdgeFluxes {
    let domain = &field.domain;
    let grid = &domain.grid;
    let weighted = |component: &Array2<f64>| -> Array2<f64> {
        let mut out = component.clone();
        Zip::indexed(&mut out).and(&field.valid).par_for_each(|(j, i), value, &ok| {
            if !ok {
                *value = f64::NAN;
            } else if domain.thickness != Thickness::Uniform {
                *value *= domain.thickness.at_node(grid, j, i);
            }
        });
        out
    };
    edge_fluxes_of(&weighted(&field.u), &weighted(&field.v), &EdgeRules::new(&grid.x), &EdgeRules::new(&grid.y))
}

/// Edge fluxes of arrays whose gaps are NaN (thickness already multiplied in).
pub fn edge_fluxes_of(u: &Array2<f64>, v: &Array2<f64>, rules_x: &EdgeRules, rules_y: &EdgeRules) -> EdgeFluxes {
    let (ny, nx) = u.dim();
    let mut along_y = Array2::from_elem((ny - 1, nx), f64::NAN);
    Zip::indexed(along_y.rows_mut()).par_for_each(|j, mut row| {
        for i in 0..nx {
            if u[[j, i]].is_finite() && u[[j + 1, i]].is_finite() {
                let before = j > 0 && u[[j - 1, i]].is_finite();
                let after = j + 2 < ny && u[[j + 2, i]].is_finite();
                row[i] = rules_y.of(j, before, after).terms().map(|(m, c)| c * u[[m, i]]).sum();
            }
        }
    });
    let mut along_x = Array2::from_elem((ny, nx - 1), f64::NAN);
    Zip::indexed(along_x.rows_mut()).par_for_each(|j, mut row| {
        for i in 0..nx - 1 {
            if v[[j, i]].is_finite() && v[[j, i + 1]].is_finite() {
                let before = i > 0 && v[[j, i - 1]].is_finite();
                let after = i + 2 < nx && v[[j, i + 2]].is_finite();
                row[i] = -rules_x.of(i, before, after).terms().map(|(m, c)| c * v[[j, m]]).sum::<f64>();
            }
        }
    });
    EdgeFluxes { along_y, along_x }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test] // closed Newton-Cotes type rules, common practice
    fn uniform_rules_are_the_published_ones() {
        let rules = EdgeRules::new(&Axis::uniform(100.0, 0.5, 8).unwrap());
        let close = |rule: &EdgeRule, expected: &[f64]| {
            assert_eq!(rule.len, expected.len());
            for (c, e) in rule.coefficient.iter().zip(expected) {
                approx::assert_abs_diff_eq!(*c, *e, epsilon = 1e-15);
            }
        };
        close(rules.of(3, true, true), &[-1.0 / 48.0, 13.0 / 48.0, 13.0 / 48.0, -1.0 / 48.0]);
        close(rules.of(0, false, true), &[5.0 / 24.0, 8.0 / 24.0, -1.0 / 24.0]);
        close(rules.of(6, true, false), &[-1.0 / 24.0, 8.0 / 24.0, 5.0 / 24.0]);
        close(rules.of(2, false, false), &[0.25, 0.25]);
    }

    #[test]
    fn stretched_rules_integrate_cubics_exactly() {
        let axis = Axis::from_nodes(vec![0.0, 0.4, 0.5, 0.9, 1.6]).unwrap();
        let rules = EdgeRules::new(&axis);
        let f = |t: f64| 1.0 - t + 2.0 * t * t - 3.0 * t * t * t;
        let primitive = |t: f64| t - t * t / 2.0 + 2.0 * t.powi(3) / 3.0 - 0.75 * t.powi(4);
        for k in 1..3 {
            let sum: f64 = rules.of(k, true, true).terms().map(|(m, c)| c * f(axis.at(m))).sum();
            approx::assert_abs_diff_eq!(sum, primitive(axis.at(k + 1)) - primitive(axis.at(k)), epsilon = 1e-14);
        }
    }
}
