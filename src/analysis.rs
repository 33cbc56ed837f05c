//! Layer 4, the whole job on one frame: screen, fit, check, extract.  May use: field, numerics, extract.

use ndarray::{Array2, Zip};

use crate::extract::cells::{Cell, CellOptions, Sense, find_cells};
use crate::extract::contour::{Contour, Scene, TraceOptions, trace_contours, wall_contours};
use crate::extract::levels::{LevelChoice, choose_levels, round_step};
use crate::extract::separatrix::trace_separatrices;
use crate::extract::stagnation::{
    StagnationKind, StagnationOptions, StagnationPoint, find_stagnation_points, index_sum, number_points,
};
use crate::extract::trace::{distance_to_segment, encloses};
use crate::extract::turning::{Turning, turning_number};
use crate::extract::wall_points::{WallPointOptions, find_wall_points};
use crate::field::{Domain, FieldError, Flags, Remark, RemarkKind, Shape, Side, Thickness, VelocityField};
use crate::numerics::box_test::{DivergenceOptions, DivergenceReport, Verdict, check_divergence};
use crate::numerics::divergence::{GradientMaps, gradient_maps};
use crate::numerics::extend::extended_surface;
use crate::numerics::fill::fill_gaps;
use crate::numerics::helmholtz::{ResidualShare, residual_share};
use crate::numerics::screening::{ScreenOptions, screen};
use crate::numerics::solver::StopReason;
use crate::numerics::stream_function::{DIRECT_TOLERANCE, FitError, FitOptions, StreamFit, solve_stream_function};
use crate::numerics::surface::PsiSurface;

/// Settings of an analysis.
#[derive(Debug, Clone, Default)]
pub struct AnalysisOptions {
    /// Screening; `None` takes every vector as it is.
    pub screen: Option<ScreenOptions>,
    /// Fit of psi.
    pub fit: FitOptions,
    /// Box test.
    pub boxes: DivergenceOptions,
    /// Interior stagnation points.
    pub stagnation: StagnationOptions,
    /// Attachment and separation points.
    pub wall_points: WallPointOptions,
    /// Which streamlines.
    pub levels: LevelChoice,
    /// How they are traced.
    pub trace: TraceOptions,
    /// Recirculation cells.
    pub cells: CellOptions,
}

/// Why a frame could not be analyzed.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum AnalysisError {
    /// The field itself is unusable: every reason.
    #[error("the field cannot be analyzed: {}", .0.iter().map(ToString::to_string).collect::<Vec<_>>().join("; "))]
    Field(Vec<FieldError>),
    /// No stream function.
    #[error(transparent)]
    Fit(#[from] FitError),
}

/// Stages reported to an observer, in order.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Stage {
    /// Comparison of every vector with its neighbors and with the fit.
    Screening,
    /// Fit of psi.
    Fit,
    /// Divergence map, box test, residual share.
    Divergence,
    /// Stagnation points, wall points.
    Points,
    /// Streamlines, separatrices, cells.
    Lines,
}

impl Stage {
    /// Name in summaries.
    pub fn name(self) -> &'static str {
        match self {
            Stage::Screening => "screening",
            Stage::Fit => "fit",
            Stage::Divergence => "divergence",
            Stage::Points => "points",
            Stage::Lines => "lines",
        }
    }
}

/// Called when a stage ends; the library itself reads no clock.
pub type Observer<'a> = &'a (dyn Fn(Stage) + Sync);

/// A screened and fitted frame.
#[derive(Debug, Clone)]
pub struct FittedFlow {
    /// The field as measured.
    pub measured: VelocityField,
    /// The field that was fitted: screened vectors are gaps.
    pub used: VelocityField,
    /// What every node is, shape `(ny, nx)`.
    pub flags: Array2<Flags>,
    /// The fit, psi on fitted nodes only.
    pub fit: StreamFit,
    /// Surface through fitted and filled psi at the nodes.
    pub surface: PsiSurface,
    /// The same surface carried on to walls and bodies: what lines and fluxes are read from.
    pub extended: PsiSurface,
    /// Fitted u, NaN where there is no psi; shape `(ny, nx)`.
    pub u_fit: Array2<f64>,
    /// Fitted v.
    pub v_fit: Array2<f64>,
    /// Remarks of these stages.
    pub remarks: Vec<Remark>,
}

impl FittedFlow {
    /// The fitted field with the vectors of the fit at filled nodes.
    pub fn filled(&self) -> VelocityField {
        let mut field = self.used.clone();
        for (node, flag) in self.flags.indexed_iter() {
            if flag.has(Flags::FILLED) {
                field.u[node] = self.u_fit[node];
                field.v[node] = self.v_fit[node];
                field.valid[node] = field.u[node].is_finite() && field.v[node].is_finite();
            }
        }
        field
    }

    /// psi at the nodes, narrow gaps filled; NaN where there is none.
    pub fn surface_psi(&self) -> &Array2<f64> {
        self.surface.psi()
    }
}

/// The incompressibility check of a fitted frame.
#[derive(Debug, Clone)]
pub struct Check {
    /// Divergence, its sigma and vorticity at the nodes.
    pub map: GradientMaps,
    /// Box test and verdict.
    pub report: DivergenceReport,
    /// Share of the flux energy that no stream function explains.
    pub residual: ResidualShare,
    /// Remarks of this stage.
    pub remarks: Vec<Remark>,
}

/// Points, lines and cells of a fitted frame.
#[derive(Debug, Clone)]
pub struct Features {
    /// Stagnation points in table order.
    pub points: Vec<StagnationPoint>,
    /// Sum of the indices of the interior points.
    pub index_sum: i32,
    /// Turning number of the velocity on the rim.
    pub turning: Turning,
    /// Levels drawn.
    pub levels: Vec<f64>,
    /// Streamlines, separatrices, walls.
    pub lines: Vec<Contour>,
    /// Recirculation cells.
    pub cells: Vec<Cell>,
    /// Remarks of these stages.
    pub remarks: Vec<Remark>,
}

/// Everything isopsi finds in one frame.
#[derive(Debug, Clone)]
pub struct Analysis {
    /// Screened and fitted frame.
    pub flow: FittedFlow,
    /// Incompressibility check.
    pub check: Check,
    /// Points, lines, cells.
    pub features: Features,
}

impl Analysis {
    /// Screens, fits, checks and extracts.
    ///
    /// # Errors
    /// [`AnalysisError`] when the field is unusable or has no stream function.
    pub fn run(
        field: &VelocityField,
        options: &AnalysisOptions,
        observer: Observer<'_>,
    ) -> Result<Self, AnalysisError> {
        let flow = fit_flow(field, options, observer)?;
        let check = check_flow(&flow, options, observer);
        let features = find_features(&flow, options, observer);
        Ok(Self { flow, check, features })
    }

    /// Remarks of all stages, in order.
    pub fn remarks(&self) -> impl Iterator<Item = &Remark> {
        self.flow.remarks.iter().chain(&self.check.remarks).chain(&self.features.remarks)
    }

    /// The verdict.
    pub fn verdict(&self) -> Verdict {
        self.check.report.verdict
    }
}

/// Screens the vectors, fits psi, screens against the fit, fits again, fills narrow gaps.
///
/// # Errors
/// [`AnalysisError`] when the field is unusable or has no stream function.
pub fn fit_flow(
    field: &VelocityField,
    options: &AnalysisOptions,
    observer: Observer<'_>,
) -> Result<FittedFlow, AnalysisError> {
    let problems = field.problems();
    if !problems.is_empty() {
        return Err(AnalysisError::Field(problems));
    }
    let mut remarks = Vec::new();
    let (used, fit) = match &options.screen {
        None => (field.clone(), solve_stream_function(field, &options.fit)?),
        Some(screening) => screened(field, screening, &options.fit, &mut remarks)?,
    };
    observer(Stage::Screening);
    let filled = fill_gaps(&used.domain, &fit.psi, &fit.component);
    let surface = PsiSurface::new(used.grid(), &filled.psi);
    let extended = extended_surface(&used.domain, &filled.psi, &fit.body_psi, &fit.wall_psi);
    let (u_fit, v_fit) = fitted_velocity(&used, &surface);
    let mut flags = filled.flags;
    Zip::indexed(&mut flags).for_each(|(j, i), flag| {
        if field.domain.is_solid(j, i) {
            *flag = flag.with(Flags::SOLID);
        }
        if field.valid[[j, i]] {
            *flag = flag.with(Flags::MEASURED);
            if !used.valid[[j, i]] {
                *flag = flag.with(Flags::SCREENED);
            }
        }
    });
    if fit.components > 1 {
        remarks.push(Remark::new(
            RemarkKind::SeveralComponents,
            format!(
                "the vectors fall into {} separate parts; psi differences between parts are unknown, each part has its own zero",
                fit.components
            ),
        ));
    }
    if fit.solve.reason == StopReason::IterationLimit {
        remarks.push(Remark::new(
            RemarkKind::NotConverged,
            format!(
                "the solver stopped after {} iterations at a relative residual of {:.1e}, above the tolerance {:.1e}",
                fit.solve.iterations, fit.solve.relative_residual, fit.solve.tolerance
            ),
        ));
    }
    observer(Stage::Fit);
    Ok(FittedFlow { measured: field.clone(), used, flags, fit, surface, extended, u_fit, v_fit, remarks })
}

/// Relative residual of the fits that only serve the screening.
const ROUGH_TOLERANCE: f64 = 1e-6;

/// Screens by medians and against the fit; the last fit is kept when nothing more was rejected.
fn screened(
    field: &VelocityField,
    screening: &ScreenOptions,
    options: &FitOptions,
    remarks: &mut Vec<Remark>,
) -> Result<(VelocityField, StreamFit), AnalysisError> {
    // While vectors are still being judged a rougher solution tells as much; the fit that is kept has the full tolerance.
    let rough = FitOptions { tolerance: options.tolerance.max(ROUGH_TOLERANCE), ..options.clone() };
    let mut last: Option<(Array2<bool>, StreamFit)> = None;
    let found = screen(field, screening, |kept| {
        let fit = solve_stream_function(kept, &rough).ok()?;
        let filled = fill_gaps(&kept.domain, &fit.psi, &fit.component);
        let velocity = fitted_velocity(kept, &PsiSurface::new(kept.grid(), &filled.psi));
        last = Some((kept.valid.clone(), fit));
        Some(velocity)
    });
    if found.limited {
        remarks.push(Remark::new(
            RemarkKind::Note,
            format!(
                "screening stopped at {} vectors, the largest share it may remove: so many cannot all be outliers; check sigma, units and axes",
                found.count()
            ),
        ));
    }
    let used = found.apply(field);
    match last {
        Some((valid, fit))
            if valid == used.valid && fit.solve.relative_residual <= options.tolerance.max(DIRECT_TOLERANCE) =>
        {
            Ok((used, fit))
        }
        _ => {
            let fit = solve_stream_function(&used, options)?;
            Ok((used, fit))
        }
    }
}

/// Velocity of the surface at the nodes, divided by the thickness; NaN where there is no psi or the thickness is not positive.
fn fitted_velocity(field: &VelocityField, surface: &PsiSurface) -> (Array2<f64>, Array2<f64>) {
    let domain = &field.domain;
    let (mut u, mut v) = (surface.psi_y().clone(), surface.psi_x().mapv(|p| -p));
    if domain.thickness != Thickness::Uniform {
        Zip::indexed(&mut u).and(&mut v).for_each(|(j, i), u, v| {
            let h = domain.thickness.at_node(&domain.grid, j, i);
            let inverse = if h > 0.0 { 1.0 / h } else { f64::NAN };
            *u *= inverse;
            *v *= inverse;
        });
    }
    (u, v)
}

/// Divergence map, box test with verdict, residual share.
pub fn check_flow(flow: &FittedFlow, options: &AnalysisOptions, observer: Observer<'_>) -> Check {
    let report = check_divergence(&flow.used, &options.boxes);
    let map = gradient_maps(&flow.used, report.overlap);
    let residual = residual_share(&flow.used, &flow.fit.residual, report.overlap);
    let mut remarks = Vec::new();
    if flow.used.overlap.is_none() {
        remarks.push(Remark::new(
            RemarkKind::OverlapMissing,
            format!(
                "no overlap is declared; {} is used (`--overlap 0.5` when neighboring windows share half their width)",
                report.overlap
            ),
        ));
    }
    if let (Some(declared), Some(estimated)) = (report.sigma_declared, report.sigma_estimated)
        && !estimated.upper_bound
        && (declared - estimated.sigma).abs() > SIGMA_DISAGREES * estimated.uncertainty.max(0.05 * declared)
    {
        remarks.push(Remark::new(
            RemarkKind::SigmaDisagrees,
            format!(
                "sigma is declared as {declared:.4}, the smallest boxes say {:.4} +- {:.4}: the declared value is too {} or the flow is divergent on the scale of the nodes",
                estimated.sigma,
                estimated.uncertainty,
                if declared < estimated.sigma { "small" } else { "large" }
            ),
        ));
    }
    observer(Stage::Divergence);
    Check { map, report, residual, remarks }
}

/// Declared and estimated sigma disagree when they differ by more than this many uncertainties of the estimate.
pub const SIGMA_DISAGREES: f64 = 3.0;

/// Noise of psi one spacing off a wall against psi on it, in units of sigma times spacing, for the fit without smoothing.
const WALL_NOISE: f64 = 0.6;

/// Stagnation points, streamlines, separatrices, recirculation cells.
pub fn find_features(flow: &FittedFlow, options: &AnalysisOptions, observer: Observer<'_>) -> Features {
    let domain = &flow.used.domain;
    let (body_psi, wall_psi) = (&flow.fit.body_psi, &flow.fit.wall_psi);
    let mut remarks = Vec::new();
    let search = find_stagnation_points(&flow.surface, domain, &options.stagnation);
    remarks.extend(search.remark());
    let index_sum = index_sum(&search.points);
    let turning = turning_number(&flow.surface, domain, &options.stagnation);
    let mut points = beside_walls(search.points, flow, &options.stagnation);
    let mut wall_options = options.wall_points.clone();
    if wall_options.psi_noise == 0.0
        && let Some(sigma) = flow.used.sigma.rms(&flow.used.valid)
    {
        let width = 1.0 / (1.0 - flow.used.overlap.unwrap_or(0.0));
        wall_options.psi_noise = WALL_NOISE * sigma * flow.used.grid().spacing() * width.sqrt();
    }
    points.extend(find_wall_points(&flow.surface, domain, body_psi, wall_psi, &wall_options));
    let mut points = number_points(points);
    note_filled(&mut points, flow);
    observer(Stage::Points);
    let scene = Scene { surface: &flow.extended, domain, flags: &flow.flags };
    let solid_psi: Vec<f64> = body_psi.iter().chain(wall_psi).copied().collect();
    let levels = choose_levels(&flow.extended, &options.levels, &solid_psi);
    let centers: Vec<[f64; 2]> =
        points.iter().filter(|p| p.kind == StagnationKind::Center).map(|p| [p.x, p.y]).collect();
    let mut lines = trace_contours(&scene, &levels, &centers, &options.trace);
    lines.extend(trace_separatrices(&scene, &points, &options.trace));
    lines.extend(wall_contours(&scene, body_psi, wall_psi));
    let cells = find_cells(&scene, &points, body_psi, wall_psi, &options.cells);
    if matches!(options.levels, LevelChoice::Count(_)) {
        lines.extend(lines_inside(&scene, &cells, &points, &levels, options));
    }
    observer(Stage::Lines);
    Features { points, index_sum, turning, levels, lines, cells, remarks }
}

/// A cell through which fewer streamlines than this run gets its own finer round levels.
const LINES_IN_CELL: usize = 3;

/// Streamlines inside weak recirculation cells, at finer round levels.
fn lines_inside(
    scene: &Scene<'_>,
    cells: &[Cell],
    points: &[StagnationPoint],
    levels: &[f64],
    options: &AnalysisOptions,
) -> Vec<Contour> {
    let strongest = cells.iter().map(|c| c.flux).fold(0.0, f64::max);
    let mut out = Vec::new();
    for cell in cells.iter().filter(|c| c.flux > WEAKEST_CELL * strongest) {
        let Some(center) = points.iter().find(|p| p.id == cell.center_id) else { continue };
        let inward = if cell.sense == Sense::CounterClockwise { 1.0 } else { -1.0 };
        let bound = center.psi - inward * cell.flux;
        let (low, high) = (bound.min(center.psi), bound.max(center.psi));
        let inside = |c: f64| c > low + 0.02 * cell.flux && c < high - 0.02 * cell.flux;
        if levels.iter().filter(|&&c| inside(c)).count() >= LINES_IN_CELL {
            continue;
        }
        let step = round_step(cell.flux / (LINES_IN_CELL as f64 + 1.0));
        let finer: Vec<f64> = ((low / step).ceil() as i64..=(high / step).floor() as i64)
            .map(|k| k as f64 * step)
            .filter(|&c| inside(c) && !levels.iter().any(|l| (l - c).abs() < 1e-9 * step))
            .collect();
        let around = [[center.x, center.y]];
        out.extend(trace_contours(scene, &finer, &around, &options.trace).into_iter().filter(|line| {
            line.closed && encloses(&line.vertices, around[0]) && encloses(&cell.boundary, line.vertices[0])
        }));
    }
    out
}

/// Cells carrying less than this share of the strongest one get no lines of their own.
const WEAKEST_CELL: f64 = 0.02;

/// Points within this many node spacings of a wall or body are looked for on the surface that knows psi there.
const BESIDE_WALL: f64 = 1.5;

/// Points of the nodal surface away from walls and bodies, of the extended one beside them: between the outermost vectors and a wall
/// only the psi of the wall tells a stagnation point from noise.
fn beside_walls(nodal: Vec<StagnationPoint>, flow: &FittedFlow, options: &StagnationOptions) -> Vec<StagnationPoint> {
    let domain = &flow.used.domain;
    let reach = BESIDE_WALL * flow.used.grid().spacing();
    let close =
        |p: &StagnationPoint| distance_to_solids(domain, &flow.fit.body_psi, &flow.fit.wall_psi, [p.x, p.y]) <= reach;
    if !nodal.iter().any(close) && domain.walls.is_empty() && domain.bodies.is_empty() {
        return nodal;
    }
    let extended = find_stagnation_points(&flow.extended, domain, options).points;
    let least = BESIDE_WALL / 3.0 * flow.used.grid().spacing();
    let mut points: Vec<StagnationPoint> = nodal.into_iter().filter(|p| !close(p)).collect();
    points.extend(extended.into_iter().filter(|p| {
        close(p)
            && distance_to_solids(domain, &flow.fit.body_psi, &flow.fit.wall_psi, [p.x, p.y]) > least
            && !domain.bodies.iter().any(|b| b.shape.contains(p.x, p.y))
    }));
    points
}

/// Distance to the nearest wall or body that psi is tied to, infinite without any.
fn distance_to_solids(domain: &Domain, body_psi: &[f64], wall_psi: &[f64; 4], p: [f64; 2]) -> f64 {
    let grid = &domain.grid;
    let mut nearest = f64::INFINITY;
    for (side, psi) in Side::ALL.into_iter().zip(wall_psi) {
        let Some(wall) = domain.walls.get(side) else { continue };
        if psi.is_finite() {
            nearest = nearest.min(match side {
                Side::Bottom => p[1] - wall.at.unwrap_or(grid.y.first()),
                Side::Top => wall.at.unwrap_or(grid.y.last()) - p[1],
                Side::Left => p[0] - wall.at.unwrap_or(grid.x.first()),
                Side::Right => wall.at.unwrap_or(grid.x.last()) - p[0],
            });
        }
    }
    for (body, psi) in domain.bodies.iter().zip(body_psi) {
        if psi.is_finite() {
            nearest = nearest.min(match &body.shape {
                Shape::Circle { x, y, radius } => (p[0] - x).hypot(p[1] - y) - radius,
                Shape::Polygon { vertices } => (0..vertices.len())
                    .map(|k| distance_to_segment(p, vertices[k], vertices[(k + 1) % vertices.len()]))
                    .fold(f64::INFINITY, f64::min),
                Shape::Nodes => f64::INFINITY,
            });
        }
    }
    nearest
}

/// Marks points in cells with a filled corner.
fn note_filled(points: &mut [StagnationPoint], flow: &FittedFlow) {
    for point in points {
        let Some((j, i, _, _)) = flow.surface.locate(point.x, point.y) else { continue };
        let corners = [(j, i), (j, i + 1), (j + 1, i), (j + 1, i + 1)];
        if corners.iter().any(|&node| flow.flags[node].has(Flags::FILLED)) {
            point.notes.push("in_filled");
        }
    }
}
