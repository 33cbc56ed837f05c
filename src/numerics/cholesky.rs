//! Sparse Cholesky factorization of the fit, one pinned unknown for every connected part.

use faer::Side;
use faer::linalg::solvers::Solve;
use faer::sparse::linalg::solvers::Llt;
use faer::sparse::{SparseColMat, Triplet};

/// A factorization that can be applied to many right-hand sides.
pub struct Factor {
    llt: Llt<usize, f64>,
    /// Position of every unknown in the reduced system, `usize::MAX` for pinned and unused ones.
    reduced: Vec<usize>,
    size: usize,
}

impl Factor {
    /// Factors the weighted graph Laplacian of `edges` (two unknowns, weight) with the unknowns in `pinned` held at 0;
    /// `None` when it is not positive definite.
    pub fn new(unknowns: usize, edges: &[(u32, u32, f64)], pinned: &[bool], used: &[bool]) -> Option<Self> {
        let mut reduced = vec![usize::MAX; unknowns];
        let mut size = 0;
        for k in 0..unknowns {
            if used[k] && !pinned[k] {
                reduced[k] = size;
                size += 1;
            }
        }
        let mut diagonal = vec![0.0; size];
        let mut triplets = Vec::with_capacity(edges.len() + size);
        for &(a, b, w) in edges {
            let (a, b) = (reduced[a as usize], reduced[b as usize]);
            for k in [a, b] {
                if k != usize::MAX {
                    diagonal[k] += w;
                }
            }
            if a != usize::MAX && b != usize::MAX {
                triplets.push(Triplet::new(a.max(b), a.min(b), -w));
            }
        }
        triplets.extend(diagonal.iter().enumerate().map(|(k, &d)| Triplet::new(k, k, d)));
        let matrix = SparseColMat::<usize, f64>::try_new_from_triplets(size, size, &triplets).ok()?;
        let llt = matrix.sp_cholesky(Side::Lower).ok()?;
        Some(Self { llt, reduced, size })
    }

    /// Solves for one right-hand side; pinned and unused unknowns are 0.
    pub fn solve(&self, b: &[f64]) -> Vec<f64> {
        let mut right = faer::Col::<f64>::zeros(self.size);
        for (k, &r) in self.reduced.iter().enumerate() {
            if r != usize::MAX {
                right[r] = b[k];
            }
        }
        let solution = self.llt.solve(&right);
        self.reduced.iter().map(|&r| if r == usize::MAX { 0.0 } else { solution[r] }).collect()
    }
}
