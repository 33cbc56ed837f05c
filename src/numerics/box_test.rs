//! Are the vectors consistent with plane incompressible flow?  Outflow of boxes of many sizes against its noise.
//!
//! The outflow of a box of `m x m` cells is the loop sum of the edge fluxes the fit uses.  Its variance follows exactly from the
//! noise model; `T_m` is the mean squared outflow over its variance, with `nu_m` degrees of freedom from the correlations of
//! neighboring boxes (Satterthwaite 1946, from memory), and the smallest p value over the sizes is corrected after Bonferroni.
//! What the quadrature and the grid cannot resolve is allowed for, so that exact fields are not taken for divergent ones.

use ndarray::Array2;
use rayon::prelude::*;
use statrs::distribution::{ChiSquared, ContinuousCDF, FisherSnedecor};

use super::divergence::gradient_maps;
use super::noise::{Correlation, Term};
use super::outflow::{Outflows, Tile};
use crate::field::{Axis, Sigma, VelocityField};

/// Settings of the check.
#[derive(Debug, Clone, PartialEq)]
pub struct DivergenceOptions {
    /// Box sizes in cells, increasing, the first 1.
    pub sizes: Vec<usize>,
    /// Probability of rejecting a field that is free of divergence.
    pub significance: f64,
    /// Fewest boxes of a size.
    pub min_boxes: usize,
}

impl DivergenceOptions {
    /// Default box sizes.
    pub const SIZES: [usize; 6] = [1, 2, 4, 8, 16, 32];
    /// Default significance.
    pub const SIGNIFICANCE: f64 = 0.05;
    /// Default fewest boxes of a size.
    pub const MIN_BOXES: usize = 4;
}

impl Default for DivergenceOptions {
    fn default() -> Self {
        Self { sizes: Self::SIZES.to_vec(), significance: Self::SIGNIFICANCE, min_boxes: Self::MIN_BOXES }
    }
}

/// Outcome of the check.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Verdict {
    /// Nothing beyond noise and truncation.
    Consistent,
    /// Outflow that neither noise nor truncation explains.
    Inconsistent,
    /// The data do not decide.
    Undecided,
}

impl Verdict {
    /// Name in files and messages.
    pub fn name(self) -> &'static str {
        match self {
            Verdict::Consistent => "consistent",
            Verdict::Inconsistent => "inconsistent",
            Verdict::Undecided => "undecided",
        }
    }
}

/// Why the verdict is what it is.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Reason {
    /// The outflow of boxes of every size is within its expectation.
    WithinNoise,
    /// The field carries no noise that shows; its outflow is within the error of the quadrature.
    WithinTruncation,
    /// Outflow grows with the box beyond what noise of any size can do.
    GrowsWithBox,
    /// All sizes exceed the declared sigma alike: sigma declared too small, or divergence on the scale of the nodes.
    SigmaTooSmall,
    /// The test rejects with the estimated overlap but not with a large one: declare the overlap.
    OverlapUnknown,
    /// Fewer boxes than the test needs.
    TooFewCells,
}

impl Reason {
    /// One sentence for reports.
    pub fn text(self) -> &'static str {
        match self {
            Reason::WithinNoise => "the outflow of boxes of every size is within what the noise explains",
            Reason::WithinTruncation => "the outflow of boxes of every size is within the error of the grid",
            Reason::GrowsWithBox => "the outflow of large boxes exceeds what noise explains",
            Reason::SigmaTooSmall => {
                "the outflow exceeds the declared sigma by the same factor at every box size: sigma is declared too small, or the \
                 flow diverges on the scale of the nodes"
            }
            Reason::OverlapUnknown => {
                "noise of a large window overlap would explain the outflow; declare the overlap to decide"
            }
            Reason::TooFewCells => "too few cells with four usable edges",
        }
    }
}

/// Result for one box size.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct ScaleResult {
    /// Box side in cells.
    pub size: usize,
    /// Number of boxes.
    pub boxes: usize,
    /// Root mean square outflow, velocity times length (times thickness).
    pub outflow_rms: f64,
    /// Its expectation from noise alone, same unit.
    pub noise_rms: f64,
    /// Mean squared outflow over its variance (noise and truncation); 1 expected.
    pub statistic: f64,
    /// Degrees of freedom of the statistic, from the correlations of the boxes; `p` also grants 1 % of doubt about sigma.
    pub degrees: f64,
    /// Probability of a larger statistic without divergence, for the declared sigma (for the estimated one when none is declared:
    /// NaN at size 1, which that estimate comes from).
    pub p: f64,
    /// Share of the expected mean square that is truncation, 0 to 1.
    pub truncation_share: f64,
}

/// Noise level found in the data.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct NoiseLevel {
    /// Root mean square sigma of a component; velocity unit.
    pub sigma: f64,
    /// Its own standard uncertainty; velocity unit.
    pub uncertainty: f64,
    /// True when truncation hides the noise: `sigma` is an upper bound.
    pub upper_bound: bool,
}

/// Overlap found in the data.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct OverlapEstimate {
    /// The best overlap, in steps of 0.05.
    pub overlap: f64,
    /// Misfit of the noise levels over the box sizes, about chi-square with [`Self::degrees`] degrees of freedom.
    pub misfit: f64,
    /// Degrees of freedom of the misfit.
    pub degrees: usize,
    /// Whether the noise has the form the model supposes (misfit below its 99 % point).
    pub fits_model: bool,
}

/// Everything the check found.
#[derive(Debug, Clone, PartialEq)]
pub struct DivergenceReport {
    /// One entry for each box size.
    pub scales: Vec<ScaleResult>,
    /// The verdict.
    pub verdict: Verdict,
    /// Why.
    pub reason: Reason,
    /// Smallest p over the sizes times their number, at most 1; NaN when nothing could be tested.
    pub p: f64,
    /// The same for the growth with box size alone, whatever sigma is.
    pub p_growth: f64,
    /// Root mean square declared sigma.
    pub sigma_declared: Option<f64>,
    /// Sigma from the smallest boxes; `None` without enough cells.
    pub sigma_estimated: Option<NoiseLevel>,
    /// Overlap used.
    pub overlap: f64,
    /// Overlap found in the data, when none was declared.
    pub overlap_estimated: Option<OverlapEstimate>,
    /// Root mean square of the nodal divergence (central differences), 1/time.
    pub divergence_rms: f64,
    /// Its expectation from noise (declared sigma, else the estimate), 1/time.
    pub divergence_noise: f64,
    /// Truncation share of the smallest boxes.
    pub truncation_share: f64,
}

/// Fewest degrees of freedom of the smallest boxes for a verdict.
const MIN_DEGREES: f64 = 8.0;
/// Relative uncertainty of sigma and of the noise model that is always granted: on millions of cells the outflow would otherwise
/// judge the fourth digit of sigma.
const MODEL_DOUBT: f64 = 0.01;
/// Overlap that stands for "any" when the overlap is unknown.
const LARGE_OVERLAP: f64 = 0.9;
/// Step of the search for the overlap.
const OVERLAP_STEP: f64 = 0.05;
/// Box sizes from which the overlap is estimated.
const OVERLAP_SIZES: [usize; 6] = [1, 2, 3, 4, 6, 8];
/// Boxes whose allowance exceeds this share of their noise variance tell nothing about sigma.
const SIGMA_TRUNCATION: f64 = 0.25;
/// Squared outflows beyond this many standard deviations are left out of the estimate of sigma.
const CLIP: f64 = 3.5;
/// Smallest boxes from which sigma is estimated.
const LEVEL_SAMPLE: usize = 1 << 17;
/// Boxes from which degrees of freedom are computed.
const SAMPLE: usize = 48;
/// Boxes from which the degrees of freedom of that estimate are computed.
const OVERLAP_DEGREES: usize = 6;
/// Boxes of one size from which the overlap is estimated.
const OVERLAP_SAMPLE: usize = 2000;
/// Relative rounding of the data: noise is never taken as smaller than this times the rms speed.
const ROUNDING: f64 = 1e-14;

/// Tests whether a field is consistent with plane incompressible flow (of its layer of given thickness).
///
/// * Gaps: a box counts with its usable cells when these are at least half; see [`DivergenceOptions`] for sizes.
/// * Accuracy: false alarms near the significance for noise of the model, 17 x 17 nodes and more; sigma within 2 % on
///   65 x 65 nodes.
/// * Without a declared sigma only the growth of outflow with box size is judged; without a declared overlap it is estimated and
///   a rejection must hold for a large overlap too.
pub fn check_divergence(field: &VelocityField, options: &DivergenceOptions) -> DivergenceReport {
    let mut outflows = Outflows::new(field);
    let estimate = field.overlap.is_none().then(|| estimate_overlap(&outflows)).flatten();
    let overlap = field.overlap.or(estimate.map(|e| e.overlap)).unwrap_or(0.0);
    let sigma_declared = field.sigma.rms(&field.valid);
    let test = BoxTest::new(field, &mut outflows, options, overlap);
    let maps = gradient_maps(field, overlap);
    let scale = if sigma_declared.is_some() { 1.0 } else { test.level.map_or(f64::NAN, |l| l.scale) };
    let (divergence_rms, divergence_noise) = maps.divergence_rms(scale);
    let (verdict, reason) = test.verdict(options, field.overlap.is_some(), || {
        BoxTest::new(field, &mut outflows, options, LARGE_OVERLAP).p_growth < options.significance
    });
    let unit = match &field.sigma {
        Sigma::Unknown => 1.0,
        _ => sigma_declared.unwrap_or(1.0),
    };
    DivergenceReport {
        verdict,
        reason,
        p: test.p,
        p_growth: test.p_growth,
        sigma_declared,
        sigma_estimated: test.level.map(|l| NoiseLevel {
            sigma: l.scale * unit,
            uncertainty: l.scale * unit * l.relative,
            upper_bound: l.upper_bound,
        }),
        overlap,
        overlap_estimated: estimate,
        divergence_rms,
        divergence_noise,
        truncation_share: test.scales.first().map_or(f64::NAN, |s| s.truncation_share),
        scales: test.scales,
    }
}

/// Outflow of the boxes of one size, for display; arrays are `(rows, columns)` of boxes, NaN where a box does not count.
#[derive(Debug, Clone, PartialEq)]
pub struct BoxMap {
    /// Box side in cells.
    pub size: usize,
    /// Box edges along x, one more than columns.
    pub x: Vec<f64>,
    /// Box edges along y, one more than rows.
    pub y: Vec<f64>,
    /// Outflow, velocity times length (times thickness).
    pub outflow: Array2<f64>,
    /// Outflow over its standard deviation from noise and truncation.
    pub z: Array2<f64>,
}

/// Map of the outflow of boxes of `size x size` cells.
///
/// `scale`: noise level as a multiple of the declared sigma, or sigma itself when none is declared.
pub fn box_map(field: &VelocityField, size: usize, overlap: f64, scale: f64) -> BoxMap {
    let size = size.max(1);
    let mut outflows = Outflows::new(field);
    outflows.allow_jumps(scale);
    let (shape, (j0, i0)) = outflows.layout(size);
    let edges = |axis: &Axis, first: usize, count: usize| (0..=count).map(|k| axis.at(first + k * size)).collect();
    let mut map = BoxMap {
        size,
        x: edges(&field.grid().x, i0, shape.1),
        y: edges(&field.grid().y, j0, shape.0),
        outflow: Array2::from_elem(shape, f64::NAN),
        z: Array2::from_elem(shape, f64::NAN),
    };
    for tile in outflows.tiles(size, &outflows.places(size), &Correlation::new(overlap)) {
        map.outflow[tile.place] = tile.outflow;
        map.z[tile.place] = tile.outflow / tile.weight_variance(scale).sqrt();
    }
    map
}

/// Noise level as a multiple of the sigma of the field.
#[derive(Debug, Clone, Copy)]
struct Level {
    scale: f64,
    relative: f64,
    upper_bound: bool,
}

struct BoxTest {
    scales: Vec<ScaleResult>,
    level: Option<Level>,
    p: f64,
    p_growth: f64,
    declared: bool,
}

impl BoxTest {
    fn new(field: &VelocityField, outflows: &mut Outflows, options: &DivergenceOptions, overlap: f64) -> Self {
        let rho = Correlation::new(overlap);
        let declared = field.sigma != Sigma::Unknown;
        let sizes: Vec<(usize, Vec<(usize, usize)>)> = options
            .sizes
            .iter()
            .filter(|&&m| m > 0)
            .map(|&m| (m, outflows.places(m)))
            .filter(|(_, places)| places.len() >= options.min_boxes)
            .collect();
        let Some((1, smallest)) = sizes.first() else {
            return Self { scales: Vec::new(), level: None, p: f64::NAN, p_growth: f64::NAN, declared };
        };
        let rounding = (ROUNDING * field.rms_speed() * field.grid().spacing()).powi(2);
        let nu = degrees(outflows, 1, smallest, &rho, SAMPLE);
        let chosen = spread(smallest, LEVEL_SAMPLE);
        let share = chosen.len() as f64 / smallest.len() as f64;
        let level = noise_level(&outflows.tiles(1, &chosen, &rho), nu * share, rounding);
        let used = if declared { 1.0 } else { level.scale };
        outflows.allow_jumps(used);
        let mut scales = Vec::new();
        let mut growth = Vec::new();
        let mut base = f64::NAN;
        for (m, places) in &sizes {
            let nu = if *m == 1 { nu } else { degrees(outflows, *m, places, &rho, SAMPLE) };
            let sums = Sums::new(outflows, *m, places, &rho, [used, level.scale], rounding);
            let [t, free] = sums.statistic;
            if *m == 1 {
                base = nu;
            }
            let judged = believed(nu);
            let p_free = if *m == 1 {
                f64::NAN
            } else {
                FisherSnedecor::new(judged, believed(base)).map_or(f64::NAN, |f| f.sf(free))
            };
            let p = if declared { ChiSquared::new(judged).map_or(f64::NAN, |c| c.sf(judged * t)) } else { p_free };
            growth.push(p_free);
            let noise = sums.variance * used * used;
            scales.push(ScaleResult {
                size: *m,
                boxes: places.len(),
                outflow_rms: sums.square.sqrt(),
                noise_rms: noise.sqrt(),
                statistic: t,
                degrees: nu,
                p,
                truncation_share: sums.truncation / (sums.truncation + noise),
            });
        }
        let p: Vec<f64> = scales.iter().map(|s| s.p).collect();
        Self { p: bonferroni(&p), p_growth: bonferroni(&growth), scales, level: Some(level), declared }
    }

    fn verdict(
        &self,
        options: &DivergenceOptions,
        overlap_declared: bool,
        holds_for_large_overlap: impl FnOnce() -> bool,
    ) -> (Verdict, Reason) {
        let Some(first) = self.scales.first() else {
            return (Verdict::Undecided, Reason::TooFewCells);
        };
        if !(first.degrees >= MIN_DEGREES && self.p.is_finite()) {
            return (Verdict::Undecided, Reason::TooFewCells);
        }
        if self.p >= options.significance {
            let truncated = self.scales.iter().all(|s| s.truncation_share > 0.5);
            let reason = if truncated { Reason::WithinTruncation } else { Reason::WithinNoise };
            return (Verdict::Consistent, reason);
        }
        let sigma_explains = self.declared
            && first.p * (self.scales.len() as f64) < options.significance
            && (self.p_growth.is_nan() || self.p_growth >= options.significance);
        if sigma_explains {
            return (Verdict::Undecided, Reason::SigmaTooSmall);
        }
        if !overlap_declared && !holds_for_large_overlap() {
            return (Verdict::Undecided, Reason::OverlapUnknown);
        }
        (Verdict::Inconsistent, Reason::GrowsWithBox)
    }
}

/// Degrees of freedom with the doubt about the noise model in them: `Var T = 2 / nu + (2 doubt)^2`.
fn believed(nu: f64) -> f64 {
    2.0 / (2.0 / nu + (2.0 * MODEL_DOUBT).powi(2))
}

/// Means over the boxes of one size.
struct Sums {
    /// Mean squared outflow over its expectation, both weighted by the inverse variance, for two noise scales.
    statistic: [f64; 2],
    square: f64,
    variance: f64,
    /// For the first noise scale.
    truncation: f64,
}

impl Sums {
    /// Boxes held in memory at a time; fixed, so that sums do not depend on threads.
    const CHUNK: usize = 1 << 16;

    fn new(
        outflows: &Outflows,
        m: usize,
        places: &[(usize, usize)],
        rho: &Correlation,
        scales: [f64; 2],
        rounding: f64,
    ) -> Self {
        let floor = rounding * (4 * m) as f64;
        let mut seen = [0.0; 2];
        let mut expected = [0.0; 2];
        let (mut square, mut variance, mut truncation) = (0.0, 0.0, 0.0);
        for chunk in places.chunks(Self::CHUNK) {
            for t in outflows.tiles(m, chunk, rho) {
                let o2 = t.outflow * t.outflow;
                for (k, scale) in scales.into_iter().enumerate() {
                    let weight = 1.0 / (t.weight_variance(scale) + floor);
                    seen[k] += weight * o2;
                    expected[k] += weight * (t.expected(scale) + floor);
                }
                square += o2;
                variance += t.variance;
                truncation += t.truncation(scales[0]);
            }
        }
        let n = places.len() as f64;
        Self {
            statistic: [seen[0] / expected[0], seen[1] / expected[1]],
            square: square / n,
            variance: variance / n,
            truncation: truncation / n,
        }
    }
}

fn mean(tiles: &[Tile], f: impl Fn(&Tile) -> f64) -> f64 {
    tiles.iter().map(f).sum::<f64>() / tiles.len() as f64
}

/// Smallest finite p times the number of finite ones, at most 1; NaN when there is none.
fn bonferroni(p: &[f64]) -> f64 {
    let finite: Vec<f64> = p.iter().copied().filter(|p| p.is_finite()).collect();
    finite.iter().copied().reduce(f64::min).map_or(f64::NAN, |least| (least * finite.len() as f64).min(1.0))
}

/// Noise level from the smallest boxes, robust against outliers, from boxes where truncation is small.
fn noise_level(tiles: &[Tile], nu: f64, rounding: f64) -> Level {
    let all: Vec<f64> = tiles.iter().map(|t| t.outflow * t.outflow / t.variance).collect();
    let floor = rounding / mean(tiles, |t| t.variance);
    let mut square = clipped_mean_square(&all).max(floor);
    let mut share = 1.0;
    let mut upper_bound = false;
    for _ in 0..4 {
        let clean: Vec<f64> = tiles
            .iter()
            .zip(&all)
            .filter(|(t, _)| t.truncation(square.sqrt()) <= SIGMA_TRUNCATION * square * t.variance)
            .map(|(_, z)| *z)
            .collect();
        share = clean.len() as f64 / all.len() as f64;
        upper_bound = share < 0.25;
        if upper_bound {
            square = clipped_mean_square(&all).max(floor);
            share = 1.0;
            break;
        }
        square = clipped_mean_square(&clean).max(floor);
    }
    Level { scale: square.sqrt(), relative: (0.5 / (nu * share)).sqrt(), upper_bound }
}

/// Mean of squares of a normal sample with what lies beyond [`CLIP`] standard deviations left out, made unbiased; starts from the
/// median.
fn clipped_mean_square(squares: &[f64]) -> f64 {
    /// Median of chi-square with one degree of freedom.
    const MEDIAN: f64 = 0.454_936_423_119_572_7;
    /// Mean of z^2 within +-[`CLIP`]: 1 - 2 c phi(c) / (2 Phi(c) - 1).
    const CLIPPED_MEAN: f64 = 0.993_888_377_6;
    let mut sorted: Vec<f64> = squares.iter().copied().filter(|s| s.is_finite()).collect();
    if sorted.is_empty() {
        return f64::NAN;
    }
    sorted.sort_unstable_by(f64::total_cmp);
    let mut square = sorted[sorted.len() / 2] / MEDIAN;
    for _ in 0..20 {
        let inside = sorted.partition_point(|&s| s <= CLIP * CLIP * square);
        if inside == 0 {
            break;
        }
        let next = sorted[..inside].iter().sum::<f64>() / inside as f64 / CLIPPED_MEAN;
        if (next - square).abs() <= 1e-12 * square {
            break;
        }
        square = next;
    }
    square
}

/// At most `limit` entries, evenly spread.
fn spread<T: Copy>(all: &[T], limit: usize) -> Vec<T> {
    let step = all.len().div_ceil(limit.max(1)).max(1);
    all.iter().copied().skip(step / 2).step_by(step).collect()
}

/// Degrees of freedom of the mean squared standardized outflow, `N / mean_b sum_b' corr(b, b')^2`, the mean over a spread sample.
fn degrees(outflows: &Outflows, m: usize, places: &[(usize, usize)], rho: &Correlation, sample: usize) -> f64 {
    // Boxes further apart than this share no correlated nodes: a rule reaches one node beyond its edge on either side.
    let reach = 1 + (rho.reach() + 4) / m;
    let chosen = spread(places, if rho.reach() > 20 { sample / 3 } else { sample });
    let sums: Vec<f64> = chosen
        .par_iter()
        .map(|&place| {
            let terms = outflows.tile_terms(m, place);
            let variance = outflows.tile_covariance(&terms, &terms, rho);
            let (ty, tx) = place;
            let mut sum = 0.0;
            for row in ty.saturating_sub(reach)..=ty + reach {
                let from = places.partition_point(|p| *p < (row, tx.saturating_sub(reach)));
                let to = places.partition_point(|p| *p <= (row, tx + reach));
                for &other in &places[from..to] {
                    if other == place {
                        sum += 1.0;
                        continue;
                    }
                    let around = outflows.tile_terms(m, other);
                    let covariance = outflows.tile_covariance(&terms, &around, rho);
                    if covariance != 0.0 {
                        sum += covariance * covariance / (variance * outflows.tile_covariance(&around, &around, rho));
                    }
                }
            }
            sum
        })
        .collect();
    places.len() as f64 / (sums.iter().sum::<f64>() / sums.len() as f64)
}

/// Overlap whose noise levels agree best over the box sizes: least `sum_m 2 nu_m (ln sigma_m - mean)^2`.
///
/// `None` without two sizes of at least 16 boxes.
fn estimate_overlap(outflows: &Outflows) -> Option<OverlapEstimate> {
    struct Size {
        m: usize,
        places: Vec<(usize, usize)>,
        chosen: Vec<(usize, usize)>,
        /// Squared outflow.
        squares: Vec<f64>,
        /// Sum over the boxes of coefficient products by lag `[dy][dx]`.
        lags: Vec<Vec<f64>>,
    }
    let white = Correlation::new(0.0);
    let sizes: Vec<Size> = OVERLAP_SIZES
        .iter()
        .map(|&m| (m, outflows.places(m)))
        .filter(|(_, places)| places.len() >= 16)
        .map(|(m, places)| {
            let chosen = spread(&places, OVERLAP_SAMPLE);
            let width = m + 6;
            let mut lags = vec![vec![0.0; width]; width];
            for &place in &chosen {
                for (part, terms) in outflows.tile_terms(m, place).iter().enumerate() {
                    let scaled: Vec<Term> =
                        terms.iter().map(|t| Term { weight: t.weight * outflows.sigma_of(part, t), ..*t }).collect();
                    for a in &scaled {
                        for b in &scaled {
                            lags[a.j.abs_diff(b.j)][a.i.abs_diff(b.i)] += a.weight * b.weight;
                        }
                    }
                }
            }
            let tiles = outflows.tiles(m, &chosen, &white);
            let squares = tiles.iter().map(|t| t.outflow * t.outflow).collect();
            Size { m, places, chosen, squares, lags }
        })
        .collect();
    if sizes.len() < 2 {
        return None;
    }
    // Degrees of freedom only weigh the sizes: a few overlaps, linear between them.
    const KNOTS: [f64; 4] = [0.0, 0.5, 0.75, LARGE_OVERLAP];
    let freedom: Vec<[f64; 4]> = sizes
        .iter()
        .map(|s| {
            KNOTS.map(|overlap| {
                let nu = degrees(outflows, s.m, &s.places, &Correlation::new(overlap), OVERLAP_DEGREES);
                nu * s.chosen.len() as f64 / s.places.len() as f64
            })
        })
        .collect();
    let interpolate = |nu: &[f64; 4], overlap: f64| {
        let k = KNOTS.partition_point(|knot| *knot < overlap).clamp(1, KNOTS.len() - 1);
        nu[k - 1] + (nu[k] - nu[k - 1]) * (overlap - KNOTS[k - 1]) / (KNOTS[k] - KNOTS[k - 1])
    };
    let mut best: Option<OverlapEstimate> = None;
    let steps = (LARGE_OVERLAP / OVERLAP_STEP).round() as usize;
    for step in 0..=steps {
        let overlap = step as f64 * OVERLAP_STEP;
        let rho = Correlation::new(overlap);
        let (mut weights, mut logs) = (Vec::new(), Vec::new());
        for (size, nu) in sizes.iter().zip(&freedom) {
            let mut variance = 0.0;
            for (dy, row) in size.lags.iter().enumerate() {
                for (dx, c) in row.iter().enumerate() {
                    variance += c * rho.at(dy) * rho.at(dx);
                }
            }
            variance /= size.chosen.len() as f64;
            weights.push(2.0 * interpolate(nu, overlap));
            logs.push(0.5 * (clipped_mean_square(&size.squares) / variance).ln());
        }
        let total: f64 = weights.iter().sum();
        let middle = weights.iter().zip(&logs).map(|(w, l)| w * l).sum::<f64>() / total;
        let misfit: f64 = weights.iter().zip(&logs).map(|(w, l)| w * (l - middle).powi(2)).sum();
        if misfit.is_finite() && best.is_none_or(|b| misfit < b.misfit) {
            let degrees = sizes.len().saturating_sub(2).max(1);
            let limit = ChiSquared::new(degrees as f64).map_or(f64::INFINITY, |c| c.inverse_cdf(0.99));
            best = Some(OverlapEstimate { overlap, misfit, degrees, fits_model: misfit <= limit });
        }
    }
    best
}

#[cfg(test)]
mod tests {
    use std::f64::consts::TAU;
    use std::sync::Arc;

    use super::*;
    use crate::field::{Domain, Grid, Thickness};
    use crate::numerics::noise::NoiseGenerator;

    fn square(n: usize) -> Grid {
        let axis = Axis::uniform(0.0, 1.0 / (n - 1) as f64, n).unwrap();
        Grid::new(axis.clone(), axis)
    }

    fn sampled(grid: Grid, f: impl Fn(f64, f64) -> (f64, f64)) -> VelocityField {
        let part = |k: usize| {
            Array2::from_shape_fn(grid.shape(), |(j, i)| {
                let (u, v) = f(grid.x.at(i), grid.y.at(j));
                if k == 0 { u } else { v }
            })
        };
        let (u, v) = (part(0), part(1));
        VelocityField::new(Arc::new(Domain::open(grid)), u, v).unwrap()
    }

    /// Taylor & Green 1937.
    fn cells(x: f64, y: f64) -> (f64, f64) {
        let k = TAU * 0.85;
        let (a, b) = (k * (x - 0.13), k * (y - 0.07));
        (a.sin() * b.cos(), -a.cos() * b.sin())
    }

    fn noisy(mut f: VelocityField, sigma: f64, overlap: f64, member: u64) -> VelocityField {
        let (nu, nv) = NoiseGenerator::new(f.grid().shape(), overlap, 5).unit(member);
        f.u.scaled_add(sigma, &nu);
        f.v.scaled_add(sigma, &nv);
        f
    }

    fn declared(f: VelocityField, sigma: f64, overlap: f64) -> VelocityField {
        f.with_sigma(Sigma::Uniform { u: sigma, v: sigma }).with_overlap(overlap)
    }

    #[test] // standard deviations and degrees of freedom of a 400-member noise pool on 65 x 65 nodes, measured independently
    fn box_noise_and_degrees_of_freedom_are_those_of_a_large_noise_pool() {
        let f = sampled(square(65), |_, _| (0.0, 0.0));
        let outflows = Outflows::new(&f);
        let table: [(f64, [f64; 5], [f64; 4]); 3] = [
            (0.0, [1.538, 2.598, 3.839, 5.572, 7.89], [0.82, 0.86, 0.85, 0.86]),
            (0.5, [1.295, 3.304, 5.19, 7.69, 11.3], [0.58, 0.91, 0.84, 0.87]),
            (0.75, [0.959, 2.60, 6.55, 10.3, 15.4], [0.37, 0.60, 0.85, 0.88]),
        ];
        for (overlap, sd, ratio) in table {
            let rho = Correlation::new(overlap);
            for (k, m) in [1, 2, 4, 8, 16].into_iter().enumerate() {
                let places = outflows.places(m);
                let tiles = outflows.tiles(m, &places, &rho);
                let mean_sd = mean(&tiles, |t| t.variance).sqrt() * 64.0;
                approx::assert_relative_eq!(mean_sd, sd[k], max_relative = 0.02);
                if k < 4 {
                    let nu = degrees(&outflows, m, &places, &rho, SAMPLE) / places.len() as f64;
                    approx::assert_abs_diff_eq!(nu, ratio[k], epsilon = 0.08);
                }
            }
        }
    }

    #[test] // trapezoid closed form sd = sigma h sqrt(4 (1 - rho(m)) w'Rw) does not hold for the 4-point rule; the pool does
    fn box_variance_with_gaps_and_uneven_sigma_is_that_of_drawn_noise() {
        let mut grid = square(20);
        grid.x = Axis::from_nodes((0..20).map(|i| i as f64 + 0.2 * (i as f64 * 0.7).sin()).collect()).unwrap();
        let sigma = |j: usize, i: usize| 0.5 + 0.05 * j as f64 + 0.02 * i as f64;
        let f = sampled(grid, |_, _| (0.0, 0.0)).without(|j, i| (j, i) == (6, 7) || (j > 12 && i < 4)).with_sigma(
            Sigma::PerNode {
                u: Array2::from_shape_fn((20, 20), |(j, i)| sigma(j, i)),
                v: Array2::from_elem((20, 20), 0.7),
            },
        );
        for overlap in [0.0, 0.5] {
            let rho = Correlation::new(overlap);
            let source = NoiseGenerator::new((20, 20), overlap, 3);
            for m in [1, 4] {
                let outflows = Outflows::new(&f);
                let places = outflows.places(m);
                let expected = outflows.tiles(m, &places, &rho);
                let mut sums = vec![0.0; places.len()];
                let mut allowance = 0.0;
                for member in 0..400 {
                    let (u, v) = source.of_field(&f, member);
                    let noise = VelocityField { u, v, ..f.clone() };
                    for (sum, t) in sums.iter_mut().zip(Outflows::new(&noise).tiles(m, &places, &rho)) {
                        *sum += t.outflow * t.outflow / 400.0;
                        allowance += t.allowance / t.allowance_noise / (400 * places.len()) as f64;
                    }
                }
                let ratio = mean(&expected, |t| t.variance) * places.len() as f64 / sums.iter().sum::<f64>();
                approx::assert_abs_diff_eq!(ratio, 1.0, epsilon = 0.03);
                for (t, sum) in expected.iter().zip(&sums) {
                    assert!(
                        (0.7..1.35).contains(&(sum / t.variance)),
                        "{m} {overlap} {:?}: {}",
                        t.place,
                        sum / t.variance
                    );
                }
                if m == 1 {
                    approx::assert_abs_diff_eq!(allowance, 1.0, epsilon = 0.25);
                }
            }
        }
    }

    #[test]
    fn the_outflow_of_a_box_is_the_sum_of_its_cells_and_exact_for_linear_divergence() {
        let f = sampled(square(17), |x, y| (0.5 * x + y, 0.25 * y - x));
        let outflows = Outflows::new(&f);
        let rho = Correlation::new(0.0);
        for m in [1, 2, 4] {
            for t in outflows.tiles(m, &outflows.places(m), &rho) {
                approx::assert_abs_diff_eq!(t.outflow, 0.75 * (m as f64 / 16.0).powi(2), epsilon = 1e-13);
                approx::assert_abs_diff_eq!(t.allowance, 0.0, epsilon = 1e-20);
            }
        }
    }

    #[test]
    fn noise_of_the_declared_size_is_consistent_and_sigma_is_found_within_3_percent() {
        for (overlap, member) in [(0.0, 1), (0.5, 2), (0.75, 3)] {
            let f = declared(noisy(sampled(square(65), cells), 0.02, overlap, member), 0.02, overlap);
            let report = check_divergence(&f, &DivergenceOptions::default());
            assert_eq!(report.verdict, Verdict::Consistent, "{report:?}");
            let level = report.sigma_estimated.unwrap();
            assert!((level.sigma / 0.02 - 1.0).abs() < 0.06 && level.uncertainty < 0.0006, "{level:?}");
            approx::assert_relative_eq!(report.divergence_rms, report.divergence_noise, max_relative = 0.2);
        }
    }

    #[test]
    fn a_flipped_component_is_inconsistent_with_any_declaration() {
        let f = noisy(sampled(square(65), |x, y| (cells(x, y).0, -cells(x, y).1)), 0.02, 0.5, 4);
        for field in [declared(f.clone(), 0.02, 0.5), f.clone().with_overlap(0.5), f] {
            let report = check_divergence(&field, &DivergenceOptions::default());
            assert_eq!(report.verdict, Verdict::Inconsistent, "{report:#?}");
        }
    }

    #[test]
    fn a_sigma_declared_three_times_too_small_leaves_the_verdict_open() {
        let f = declared(noisy(sampled(square(65), cells), 0.03, 0.5, 6), 0.01, 0.5);
        let report = check_divergence(&f, &DivergenceOptions::default());
        assert_eq!((report.verdict, report.reason), (Verdict::Undecided, Reason::SigmaTooSmall), "{report:#?}");
        approx::assert_relative_eq!(report.sigma_estimated.unwrap().sigma, 0.03, max_relative = 0.05);
    }

    #[test]
    fn overlap_is_found_within_0_1() {
        for (overlap, member) in [(0.0, 1), (0.5, 2), (0.75, 3)] {
            let f = noisy(sampled(square(65), cells), 0.03, overlap, member);
            let found = estimate_overlap(&Outflows::new(&f)).unwrap();
            assert!((found.overlap - overlap).abs() < 0.101 && found.fits_model, "{found:?}");
        }
    }

    #[test]
    fn exact_fields_are_never_divergent_whatever_sigma_is_declared() {
        let vortex = |x: f64, y: f64| {
            let (a, b) = (x - 0.48, y - 0.53);
            let r2 = a * a + b * b;
            let q = -(-r2 / 0.01).exp_m1() / r2.max(1e-12);
            (-q * b, q * a)
        };
        let flows: [fn(f64, f64) -> (f64, f64); 2] = [cells, vortex];
        for flow in flows {
            for n in [17, 33, 65] {
                let f = sampled(square(n), flow).without(|j, i| (j * 7 + i * 3) % 41 == 0);
                for field in [
                    f.clone(),
                    f.clone().with_overlap(0.5),
                    declared(f.clone(), 1e-12, 0.0),
                    declared(f.clone(), 1e-4, 0.5),
                    declared(f.clone(), 0.02, 0.75),
                ] {
                    let report = check_divergence(&field, &DivergenceOptions::default());
                    assert_ne!(report.verdict, Verdict::Inconsistent, "{n} {report:#?}");
                }
            }
        }
    }

    #[test]
    fn two_nodes_a_side_or_gaps_everywhere_are_undecided_not_an_error() {
        let tiny = sampled(square(3), cells);
        let holes = sampled(square(20), cells).without(|j, i| j % 2 == 0 && i % 2 == 0);
        for field in [tiny, holes.clone(), declared(holes, 0.1, 0.5)] {
            let report = check_divergence(&field, &DivergenceOptions::default());
            assert_eq!((report.verdict, report.reason), (Verdict::Undecided, Reason::TooFewCells), "{report:#?}");
        }
    }

    #[test]
    fn box_map_places_a_source_in_its_box() {
        let f = sampled(square(20), |x, y| {
            let (a, b) = (x - 0.51, y - 0.27);
            let r2 = a * a + b * b + 1e-4;
            (a / r2, b / r2)
        });
        let map = box_map(&declared(f, 0.01, 0.0), 4, 0.0, 1.0);
        assert_eq!((map.outflow.dim(), map.x.len(), map.y.len()), ((4, 4), 5, 5));
        let largest = map.outflow.indexed_iter().max_by(|a, b| a.1.total_cmp(b.1)).unwrap().0;
        let inside = |edges: &[f64], k: usize, at: f64| edges[k] <= at && at <= edges[k + 1];
        assert!(inside(&map.y, largest.0, 0.27) && inside(&map.x, largest.1, 0.51) && map.z[largest] > 5.0);
    }

    #[test] // axisymmetric stagnation flow u_x = -2 x, u_r = r: divergent in the plane, not with the radius as thickness
    fn thickness_enters_the_outflow() {
        let plane = sampled(square(33), |x, y| (-2.0 * x, y));
        let mut domain = (*plane.domain).clone();
        domain.thickness = Thickness::Radius;
        let round = VelocityField { domain: Arc::new(domain), ..plane.clone() };
        let verdict =
            |f: VelocityField| check_divergence(&declared(f, 0.01, 0.0), &DivergenceOptions::default()).verdict;
        assert_eq!(verdict(plane), Verdict::Inconsistent);
        assert_eq!(verdict(round), Verdict::Consistent);
    }
}
