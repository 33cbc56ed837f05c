//! Weighted least-squares stream function from edge fluxes.

use ndarray::{Array2, Zip};

use super::cholesky::Factor;
use super::dct::solve_cosine;
use super::flux::{EdgeFluxes, EdgeRules, edge_fluxes_of};
use super::graph::{Graph, NONE, ON_NODES, WALL_REACH, wall_distance};
use super::multigrid::{Multigrid, node_part};
use super::solver::{SolveReport, SolverKind, StopReason};
use super::surface::PsiSurface;
use crate::field::{Domain, Side, Sigma, Thickness, VelocityField};

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
    /// No two neighbouring nodes carry a vector.
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
    /// The zero in force for the largest part ([`PsiZero::Auto`] resolved).
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

/// Largest number of unknowns for which the factorization is chosen automatically; above it multigrid is faster even for one
/// right-hand side (measured on 2 cores).
pub const CHOLESKY_LIMIT: usize = 12_000;

/// Residual that a direct solve must reach; above it the answer is not called converged.
pub const DIRECT_TOLERANCE: f64 = 1e-9;

/// Everything about a fit that does not depend on the velocities: it can be shared by all frames and ensemble members with the same
/// usable vectors and sigma.
pub struct StreamFunctionOperator {
    graph: Graph,
    parts: Parts,
    zero: PsiZero,
    options: FitOptions,
    method: Method,
    rules: (EdgeRules, EdgeRules),
    steps: (f64, f64),
}

enum Method {
    Cosine,
    Cholesky(Box<Factor>),
    Multigrid(Box<Multigrid>),
}

/// Connected parts of the unknowns.
struct Parts {
    /// Part of every unknown, counted from 1 (largest first), 0 without edges.
    of: Vec<u16>,
    /// Number of parts.
    count: usize,
    /// Number of unknowns in every part.
    size: Vec<usize>,
}

impl StreamFunctionOperator {
    /// Builds the operator for the usable vectors and sigma of a field.
    ///
    /// # Errors
    /// [`FitError`] as [`solve_stream_function`].
    pub fn new(field: &VelocityField, options: &FitOptions) -> Result<Self, FitError> {
        let domain = &field.domain;
        check_walls(domain)?;
        let graph = Graph::new(domain, &field.valid, &field.sigma);
        let unknowns = graph.nodes + graph.extras;
        let full = graph.extras == 0 && graph.nodes == domain.grid.node_count() && domain.grid.is_uniform();
        let uniform = match &field.sigma {
            Sigma::Unknown => true,
            Sigma::Uniform { u, v } => u == v,
            Sigma::PerNode { .. } => false,
        };
        let cosine = full && uniform && domain.thickness == Thickness::Uniform;
        let parts = if cosine { Parts::single(unknowns) } else { Parts::new(&graph) };
        if parts.count == 0 {
            return Err(FitError::NoEdges { valid: field.valid_count() });
        }
        let zero = resolve_zero(options.zero, field, &graph)?;
        let kind = match options.solver {
            SolverKind::Auto if cosine => SolverKind::Cosine,
            SolverKind::Auto if unknowns <= CHOLESKY_LIMIT => SolverKind::Cholesky,
            SolverKind::Auto => SolverKind::Multigrid,
            SolverKind::Cosine if !cosine => return Err(FitError::CosineNotApplicable),
            kind => kind,
        };
        let method = match kind {
            SolverKind::Cosine => Method::Cosine,
            SolverKind::Cholesky => {
                Method::Cholesky(Box::new(factor(&graph, &parts).ok_or(FitError::Factorization { unknowns })?))
            }
            _ => Method::Multigrid(Box::new(Multigrid::new(&graph))),
        };
        let rules = (EdgeRules::new(&domain.grid.x), EdgeRules::new(&domain.grid.y));
        let steps = (domain.grid.x.mean_step(), domain.grid.y.mean_step());
        Ok(Self { graph, parts, zero, options: options.clone(), method, rules, steps })
    }

    /// Fits the velocities of a field with the usable vectors the operator was built for.
    ///
    /// # Errors
    /// [`FitError::Factorization`] when neither multigrid nor the factorization succeeds, [`FitError::ZeroOutside`] when the asked
    /// zero carries no psi.
    pub fn fit(&self, field: &VelocityField) -> Result<StreamFit, FitError> {
        let (u, v) = self.weighted_velocity(field);
        let EdgeFluxes { along_y, along_x } = edge_fluxes_of(&u, &v, &self.rules.0, &self.rules.1);
        let tie_flux: Vec<f64> = self
            .graph
            .ties
            .iter()
            .map(|tie| {
                let component = if tie.uses_u { &u } else { &v };
                tie.terms.iter().map(|&(node, c)| c * component[node]).sum()
            })
            .collect();
        drop((u, v));
        let (mut psi, mut extra, solve) = self.solve(&along_y, &along_x, &tie_flux)?;
        let component = self.component_of_nodes(psi.dim());
        self.shift_to_zero(field, &mut psi, &mut extra, &component)?;
        let residual = self.residual(&psi, along_y, along_x);
        let value = |k: Option<u32>| k.map_or(f64::NAN, |k| extra[k as usize]);
        Ok(StreamFit {
            component,
            components: self.parts.count,
            body_psi: self.graph.body_extra.iter().map(|&k| value(k)).collect(),
            wall_psi: self.graph.wall_extra.map(value),
            zero: self.zero,
            residual,
            solve,
            psi,
        })
    }

    /// u and v times the thickness, NaN in gaps.
    fn weighted_velocity(&self, field: &VelocityField) -> (Array2<f64>, Array2<f64>) {
        let weighted = |component: &Array2<f64>| -> Array2<f64> {
            let mut out = component.clone();
            Zip::indexed(&mut out).and(&field.valid).par_for_each(|(j, i), value, &ok| {
                if !ok {
                    *value = f64::NAN;
                } else if field.domain.thickness != Thickness::Uniform {
                    *value *= field.domain.thickness.at_node(field.grid(), j, i);
                }
            });
            out
        };
        (weighted(&field.u), weighted(&field.v))
    }

    /// psi at nodes and at extra unknowns for given edge fluxes (NaN where there is no edge) and tie fluxes.
    ///
    /// # Errors
    /// [`FitError::Factorization`].
    pub fn solve(
        &self,
        along_y: &Array2<f64>,
        along_x: &Array2<f64>,
        tie_flux: &[f64],
    ) -> Result<(Array2<f64>, Vec<f64>, SolveReport), FitError> {
        let graph = &self.graph;
        let shape = graph.unknown.dim();
        let (grid_b, extra_b) = self.right_hand_side(along_y, along_x, tie_flux);
        let unknowns = graph.nodes + graph.extras;
        let report = |solver, reason, iterations, relative_residual| SolveReport {
            solver,
            reason,
            iterations,
            relative_residual,
            tolerance: self.options.tolerance,
            unknowns,
        };
        match &self.method {
            Method::Cosine => {
                let (dx, dy) = self.steps;
                let psi = solve_cosine(grid_b.clone(), dx, dy);
                let relative = self.cosine_residual(&psi, &grid_b);
                Ok((psi, Vec::new(), report(SolverKind::Cosine, StopReason::Direct, 0, relative)))
            }
            Method::Cholesky(factor) => {
                let b = self.compact(&grid_b, &extra_b);
                let x = factor.solve(&b);
                let relative = self.graph_residual(&x, &b);
                let (psi, extra) = self.spread(&x, shape);
                Ok((psi, extra, report(SolverKind::Cholesky, StopReason::Direct, 0, relative)))
            }
            Method::Multigrid(grid) => {
                let mut b: Vec<f64> = grid_b.iter().copied().collect();
                b.extend_from_slice(&extra_b);
                let outcome = grid.solve(&b, self.options.tolerance, self.options.max_iterations);
                if !outcome.converged
                    && let Some(factor) = factor(graph, &self.parts)
                {
                    let b = self.compact(&grid_b, &extra_b);
                    let x = factor.solve(&b);
                    let relative = self.graph_residual(&x, &b);
                    let (psi, extra) = self.spread(&x, shape);
                    return Ok((psi, extra, report(SolverKind::Cholesky, StopReason::Direct, 0, relative)));
                }
                let mut product = vec![0.0; grid.len()];
                grid.multiply(&outcome.x, &mut product);
                let square = |v: &mut dyn Iterator<Item = f64>| v.map(|x| x * x).sum::<f64>().sqrt();
                let relative = square(&mut product.iter().zip(&b).map(|(a, b)| b - a)) / square(&mut b.iter().copied());
                let mut psi = node_part(&outcome.x, shape);
                let extra = outcome.x[shape.0 * shape.1..].to_vec();
                Zip::from(&mut psi).and(&graph.unknown).for_each(|psi, &k| {
                    if k == NONE || self.parts.of[k as usize] == 0 {
                        *psi = f64::NAN;
                    } else if k as usize >= graph.nodes {
                        *psi = extra[k as usize - graph.nodes];
                    }
                });
                let reason = if outcome.converged { StopReason::Converged } else { StopReason::IterationLimit };
                let relative = if relative.is_finite() { relative } else { 0.0 };
                Ok((psi, extra, report(SolverKind::Multigrid, reason, outcome.iterations, relative)))
            }
        }
    }

    /// `D' W q` on the grid and on the extra unknowns.
    fn right_hand_side(
        &self,
        along_y: &Array2<f64>,
        along_x: &Array2<f64>,
        tie_flux: &[f64],
    ) -> (Array2<f64>, Vec<f64>) {
        let graph = &self.graph;
        let (ny, nx) = graph.unknown.dim();
        let mut b = Array2::<f64>::zeros((ny, nx));
        let flow = |w: f64, q: f64| if w != 0.0 { w * q } else { 0.0 };
        Zip::indexed(b.rows_mut()).par_for_each(|j, mut row| {
            for i in 0..nx {
                let mut sum = 0.0;
                if j > 0 {
                    sum += flow(graph.weight_y[[j - 1, i]], along_y[[j - 1, i]]);
                }
                if j + 1 < ny {
                    sum -= flow(graph.weight_y[[j, i]], along_y[[j, i]]);
                }
                if i > 0 {
                    sum += flow(graph.weight_x[[j, i - 1]], along_x[[j, i - 1]]);
                }
                if i + 1 < nx {
                    sum -= flow(graph.weight_x[[j, i]], along_x[[j, i]]);
                }
                row[i] = sum;
            }
        });
        let mut extra = vec![0.0; graph.extras];
        for (tie, &q) in graph.ties.iter().zip(tie_flux) {
            b[tie.node] += tie.weight * q;
            extra[tie.extra as usize] -= tie.weight * q;
        }
        if graph.extras > 0 {
            // Nodes on a wall hand their balance to the unknown of the wall.
            Zip::from(&mut b).and(&graph.unknown).for_each(|b, &k| {
                if k != NONE && k as usize >= graph.nodes {
                    extra[k as usize - graph.nodes] += *b;
                    *b = 0.0;
                }
            });
        }
        (b, extra)
    }

    fn compact(&self, grid: &Array2<f64>, extra: &[f64]) -> Vec<f64> {
        let mut b = vec![0.0; self.graph.nodes + self.graph.extras];
        for (&k, &value) in self.graph.unknown.iter().zip(grid) {
            if k != NONE && (k as usize) < self.graph.nodes {
                b[k as usize] = value;
            }
        }
        b[self.graph.nodes..].copy_from_slice(extra);
        b
    }

    fn spread(&self, x: &[f64], shape: (usize, usize)) -> (Array2<f64>, Vec<f64>) {
        let graph = &self.graph;
        let psi = Array2::from_shape_fn(shape, |node| match graph.unknown[node] {
            NONE => f64::NAN,
            k if self.parts.of[k as usize] == 0 => f64::NAN,
            k => x[k as usize],
        });
        (psi, x[graph.nodes..].to_vec())
    }

    /// Relative residual of the normal equations for compact vectors.
    fn graph_residual(&self, x: &[f64], b: &[f64]) -> f64 {
        let mut r = b.to_vec();
        for (p, q, w) in edges_of(&self.graph) {
            let flow = w * (x[q as usize] - x[p as usize]);
            r[q as usize] -= flow;
            r[p as usize] += flow;
        }
        relative_norm(&r, b)
    }

    fn cosine_residual(&self, psi: &Array2<f64>, b: &Array2<f64>) -> f64 {
        let (mut r, graph) = (b.clone(), &self.graph);
        let (ny, nx) = psi.dim();
        Zip::indexed(r.rows_mut()).par_for_each(|j, mut row| {
            for i in 0..nx {
                let here = psi[[j, i]];
                let mut sum = 0.0;
                if j > 0 {
                    sum += graph.weight_y[[j - 1, i]] * (here - psi[[j - 1, i]]);
                }
                if j + 1 < ny {
                    sum += graph.weight_y[[j, i]] * (here - psi[[j + 1, i]]);
                }
                if i > 0 {
                    sum += graph.weight_x[[j, i - 1]] * (here - psi[[j, i - 1]]);
                }
                if i + 1 < nx {
                    sum += graph.weight_x[[j, i]] * (here - psi[[j, i + 1]]);
                }
                row[i] -= sum;
            }
        });
        let norm = |a: &Array2<f64>| a.iter().map(|x| x * x).sum::<f64>().sqrt();
        let scale = norm(b);
        if scale > 0.0 { norm(&r) / scale } else { 0.0 }
    }

    fn component_of_nodes(&self, shape: (usize, usize)) -> Array2<u16> {
        Array2::from_shape_fn(shape, |node| match self.graph.unknown[node] {
            NONE => 0,
            k => self.parts.of[k as usize],
        })
    }

    /// Shifts every part to its zero: the part that holds the asked zero to it, the others to mean zero.
    fn shift_to_zero(
        &self,
        field: &VelocityField,
        psi: &mut Array2<f64>,
        extra: &mut [f64],
        component: &Array2<u16>,
    ) -> Result<(), FitError> {
        let graph = &self.graph;
        let mut shift = vec![0.0; self.parts.count + 1];
        let mut count = vec![0usize; self.parts.count + 1];
        for (&p, &c) in psi.iter().zip(component) {
            if c != 0 {
                shift[c as usize] += p;
                count[c as usize] += 1;
            }
        }
        for (s, &n) in shift.iter_mut().zip(&count) {
            *s = if n > 0 { *s / n as f64 } else { 0.0 };
        }
        let on_extra = |k: Option<u32>| {
            k.map(|k| (self.parts.of[graph.nodes + k as usize] as usize, extra[k as usize]))
                .filter(|(part, _)| *part > 0)
        };
        let reference = match self.zero {
            PsiZero::Mean => None,
            PsiZero::Auto => on_extra(graph.axis_extra),
            PsiZero::Wall(side) => {
                on_extra(Side::ALL.iter().position(|&s| s == side).and_then(|s| graph.wall_extra[s]))
            }
            PsiZero::Body(body) => on_extra(graph.body_extra.get(body).copied().flatten()),
            PsiZero::Point { x, y } => {
                let surface = PsiSurface::new(field.grid(), psi);
                let (j, i, s, t) = surface.locate(x, y).ok_or(FitError::ZeroOutside { x, y })?;
                Some((component[[j, i]] as usize, surface.eval_in_cell(j, i, s, t).psi))
            }
        };
        if let Some((part, value)) = reference {
            shift[part] = value;
        }
        Zip::from(&mut *psi).and(component).par_for_each(|p, &c| *p -= shift[c as usize]);
        for (k, value) in extra.iter_mut().enumerate() {
            match self.parts.of[graph.nodes + k] {
                0 => *value = f64::NAN,
                part => *value -= shift[part as usize],
            }
        }
        Ok(())
    }

    fn residual(&self, psi: &Array2<f64>, along_y: Array2<f64>, along_x: Array2<f64>) -> EdgeResidual {
        let mut r_y = along_y.clone();
        Zip::indexed(&mut r_y).par_for_each(|(j, i), r| *r -= psi[[j + 1, i]] - psi[[j, i]]);
        let mut r_x = along_x.clone();
        Zip::indexed(&mut r_x).par_for_each(|(j, i), r| *r -= psi[[j, i + 1]] - psi[[j, i]]);
        EdgeResidual {
            flux_y: along_y,
            flux_x: along_x,
            along_y: r_y,
            along_x: r_x,
            weight_y: self.graph.weight_y.clone(),
            weight_x: self.graph.weight_x.clone(),
        }
    }
}

/// Relative Euclidean norm of `r` to `b`; 0 when `b` vanishes.
fn relative_norm(r: &[f64], b: &[f64]) -> f64 {
    let norm = |a: &[f64]| a.iter().map(|x| x * x).sum::<f64>().sqrt();
    let scale = norm(b);
    if scale > 0.0 { norm(r) / scale } else { 0.0 }
}

/// All edges and ties as pairs of unknowns with weight; edges within one unknown are left out.
fn edges_of(graph: &Graph) -> impl Iterator<Item = (u32, u32, f64)> + '_ {
    let pair = |a: u32, b: u32, w: f64| (w != 0.0 && a != b && a != NONE && b != NONE).then_some((a, b, w));
    let along_y = graph
        .weight_y
        .indexed_iter()
        .filter_map(move |((j, i), &w)| pair(graph.unknown[[j, i]], graph.unknown[[j + 1, i]], w));
    let along_x = graph
        .weight_x
        .indexed_iter()
        .filter_map(move |((j, i), &w)| pair(graph.unknown[[j, i]], graph.unknown[[j, i + 1]], w));
    let ties =
        graph.ties.iter().filter_map(move |t| pair(graph.nodes as u32 + t.extra, graph.unknown[t.node], t.weight));
    along_y.chain(along_x).chain(ties)
}

impl Parts {
    fn single(unknowns: usize) -> Self {
        Self { of: vec![1; unknowns], count: 1, size: vec![unknowns] }
    }

    fn new(graph: &Graph) -> Self {
        let n = graph.nodes + graph.extras;
        let mut parent: Vec<u32> = (0..n as u32).collect();
        fn root(parent: &mut [u32], mut k: u32) -> u32 {
            while parent[k as usize] != k {
                parent[k as usize] = parent[parent[k as usize] as usize];
                k = parent[k as usize];
            }
            k
        }
        let mut used = vec![false; n];
        for (a, b, _) in edges_of(graph) {
            (used[a as usize], used[b as usize]) = (true, true);
            let (a, b) = (root(&mut parent, a), root(&mut parent, b));
            parent[a.max(b) as usize] = a.min(b);
        }
        let mut size_of_root = std::collections::BTreeMap::new();
        for k in 0..n as u32 {
            if used[k as usize] {
                *size_of_root.entry(root(&mut parent, k)).or_insert(0usize) += 1;
            }
        }
        let mut order: Vec<(u32, usize)> = size_of_root.into_iter().collect();
        order.sort_by_key(|&(root, size)| (std::cmp::Reverse(size), root));
        // More parts than fit a label: the smallest ones carry no psi.
        order.truncate(usize::from(u16::MAX));
        let label: std::collections::BTreeMap<u32, u16> =
            order.iter().enumerate().map(|(k, &(root, _))| (root, k as u16 + 1)).collect();
        let of = (0..n as u32)
            .map(|k| if used[k as usize] { label.get(&root(&mut parent, k)).copied().unwrap_or(0) } else { 0 })
            .collect();
        Self { of, count: order.len(), size: order.into_iter().map(|(_, size)| size).collect() }
    }
}

fn factor(graph: &Graph, parts: &Parts) -> Option<Factor> {
    let n = graph.nodes + graph.extras;
    let mut pinned = vec![false; n];
    let mut seen = vec![false; parts.size.len() + 1];
    for k in 0..n {
        let part = parts.of[k] as usize;
        if part > 0 && !seen[part] {
            seen[part] = true;
            pinned[k] = true;
        }
    }
    let used: Vec<bool> = parts.of.iter().map(|&part| part > 0).collect();
    let edges: Vec<(u32, u32, f64)> = edges_of(graph).filter(|&(a, _, _)| used[a as usize]).collect();
    Factor::new(n, &edges, &pinned, &used)
}

fn resolve_zero(zero: PsiZero, field: &VelocityField, graph: &Graph) -> Result<PsiZero, FitError> {
    let domain = &field.domain;
    match zero {
        PsiZero::Auto => {
            if let Some(s) = graph.wall_extra.iter().position(Option::is_some) {
                return Ok(PsiZero::Wall(Side::ALL[s]));
            }
            if let Some(body) = graph.body_extra.iter().position(Option::is_some) {
                return Ok(PsiZero::Body(body));
            }
            Ok(if graph.axis_extra.is_some() { PsiZero::Auto } else { PsiZero::Mean })
        }
        PsiZero::Wall(side) if domain.walls.get(side).is_none() => Err(FitError::ZeroNotWall { side: side.name() }),
        PsiZero::Body(body) if graph.body_extra.get(body).copied().flatten().is_none() => {
            Err(FitError::ZeroNotBody { number: body + 1, bodies: domain.bodies.len() })
        }
        PsiZero::Point { x, y } if !(x.is_finite() && y.is_finite()) => Err(FitError::ZeroOutside { x, y }),
        other => Ok(other),
    }
}

fn check_walls(domain: &Domain) -> Result<(), FitError> {
    for side in Side::ALL {
        if let Some(at) = domain.walls.get(side).and_then(|wall| wall.at) {
            let (distance, _) = wall_distance(domain, side, at);
            if !(-ON_NODES..=WALL_REACH).contains(&distance) {
                return Err(FitError::WallPlace { side: side.name(), at, steps: distance });
            }
        }
    }
    if domain.thickness == Thickness::Radius && domain.grid.y.first() < -ON_NODES * domain.grid.y.mean_step() {
        return Err(FitError::NegativeRadius { y: domain.grid.y.first() });
    }
    Ok(())
}
