//! Fills narrow gaps of psi smoothly from the fit around them.

use std::collections::VecDeque;

use faer::Side;
use faer::linalg::solvers::Solve;
use faer::sparse::{SparseColMat, Triplet};
use ndarray::Array2;

use crate::field::{Axis, Domain, Flags};

/// Largest distance of a filled node from the nearest node with psi, in nodes along the grid (diagonals count as one): a gap that
/// reaches deeper stays open as a whole, since nothing measured says what happens inside it.
pub const FILL_REACH: usize = 3;

/// psi with narrow gaps filled, and what became of every node.
#[derive(Debug, Clone, PartialEq)]
pub struct FilledPsi {
    /// psi, NaN in solids and in gaps that stay open; shape `(ny, nx)`.
    pub psi: Array2<f64>,
    /// [`Flags::FILLED`] where a value was filled in, with [`Flags::EXTRAPOLATED`] where no fitted node lies on both sides along
    /// either grid line; else empty.
    pub flags: Array2<Flags>,
}

/// Fills gaps no deeper than [`FILL_REACH`] with the values that minimize the third derivatives of psi,
/// `sum psi_xxx^2 + 3 psi_xxy^2 + 3 psi_xyy^2 + psi_yyy^2`, given the fitted nodes around.
///
/// * Shape: `psi`, `component` and the result are `(ny, nx)`.
/// * Gaps: nodes inside bodies stay NaN; a gap between two components of the fit stays open (their difference is unknown).
/// * Accuracy: third order in the width of the gap; exact for uniform shear and strain.  Derivatives by divided differences on the
///   actual positions, a row that would touch an open node is dropped.  Where that leaves the system singular, second and then
///   first derivatives are used instead.
pub fn fill_gaps(domain: &Domain, psi: &Array2<f64>, component: &Array2<u16>) -> FilledPsi {
    let (ny, nx) = psi.dim();
    let mut flags = Array2::from_elem((ny, nx), Flags::default());
    let unknown = fillable(domain, psi, component);
    let count = unknown.iter().filter(|&&k| k != OPEN).count();
    let mut filled = psi.clone();
    if count == 0 {
        return FilledPsi { psi: filled, flags };
    }
    if let Some(values) = (1..=3).rev().find_map(|order| solve(domain, psi, &unknown, count, order)) {
        for ((j, i), &k) in unknown.indexed_iter() {
            if k != OPEN {
                filled[[j, i]] = values[k];
                flags[[j, i]] =
                    if between(psi, j, i) { Flags::FILLED } else { Flags::FILLED.with(Flags::EXTRAPOLATED) };
            }
        }
    }
    FilledPsi { psi: filled, flags }
}

const OPEN: usize = usize::MAX;

/// Numbers of the nodes to fill, [`OPEN`] elsewhere.
fn fillable(domain: &Domain, psi: &Array2<f64>, component: &Array2<u16>) -> Array2<usize> {
    let (ny, nx) = psi.dim();
    let gap = |j: usize, i: usize| !psi[[j, i]].is_finite() && !domain.is_solid(j, i);
    let depth = depth_of(psi, domain);
    let mut number = Array2::from_elem((ny, nx), OPEN);
    let mut seen = Array2::from_elem((ny, nx), false);
    let mut next = 0;
    for j0 in 0..ny {
        for i0 in 0..nx {
            if !gap(j0, i0) || seen[[j0, i0]] {
                continue;
            }
            let (mut members, mut queue) = (Vec::new(), VecDeque::from([(j0, i0)]));
            seen[[j0, i0]] = true;
            let (mut deepest, mut parts) = (0, [0u16; 2]);
            while let Some((j, i)) = queue.pop_front() {
                members.push((j, i));
                deepest = deepest.max(depth[[j, i]]);
                for (jj, ii) in around(j, i, ny, nx) {
                    if gap(jj, ii) {
                        if !seen[[jj, ii]] {
                            seen[[jj, ii]] = true;
                            queue.push_back((jj, ii));
                        }
                    } else if component[[jj, ii]] != 0 {
                        let part = component[[jj, ii]];
                        parts = if parts[0] == 0 { [part, part] } else { [parts[0].min(part), parts[1].max(part)] };
                    }
                }
            }
            if deepest <= FILL_REACH && parts[0] != 0 && parts[0] == parts[1] {
                members.sort_unstable();
                for (j, i) in members {
                    number[[j, i]] = next;
                    next += 1;
                }
            }
        }
    }
    number
}

/// Distance of every gap node from the nearest node with psi, walking through the gap; large where none is reached.
fn depth_of(psi: &Array2<f64>, domain: &Domain) -> Array2<usize> {
    let (ny, nx) = psi.dim();
    let mut depth = Array2::from_elem((ny, nx), OPEN);
    let mut queue = VecDeque::new();
    for ((j, i), value) in psi.indexed_iter() {
        if value.is_finite() {
            depth[[j, i]] = 0;
            queue.push_back((j, i));
        }
    }
    while let Some((j, i)) = queue.pop_front() {
        for (jj, ii) in around(j, i, ny, nx) {
            if depth[[jj, ii]] == OPEN && !domain.is_solid(jj, ii) {
                depth[[jj, ii]] = depth[[j, i]] + 1;
                queue.push_back((jj, ii));
            }
        }
    }
    depth
}

/// The up to 8 neighbors of a node.
fn around(j: usize, i: usize, ny: usize, nx: usize) -> impl Iterator<Item = (usize, usize)> {
    (j.saturating_sub(1)..(j + 2).min(ny))
        .flat_map(move |jj| (i.saturating_sub(1)..(i + 2).min(nx)).map(move |ii| (jj, ii)))
        .filter(move |&node| node != (j, i))
}

/// Whether fitted nodes lie on both sides along x or along y.
fn between(psi: &Array2<f64>, j: usize, i: usize) -> bool {
    let (row, column) = (psi.row(j), psi.column(i));
    let both = |line: ndarray::ArrayView1<'_, f64>, k: usize| {
        line.iter().take(k).any(|p| p.is_finite()) && line.iter().skip(k + 1).any(|p| p.is_finite())
    };
    both(row, i) || both(column, j)
}

/// Weights of the divided difference that gives the `order`-th derivative from nodes `start ..= start + order`, times the mean step
/// to that power (so that it is a plain difference on a uniform axis).
fn difference(axis: &Axis, start: usize, order: usize) -> Vec<f64> {
    let scale = axis.mean_step().powi(order as i32) * (1..=order).product::<usize>() as f64;
    (0..=order)
        .map(|k| {
            let product: f64 =
                (0..=order).filter(|&m| m != k).map(|m| axis.at(start + k) - axis.at(start + m)).product();
            scale / product
        })
        .collect()
}

const REACH: usize = 3;
const WINDOW: usize = 2 * REACH + 1;

/// Minimizer over the unknown nodes, `None` when the system is singular.
fn solve(domain: &Domain, psi: &Array2<f64>, unknown: &Array2<usize>, count: usize, order: usize) -> Option<Vec<f64>> {
    let (ny, nx) = psi.dim();
    let grid = &domain.grid;
    let h = grid.spacing();
    let (ratio_x, ratio_y) = (h / grid.x.mean_step(), h / grid.y.mean_step());
    // Rows of the normal matrix as windows of (2 * REACH + 1)^2 neighbors.
    let mut window = vec![[0.0f64; WINDOW * WINDOW]; count];
    let mut right = vec![0.0f64; count];
    let members: Vec<(usize, usize)> = unknown.indexed_iter().filter(|(_, k)| **k != OPEN).map(|(at, _)| at).collect();
    for along_y in 0..=order {
        let along_x = order - along_y;
        let binomial = (0..along_y).fold(1.0, |b, k| b * (order - k) as f64 / (k + 1) as f64);
        let scale = binomial.sqrt() * ratio_y.powi(along_y as i32) * ratio_x.powi(along_x as i32);
        // Only stencils that reach an unknown node matter.
        let mut starts: Vec<(usize, usize)> = members
            .iter()
            .flat_map(|&(j, i)| {
                (j.saturating_sub(along_y)..=j).flat_map(move |a| (i.saturating_sub(along_x)..=i).map(move |b| (a, b)))
            })
            .filter(|&(j, i)| j + along_y < ny && i + along_x < nx)
            .collect();
        starts.sort_unstable();
        starts.dedup();
        for (j, i) in starts {
            let nodes = |a: usize, b: usize| [j + a, i + b];
            let mut touches = false;
            let usable = (0..=along_y).all(|a| {
                (0..=along_x).all(|b| {
                    let filled = unknown[nodes(a, b)] != OPEN;
                    touches |= filled;
                    filled || psi[nodes(a, b)].is_finite()
                })
            });
            if !usable || !touches {
                continue;
            }
            let (wy, wx) = (difference(&grid.y, j, along_y), difference(&grid.x, i, along_x));
            let weight = |a: usize, b: usize| scale * wy[a] * wx[b];
            for a in 0..=along_y {
                for b in 0..=along_x {
                    let k = unknown[nodes(a, b)];
                    if k == OPEN {
                        continue;
                    }
                    for c in 0..=along_y {
                        for d in 0..=along_x {
                            let product = weight(a, b) * weight(c, d);
                            let other = nodes(c, d);
                            if unknown[other] == OPEN {
                                right[k] -= product * psi[other];
                            } else {
                                window[k][(REACH + c - a) * WINDOW + REACH + d - b] += product;
                            }
                        }
                    }
                }
            }
        }
    }
    let mut triplets = Vec::new();
    for ((j, i), &k) in unknown.indexed_iter() {
        if k == OPEN {
            continue;
        }
        for (slot, &value) in window[k].iter().enumerate() {
            if value != 0.0 {
                let (jj, ii) = (j + slot / WINDOW - REACH, i + slot % WINDOW - REACH);
                triplets.push(Triplet::new(k, unknown[[jj, ii]], value));
            }
        }
    }
    let matrix = SparseColMat::<usize, f64>::try_new_from_triplets(count, count, &triplets).ok()?;
    let factor = matrix.sp_cholesky(Side::Lower).ok()?;
    let solution = factor.solve(&faer::Col::from_fn(count, |k| right[k]));
    let values: Vec<f64> = (0..count).map(|k| solution[k]).collect();
    values.iter().all(|v| v.is_finite()).then_some(values)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::field::{Body, Grid, Shape, Surface};

    fn planted(n: usize, hidden: impl Fn(usize, usize) -> bool) -> (Domain, Array2<f64>, Array2<f64>, Array2<u16>) {
        let nodes: Vec<f64> = (0..n).map(|i| (i as f64 / n as f64).powf(1.2)).collect();
        let grid = Grid::new(Axis::from_nodes(nodes).unwrap(), Axis::uniform(0.0, 0.04, n).unwrap());
        let truth = Array2::from_shape_fn((n, n), |(j, i)| {
            let (x, y) = (grid.x.at(i), grid.y.at(j));
            0.3 + x - 2.0 * y + 1.5 * x * y - x * x + 0.5 * y * y
        });
        let psi = Array2::from_shape_fn((n, n), |(j, i)| if hidden(j, i) { f64::NAN } else { truth[[j, i]] });
        let component = psi.mapv(|p| u16::from(p.is_finite()));
        (Domain::open(grid), truth, psi, component)
    }

    #[test] // a quadratic psi (uniform shear and strain) has no third derivative: it must come back to rounding
    fn a_quadratic_psi_is_filled_exactly_on_stretched_axes() {
        let hidden =
            |j: usize, i: usize| (8..12).contains(&j) && (5..11).contains(&i) || (j, i) == (15, 15) || (j, i) == (0, 9);
        let (domain, truth, psi, component) = planted(20, hidden);
        let filled = fill_gaps(&domain, &psi, &component);
        for ((j, i), t) in truth.indexed_iter() {
            approx::assert_abs_diff_eq!(filled.psi[[j, i]], *t, epsilon = 1e-9);
            assert_eq!(filled.flags[[j, i]].has(Flags::FILLED), hidden(j, i));
        }
    }

    #[test]
    fn deep_gaps_bodies_and_gaps_between_components_stay_open() {
        let (domain, _, psi, component) = planted(24, |j, i| (8..16).contains(&j) && (8..16).contains(&i));
        let filled = fill_gaps(&domain, &psi, &component);
        assert!(filled.psi[[9, 9]].is_nan() && filled.psi[[12, 12]].is_nan());

        let (domain, _, psi, mut component) = planted(24, |j, _| j == 10);
        component.slice_mut(ndarray::s![11.., ..]).fill(2);
        assert!(fill_gaps(&domain, &psi, &component).psi[[10, 5]].is_nan());

        let (domain, _, mut psi, component) = planted(24, |_, _| false);
        let body = Body { shape: Shape::Circle { x: 0.5, y: 0.5, radius: 0.05 }, surface: Surface::Free };
        let domain = domain.with_body(body);
        for (node, covered) in domain.covered.indexed_iter() {
            if *covered != 0 {
                psi[node] = f64::NAN;
            }
        }
        let filled = fill_gaps(&domain, &psi, &component);
        assert!(domain.covered.indexed_iter().all(|(node, c)| (*c == 0) == filled.psi[node].is_finite()));
    }

    #[test]
    fn a_corner_outside_the_hull_is_called_extrapolated() {
        let (domain, _, psi, component) = planted(12, |j, i| j == 0 && i < 2 || (j, i) == (5, 5));
        let filled = fill_gaps(&domain, &psi, &component);
        assert!(filled.flags[[0, 0]].has(Flags::EXTRAPOLATED));
        assert!(!filled.flags[[5, 5]].has(Flags::EXTRAPOLATED));
    }
}
