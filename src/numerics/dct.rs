//! Direct solve on a full rectangle by the type-I cosine transform.

use std::f64::consts::PI;

use ndarray::parallel::prelude::*;
use ndarray::{Array2, ArrayViewMut2, Axis as Dim, Zip};
use rustdct::DctPlanner;

/// Solves `D' W D psi = b` on a full rectangle of uniform axes with rim weights 1/2, for `b` of zero sum.
///
/// Eigenvalues `dx/dy (2 - 2 cos(pi k/(ny - 1))) + dy/dx (2 - 2 cos(pi l/(nx - 1)))` of the node-mass-scaled operator (Strang 1999,
/// from memory).  Shape `(ny, nx)`; the result has zero mean in the node-mass sense.  Accuracy: rounding.
pub fn solve_cosine(mut b: Array2<f64>, dx: f64, dy: f64) -> Array2<f64> {
    let (ny, nx) = b.dim();
    scale_by_node_mass(&mut b);
    transform_rows(b.view_mut());
    let mut t = transposed(&b);
    transform_rows(t.view_mut());
    let wave = |k: usize, n: usize| 2.0 - 2.0 * (PI * k as f64 / (n - 1) as f64).cos();
    let along_y: Vec<f64> = (0..ny).map(|k| dx / dy * wave(k, ny)).collect();
    // rustdct's DCT-I is its own inverse up to 2/(n - 1) for each dimension.
    let norm = 4.0 / ((ny - 1) as f64 * (nx - 1) as f64);
    Zip::indexed(t.rows_mut()).par_for_each(|l, mut row| {
        let along_x = dy / dx * wave(l, nx);
        for (k, value) in row.iter_mut().enumerate() {
            *value = if k == 0 && l == 0 { 0.0 } else { *value * norm / (along_y[k] + along_x) };
        }
    });
    transform_rows(t.view_mut());
    let mut psi = transposed(&t);
    transform_rows(psi.view_mut());
    psi
}

/// Divides by the node mass: 1 inside, 1/2 on rims, 1/4 at corners.
fn scale_by_node_mass(b: &mut Array2<f64>) {
    let (ny, nx) = b.dim();
    Zip::indexed(b.rows_mut()).par_for_each(|j, mut row| {
        if j == 0 || j + 1 == ny {
            row *= 2.0;
        }
        row[0] *= 2.0;
        row[nx - 1] *= 2.0;
    });
}

fn transform_rows(mut a: ArrayViewMut2<'_, f64>) {
    let plan = DctPlanner::new().plan_dct1(a.ncols());
    a.axis_chunks_iter_mut(Dim(0), 8).into_par_iter().for_each(|mut rows| {
        let mut scratch = vec![0.0; plan.get_scratch_len()];
        for mut row in rows.rows_mut() {
            if let Some(line) = row.as_slice_mut() {
                plan.process_dct1_with_scratch(line, &mut scratch);
            }
        }
    });
}

/// Transposed copy in blocks that stay in the cache.
fn transposed(a: &Array2<f64>) -> Array2<f64> {
    const BLOCK: usize = 32;
    let (ny, nx) = a.dim();
    let mut out = Array2::zeros((nx, ny));
    out.axis_chunks_iter_mut(Dim(0), BLOCK).into_par_iter().enumerate().for_each(|(block, mut rows)| {
        let i0 = block * BLOCK;
        for j0 in (0..ny).step_by(BLOCK) {
            for i in 0..rows.nrows() {
                for j in j0..(j0 + BLOCK).min(ny) {
                    rows[[i, j]] = a[[j, i0 + i]];
                }
            }
        }
    });
    out
}
