//! The operator behind the fit: graph, parts and solver, shared by all velocities with the same usable vectors.

use std::sync::OnceLock;

use ndarray::{Array2, Zip};

use super::cholesky::Factor;
use super::dct::solve_cosine;
use super::flux::{EdgeFluxes, EdgeRules, edge_fluxes_of};
use super::graph::{Graph, NONE};
use super::multigrid::{Multigrid, node_part};
use super::parts::Parts;
use super::solver::{SolveReport, SolverKind, StopReason};
use super::stream_function::{EdgeResidual, FitError, FitOptions, PsiZero, StreamFit};
use super::surface::PsiSurface;
use super::walls::{ON_NODES, WALL_REACH, wall_distance};
use crate::field::{Domain, Side, Sigma, Thickness, VelocityField};

/// Largest number of unknowns for which the factorization is chosen automatically; above it multigrid is faster even for one
/// right-hand side (measured on 2 cores).
pub const CHOLESKY_LIMIT: usize = 12_000;

/// Largest number of unknowns for which the factorization is chosen on grids that are hard for multigrid (about 700 bytes each).
pub const CHOLESKY_LIMIT_HARD: usize = 600_000;

/// A grid is hard for multigrid when more than [`HARD_SHARE`] of its nodes have edge weights along x and y that differ by more than
/// this factor (packed axes)...
pub const HARD_ANISOTROPY: f64 = 6.0;

/// ... or when more than this share of the fluid nodes is missing beside a usable one (scattered gaps, not one large one).
pub const HARD_SHARE: f64 = 0.15;

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
    /// With the factorization that takes over where the iteration does not converge, made when first needed.
    Multigrid(Box<Multigrid>, OnceLock<Option<Box<Factor>>>),
}

impl StreamFunctionOperator {
    /// Builds the operator for the usable vectors and sigma of a field.
    ///
    /// # Errors
    /// [`FitError`] when there is nothing to fit or the asked zero of psi does not exist.
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
        let zero = resolve_zero(options.zero, field, &graph, &parts)?;
        let kind = match options.solver {
            SolverKind::Auto if cosine => SolverKind::Cosine,
            SolverKind::Auto if unknowns <= CHOLESKY_LIMIT => SolverKind::Cholesky,
            SolverKind::Auto if unknowns <= CHOLESKY_LIMIT_HARD && is_hard(field, &graph) => SolverKind::Cholesky,
            SolverKind::Auto => SolverKind::Multigrid,
            SolverKind::Cosine if !cosine => return Err(FitError::CosineNotApplicable),
            kind => kind,
        };
        let method = match kind {
            SolverKind::Cosine => Method::Cosine,
            SolverKind::Cholesky => {
                Method::Cholesky(Box::new(factor(&graph, &parts).ok_or(FitError::Factorization { unknowns })?))
            }
            _ => Method::Multigrid(Box::new(Multigrid::new(&graph)), OnceLock::new()),
        };
        let rules = (EdgeRules::new(&domain.grid.x), EdgeRules::new(&domain.grid.y));
        let steps = (domain.grid.x.mean_step(), domain.grid.y.mean_step());
        Ok(Self { graph, parts, zero, options: options.clone(), method, rules, steps })
    }

    /// Fits the velocities of a field with the usable vectors the operator was built for.
    ///
    /// # Errors
    /// [`FitError::OtherVectors`] when other vectors are usable than the operator was built for, [`FitError::ZeroOutside`] when the
    /// asked zero carries no psi.
    pub fn fit(&self, field: &VelocityField) -> Result<StreamFit, FitError> {
        let mut others = 0;
        Zip::from(&field.valid).and(&self.graph.unknown).for_each(|&ok, &k| others += usize::from(ok == (k == NONE)));
        if others > 0 {
            return Err(FitError::OtherVectors { count: others });
        }
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
                Ok((psi, Vec::new(), report(SolverKind::Cosine, direct_reason(relative), 0, relative)))
            }
            Method::Cholesky(factor) => {
                let (psi, extra, relative) = self.solve_directly(factor, &grid_b, &extra_b);
                Ok((psi, extra, report(SolverKind::Cholesky, direct_reason(relative), 0, relative)))
            }
            Method::Multigrid(grid, fallback) => {
                let mut b: Vec<f64> = grid_b.iter().copied().collect();
                b.extend_from_slice(&extra_b);
                let outcome = grid.solve(&b, self.options.tolerance, self.options.max_iterations);
                if !outcome.converged
                    && let Some(factor) = fallback.get_or_init(|| factor(graph, &self.parts).map(Box::new))
                {
                    let (psi, extra, relative) = self.solve_directly(factor, &grid_b, &extra_b);
                    return Ok((psi, extra, report(SolverKind::Cholesky, direct_reason(relative), 0, relative)));
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

    /// psi at nodes and at extra unknowns by factorization, and the relative residual; refined once where rounding left more than
    /// the tolerance.
    fn solve_directly(&self, factor: &Factor, grid_b: &Array2<f64>, extra_b: &[f64]) -> (Array2<f64>, Vec<f64>, f64) {
        let b = self.compact(grid_b, extra_b);
        let mut x = factor.solve(&b);
        let r = self.graph_residual(&x, &b);
        let mut relative = relative_norm(&r, &b);
        if relative > self.options.tolerance {
            let better: Vec<f64> = factor.solve(&r).iter().zip(&x).map(|(dx, x)| x + dx).collect();
            let after = relative_norm(&self.graph_residual(&better, &b), &b);
            if after < relative {
                (x, relative) = (better, after);
            }
        }
        let (psi, extra) = self.spread(&x, grid_b.dim());
        (psi, extra, relative)
    }

    /// Residual `b - A x` of the normal equations for compact vectors.
    fn graph_residual(&self, x: &[f64], b: &[f64]) -> Vec<f64> {
        let mut r = b.to_vec();
        for (p, q, w) in self.graph.edges() {
            let flow = w * (x[q as usize] - x[p as usize]);
            r[q as usize] -= flow;
            r[p as usize] += flow;
        }
        r
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
            PsiZero::Mean | PsiZero::Auto => None,
            PsiZero::Axis => on_extra(graph.axis_extra),
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

/// A direct solve whose residual is above [`DIRECT_TOLERANCE`] is not called converged.
fn direct_reason(relative_residual: f64) -> StopReason {
    if relative_residual <= DIRECT_TOLERANCE { StopReason::Direct } else { StopReason::IterationLimit }
}

/// Relative Euclidean norm of `r` to `b`; 0 when `b` vanishes.
fn relative_norm(r: &[f64], b: &[f64]) -> f64 {
    let norm = |a: &[f64]| a.iter().map(|x| x * x).sum::<f64>().sqrt();
    let scale = norm(b);
    if scale > 0.0 { norm(r) / scale } else { 0.0 }
}

fn factor(graph: &Graph, parts: &Parts) -> Option<Factor> {
    let mut seen = vec![false; parts.size.len() + 1];
    // The first unknown of every part is pinned.
    let kept: Vec<bool> =
        parts.of.iter().map(|&part| part > 0 && std::mem::replace(&mut seen[part as usize], true)).collect();
    let mut place = vec![(0, 0); graph.nodes];
    for ((j, i), &k) in graph.unknown.indexed_iter() {
        if k != NONE && (k as usize) < graph.nodes {
            place[k as usize] = (j as u32, i as u32);
        }
    }
    Factor::new(graph.edges().filter(|&(a, _, _)| parts.of[a as usize] > 0), &kept, &place)
}

/// The zero in force; [`PsiZero::Auto`] passes over walls and bodies without vectors beside them.
fn resolve_zero(zero: PsiZero, field: &VelocityField, graph: &Graph, parts: &Parts) -> Result<PsiZero, FitError> {
    let domain = &field.domain;
    let reached = |k: Option<u32>| k.is_some_and(|k| parts.of[graph.nodes + k as usize] > 0);
    let reach = |k: Option<u32>, place: &dyn Fn() -> String| {
        if reached(k) { Ok(zero) } else { Err(FitError::ZeroUnreached { place: place() }) }
    };
    match zero {
        PsiZero::Auto => Ok(if let Some(s) = graph.wall_extra.iter().position(|&k| reached(k)) {
            PsiZero::Wall(Side::ALL[s])
        } else if let Some(body) = graph.body_extra.iter().position(|&k| reached(k)) {
            PsiZero::Body(body)
        } else if reached(graph.axis_extra) {
            PsiZero::Axis
        } else {
            PsiZero::Mean
        }),
        PsiZero::Mean => Ok(zero),
        PsiZero::Wall(side) => match Side::ALL.iter().position(|&s| s == side).and_then(|s| graph.wall_extra[s]) {
            None => Err(FitError::ZeroNotWall { side: side.name() }),
            wall => reach(wall, &|| format!("{} wall", side.name())),
        },
        PsiZero::Body(body) => match graph.body_extra.get(body).copied().flatten() {
            None => Err(FitError::ZeroNotBody { number: body + 1, bodies: domain.bodies.len() }),
            extra => reach(extra, &|| format!("surface of body {}", body + 1)),
        },
        PsiZero::Axis => match graph.axis_extra {
            None => Err(FitError::ZeroNotAxis),
            axis => reach(axis, &|| "axis".to_owned()),
        },
        PsiZero::Point { x, y } if !(x.is_finite() && y.is_finite()) => Err(FitError::ZeroOutside { x, y }),
        PsiZero::Point { .. } => Ok(zero),
    }
}

/// Whether multigrid would need many iterations: strongly packed axes or many gaps.
fn is_hard(field: &VelocityField, graph: &Graph) -> bool {
    let (ny, nx) = graph.unknown.dim();
    let (mut packed, mut missing, mut all) = (0usize, 0usize, 0usize);
    for j in 0..ny {
        for i in 0..nx {
            if field.domain.is_solid(j, i) {
                continue;
            }
            all += 1;
            let beside = |jj: usize, ii: usize| field.valid.get([jj, ii]).copied().unwrap_or(false);
            missing += usize::from(
                !field.valid[[j, i]]
                    && (beside(j + 1, i)
                        || beside(j, i + 1)
                        || beside(j.wrapping_sub(1), i)
                        || beside(j, i.wrapping_sub(1))),
            );
            if j + 1 < ny && i + 1 < nx {
                let (x, y) = (graph.weight_x[[j, i]], graph.weight_y[[j, i]]);
                packed += usize::from(x > 0.0 && y > 0.0 && f64::max(x / y, y / x) > HARD_ANISOTROPY);
            }
        }
    }
    (missing.max(packed)) as f64 > HARD_SHARE * all as f64
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
