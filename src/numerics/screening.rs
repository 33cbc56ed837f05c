//! Screening of gross errors: a local median test before the fit, a studentized residual test after it.

use ndarray::{Array2, Zip};
use rayon::prelude::*;

use crate::field::VelocityField;

/// Settings of both tests.
#[derive(Debug, Clone, PartialEq)]
pub struct ScreenOptions {
    /// Limit of the normalized median test.
    pub limit: f64,
    /// Noise floor of the normalized median test, velocity unit; `None`: [`Self::EPSILON_FACTOR`] times sigma (declared, else
    /// estimated from the scatter about the local medians).
    pub epsilon: Option<f64>,
    /// Most passes of each test; a vector rejected in one pass is no neighbor in the next.
    pub passes: usize,
    /// Fewest neighbors for a judgment.
    pub min_neighbors: usize,
    /// Good vectors the residual test may reject by chance in a whole field.
    pub expected_false: f64,
    /// Largest share of the vectors that may be rejected; the worst go first.
    pub max_share: f64,
}

impl ScreenOptions {
    /// Default limit of the median test (Westerweel & Scarano 2005, from memory).
    pub const LIMIT: f64 = 2.0;
    /// Noise floor in units of sigma: on pure Gaussian noise the median test then rejects 1 good vector in 10^5 per component;
    /// equal to sigma it would be 0.6 %, with no floor a third.
    pub const EPSILON_FACTOR: f64 = 2.0;
    /// Default passes.
    pub const PASSES: usize = 6;
    /// Default fewest neighbors: a corner has three.
    pub const MIN_NEIGHBORS: usize = 3;
    /// Default expected number of false rejections of the residual test.
    pub const EXPECTED_FALSE: f64 = 0.1;
    /// Default largest share.
    pub const MAX_SHARE: f64 = 0.25;
}

impl Default for ScreenOptions {
    fn default() -> Self {
        Self {
            limit: Self::LIMIT,
            epsilon: None,
            passes: Self::PASSES,
            min_neighbors: Self::MIN_NEIGHBORS,
            expected_false: Self::EXPECTED_FALSE,
            max_share: Self::MAX_SHARE,
        }
    }
}

/// Outcome of a test; arrays `(ny, nx)`.
#[derive(Debug, Clone, PartialEq)]
pub struct Screening {
    /// Vectors to leave out.
    pub rejected: Array2<bool>,
    /// Test statistic over its limit when last judged: above 1 suspicious; NaN where there was no judgment.  A suspicious vector
    /// that continues its neighbors along a grid line or diagonal is kept all the same.
    pub ratio: Array2<f64>,
    /// Noise floor of the median test or global residual scale of the residual test, velocity unit.
    pub scale: f64,
    /// Passes made.
    pub passes: usize,
    /// True when [`ScreenOptions::max_share`] kept further vectors from being rejected.
    pub limited: bool,
}

impl Screening {
    fn nothing(shape: (usize, usize)) -> Self {
        Self {
            rejected: Array2::from_elem(shape, false),
            ratio: Array2::from_elem(shape, f64::NAN),
            scale: f64::NAN,
            passes: 0,
            limited: false,
        }
    }

    /// Number of rejected vectors.
    pub fn count(&self) -> usize {
        self.rejected.iter().filter(|r| **r).count()
    }

    /// The field without the rejected vectors.
    pub fn apply(&self, field: &VelocityField) -> VelocityField {
        field.clone().without(|j, i| self.rejected[[j, i]])
    }
}

/// A suspicious vector is kept when, along one of the four grid directions, it lies this much closer to the value its neighbors
/// there predict than to the median around it: walls, corners and shear layers continue along themselves, a wrong vector does not.
const GUARD: f64 = 0.3;

/// Share of the scatter of the other component below which that of a component is never taken: in a wall layer one component can
/// be almost constant where the other turns within a node.
const CROSS_SHARE: f64 = 0.25;

/// Nodes on either side that the guard looks at.
const GUARD_REACH: usize = 3;

/// How much closer a one-sided prediction must come where both sides are known.
const ONE_SIDED_PENALTY: f64 = 10.0;

/// Ratio of the scatter about a median of eight to sigma, white noise: sqrt(1 + 1.5 / 8), the variance of the median included.
const MEDIAN_SCATTER: f64 = 1.09;

/// About this many nodes give the scatter.
const SCATTER_SAMPLE: usize = 20_000;

/// Median absolute deviation to standard deviation of a normal sample.
const MAD: f64 = 1.482_602_218_505_602;

/// Share of the scatter seen in the data below which a declared sigma is not believed: on a coarse grid the flow itself varies more.
const LEAST_SCATTER: f64 = 0.5;

/// Rounding: scatter below this share of the rms speed is none.
const ROUNDING: f64 = 1e-10;

/// Normalized median statistic `|value - median| / (median |neighbor - median| + epsilon)` of one component.
///
/// Source: Westerweel & Scarano 2005 (from memory).  0 when value and median agree exactly; infinite when there is neither scatter
/// nor floor.  `neighbors` is reordered.
pub fn normalized_median(value: f64, neighbors: &mut [f64], epsilon: f64) -> f64 {
    let (middle, scatter) = median_and_scatter(neighbors);
    let deviation = (value - middle).abs();
    if deviation == 0.0 { 0.0 } else { deviation / (scatter + epsilon) }
}

/// Median and median absolute deviation from it.
fn median_and_scatter(values: &mut [f64]) -> (f64, f64) {
    let middle = median(values);
    values.iter_mut().for_each(|n| *n = (*n - middle).abs());
    (middle, median(values))
}

/// Median by partial sorting; NaN of an empty slice.
fn median(values: &mut [f64]) -> f64 {
    let n = values.len();
    if n == 0 {
        return f64::NAN;
    }
    if n <= 9 {
        // Insertion sort: most calls have the eight neighbors of a node.
        for a in 1..n {
            let value = values[a];
            let mut b = a;
            while b > 0 && values[b - 1] > value {
                values[b] = values[b - 1];
                b -= 1;
            }
            values[b] = value;
        }
        return if n % 2 == 1 { values[n / 2] } else { 0.5 * (values[n / 2 - 1] + values[n / 2]) };
    }
    let (below, &mut upper, _) = values.select_nth_unstable_by(n / 2, f64::total_cmp);
    if n % 2 == 1 { upper } else { 0.5 * (upper + below.iter().copied().fold(f64::NEG_INFINITY, f64::max)) }
}

/// The (up to eight) usable neighbors of a node.
fn around(valid: &Array2<bool>, j: usize, i: usize) -> impl Iterator<Item = (usize, usize)> + '_ {
    let (ny, nx) = valid.dim();
    (j.saturating_sub(1)..=(j + 1).min(ny - 1))
        .flat_map(move |jj| (i.saturating_sub(1)..=(i + 1).min(nx - 1)).map(move |ii| (jj, ii)))
        .filter(move |&node| node != (j, i) && valid[node])
}

/// Normalized median test of every vector, repeated without the rejected ones until nothing is found.
///
/// * Gaps: up to eight neighbors, those of a rim or gap fewer; with fewer than [`ScreenOptions::min_neighbors`] no judgment.  A
///   vector all of whose neighbors were rejected is rejected too.
/// * Each component is judged, its scatter not taken below a quarter of that of the other; the worse one counts.  Stretched axes: the plain median of the same eight nodes.
/// * Accuracy: finds single vectors and the rims of clusters; the inside of a cluster is left to [`screen_by_fit`].
pub fn screen_by_median(field: &VelocityField, options: &ScreenOptions) -> Screening {
    let shape = field.grid().shape();
    let mut found = Screening::nothing(shape);
    let mut valid = field.valid.clone();
    let allowed = (options.max_share * field.valid_count() as f64) as usize;
    let estimated = median_scatter(field);
    found.scale = options.epsilon.unwrap_or_else(|| {
        let sigma = field.sigma.rms(&field.valid);
        ScreenOptions::EPSILON_FACTOR * sigma.map_or(estimated, |sigma| sigma.max(LEAST_SCATTER * estimated))
    });
    let least = ScreenOptions::EPSILON_FACTOR * LEAST_SCATTER * estimated;
    let mut open: Option<Vec<(usize, usize)>> = None;
    for _ in 0..options.passes {
        found.passes += 1;
        let judge = |(j, i): (usize, usize)| judge_by_median(field, &valid, j, i, (found.scale, least), options);
        let judged: Vec<(usize, usize, f64, bool)> = match &open {
            None => (0..shape.0)
                .into_par_iter()
                .flat_map_iter(|j| (0..shape.1).map(move |i| (j, i)))
                .map(|(j, i)| (j, i, judge((j, i))))
                .map(|(j, i, (ratio, reject))| (j, i, ratio, reject))
                .collect(),
            Some(nodes) => {
                nodes.iter().map(|&(j, i)| (j, i, judge((j, i)))).map(|(j, i, (r, x))| (j, i, r, x)).collect()
            }
        };
        let mut candidates = Vec::new();
        for (j, i, ratio, reject) in judged {
            if ratio.is_finite() {
                found.ratio[[j, i]] = ratio;
            }
            if reject {
                candidates.push((ratio, j, i));
            }
        }
        let before = found.rejected.clone();
        if !take_worst(&mut found, &mut valid, candidates, allowed) {
            break;
        }
        // Only what has a newly rejected vector within the reach of the guard can change.
        let mut touched = Array2::from_elem(shape, false);
        for ((j, i), &now) in found.rejected.indexed_iter() {
            if now && !before[[j, i]] {
                for jj in j.saturating_sub(GUARD_REACH)..=(j + GUARD_REACH).min(shape.0 - 1) {
                    for ii in i.saturating_sub(GUARD_REACH)..=(i + GUARD_REACH).min(shape.1 - 1) {
                        touched[[jj, ii]] = true;
                    }
                }
            }
        }
        open = Some(touched.indexed_iter().filter(|(_, t)| **t).map(|(node, _)| node).collect());
    }
    reject_stranded(field, &mut found, &mut valid, allowed);
    found
}

/// Largest number that divides both.
fn greatest_divisor(mut a: usize, mut b: usize) -> usize {
    while b > 0 {
        (a, b) = (b, a % b);
    }
    a
}

/// Estimate of sigma from the scatter of the vectors about their local medians.
fn median_scatter(field: &VelocityField) -> f64 {
    let nx = field.grid().nx();
    // A stride that shares no factor with the rows visits every column.
    let mut step = (field.grid().node_count() / SCATTER_SAMPLE).max(1);
    while step > 1 && greatest_divisor(step, nx) > 1 {
        step += 1;
    }
    let chosen = (0..field.grid().node_count()).step_by(step).map(|k| (k / nx, k % nx));
    let sigma = [&field.u, &field.v].map(|f| {
        let mut deviations: Vec<f64> = Vec::new();
        let mut values = Vec::with_capacity(8);
        for (j, i) in chosen.clone() {
            if !field.valid[[j, i]] {
                continue;
            }
            values.clear();
            values.extend(around(&field.valid, j, i).map(|node| f[node]));
            if values.len() >= ScreenOptions::MIN_NEIGHBORS {
                deviations.push((f[[j, i]] - median(&mut values)).abs());
            }
        }
        MAD / MEDIAN_SCATTER * median(&mut deviations)
    });
    let pooled = (0.5 * (sigma[0] * sigma[0] + sigma[1] * sigma[1])).sqrt();
    if pooled.is_finite() { pooled.max(ROUNDING * field.rms_speed()) } else { f64::INFINITY }
}

/// Statistic over its limit, and whether the vector is to be rejected.
fn judge_by_median(
    field: &VelocityField,
    valid: &Array2<bool>,
    j: usize,
    i: usize,
    (common, least): (f64, f64),
    options: &ScreenOptions,
) -> (f64, bool) {
    if !valid[[j, i]] {
        return (f64::NAN, false);
    }
    let (mut us, mut vs, mut n) = ([0.0; 8], [0.0; 8], 0);
    for node in around(valid, j, i) {
        us[n] = field.u[node];
        vs[n] = field.v[node];
        n += 1;
    }
    if n < options.min_neighbors.max(1) {
        return (f64::NAN, false);
    }
    let declared = field.sigma.at(j, i).filter(|_| options.epsilon.is_none());
    let epsilons = declared.map_or((common, common), |(su, sv)| {
        ((ScreenOptions::EPSILON_FACTOR * su).max(least), (ScreenOptions::EPSILON_FACTOR * sv).max(least))
    });
    let parts = [(&field.u, &mut us, epsilons.0), (&field.v, &mut vs, epsilons.1)].map(|(f, values, epsilon)| {
        let (middle, scatter) = median_and_scatter(&mut values[..n]);
        (f, (f[[j, i]] - middle).abs(), scatter, epsilon)
    });
    let (mut worst, mut reject) = (0.0_f64, false);
    for (k, &(f, deviation, scatter, epsilon)) in parts.iter().enumerate() {
        if deviation == 0.0 {
            continue;
        }
        let ratio = deviation / (scatter.max(CROSS_SHARE * parts[1 - k].2) + epsilon) / options.limit;
        worst = worst.max(ratio);
        reject |= ratio > 1.0 && continuation_error(field, f, valid, j, i) > GUARD * deviation;
    }
    (worst.min(f64::MAX), reject)
}

/// Smallest distance of a component from its prediction along rows, columns and diagonals; infinite without any prediction.
fn continuation_error(field: &VelocityField, f: &Array2<f64>, valid: &Array2<bool>, j: usize, i: usize) -> f64 {
    let grid = field.grid();
    let (ny, nx) = valid.dim();
    let mut least = f64::INFINITY;
    for (dj, di) in [(0_isize, 1_isize), (1, 0), (1, 1), (1, -1)] {
        let node = |k: isize| {
            let (jj, ii) = (j as isize + k * dj, i as isize + k * di);
            let inside = jj >= 0 && ii >= 0 && (jj as usize) < ny && (ii as usize) < nx;
            (inside && valid[[jj as usize, ii as usize]]).then_some((jj as usize, ii as usize))
        };
        let place = |(jj, ii): (usize, usize), k: isize| match (dj, di) {
            (0, _) => grid.x.at(ii) - grid.x.at(i),
            (_, 0) => grid.y.at(jj) - grid.y.at(j),
            _ => k as f64,
        };
        // From the best supported prediction down; the first that is possible counts.
        const SETS: [&[isize]; 4] = [&[-2, -1, 1, 2], &[-1, 1, 2], &[-2, -1, 1], &[-1, 1]];
        const ONE_SIDED: [&[isize]; 2] = [&[1, 2, 3], &[-1, -2, -3]];
        let predict = |set: &[isize]| -> Option<f64> {
            let mut points = [(0.0, 0.0); 4];
            for (slot, &k) in points.iter_mut().zip(set) {
                let found = node(k)?;
                *slot = (place(found, k), f[found]);
            }
            let points = &points[..set.len()];
            Some(
                (0..points.len())
                    .map(|a| {
                        let basis = (0..points.len()).filter(|&b| b != a);
                        points[a].1 * basis.map(|b| -points[b].0 / (points[a].0 - points[b].0)).product::<f64>()
                    })
                    .sum(),
            )
        };
        let here = f[[j, i]];
        if let Some(value) = SETS.iter().find_map(|set| predict(set)) {
            least = least.min((value - here).abs());
        }
        // Beside a rim or gap a vector may also continue what lies on its other side; elsewhere only if it does so closely.
        let beside = node(-2).is_none() || node(2).is_none();
        let penalty = if beside { 1.0 } else { ONE_SIDED_PENALTY };
        for value in ONE_SIDED.iter().filter_map(|set| predict(set)) {
            least = least.min(penalty * (value - here).abs());
        }
    }
    least
}

/// Rejects the candidates, worst first, within the allowed number; false when there was nothing to reject.
fn take_worst(
    found: &mut Screening,
    valid: &mut Array2<bool>,
    mut candidates: Vec<(f64, usize, usize)>,
    allowed: usize,
) -> bool {
    if candidates.is_empty() {
        return false;
    }
    candidates.sort_by(|a, b| b.0.total_cmp(&a.0).then((a.1, a.2).cmp(&(b.1, b.2))));
    let room = allowed.saturating_sub(found.count());
    if candidates.len() > room {
        found.limited = true;
        candidates.truncate(room);
    }
    for &(_, j, i) in &candidates {
        found.rejected[[j, i]] = true;
        valid[[j, i]] = false;
    }
    !candidates.is_empty()
}

/// Rejects vectors whose neighbors have all been rejected: nothing supports them and no edge reaches them.
fn reject_stranded(field: &VelocityField, found: &mut Screening, valid: &mut Array2<bool>, allowed: usize) {
    let stranded: Vec<(usize, usize)> = valid
        .indexed_iter()
        .filter(|&((j, i), &ok)| {
            ok && around(&field.valid, j, i).next().is_some() && around(valid, j, i).next().is_none()
        })
        .map(|(node, _)| node)
        .collect();
    for node in stranded {
        if found.count() < allowed {
            found.rejected[node] = true;
            valid[node] = false;
        }
    }
}

/// Standard deviation of the residual `u - u_fit` for unit sigma, inside; between 0.80 (no overlap) and 0.68 (much).
const RESIDUAL_NOISE: f64 = 0.8;
/// The same at the end of a grid line.
const RESIDUAL_NOISE_RIM: f64 = 1.0;
/// The same at a corner.
const RESIDUAL_NOISE_CORNER: f64 = 1.4;
/// Share of an error of one vector that the fit follows at its node, inside and at the end of a line (leverage).
const LEVERAGE: f64 = 0.3;
/// See [`LEVERAGE`].
const LEVERAGE_RIM: f64 = 0.6;
/// Half width of the window of the local residual scale, nodes.
const WINDOW: usize = 3;
/// Half width of the neighborhood within which only the worst vectors go in one pass: their errors spread to the others.
const PEEL: usize = 2;
/// Share of the worst residual around from which a vector may go in the same pass: errors spread to at most 0.18 of it for each.
const PEEL_SHARE: f64 = 0.5;
/// Share of the local spread of the velocity below which a residual is never judged an error, however clean the data.
const SPREAD_SHARE: f64 = 0.1;

/// One pass of the test of every vector against the field fitted to all the others.
///
/// The residual `u - u_fit` is corrected for the share of an error that the fit follows, and divided by its standard deviation:
/// the largest of that of the declared sigma, of the median absolute residual in 7 x 7 nodes around, of the same over the field
/// where no sigma is declared, and of a small share of the local spread of the velocity.  The squared sum over both components
/// is compared with the limit that [`ScreenOptions::expected_false`] good vectors of the whole field exceed by chance (normal
/// noise).  Only the worst of a neighborhood go in one pass; fit again and repeat until nothing is rejected.
///
/// * Shapes: all `(ny, nx)`; NaN in `u_fit`, `v_fit` leaves a vector unjudged.
/// * `u_fit`, `v_fit`: fitted velocity (thickness divided out) at the nodes.
pub fn screen_by_fit(
    field: &VelocityField,
    u_fit: &Array2<f64>,
    v_fit: &Array2<f64>,
    options: &ScreenOptions,
) -> Screening {
    let shape = field.grid().shape();
    let mut found = Screening::nothing(shape);
    if u_fit.dim() != shape || v_fit.dim() != shape {
        return found;
    }
    found.passes = 1;
    let (ny, nx) = shape;
    let residual = |f: &Array2<f64>, fit: &Array2<f64>| {
        Zip::from(f).and(fit).and(&field.valid).map_collect(|a, b, ok| if *ok { a - b } else { f64::NAN })
    };
    let (ru, rv) = (residual(&field.u, u_fit), residual(&field.v, v_fit));
    let mut all: Vec<f64> = ru.iter().chain(&rv).filter(|r| r.is_finite()).map(|r| r.abs()).collect();
    let judged = all.len() / 2;
    if judged == 0 {
        return found;
    }
    let everywhere = MAD * median(&mut all);
    found.scale = everywhere;
    let limit = (2.0 * (judged as f64 / options.expected_false).max(std::f64::consts::E).ln()).sqrt();
    let floor = ROUNDING * field.rms_speed();
    let undeclared = field.sigma.at(0, 0).is_none();
    let local_scale = LocalScale::new(&ru, &rv, everywhere);
    let rows: Vec<Vec<[f64; 2]>> = (0..ny)
        .into_par_iter()
        .map(|j| {
            (0..nx)
                .map(|i| {
                    if !(ru[[j, i]].is_finite() && rv[[j, i]].is_finite()) {
                        return [f64::NAN; 2];
                    }
                    let local = local_scale.at(j, i);
                    let end = |a: Option<(usize, usize)>| a.is_none_or(|node| !field.valid[node]);
                    let y_end = end(j.checked_sub(1).map(|a| (a, i))) || end((j + 1 < ny).then_some((j + 1, i)));
                    let x_end = end(i.checked_sub(1).map(|a| (j, a))) || end((i + 1 < nx).then_some((j, i + 1)));
                    let shape_factor = match (x_end, y_end) {
                        (true, true) => RESIDUAL_NOISE_CORNER,
                        (false, false) => RESIDUAL_NOISE,
                        _ => RESIDUAL_NOISE_RIM,
                    };
                    let data_scale = if undeclared { local.max(everywhere) } else { local };
                    let sigma = field.sigma.at(j, i).unwrap_or((0.0, 0.0));
                    let judge = |spread: f64| {
                        let (mut square, mut size) = (0.0, 0.0_f64);
                        for (r, sigma, own_end) in [(ru[[j, i]], sigma.0, y_end), (rv[[j, i]], sigma.1, x_end)] {
                            let kept = 1.0 - if own_end { LEVERAGE_RIM } else { LEVERAGE };
                            let noise = shape_factor * sigma.max(data_scale / RESIDUAL_NOISE);
                            let sd = noise.max(kept * SPREAD_SHARE * spread).max(floor);
                            square += (r / sd).powi(2);
                            size = size.max(r.abs() / kept);
                        }
                        [square.sqrt() / limit, size]
                    };
                    // The spread only matters for a vector that is suspicious without it.
                    let found = judge(0.0);
                    if found[0] > 1.0 { judge(local_spread(field, j, i)) } else { found }
                })
                .collect()
        })
        .collect();
    let mut candidates = Vec::new();
    for j in 0..ny {
        for i in 0..nx {
            let [ratio, size] = rows[j][i];
            found.ratio[[j, i]] = ratio;
            if ratio.is_nan() || ratio <= 1.0 {
                continue;
            }
            let worst = (j.saturating_sub(PEEL)..=(j + PEEL).min(ny - 1))
                .flat_map(|jj| (i.saturating_sub(PEEL)..=(i + PEEL).min(nx - 1)).map(move |ii| (jj, ii)))
                .map(|(jj, ii)| rows[jj][ii][1])
                .fold(0.0, f64::max);
            if size < PEEL_SHARE * worst {
                continue;
            }
            // The component that carries the residual must not continue its neighbors either.
            let (a, b) = (ru[[j, i]].abs(), rv[[j, i]].abs());
            let suspicious = [(&field.u, a), (&field.v, b)].into_iter().any(|(f, deviation)| {
                2.0 * deviation >= a.max(b) && continuation_error(field, f, &field.valid, j, i) > GUARD * deviation
            });
            if suspicious {
                candidates.push((ratio, j, i));
            }
        }
    }
    let allowed = (options.max_share * field.valid_count() as f64) as usize;
    let mut valid = field.valid.clone();
    take_worst(&mut found, &mut valid, candidates, allowed);
    found
}

/// Median absolute residual (times [`MAD`]) of windows around every fourth node; a node takes the nearest.
struct LocalScale {
    scales: Array2<f64>,
}

impl LocalScale {
    /// Nodes between window centers.
    const STEP: usize = 4;
    /// Fewest residuals (of u and v together) for a scale of its own.
    const LEAST: usize = 16;

    fn new(ru: &Array2<f64>, rv: &Array2<f64>, everywhere: f64) -> Self {
        let (ny, nx) = ru.dim();
        let (rows, columns) = (ny.div_ceil(Self::STEP), nx.div_ceil(Self::STEP));
        let mut scales = Array2::from_elem((rows, columns), everywhere);
        Zip::indexed(scales.rows_mut()).par_for_each(|a, mut row| {
            let mut near = Vec::with_capacity(2 * (2 * WINDOW + 1).pow(2));
            let j = (a * Self::STEP + Self::STEP / 2).min(ny - 1);
            for (b, scale) in row.iter_mut().enumerate() {
                let i = (b * Self::STEP + Self::STEP / 2).min(nx - 1);
                near.clear();
                for jj in j.saturating_sub(WINDOW)..=(j + WINDOW).min(ny - 1) {
                    for ii in i.saturating_sub(WINDOW)..=(i + WINDOW).min(nx - 1) {
                        if ru[[jj, ii]].is_finite() && rv[[jj, ii]].is_finite() {
                            near.extend([ru[[jj, ii]].abs(), rv[[jj, ii]].abs()]);
                        }
                    }
                }
                if near.len() >= Self::LEAST {
                    *scale = MAD * median(&mut near);
                }
            }
        });
        Self { scales }
    }

    fn at(&self, j: usize, i: usize) -> f64 {
        self.scales[[j / Self::STEP, i / Self::STEP]]
    }
}

/// Median distance of the vectors in 5 x 5 nodes from their median, the larger of the two components.
fn local_spread(field: &VelocityField, j: usize, i: usize) -> f64 {
    let (ny, nx) = field.valid.dim();
    let mut largest = 0.0_f64;
    let mut values = [0.0; 25];
    for f in [&field.u, &field.v] {
        let mut n = 0;
        for jj in j.saturating_sub(2)..=(j + 2).min(ny - 1) {
            for ii in i.saturating_sub(2)..=(i + 2).min(nx - 1) {
                if field.valid[[jj, ii]] {
                    values[n] = f[[jj, ii]];
                    n += 1;
                }
            }
        }
        let values = &mut values[..n];
        largest = largest.max(median_and_scatter(values).1);
    }
    largest
}

/// Both tests: medians, then fit and residual test in turn until nothing more is rejected.
///
/// `fit` returns the fitted velocity at the nodes of the field it is given, or `None` when there is no fit; values at rejected
/// nodes (from filled gaps) let a vector the medians rejected wrongly come back.  `ratio` is that of the last test that judged.
pub fn screen(
    field: &VelocityField,
    options: &ScreenOptions,
    mut fit: impl FnMut(&VelocityField) -> Option<(Array2<f64>, Array2<f64>)>,
) -> Screening {
    let mut found = screen_by_median(field, options);
    let allowed = (options.max_share * field.valid_count() as f64) as usize;
    for _ in 0..options.passes {
        let kept = found.apply(field);
        let Some((u_fit, v_fit)) = fit(&kept) else {
            return found;
        };
        let pass = screen_by_fit(&kept, &u_fit, &v_fit, options);
        found.passes += 1;
        let mut candidates = Vec::new();
        for (node, &reject) in pass.rejected.indexed_iter() {
            if pass.ratio[node].is_finite() {
                found.ratio[node] = pass.ratio[node];
            }
            if reject {
                candidates.push((pass.ratio[node], node.0, node.1));
            }
        }
        let mut valid = kept.valid.clone();
        if !take_worst(&mut found, &mut valid, candidates, allowed) {
            reinstate(field, &kept, &u_fit, &v_fit, pass.scale, options, &mut found);
            break;
        }
    }
    let mut valid = found.apply(field).valid;
    reject_stranded(field, &mut found, &mut valid, allowed);
    found
}

/// Takes rejected vectors back that agree with the field fitted without them.
fn reinstate(
    field: &VelocityField,
    kept: &VelocityField,
    u_fit: &Array2<f64>,
    v_fit: &Array2<f64>,
    scale: f64,
    options: &ScreenOptions,
    found: &mut Screening,
) {
    /// A prediction in a gap is about as uncertain as a vector: sqrt(2).
    const PREDICTION: f64 = std::f64::consts::SQRT_2;
    let limit = (2.0 * (field.valid_count() as f64 / options.expected_false).max(std::f64::consts::E).ln()).sqrt();
    for node in found.rejected.indexed_iter().filter(|(_, r)| **r).map(|(node, _)| node).collect::<Vec<_>>() {
        let sigma = field.sigma.at(node.0, node.1).unwrap_or((0.0, 0.0));
        let spread = SPREAD_SHARE * local_spread(kept, node.0, node.1);
        let spread = if spread.is_finite() { spread } else { 0.0 };
        let mut square = 0.0;
        for (f, fitted, sigma) in [(&field.u, u_fit, sigma.0), (&field.v, v_fit, sigma.1)] {
            let sd = (PREDICTION * sigma.max(scale / RESIDUAL_NOISE)).max(spread);
            square += ((f[node] - fitted[node]) / sd).powi(2);
        }
        if square.sqrt() < 0.5 * limit {
            found.rejected[node] = false;
            found.ratio[node] = square.sqrt() / limit;
        }
    }
}

#[cfg(test)]
mod tests {
    use std::sync::Arc;

    use super::*;
    use crate::field::{Axis, Domain, Grid, Sigma};
    use crate::numerics::noise::NoiseGenerator;

    fn sampled(n: usize, f: impl Fn(f64, f64) -> (f64, f64)) -> VelocityField {
        let axis = Axis::uniform(0.0, 1.0 / (n - 1) as f64, n).unwrap();
        let grid = Grid::new(axis.clone(), axis);
        let both = Array2::from_shape_fn((n, n), |(j, i)| f(grid.x.at(i), grid.y.at(j)));
        VelocityField::new(Arc::new(Domain::open(grid)), both.mapv(|p| p.0), both.mapv(|p| p.1)).unwrap()
    }

    #[test] // worked examples of the definition of Westerweel & Scarano 2005, epsilon 0.1 px
    fn normalized_median_gives_the_worked_examples() {
        for (center, expected) in [(1.4, 2.285714), (1.3, 1.714286), (1.6, 3.428571)] {
            let mut neighbors = [1.0, 1.1, 0.9, 1.05, 0.95, 1.0, 1.2, 0.8];
            approx::assert_abs_diff_eq!(normalized_median(center, &mut neighbors, 0.1), expected, epsilon = 1e-6);
        }
    }

    #[test] // Monte Carlo of 10^6 neighborhoods, one component: epsilon / sigma = 0, 0.2, 0.5, 1, 2
    fn false_alarms_on_pure_noise_are_those_published_for_each_noise_floor() {
        let (u, v) = NoiseGenerator::new((300, 300), 0.0, 9).unit(0);
        for (epsilon, expected, tolerance) in
            [(0.0, 0.313, 0.006), (0.2, 0.178, 0.005), (0.5, 0.062, 0.003), (1.0, 0.0062, 0.001), (2.0, 1.1e-5, 4e-5)]
        {
            let (mut alarms, mut count) = (0.0, 0.0);
            for f in [&u, &v] {
                for j in 1..299 {
                    for i in 1..299 {
                        let mut near: Vec<f64> =
                            (0..9).filter(|k| *k != 4).map(|k| f[[j + k / 3 - 1, i + k % 3 - 1]]).collect();
                        alarms += f64::from(u8::from(normalized_median(f[[j, i]], &mut near, epsilon) > 2.0));
                        count += 1.0;
                    }
                }
            }
            approx::assert_abs_diff_eq!(alarms / count, expected, epsilon = tolerance);
        }
    }

    #[test]
    fn a_single_wrong_vector_is_found_and_its_neighbors_are_kept() {
        for sigma in [Sigma::Unknown, Sigma::Uniform { u: 0.01, v: 0.01 }] {
            let mut f = sampled(17, |x, y| (y + 0.2 * (3.0 * x).sin(), x)).with_sigma(sigma);
            for place in [(8, 8), (0, 5), (16, 16)] {
                let mut wrong = f.clone();
                wrong.v[place] += 1.5;
                let found = screen_by_median(&wrong, &ScreenOptions::default());
                assert_eq!(found.count(), 1, "{place:?}");
                assert!(found.rejected[place] && found.ratio[place] > 1.0);
            }
            f.u.fill(0.0);
            assert_eq!(screen_by_median(&f, &ScreenOptions::default()).count(), 0);
        }
    }

    #[test] // u jumps from 0 to 1 between the last two rows, as under a moving lid
    fn a_row_that_continues_along_itself_is_kept() {
        let f = sampled(21, |_, y| (if y > 0.99 { 1.0 } else { 0.05 * y }, 0.0));
        for sigma in [Sigma::Unknown, Sigma::Uniform { u: 0.001, v: 0.001 }] {
            assert_eq!(screen_by_median(&f.clone().with_sigma(sigma), &ScreenOptions::default()).count(), 0);
        }
    }

    #[test]
    fn no_more_than_the_stated_share_is_rejected_and_the_report_says_so() {
        let mut f = sampled(20, |_, _| (1.0, 0.0));
        let mut lot = 1_u64;
        for _ in 0..60 {
            lot = lot.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
            f.u[[(lot >> 40) as usize % 20, (lot >> 20) as usize % 20]] = 50.0 + (lot >> 50) as f64;
        }
        let options = ScreenOptions { max_share: 0.05, ..ScreenOptions::default() };
        let found = screen_by_median(&f, &options);
        assert!(found.limited && found.count() <= 20);
    }

    #[test]
    fn residual_test_rejects_the_wrong_vector_not_those_its_error_spreads_to() {
        let f = sampled(15, |x, y| (y, x)).with_sigma(Sigma::Uniform { u: 0.01, v: 0.01 });
        let mut wrong = f.clone();
        wrong.u[[7, 7]] += 1.0;
        let (mut u_fit, v_fit) = (f.u.clone(), f.v.clone());
        u_fit[[7, 7]] += 0.3;
        for node in [(6, 7), (8, 7), (7, 6), (7, 8)] {
            u_fit[node] += 0.116;
        }
        let found = screen_by_fit(&wrong, &u_fit, &v_fit, &ScreenOptions::default());
        assert!(found.rejected[[7, 7]] && found.count() == 1);
    }

    #[test]
    fn empty_and_gappy_fields_are_screened_without_complaint() {
        let f = sampled(9, |x, y| (x, y)).without(|j, i| (j + i) % 2 == 0 || j > 4);
        let found = screen(&f, &ScreenOptions::default(), |_| None);
        assert_eq!(found.count(), 0);
        let none = f.without(|_, _| true);
        assert_eq!(screen(&none, &ScreenOptions::default(), |g| Some((g.u.clone(), g.v.clone()))).count(), 0);
    }
}
