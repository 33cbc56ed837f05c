//! Points of a table become nodes of a rectilinear grid.

use std::collections::HashMap;
use std::path::Path;

use ndarray::Array2;

use super::super::error::IoError;
use super::super::raw::{RawAxis, RawFrame};
use super::names::Column;
use super::rows::Table;

/// Coordinates closer than this share of their range are the same line of the grid.
const SAME_LINE: f64 = 1e-7;

/// The same as a share of the largest coordinate, tried when the first does not give a grid: rounding of single precision.
const SAME_LINE_SINGLE: f64 = 4.0 / (1u32 << 24) as f64;

/// At least this share of the nodes of the grid spanned by the coordinates must be listed; fewer rows do not make a grid.
const LEAST_COVERAGE: f64 = 0.2;

/// Points on a row and on a column at least, on average: a single profile whose positions waver is no grid.
const LEAST_ON_LINE: f64 = 1.5;

/// Distinct positions of a column, increasing, and the number of each row's position.
struct Lines {
    at: Vec<f64>,
    of_row: Vec<u32>,
}

impl Lines {
    fn new(values: &[f64], single: bool) -> Self {
        // Tables repeat their positions row by row: the next, the same or the first position is nearly always right.
        let mut found: Vec<f64> = Vec::new();
        let mut known: HashMap<u64, u32> = HashMap::new();
        let mut of_row = Vec::with_capacity(values.len());
        let mut last = 0usize;
        for &value in values {
            let value = value + 0.0; // -0 is 0
            let is = |k: usize| found.get(k) == Some(&value);
            let k = if is(last) {
                last
            } else if is(last + 1) {
                last + 1
            } else if is(0) {
                0
            } else {
                let new = found.len() as u32;
                let k = *known.entry(value.to_bits()).or_insert(new);
                if k == new {
                    found.push(value);
                }
                k as usize
            };
            of_row.push(k as u32);
            last = k;
        }
        let mut order: Vec<u32> = (0..found.len() as u32).collect();
        order.sort_unstable_by(|&a, &b| found[a as usize].total_cmp(&found[b as usize]));
        let (low, high) = match (order.first(), order.last()) {
            (Some(&a), Some(&b)) => (found[a as usize], found[b as usize]),
            _ => (0.0, 0.0),
        };
        let mut same = SAME_LINE * (high - low);
        if single {
            same = same.max(SAME_LINE_SINGLE * low.abs().max(high.abs()));
        }
        let mut at: Vec<f64> = Vec::with_capacity(found.len());
        let mut place = vec![0u32; found.len()];
        let mut previous = f64::NEG_INFINITY;
        for k in order {
            let value = found[k as usize];
            if at.is_empty() || value - previous > same {
                at.push(value);
            }
            previous = value;
            place[k as usize] = at.len() as u32 - 1;
        }
        of_row.iter_mut().for_each(|k| *k = place[*k as usize]);
        Self { at, of_row }
    }

    /// The two neighbors that are closest.
    fn closest(&self) -> (f64, f64) {
        self.at.windows(2).min_by(|a, b| (a[1] - a[0]).total_cmp(&(b[1] - b[0]))).map_or((0.0, 0.0), |w| (w[0], w[1]))
    }
}

fn is_sparse(xs: &Lines, ys: &Lines) -> bool {
    let (nx, ny, count) = (xs.at.len() as f64, ys.at.len() as f64, xs.of_row.len() as f64);
    nx * ny * LEAST_COVERAGE > count || LEAST_ON_LINE * nx.max(ny) > count
}

/// Puts rows on a grid; absent rows are gaps.
///
/// # Errors
/// [`IoError`] for a single row or column, points that are not rectilinear, a point given twice (with both lines).
pub fn to_grid(path: &Path, columns: &[Column], mut table: Table) -> Result<RawFrame, IoError> {
    let slot = |role: &str| columns.iter().position(|c| c.role == role);
    let (Some(x), Some(y)) = (slot("x"), slot("y")) else {
        return Err(IoError::content(path, "header", "no column for x, y"));
    };
    let count = table.lines.len();
    if count == 0 {
        return Err(IoError::content(path, "points", "no rows"));
    }
    let (mut xs, mut ys) = (Lines::new(&table.values[x], false), Lines::new(&table.values[y], false));
    if is_sparse(&xs, &ys) {
        (xs, ys) = (Lines::new(&table.values[x], true), Lines::new(&table.values[y], true));
    }
    let (nx, ny) = (xs.at.len(), ys.at.len());
    for (name, n) in [("x", nx), ("y", ny)] {
        if n < 2 {
            return Err(IoError::content(
                path,
                "points",
                format!(
                    "all {count} points have the same {name}: a single line of points is not a plane field; at least 2 x 2 are needed"
                ),
            ));
        }
    }
    if is_sparse(&xs, &ys) {
        let ((xa, xb), (ya, yb)) = (xs.closest(), ys.closest());
        return Err(IoError::content(
            path,
            "points",
            format!(
                "{count} points have {nx} different x and {ny} different y: they do not lie on a rectilinear grid (nearest x: {xa} and {xb}; nearest y: {ya} and {yb}); resample them on a grid first"
            ),
        ));
    }
    let mut owner = vec![0u32; ny * nx];
    let mut nodes = Vec::with_capacity(count);
    for row in 0..count {
        let node = ys.of_row[row] as usize * nx + xs.of_row[row] as usize;
        if owner[node] != 0 {
            return Err(IoError::content(
                path,
                format!("line {}", table.lines[row]),
                format!(
                    "the point ({}, {}) was already given in line {}; every point may appear once",
                    table.values[x][row], table.values[y][row], owner[node]
                ),
            ));
        }
        owner[node] = table.lines[row];
        nodes.push(node as u32);
    }
    let mut take = |role: &str| -> Option<Array2<f64>> {
        let values = std::mem::take(&mut table.values[slot(role)?]);
        let mut array = vec![f64::NAN; ny * nx];
        for (&node, value) in nodes.iter().zip(values) {
            array[node as usize] = value;
        }
        Array2::from_shape_vec((ny, nx), array).ok()
    };
    Ok(RawFrame {
        u: take("u").unwrap_or_default(),
        v: take("v").unwrap_or_default(),
        sigma_u: take("sigma_u"),
        sigma_v: take("sigma_v"),
        valid: take("valid").map(|a| a.mapv(|v| v.is_finite() && v > 0.0)),
        solid: take("solid").map(|a| a.mapv(|v| if v.is_finite() && v > 0.0 { v as u16 } else { 0 })),
        depth: take("depth"),
        x: Some(RawAxis::Line(xs.at)),
        y: Some(RawAxis::Line(ys.at)),
        x_resolution: table.printed[0].resolution(),
        y_resolution: table.printed[1].resolution(),
        ..RawFrame::default()
    })
}
