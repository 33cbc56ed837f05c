//! Weighted least-squares stream function from edge fluxes.

use ndarray::Array2;

pub use super::operator::{CHOLESKY_LIMIT, CHOLESKY_LIMIT_HARD, DIRECT_TOLERANCE, StreamFunctionOperator};
use super::solver::{SolveReport, SolverKind};
use crate::field::{Side, VelocityField};

/// Where psi is zero.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub enum PsiZero {
    /// The first wall, else the first tied body, else the axis of an axisymmetric flow, else the mean.
    #[default]
    Auto,
    /// Mean over the nodes of each component.
    Mean,
    /// On a wall.
    Wall(Side),
    /// On the surface of body `k` (counted from 0), which must be tied (not free).
    Body(usize),
    /// On the axis of an axisymmetric flow that the grid reaches.
    Axis,
    /// At a point inside the valid cells.
    Point {
        /// Position.
        x: f64,
        /// Position.
        y: f64,
    },
}

/// Settings of the fit.
#[derive(Debug, Clone, PartialEq)]
pub struct FitOptions {
    /// Where psi is zero.
    pub zero: PsiZero,
    /// Which solver.
    pub solver: SolverKind,
    /// Relative residual at which an iterative solver stops.
    pub tolerance: f64,
    /// Iteration limit of an iterative solver.
    pub max_iterations: usize,
}

impl FitOptions {
    /// Default relative residual of iterative solvers.
    pub const TOLERANCE: f64 = 1e-11;
    /// Default iteration limit.
    pub const MAX_ITERATIONS: usize = 200;
}

impl Default for FitOptions {
    fn default() -> Self {
        Self {
            zero: PsiZero::Auto,
            solver: SolverKind::Auto,
            tolerance: Self::TOLERANCE,
            max_iterations: Self::MAX_ITERATIONS,
        }
    }
}

/// Why no stream function could be fitted.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum FitError {
    /// No two neighboring nodes carry a vector.
    #[error(
        "no two neighboring nodes carry a usable vector ({valid} usable vectors in all): there is nothing to integrate along"
    )]
    NoEdges {
        /// Usable vectors.
        valid: usize,
    },
    /// The asked zero is not on a wall.
    #[error("psi cannot be zero on the {side} side: it is not declared a wall")]
    ZeroNotWall {
        /// The side asked for.
        side: &'static str,
    },
    /// The asked body does not exist or is not tied.
    #[error(
        "psi cannot be zero on body {number}: {bodies} bodies are declared, and it must be slip or no-slip, not free"
    )]
    ZeroNotBody {
        /// Number asked for, counted from 1.
        number: usize,
        /// How many there are.
        bodies: usize,
    },
    /// The asked point carries no psi.
    #[error("psi cannot be zero at ({x}, {y}): no valid cell there")]
    ZeroOutside {
        /// Position.
        x: f64,
        /// Position.
        y: f64,
    },
    /// The asked wall, body or axis has no usable vector beside it.
    #[error("psi cannot be zero on the {place}: no usable vector lies beside it")]
    ZeroUnreached {
        /// Which one.
        place: String,
    },
    /// The asked axis does not exist.
    #[error(
        "psi cannot be zero on the axis: the flow is not axisymmetric (thickness `radius`) or the grid does not reach y = 0"
    )]
    ZeroNotAxis,
    /// The field has other usable vectors than the operator was built for.
    #[error("{count} nodes are usable in one frame and not in the other: the frames cannot share one operator")]
    OtherVectors {
        /// Number of nodes.
        count: usize,
    },
    /// The cosine transform was asked for where it does not apply.
    #[error("the cosine transform needs a full rectangle with uniform axes and sigma and no walls or bodies")]
    CosineNotApplicable,
    /// A wall lies inside the grid or too far outside.
    #[error(
        "the {side} wall at {at} lies {steps:.2} node steps outside the outermost vectors; it must lie on them or up to one step beyond"
    )]
    WallPlace {
        /// Side.
        side: &'static str,
        /// Position asked for.
        at: f64,
        /// Distance outside the grid in steps, negative inside.
        steps: f64,
    },
    /// An axisymmetric flow with nodes below its axis.
    #[error("thickness `radius` needs y >= 0 (y is the radius), the grid begins at y = {y}")]
    NegativeRadius {
        /// Smallest y.
        y: f64,
    },
    /// The factorization failed.
    #[error("the factorization of {unknowns} unknowns failed")]
    Factorization {
        /// Number of unknowns.
        unknowns: usize,
    },
}

/// Residuals `q - D psi` of the edge fluxes with the weights of the fit.
///
/// Shapes: y edges `(ny - 1, nx)` from node `(j, i)` to `(j + 1, i)`; x edges `(ny, nx - 1)` from `(j, i)` to `(j, i + 1)`.
/// NaN where there is no edge; weight 0 there.
#[derive(Debug, Clone, PartialEq)]
pub struct EdgeResidual {
    /// Measured psi increments along y edges.
    pub flux_y: Array2<f64>,
    /// Measured psi increments along x edges.
    pub flux_x: Array2<f64>,
    /// Residual along y edges.
    pub along_y: Array2<f64>,
    /// Residual along x edges.
    pub along_x: Array2<f64>,
    /// Weight of y edges.
    pub weight_y: Array2<f64>,
    /// Weight of x edges.
    pub weight_x: Array2<f64>,
}

/// A fitted stream function.
///
/// Sign: u = d psi/dy, v = -d psi/dx (times the thickness).  Units: velocity times length (times thickness).
#[derive(Debug, Clone, PartialEq)]
pub struct StreamFit {
    /// psi at the nodes, NaN where no edge reaches; shape `(ny, nx)`.
    pub psi: Array2<f64>,
    /// Connected part of the fluid, counted from 1, 0 where psi is NaN; every part has its own zero.
    pub component: Array2<u16>,
    /// Number of connected parts.
    pub components: usize,
    /// psi on every body, NaN where it is free or has no tie.
    pub body_psi: Vec<f64>,
    /// psi on the sides (order of [`Side::ALL`]), NaN where there is no wall.
    pub wall_psi: [f64; 4],
    /// The zero in force ([`PsiZero::Auto`] resolved) in the part that holds it; the mean is zero in the others.
    pub zero: PsiZero,
    /// Edge fluxes, residuals and weights.
    pub residual: EdgeResidual,
    /// How the solve ended.
    pub solve: SolveReport,
}

/// Fits psi to one frame.
///
/// Minimizes `sum w (psi(b) - psi(a) - q)^2` over all edges and ties, q the edge flux.  Velocity and psi are fourth order in the
/// spacing for smooth flows; a real divergent part leaks into psi at second order only.
///
/// # Errors
/// [`FitError`] when there is nothing to fit or the asked zero of psi does not exist.
pub fn solve_stream_function(field: &VelocityField, options: &FitOptions) -> Result<StreamFit, FitError> {
    StreamFunctionOperator::new(field, options)?.fit(field)
}
