//! Smooth surface through the nodal psi: cubic splines along grid lines, bicubic Hermite patches in the cells.

use ndarray::{Array2, ArrayView1, ArrayViewMut1, Axis as Dim, Zip};

use crate::field::Grid;

/// Value and derivatives of psi at a point, in physical units (not per cell).
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Jet {
    /// psi.
    pub psi: f64,
    /// d psi / dx, equal to `-h v`.
    pub psi_x: f64,
    /// d psi / dy, equal to `h u`.
    pub psi_y: f64,
    /// Second derivative along x.
    pub psi_xx: f64,
    /// Mixed second derivative.
    pub psi_xy: f64,
    /// Second derivative along y.
    pub psi_yy: f64,
}

impl Jet {
    /// Velocity of the fitted field times the thickness, `(psi_y, -psi_x)`: grad psi turned 90 degrees clockwise.
    pub fn velocity(&self) -> (f64, f64) {
        (self.psi_y, -self.psi_x)
    }

    /// Determinant of the Hessian: positive at a center, negative at a saddle.
    pub fn hessian_det(&self) -> f64 {
        self.psi_xx * self.psi_yy - self.psi_xy * self.psi_xy
    }

    /// Length of the gradient, `h |u|`.
    pub fn speed(&self) -> f64 {
        self.psi_x.hypot(self.psi_y)
    }
}

/// Surface through the nodal psi.
///
/// * Shape: nodal arrays are `(ny, nx)`; a cell `(j, i)` has the corner nodes `(j, i) .. (j + 1, i + 1)`.
/// * Gaps: a node with NaN psi carries nothing; a cell is valid when its four corners are; lines are cut at gaps.
/// * Accuracy: psi O(h^4), velocity O(h^3) at nodes; C2 on a full rectangle, C1 where lines are cut.
/// * Source: not-a-knot cubic splines along runs (quadratic for 3 nodes, linear for 2), mixed derivative the mean of both
///   orders; bicubic Hermite patch (de Boor 1978, from memory).
#[derive(Debug, Clone)]
pub struct PsiSurface {
    grid: Grid,
    psi: Array2<f64>,
    psi_x: Array2<f64>,
    psi_y: Array2<f64>,
    psi_xy: Array2<f64>,
    cell: Array2<bool>,
}

impl PsiSurface {
    /// Surface through `psi` on the nodes of `grid`; NaN marks nodes without a value.
    ///
    /// # Panics
    /// When `psi` has another shape than the grid: a programming error, not a property of data.
    pub fn new(grid: &Grid, psi: &Array2<f64>) -> Self {
        assert_eq!(psi.dim(), grid.shape(), "psi must have the shape of the grid");
        let psi_x = derivative_along(psi, Dim(1), grid.x.nodes());
        let psi_y = derivative_along(psi, Dim(0), grid.y.nodes());
        let mut psi_xy = derivative_along(&psi_x, Dim(0), grid.y.nodes());
        let other = derivative_along(&psi_y, Dim(1), grid.x.nodes());
        Zip::from(&mut psi_xy).and(&other).for_each(|a, &b| *a = 0.5 * (*a + b));
        let (ny, nx) = grid.shape();
        let cell = Array2::from_shape_fn((ny - 1, nx - 1), |(j, i)| {
            [(j, i), (j, i + 1), (j + 1, i), (j + 1, i + 1)].iter().all(|&node| psi[node].is_finite())
        });
        Self { grid: grid.clone(), psi: psi.clone(), psi_x, psi_y, psi_xy, cell }
    }

    /// The grid.
    pub fn grid(&self) -> &Grid {
        &self.grid
    }

    /// Nodal psi.
    pub fn psi(&self) -> &Array2<f64> {
        &self.psi
    }

    /// Nodal derivative along x, NaN where there is no psi; 0 for a run of a single node is not invented: NaN.
    pub fn psi_x(&self) -> &Array2<f64> {
        &self.psi_x
    }

    /// Nodal derivative along y.
    pub fn psi_y(&self) -> &Array2<f64> {
        &self.psi_y
    }

    /// Which cells are valid, shape `(ny - 1, nx - 1)`.
    pub fn cells(&self) -> &Array2<bool> {
        &self.cell
    }

    /// Whether cell `(j, i)` exists and is valid; indices may lie outside the grid.
    pub fn cell_is_valid(&self, j: isize, i: isize) -> bool {
        j >= 0
            && i >= 0
            && (j as usize) < self.cell.nrows()
            && (i as usize) < self.cell.ncols()
            && self.cell[[j as usize, i as usize]]
    }

    /// Smallest and largest nodal psi, `None` when there is none.
    pub fn range(&self) -> Option<(f64, f64)> {
        self.psi.iter().filter(|p| p.is_finite()).fold(None, |range, &p| match range {
            None => Some((p, p)),
            Some((low, high)) => Some((f64::min(low, p), f64::max(high, p))),
        })
    }

    /// Bezier coefficients `b[row][column]` of psi in valid cell `(j, i)`, row along y, column along x, local coordinates
    /// 0 to 1.
    pub fn bezier(&self, j: usize, i: usize) -> [[f64; 4]; 4] {
        let (dx, dy) = (self.grid.x.spacing(i), self.grid.y.spacing(j));
        let mut b = [[0.0; 4]; 4];
        for (a, sy, rows) in [(0, 1.0, [0, 1]), (1, -1.0, [3, 2])] {
            for (c, sx, cols) in [(0, 1.0, [0, 1]), (1, -1.0, [3, 2])] {
                let node = [j + a, i + c];
                let f = self.psi[node];
                let px = self.psi_x[node] * dx / 3.0 * sx;
                let py = self.psi_y[node] * dy / 3.0 * sy;
                let pxy = self.psi_xy[node] * dx * dy / 9.0 * sx * sy;
                b[rows[0]][cols[0]] = f;
                b[rows[0]][cols[1]] = f + px;
                b[rows[1]][cols[0]] = f + py;
                b[rows[1]][cols[1]] = f + px + py + pxy;
            }
        }
        b
    }

    /// Value and derivatives in valid cell `(j, i)` at local coordinates `s` (y) and `t` (x), 0 to 1.
    pub fn eval_in_cell(&self, j: usize, i: usize, s: f64, t: f64) -> Jet {
        jet_of(&self.bezier(j, i), s, t, self.grid.x.spacing(i), self.grid.y.spacing(j))
    }

    /// Valid cell that holds the point, with local coordinates `(j, i, s, t)`; a point on a shared edge or node is given to
    /// any valid neighbor; `None` outside the valid cells.
    pub fn locate(&self, x: f64, y: f64) -> Option<(usize, usize, f64, f64)> {
        let (i, t) = self.grid.x.locate(x)?;
        let (j, s) = self.grid.y.locate(y)?;
        if self.cell[[j, i]] {
            return Some((j, i, s, t));
        }
        let js = [(j as isize, s), (j as isize - 1, 1.0), (j as isize + 1, 0.0)];
        let is = [(i as isize, t), (i as isize - 1, 1.0), (i as isize + 1, 0.0)];
        for (k, &(jj, ss)) in js.iter().enumerate() {
            for (l, &(ii, tt)) in is.iter().enumerate() {
                let touches = (k == 0 || (k == 1 && s == 0.0) || (k == 2 && s == 1.0))
                    && (l == 0 || (l == 1 && t == 0.0) || (l == 2 && t == 1.0));
                if touches && self.cell_is_valid(jj, ii) {
                    return Some((jj as usize, ii as usize, ss, tt));
                }
            }
        }
        None
    }

    /// Value and derivatives at a point; `None` outside the valid cells.
    pub fn eval(&self, x: f64, y: f64) -> Option<Jet> {
        self.locate(x, y).map(|(j, i, s, t)| self.eval_in_cell(j, i, s, t))
    }
}

/// Value and physical derivatives of the Bezier patch `b` of a cell of size `dx` by `dy`.
pub fn jet_of(b: &[[f64; 4]; 4], s: f64, t: f64, dx: f64, dy: f64) -> Jet {
    let (p, p1, p2) = bernstein(s);
    let (q, q1, q2) = bernstein(t);
    let mut sums = [0.0; 6];
    for (r, row) in b.iter().enumerate() {
        let (mut f, mut f1, mut f2) = (0.0, 0.0, 0.0);
        for c in 0..4 {
            f += row[c] * q[c];
            f1 += row[c] * q1[c];
            f2 += row[c] * q2[c];
        }
        for (sum, term) in sums.iter_mut().zip([p[r] * f, p[r] * f1, p1[r] * f, p[r] * f2, p1[r] * f1, p2[r] * f]) {
            *sum += term;
        }
    }
    let [psi, x, y, xx, xy, yy] = sums;
    Jet { psi, psi_x: x / dx, psi_y: y / dy, psi_xx: xx / (dx * dx), psi_xy: xy / (dx * dy), psi_yy: yy / (dy * dy) }
}

/// Cubic Bernstein polynomials with first and second derivatives at `t`.
fn bernstein(t: f64) -> ([f64; 4], [f64; 4], [f64; 4]) {
    let r = 1.0 - t;
    let value = [r * r * r, 3.0 * r * r * t, 3.0 * r * t * t, t * t * t];
    let first = [-3.0 * r * r, 3.0 * r * r - 6.0 * r * t, 6.0 * r * t - 3.0 * t * t, 3.0 * t * t];
    let second = [6.0 * r, 6.0 * t - 12.0 * r, 6.0 * r - 12.0 * t, 6.0 * t];
    (value, first, second)
}

/// Nodal derivative along one dimension, lines cut at NaN.
pub fn derivative_along(f: &Array2<f64>, dim: Dim, nodes: &[f64]) -> Array2<f64> {
    let mut out = Array2::from_elem(f.dim(), f64::NAN);
    let across = Dim(1 - dim.0);
    Zip::from(f.axis_iter(across)).and(out.axis_iter_mut(across)).par_for_each(|line, result| {
        derivative_of_line(line, result, nodes);
    });
    out
}

fn derivative_of_line(line: ArrayView1<'_, f64>, mut result: ArrayViewMut1<'_, f64>, nodes: &[f64]) {
    let n = line.len();
    let mut values = Vec::with_capacity(n);
    let mut start = 0;
    while start < n {
        if !line[start].is_finite() {
            start += 1;
            continue;
        }
        values.clear();
        values.extend(line.iter().skip(start).take_while(|f| f.is_finite()));
        let end = start + values.len();
        for (k, d) in spline_slopes(&nodes[start..end], &values).into_iter().enumerate() {
            result[start + k] = d;
        }
        start = end;
    }
}

/// First derivatives at the knots of the not-a-knot cubic spline (quadratic for 3 knots, linear for 2, NaN for 1).
pub fn spline_slopes(x: &[f64], f: &[f64]) -> Vec<f64> {
    let n = x.len();
    let h = |i: usize| x[i + 1] - x[i];
    let slope = |i: usize| (f[i + 1] - f[i]) / h(i);
    match n {
        0 => return Vec::new(),
        1 => return vec![f64::NAN],
        2 => return vec![slope(0); 2],
        3 => {
            let curvature = (slope(1) - slope(0)) / (x[2] - x[0]);
            return vec![slope(0) - curvature * h(0), slope(0) + curvature * h(0), slope(1) + curvature * h(1)];
        }
        _ => {}
    }
    // Tridiagonal system; the two end rows carry the not-a-knot condition.
    let (mut diagonal, mut upper, mut d) = (vec![0.0; n], vec![0.0; n], vec![0.0; n]);
    let (h0, h1) = (h(0), h(1));
    diagonal[0] = h1;
    upper[0] = h0 + h1;
    d[0] = ((h0 + 2.0 * (h0 + h1)) * h1 * slope(0) + h0 * h0 * slope(1)) / (h0 + h1);
    for i in 1..n {
        let (lower, center, above, right) = if i + 1 < n {
            let (a, b) = (h(i - 1), h(i));
            (b, 2.0 * (a + b), a, 3.0 * (b * slope(i - 1) + a * slope(i)))
        } else {
            let (a, b) = (h(n - 2), h(n - 3));
            let right = ((a + 2.0 * (a + b)) * b * slope(n - 2) + a * a * slope(n - 3)) / (a + b);
            (a + b, b, 0.0, right)
        };
        let factor = lower / diagonal[i - 1];
        diagonal[i] = center - factor * upper[i - 1];
        upper[i] = above;
        d[i] = right - factor * d[i - 1];
    }
    d[n - 1] /= diagonal[n - 1];
    for i in (0..n - 1).rev() {
        d[i] = (d[i] - upper[i] * d[i + 1]) / diagonal[i];
    }
    d
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::field::Axis;

    #[test]
    fn slopes_of_a_cubic_are_exact_on_stretched_knots() {
        let x = [0.0, 0.3, 0.7, 1.6, 2.0, 2.9];
        let f = |t: f64| 1.0 - 2.0 * t + 0.5 * t * t + 0.25 * t * t * t;
        let values: Vec<f64> = x.iter().map(|&t| f(t)).collect();
        for (d, t) in spline_slopes(&x, &values).iter().zip(x) {
            approx::assert_abs_diff_eq!(*d, -2.0 + t + 0.75 * t * t, epsilon = 1e-12);
        }
    }

    #[test] // order 4 of the value between nodes, planted smooth function with a gap
    fn surface_reproduces_a_smooth_function_at_fourth_order() {
        let error = |n: usize| {
            let axis = Axis::uniform(0.0, 1.0 / (n - 1) as f64, n).unwrap();
            let grid = Grid::new(axis.clone(), axis);
            let f = |x: f64, y: f64| (3.0 * x + 0.2).sin() * (2.0 * y).cos();
            let psi = Array2::from_shape_fn((n, n), |(j, i)| {
                let (x, y) = (grid.x.at(i), grid.y.at(j));
                if (x - 0.5).hypot(y - 0.5) < 0.11 { f64::NAN } else { f(x, y) }
            });
            let surface = PsiSurface::new(&grid, &psi);
            let mut worst: f64 = 0.0;
            for k in 0..2000 {
                let (x, y) = ((k as f64 * 0.618_034).fract(), (k as f64 * 0.754_877).fract());
                if let Some(jet) = surface.eval(x, y) {
                    worst = worst.max((jet.psi - f(x, y)).abs());
                }
            }
            assert!(surface.eval(0.5, 0.5).is_none());
            worst
        };
        let order = (error(21) / error(41)).log2();
        assert!(order > 3.5, "order {order}");
    }

    #[test]
    fn derivatives_of_the_patch_agree_with_differences() {
        let axis = Axis::uniform(0.0, 0.1, 11).unwrap();
        let grid = Grid::new(axis.clone(), axis);
        let psi = Array2::from_shape_fn((11, 11), |(j, i)| (0.37 * (i as f64)).sin() * (0.21 * j as f64 + 0.3).cos());
        let surface = PsiSurface::new(&grid, &psi);
        let (x, y, e) = (0.512, 0.333, 1e-5);
        let at = |x, y| surface.eval(x, y).unwrap();
        let jet = at(x, y);
        approx::assert_abs_diff_eq!(jet.psi_x, (at(x + e, y).psi - at(x - e, y).psi) / (2.0 * e), epsilon = 1e-8);
        approx::assert_abs_diff_eq!(jet.psi_xy, (at(x, y + e).psi_x - at(x, y - e).psi_x) / (2.0 * e), epsilon = 1e-7);
        approx::assert_abs_diff_eq!(jet.psi_yy, (at(x, y + e).psi_y - at(x, y - e).psi_y) / (2.0 * e), epsilon = 1e-7);
    }
}
