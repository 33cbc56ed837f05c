//! How a linear solve ended.

/// Which solver produced an answer.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum SolverKind {
    /// Cosine transform where it applies, else by size.
    #[default]
    Auto,
    /// DCT-I: full rectangle, uniform axes, uniform sigma, no ties.
    Cosine,
    /// Sparse Cholesky factorization.
    Cholesky,
    /// Conjugate gradients preconditioned by geometric multigrid.
    Multigrid,
}

impl SolverKind {
    /// Name as written to summaries.
    pub fn name(self) -> &'static str {
        match self {
            SolverKind::Auto => "auto",
            SolverKind::Cosine => "cosine transform",
            SolverKind::Cholesky => "sparse Cholesky",
            SolverKind::Multigrid => "multigrid conjugate gradients",
        }
    }
}

/// Why a solver stopped.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum StopReason {
    /// A direct method finished.
    Direct,
    /// The relative residual fell below the tolerance.
    Converged,
    /// The iteration limit came first: not converged.
    IterationLimit,
}

/// How a linear solve ended; residual = b - A psi in the Euclidean norm, relative to b.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct SolveReport {
    /// The solver that ran.
    pub solver: SolverKind,
    /// Why it stopped.
    pub reason: StopReason,
    /// Iterations, 0 for a direct method.
    pub iterations: usize,
    /// Relative residual reached, measured after the solve for every solver.
    pub relative_residual: f64,
    /// Tolerance asked for.
    pub tolerance: f64,
    /// Number of unknowns.
    pub unknowns: usize,
}
