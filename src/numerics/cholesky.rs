//! Sparse Cholesky factorization of the fit, one pinned unknown for every connected part.

use faer::dyn_stack::{MemBuffer, MemStack};
use faer::sparse::linalg::cholesky::{
    CholeskySymbolicParams, LltRef, SymbolicCholesky, SymmetricOrdering, factorize_symbolic_cholesky,
};
use faer::sparse::{SparseColMat, Triplet};
use faer::{Conj, Par, Side};

/// Marks unknowns that are pinned or unused.
const OUT: u32 = u32::MAX;

/// Pieces of a dissected grid with at most this many nodes are eliminated as they come.
const LEAF: usize = 24;

/// A factorization that can be applied to many right-hand sides.
pub struct Factor {
    symbolic: SymbolicCholesky<u32>,
    values: Vec<f64>,
    /// Position of every unknown in the reduced system, [`OUT`] for pinned and unused ones.
    reduced: Vec<u32>,
    size: usize,
}

impl Factor {
    /// Factors the weighted graph Laplacian of `edges` (two unknowns, weight) with the unknowns that are not `kept` held at 0;
    /// `None` when it is not positive definite or does not fit into memory.
    ///
    /// `place` holds row and column of the unknowns on the grid; the unknowns behind them (walls, bodies) have none and are
    /// eliminated last.  Order: nested dissection along grid lines (George 1973, from memory).
    pub fn new(edges: impl Iterator<Item = (u32, u32, f64)>, kept: &[bool], place: &[(u32, u32)]) -> Option<Self> {
        let mut nodes: Vec<u32> = (0..place.len() as u32).filter(|&k| kept[k as usize]).collect();
        let mut order = Vec::with_capacity(kept.len());
        dissect(&mut nodes, place, &mut order);
        drop(nodes);
        order.extend((place.len() as u32..kept.len() as u32).filter(|&k| kept[k as usize]));
        let size = order.len();
        let mut reduced = vec![OUT; kept.len()];
        for (position, &k) in order.iter().enumerate() {
            reduced[k as usize] = position as u32;
        }
        drop(order);
        let mut diagonal = vec![0.0; size];
        let mut triplets = Vec::with_capacity(3 * size);
        for (a, b, w) in edges {
            let (a, b) = (reduced[a as usize], reduced[b as usize]);
            for k in [a, b] {
                if k != OUT {
                    diagonal[k as usize] += w;
                }
            }
            if a != OUT && b != OUT {
                triplets.push(Triplet::new(a.min(b), a.max(b), -w));
            }
        }
        triplets.extend(diagonal.iter().enumerate().map(|(k, &d)| Triplet::new(k as u32, k as u32, d)));
        let matrix = SparseColMat::<u32, f64>::try_new_from_triplets(size, size, &triplets).ok()?;
        drop(triplets);
        let symbolic = factorize_symbolic_cholesky(
            matrix.symbolic(),
            Side::Upper,
            SymmetricOrdering::Identity,
            CholeskySymbolicParams::default(),
        )
        .ok()?;
        let mut values = Vec::new();
        values.try_reserve_exact(symbolic.len_val()).ok()?;
        values.resize(symbolic.len_val(), 0.0);
        let mut buffer =
            MemBuffer::try_new(symbolic.factorize_numeric_llt_scratch::<f64>(Par::Seq, Default::default())).ok()?;
        symbolic
            .factorize_numeric_llt(
                &mut values,
                matrix.as_ref(),
                Side::Upper,
                Default::default(),
                Par::Seq,
                MemStack::new(&mut buffer),
                Default::default(),
            )
            .ok()?;
        Some(Self { symbolic, values, reduced, size })
    }

    /// Solves for one right-hand side; pinned and unused unknowns are 0.
    pub fn solve(&self, b: &[f64]) -> Vec<f64> {
        let mut x = faer::Mat::<f64>::zeros(self.size, 1);
        for (&r, &b) in self.reduced.iter().zip(b) {
            if r != OUT {
                x[(r as usize, 0)] = b;
            }
        }
        let mut buffer = MemBuffer::new(self.symbolic.solve_in_place_scratch::<f64>(1, Par::Seq));
        LltRef::new(&self.symbolic, &self.values).solve_in_place_with_conj(
            Conj::No,
            x.as_mut(),
            Par::Seq,
            MemStack::new(&mut buffer),
        );
        self.reduced.iter().map(|&r| if r == OUT { 0.0 } else { x[(r as usize, 0)] }).collect()
    }
}

/// Appends `nodes` to `order`: both halves beside a grid line first, the line itself last.
fn dissect(nodes: &mut [u32], place: &[(u32, u32)], order: &mut Vec<u32>) {
    let (mut low, mut high) = ((u32::MAX, u32::MAX), (0, 0));
    for &k in nodes.iter() {
        let (j, i) = place[k as usize];
        low = (low.0.min(j), low.1.min(i));
        high = (high.0.max(j), high.1.max(i));
    }
    let tall = high.0.saturating_sub(low.0) >= high.1.saturating_sub(low.1);
    let along = |k: u32| if tall { place[k as usize].0 } else { place[k as usize].1 };
    let extent = if tall { high.0.saturating_sub(low.0) } else { high.1.saturating_sub(low.1) };
    if nodes.len() <= LEAF || extent < 2 {
        order.extend_from_slice(nodes);
        return;
    }
    let middle = nodes.len() / 2;
    let line = along(*nodes.select_nth_unstable_by_key(middle, |&k| (along(k), k)).1);
    // Sorted into three pieces, each in ascending order so that the result does not depend on how the selection works.
    nodes.sort_unstable_by_key(|&k| (along(k).cmp(&line), k));
    let first = nodes.partition_point(|&k| along(k) < line);
    let second = nodes.partition_point(|&k| along(k) <= line);
    if first == 0 && second == nodes.len() {
        order.extend_from_slice(nodes);
        return;
    }
    let (before, rest) = nodes.split_at_mut(first);
    let (on, after) = rest.split_at_mut(second - first);
    dissect(before, place, order);
    dissect(after, place, order);
    order.extend_from_slice(on);
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test] // a chain of unit resistors between two ends: the potential is linear
    fn a_chain_with_a_pinned_end_gives_the_linear_potential() {
        let n = 200;
        let edges = (0..n - 1).map(|k| (k as u32, k as u32 + 1, 1.0));
        let kept: Vec<bool> = (0..n).map(|k| k > 0).collect();
        let place: Vec<(u32, u32)> = (0..n as u32 - 5).map(|k| (0, k)).collect();
        let mut b = vec![0.0; n];
        b[n - 1] = 1.0;
        let x = Factor::new(edges, &kept, &place).unwrap().solve(&b);
        for (k, x) in x.iter().enumerate() {
            approx::assert_abs_diff_eq!(*x, k as f64, epsilon = 1e-10);
        }
    }

    #[test]
    fn dissection_keeps_every_node_once() {
        let place: Vec<(u32, u32)> = (0..37 * 23).map(|k| (k / 23, k % 23)).collect();
        let mut nodes: Vec<u32> = (0..place.len() as u32).filter(|k| k % 7 != 3).collect();
        let expected = nodes.clone();
        let mut order = Vec::new();
        dissect(&mut nodes, &place, &mut order);
        order.sort_unstable();
        assert_eq!(order, expected);
    }
}
