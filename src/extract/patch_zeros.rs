//! Zeros of the gradient of one bicubic patch: Bernstein exclusion, contraction test, Newton, subdivision.
//!
//! Everything is in box units: a box is the unit square of its own Bezier coefficients, `s` along y, `t` along x.

use crate::numerics::surface::jet_of;

/// Bezier coefficients of a patch, `[row along y][column along x]`.
pub(super) type Patch = [[f64; 4]; 4];

/// How far outside its box a zero may lie and still be taken, in box units; keeps zeros that rounding puts just across a
/// border (the neighbor finds them too, the copies are merged).
const OUTSIDE_TOLERANCE: f64 = 1e-7;
/// Newton step (cell units) below which the iteration has converged.
const NEWTON_STEP: f64 = 1e-12;
/// A last step of this size (box units), when rounding keeps the iteration from [`NEWTON_STEP`], is still accepted.
const NEWTON_STEP_LOOSE: f64 = 1e-8;
/// Newton iterations before a box is split instead.
const NEWTON_ITERATIONS: usize = 30;
/// Longest Newton step in box units (damping) and how far beyond its box an iterate may stray.
const NEWTON_REACH: (f64, f64) = (0.6, 0.5);
/// Boxes of one cell that may need halving at one level.  An isolated zero leaves a handful, a curved valley some tens; a line
/// of zeros doubles them at every level and is given up here.
const MAX_OPEN_BOXES: usize = 64;

/// Below what the gradient of psi is not told from zero.
#[derive(Debug, Clone, Copy)]
pub(super) struct Limits {
    /// Change of psi per cell below which it counts as zero.
    pub(super) cell: f64,
    /// Rounding of a Bezier coefficient.
    pub(super) rounding: f64,
    /// Deepest subdivision.
    pub(super) max_depth: usize,
}

/// A part of the cell, in cell units.
#[derive(Debug, Clone, Copy)]
pub(super) struct Part {
    /// Lower end along y.
    pub(super) s: f64,
    /// Lower end along x.
    pub(super) t: f64,
    /// Edge length.
    pub(super) size: f64,
}

/// What was found in one cell, positions `(s, t)` in cell units.
#[derive(Debug, Default)]
pub(super) struct PatchZeros {
    pub(super) zeros: Vec<[f64; 2]>,
    /// Center of the first box that could not be decided.
    pub(super) undecided: Option<[f64; 2]>,
}

/// All zeros of the gradient in a cell; parts for which `skip` is true are left out.
pub(super) fn gradient_zeros(patch: &Patch, limits: &Limits, skip: &impl Fn(&Part) -> bool) -> PatchZeros {
    let mut result = PatchZeros::default();
    if excluded(patch, limits.cell + limits.rounding) {
        return result;
    }
    let mut open = vec![(*patch, Part { s: 0.0, t: 0.0, size: 1.0 })];
    for depth in 0..=limits.max_depth {
        let mut next = Vec::new();
        let mut halved = 0;
        for (b, part) in &open {
            if skip(part) {
                continue;
            }
            let verdict = judge(b, part, patch, limits);
            let last = depth == limits.max_depth;
            match verdict {
                Verdict::None => {}
                Verdict::Zero(at) => result.zeros.push(at),
                // At the deepest level Newton's word is taken: its zero lies outside this box.
                Verdict::Outside if last => {}
                Verdict::Outside | Verdict::Split if !last => {
                    halved += 1;
                    next.extend(quarters(b, part));
                }
                Verdict::Outside | Verdict::Split | Verdict::Degenerate => {
                    let center = [part.s + 0.5 * part.size, part.t + 0.5 * part.size];
                    result.undecided.get_or_insert(center);
                }
            }
        }
        if let Some((_, part)) = next.first()
            && halved > MAX_OPEN_BOXES
        {
            result.undecided.get_or_insert([part.s, part.t]);
            break;
        }
        open = next;
    }
    result
}

enum Verdict {
    /// No zero in the box.
    None,
    /// Exactly one, here, in cell units.
    Zero([f64; 2]),
    /// Newton converged outside; the box itself is not yet proved empty.
    Outside,
    /// Not decided at this size.
    Split,
    /// The gradient vanishes, to what can be told, along a curve or over an area.
    Degenerate,
}

fn range<'a>(coefficients: impl Iterator<Item = &'a f64>) -> (f64, f64) {
    coefficients.fold((f64::INFINITY, f64::NEG_INFINITY), |(low, high), &c| (low.min(c), high.max(c)))
}

/// Bernstein coefficients of the derivatives along x and y.
fn gradient(b: &Patch) -> ([[f64; 3]; 4], [[f64; 4]; 3]) {
    let mut gx = [[0.0; 3]; 4];
    let mut gy = [[0.0; 4]; 3];
    for r in 0..4 {
        for c in 0..3 {
            gx[r][c] = 3.0 * (b[r][c + 1] - b[r][c]);
            gy[c][r] = 3.0 * (b[c + 1][r] - b[c][r]);
        }
    }
    (gx, gy)
}

/// Whether one component of the gradient keeps one sign, by more than `floor`, over the whole box.
///
/// A polynomial lies in the hull of its Bernstein coefficients (Farouki & Rajan 1987, from memory).
fn excluded(b: &Patch, floor: f64) -> bool {
    let (gx, gy) = gradient(b);
    let strict = |(low, high): (f64, f64)| low > floor || high < -floor;
    strict(range(gx.iter().flatten())) || strict(range(gy.iter().flatten()))
}

fn judge(b: &Patch, part: &Part, cell: &Patch, limits: &Limits) -> Verdict {
    let size = part.size;
    let floor = limits.cell * size + limits.rounding;
    let (gx, gy) = gradient(b);
    let mut vanishing = 0;
    for (low, high) in [range(gx.iter().flatten()), range(gy.iter().flatten())] {
        if low > floor || high < -floor {
            return Verdict::None;
        }
        vanishing += usize::from(low.abs().max(high.abs()) <= floor);
    }
    if vanishing > 0 {
        return Verdict::Degenerate;
    }
    let hessian = HessianRange::new(&gx, &gy);
    let Some(contraction) = hessian.contraction(limits.cell * size * size + 4.0 * limits.rounding) else {
        let along_axes = hessian.axes().into_iter().any(|axis| excluded_along(axis, &gx, &gy, floor));
        return if along_axes { Verdict::None } else { Verdict::Split };
    };
    // With q < 1 the map g(p) = p - C grad psi(p) contracts on the box, so a zero p in it obeys |p - g(center)| <= q / 2
    // in the maximum norm (Krawczyk 1969, from memory).
    let Contraction { inverse: [c_xx, c_xy, c_yy], q } = contraction;
    let jet = jet_of(b, 0.5, 0.5, 1.0, 1.0);
    let image = [0.5 - (c_xy * jet.psi_x + c_yy * jet.psi_y), 0.5 - (c_xx * jet.psi_x + c_xy * jet.psi_y)];
    let reach = 0.5 * q + OUTSIDE_TOLERANCE;
    if image.iter().any(|&p| p < -reach || p > 1.0 + reach) {
        return Verdict::None;
    }
    newton(cell, part)
}

struct Contraction {
    /// Inverse of the mid Hessian: xx, xy, yy.
    inverse: [f64; 3],
    /// Bound of `|| I - C H ||` in the maximum norm, below 1.
    q: f64,
}

/// Middle and half-width of the range of the second derivatives over a box.
struct HessianRange {
    xx: (f64, f64),
    xy: (f64, f64),
    yy: (f64, f64),
}

impl HessianRange {
    fn new(gx: &[[f64; 3]; 4], gy: &[[f64; 4]; 3]) -> Self {
        let mut xx = (f64::INFINITY, f64::NEG_INFINITY);
        let mut yy = xx;
        let mut xy = xx;
        let widen = |range: &mut (f64, f64), c: f64| *range = (range.0.min(c), range.1.max(c));
        for r in 0..4 {
            for c in 0..2 {
                widen(&mut xx, 2.0 * (gx[r][c + 1] - gx[r][c]));
                widen(&mut yy, 2.0 * (gy[c + 1][r] - gy[c][r]));
            }
        }
        for r in 0..3 {
            for c in 0..3 {
                widen(&mut xy, 3.0 * (gx[r + 1][c] - gx[r][c]));
            }
        }
        let mid = |(low, high): (f64, f64)| (0.5 * (low + high), 0.5 * (high - low));
        Self { xx: mid(xx), xy: mid(xy), yy: mid(yy) }
    }

    /// `None` unless the gradient map is proved one-to-one on the box.
    fn contraction(&self, floor: f64) -> Option<Contraction> {
        let ((a, ra), (b, rb), (c, rc)) = (self.xx, self.xy, self.yy);
        let det = a * c - b * b;
        let (first, second) = (ra + rb + 2.0 * floor, rb + rc + 2.0 * floor);
        let rows = [c.abs() * first + b.abs() * second, b.abs() * first + a.abs() * second];
        let q = rows[0].max(rows[1]) / det.abs();
        (q < 1.0).then(|| Contraction { inverse: [c / det, -b / det, a / det], q })
    }

    /// Principal axes of the middle Hessian.
    fn axes(&self) -> [[f64; 2]; 2] {
        let (sin, cos) = (0.5 * (2.0 * self.xy.0).atan2(self.xx.0 - self.yy.0)).sin_cos();
        [[cos, sin], [-sin, cos]]
    }
}

/// Whether the gradient along `axis` keeps one sign over the box.
///
/// Two zeros about to merge, or just gone, lie in an oblique valley of psi in which neither psi_x nor psi_y is of one sign;
/// along the axis of the valley the gradient is.
fn excluded_along(axis: [f64; 2], gx: &[[f64; 3]; 4], gy: &[[f64; 4]; 3], floor: f64) -> bool {
    // Both components raised to degree 3 in both variables.
    let raised = |g: [f64; 3]| [g[0], (g[0] + 2.0 * g[1]) / 3.0, (2.0 * g[1] + g[2]) / 3.0, g[2]];
    let (mut low, mut high) = (f64::INFINITY, f64::NEG_INFINITY);
    for c in 0..4 {
        let column = raised([gy[0][c], gy[1][c], gy[2][c]]);
        for r in 0..4 {
            let value = axis[0] * raised(gx[r])[c] + axis[1] * column[r];
            low = low.min(value);
            high = high.max(value);
        }
    }
    low > floor || high < -floor
}

/// Newton's method from the center of a part, on the patch of the whole cell: the coefficients of a small part have lost digits
/// to cancellation.
fn newton(cell: &Patch, part: &Part) -> Verdict {
    let Part { s: s0, t: t0, size } = *part;
    let (longest, stray) = (NEWTON_REACH.0 * size, NEWTON_REACH.1 * size);
    let (mut s, mut t) = (s0 + 0.5 * size, t0 + 0.5 * size);
    let mut step = f64::INFINITY;
    for _ in 0..NEWTON_ITERATIONS {
        let jet = jet_of(cell, s, t, 1.0, 1.0);
        let det = jet.hessian_det();
        let ds = (jet.psi_xy * jet.psi_x - jet.psi_xx * jet.psi_y) / det;
        let dt = (jet.psi_xy * jet.psi_y - jet.psi_yy * jet.psi_x) / det;
        step = ds.abs() + dt.abs();
        if !step.is_finite() {
            return Verdict::Split;
        }
        s = (s + ds.clamp(-longest, longest)).clamp(s0 - stray, s0 + size + stray);
        t = (t + dt.clamp(-longest, longest)).clamp(t0 - stray, t0 + size + stray);
        if step < NEWTON_STEP {
            break;
        }
    }
    if step > NEWTON_STEP + NEWTON_STEP_LOOSE * size {
        return Verdict::Split;
    }
    let margin = OUTSIDE_TOLERANCE * size;
    let inside = |p: f64, p0: f64| (p0 - margin..=p0 + size + margin).contains(&p);
    if inside(s, s0) && inside(t, t0) { Verdict::Zero([s, t]) } else { Verdict::Outside }
}

/// The four quarters of a box by de Casteljau halving.
fn quarters(b: &Patch, part: &Part) -> [(Patch, Part); 4] {
    let size = 0.5 * part.size;
    let (low, high) = halves(b);
    let [a, c, d, e] = {
        let (ll, lr) = halves(&transposed(&low));
        let (hl, hr) = halves(&transposed(&high));
        [ll, lr, hl, hr].map(|q| transposed(&q))
    };
    let at = |ds: f64, dt: f64| Part { s: part.s + ds * size, t: part.t + dt * size, size };
    [(a, at(0.0, 0.0)), (c, at(0.0, 1.0)), (d, at(1.0, 0.0)), (e, at(1.0, 1.0))]
}

/// Halves along the rows' index.
fn halves(b: &Patch) -> (Patch, Patch) {
    let mut work = *b;
    let (mut low, mut high) = (*b, *b);
    for k in 0..4 {
        low[k] = work[0];
        high[3 - k] = work[3 - k];
        for r in 0..3 - k {
            for c in 0..4 {
                work[r][c] = 0.5 * (work[r][c] + work[r + 1][c]);
            }
        }
    }
    (low, high)
}

fn transposed(b: &Patch) -> Patch {
    std::array::from_fn(|r| std::array::from_fn(|c| b[c][r]))
}

#[cfg(test)]
mod tests {
    use super::*;

    const LIMITS: Limits = Limits { cell: 1e-10, rounding: 1e-15, max_depth: 12 };

    /// Patch of a polynomial of degree 3 in each variable, by Hermite data at the corners.
    fn patch(f: impl Fn(f64, f64) -> [f64; 4]) -> Patch {
        let mut b = [[0.0; 4]; 4];
        for (a, sy, rows) in [(0.0, 1.0, [0, 1]), (1.0, -1.0, [3, 2])] {
            for (c, sx, cols) in [(0.0, 1.0, [0, 1]), (1.0, -1.0, [3, 2])] {
                let [v, fs, ft, fst] = f(a, c);
                b[rows[0]][cols[0]] = v;
                b[rows[0]][cols[1]] = v + sx * ft / 3.0;
                b[rows[1]][cols[0]] = v + sy * fs / 3.0;
                b[rows[1]][cols[1]] = v + sx * ft / 3.0 + sy * fs / 3.0 + sx * sy * fst / 9.0;
            }
        }
        b
    }

    /// Integral of (p - a)(p - b) and its slope.
    fn cubic(p: f64, a: f64, b: f64) -> (f64, f64) {
        (p * p * p / 3.0 - 0.5 * (a + b) * p * p + a * b * p, (p - a) * (p - b))
    }

    #[test]
    fn four_planted_zeros_of_one_cell_are_all_found() {
        let b = patch(|s, t| {
            let ((f, fs), (g, gt)) = (cubic(s, 0.1, 0.62), cubic(t, 0.3, 0.33));
            [f + g, fs, gt, 0.0]
        });
        let found = gradient_zeros(&b, &LIMITS, &|_| false);
        assert!(found.undecided.is_none());
        let mut zeros = found.zeros;
        let key = |zero: &[f64; 2]| zero.map(|p| (p * 1e6).round() as i64);
        zeros.sort_by_key(key);
        let planted = [[0.1, 0.3], [0.1, 0.33], [0.62, 0.3], [0.62, 0.33]];
        assert_eq!(zeros.len(), 4);
        for (zero, at) in zeros.iter().zip(planted) {
            approx::assert_abs_diff_eq!(zero[0], at[0], epsilon = 1e-11);
            approx::assert_abs_diff_eq!(zero[1], at[1], epsilon = 1e-11);
        }
    }

    #[test]
    fn a_double_zero_and_a_line_of_zeros_end_as_undecided() {
        let double = patch(|s, t| {
            let ((f, fs), (g, gt)) = (cubic(s, 0.3, 0.3), cubic(t, 0.5, 0.9));
            [f + g, fs, gt, 0.0]
        });
        assert!(gradient_zeros(&double, &LIMITS, &|_| false).undecided.is_some());
        // psi = (s - t)^2: the gradient vanishes along the diagonal
        let line = patch(|s, t| [(s - t) * (s - t), 2.0 * (s - t), 2.0 * (t - s), -2.0]);
        let found = gradient_zeros(&line, &LIMITS, &|_| false);
        assert!(found.undecided.is_some() && found.zeros.is_empty());
    }

    #[test]
    fn halving_keeps_the_patch() {
        let b = patch(|s, t| [s * t * t + s, t * t + 1.0, 2.0 * s * t, 2.0 * t]);
        let whole = Part { s: 0.0, t: 0.0, size: 1.0 };
        for (q, part) in quarters(&b, &whole) {
            let jet = jet_of(&q, 0.3, 0.8, 1.0, 1.0);
            let (s, t) = (part.s + 0.15, part.t + 0.4);
            approx::assert_abs_diff_eq!(jet.psi, s * t * t + s, epsilon = 1e-14);
        }
    }
}
