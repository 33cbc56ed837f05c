//! Streamlines on the page: weight by role, arrow heads, levels written along them.

use super::axes::{DARK, Plot};
use super::font;
use super::scene::{Anchor, Ink, Scene, Style, TextBox, TextStyle};
use crate::extract::contour::{Contour, Role, VertexFlag};

/// Ink of ordinary streamlines.
const STREAM: Ink = Ink::solid(0x2b, 0x37, 0x48);

/// Lines shorter than this on the page, in millimeters, carry no arrow.
const ARROW_LENGTH: f64 = 9.0;

/// A line gets one arrow head on every so many millimeters.
const ARROW_SPACING: f64 = 90.0;

/// Arrow heads of one line at most.
const MOST_ARROWS: usize = 12;

/// Labels keep this distance from other marks, in millimeters.
const CLEARANCE: f64 = 0.5;

/// Dashes of lines through filled gaps, millimeters on and off.
pub const FILLED_DASH: [f64; 2] = [0.9, 0.7];

/// Filled stretches shorter than this on the page, in millimeters, are drawn through: single vectors left out would only fray the lines.
const SHORTEST_DASHED: f64 = 3.0;

/// A stretch of a line on the page that was measured throughout, or filled throughout.
struct Stretch {
    points: Vec<[f64; 2]>,
    filled: bool,
}

/// Stretches of a contour on the page; vertices that are not finite interrupt it, closed lines come back to their start.
fn stretches(plot: &Plot, contour: &Contour) -> Vec<Stretch> {
    let n = contour.vertices.len();
    let count = if contour.closed && n > 1 { n + 1 } else { n };
    let mut out: Vec<Stretch> = Vec::new();
    let mut open = false;
    for k in 0..count {
        let p = plot.place(contour.vertices[k % n]);
        if !(p[0].is_finite() && p[1].is_finite()) {
            open = false;
            continue;
        }
        let filled = contour.flags.get(k % n) == Some(&VertexFlag::Filled);
        match out.last_mut() {
            Some(last) if open && last.filled == filled => last.points.push(p),
            Some(last) if open => {
                // Vertices can be far apart on straight lines: the change lies somewhere between, drawn midway.
                let middle = last.points.last().map(|q| [0.5 * (q[0] + p[0]), 0.5 * (q[1] + p[1])]);
                last.points.extend(middle);
                out.push(Stretch { points: middle.into_iter().chain([p]).collect(), filled });
            }
            _ => out.push(Stretch { points: vec![p], filled }),
        }
        open = true;
    }
    out.retain(|s| s.points.len() > 1);
    for stretch in &mut out {
        stretch.filled &= length(&stretch.points) > SHORTEST_DASHED;
    }
    out
}

/// Shares of a segment that lie within a box, `None` when it misses.
fn inside_box(a: [f64; 2], b: [f64; 2], spot: &TextBox) -> Option<(f64, f64)> {
    let (s, c) = spot.angle.to_radians().sin_cos();
    let local = |p: [f64; 2]| {
        let d = [p[0] - spot.center[0], p[1] - spot.center[1]];
        [c * d[0] + s * d[1], c * d[1] - s * d[0]]
    };
    let (p, q) = (local(a), local(b));
    let (mut from, mut to) = (0.0_f64, 1.0_f64);
    for k in 0..2 {
        let (d, h) = (q[k] - p[k], spot.half[k]);
        if d == 0.0 {
            if p[k].abs() >= h {
                return None;
            }
        } else {
            let (t0, t1) = ((-h - p[k]) / d, (h - p[k]) / d);
            from = from.max(t0.min(t1));
            to = to.min(t0.max(t1));
        }
    }
    (from < to).then_some((from, to))
}

/// Cuts a page polyline where labels stand.
fn cut(points: &[[f64; 2]], spots: &[TextBox]) -> Vec<Vec<[f64; 2]>> {
    let mut pieces = Vec::new();
    let mut piece: Vec<[f64; 2]> = points.first().copied().into_iter().collect();
    for w in points.windows(2) {
        let [a, b] = [w[0], w[1]];
        let at = |t: f64| [a[0] + t * (b[0] - a[0]), a[1] + t * (b[1] - a[1])];
        let length = distance(a, b);
        let mut holes: Vec<(f64, f64)> = spots
            .iter()
            .filter(|s| distance(s.center, a) <= length + s.half[0] + s.half[1])
            .filter_map(|s| inside_box(a, b, s))
            .collect();
        holes.sort_by(|a, b| a.0.total_cmp(&b.0));
        for (from, to) in holes {
            if from > 0.0 {
                piece.push(at(from));
            }
            pieces.push(std::mem::replace(&mut piece, vec![at(to)]));
        }
        piece.push(b);
    }
    pieces.push(piece);
    // What is left within a label is one point, or the rest of a segment that ends in it.
    pieces.retain(|p| p.len() > 1 && length(p) > 0.05);
    pieces
}

/// Draws all lines but walls, cut where labels stand, dashed through filled gaps; whether a dashed one was drawn.
pub fn draw_lines(scene: &mut Scene, plot: &Plot, contours: &[Contour], spots: &[TextBox]) -> bool {
    let mut dashed = false;
    for (role, ink, width) in [(Role::Level, STREAM, 0.18), (Role::Separatrix, DARK, 0.42)] {
        for filled in [false, true] {
            let pieces: Vec<(Vec<[f64; 2]>, bool)> = contours
                .iter()
                .filter(|c| c.role == role)
                .flat_map(|c| stretches(plot, c))
                .filter(|s| s.filled == filled)
                .flat_map(|s| if role == Role::Level { cut(&s.points, spots) } else { vec![s.points] })
                .map(|points| (thin(&points), false))
                .collect();
            dashed |= filled && !pieces.is_empty();
            scene.paths(pieces, Style { dash: filled.then_some(FILLED_DASH), ..Style::line(ink, width) });
        }
    }
    dashed
}

/// A page polyline with the arc length of every vertex.
struct Rail {
    points: Vec<[f64; 2]>,
    starts: Vec<f64>,
}

impl Rail {
    fn new(points: Vec<[f64; 2]>) -> Self {
        let mut s = 0.0;
        let mut starts = Vec::with_capacity(points.len());
        starts.extend(points.first().map(|_| 0.0));
        starts.extend(points.windows(2).map(|w| {
            s += distance(w[0], w[1]);
            s
        }));
        Self { points, starts }
    }

    fn length(&self) -> f64 {
        self.starts.last().copied().unwrap_or(0.0)
    }

    /// Place and direction at an arc length.
    fn at(&self, s: f64) -> Option<([f64; 2], [f64; 2])> {
        if !(0.0..=self.length()).contains(&s) {
            return None;
        }
        let k = self.starts.partition_point(|&start| start < s).max(1);
        let (&from, &to) = (self.points.get(k - 1)?, self.points.get(k)?);
        let l = self.starts[k] - self.starts[k - 1];
        let t = [(to[0] - from[0]) / l, (to[1] - from[1]) / l];
        let along = s - self.starts[k - 1];
        (l > 0.0).then_some(([from[0] + along * t[0], from[1] + along * t[1]], t))
    }
}

fn distance(a: [f64; 2], b: [f64; 2]) -> f64 {
    (b[0] - a[0]).hypot(b[1] - a[1])
}

/// Vertices left out depart from the line drawn by less than this, in millimeters: half a dot at 3000 dots an inch.
const THINNED: f64 = 0.004;

/// Leaves out vertices that print cannot show (Douglas & Peucker 1973, from memory).
fn thin(points: &[[f64; 2]]) -> Vec<[f64; 2]> {
    let n = points.len();
    if n < 3 {
        return points.to_vec();
    }
    let mut keep = vec![false; n];
    (keep[0], keep[n - 1]) = (true, true);
    let mut open = vec![(0, n - 1)];
    while let Some((first, last)) = open.pop() {
        let (a, b) = (points[first], points[last]);
        let l = distance(a, b);
        let off = |p: [f64; 2]| {
            if l > 0.0 {
                ((b[0] - a[0]) * (p[1] - a[1]) - (b[1] - a[1]) * (p[0] - a[0])).abs() / l
            } else {
                distance(a, p)
            }
        };
        let far = (first + 1..last).map(|k| (k, off(points[k]))).max_by(|x, y| x.1.total_cmp(&y.1));
        if let Some((k, d)) = far
            && d > THINNED
        {
            keep[k] = true;
            open.extend([(first, k), (k, last)]);
        }
    }
    points.iter().zip(&keep).filter(|(_, k)| **k).map(|(p, _)| *p).collect()
}

fn length(line: &[[f64; 2]]) -> f64 {
    line.windows(2).map(|w| distance(w[0], w[1])).sum()
}

/// Longest stretch of a contour on the page, on which its arrow and its label stand.
fn on_page(plot: &Plot, contour: &Contour) -> Rail {
    let n = contour.vertices.len();
    let all: Vec<[f64; 2]> =
        contour.vertices.iter().cycle().take(if contour.closed { n + 1 } else { n }).map(|&v| plot.place(v)).collect();
    let longest = all
        .split(|p| !(p[0].is_finite() && p[1].is_finite()))
        .max_by(|a, b| length(a).total_cmp(&length(b)))
        .unwrap_or_default();
    Rail::new(longest.to_vec())
}

/// Small arrow heads that show which way the fluid goes, off the labels, the marks and each other; on long lines several.
pub fn draw_arrows(scene: &mut Scene, plot: &Plot, contours: &[Contour], taken: &[TextBox]) {
    let mut heads = Vec::new();
    let mut spots: Vec<[f64; 2]> = Vec::new();
    let [w, h] = plot.size();
    for contour in contours.iter().filter(|c| c.role == Role::Level) {
        let line = on_page(plot, contour);
        let total = line.length();
        if total < ARROW_LENGTH {
            continue;
        }
        let count = 1 + (total / ARROW_SPACING) as usize;
        for part in 0..count.min(MOST_ARROWS) {
            for share in [0.35, 0.6, 0.2, 0.8] {
                let Some((p, t)) = line.at((part as f64 + share) / count as f64 * total) else { continue };
                let spot = TextBox::level(p, [0.9, 0.9]);
                let inside =
                    (1.0..=w - 1.0).contains(&(p[0] - plot.at[0])) && (1.0..=h - 1.0).contains(&(p[1] - plot.at[1]));
                if !inside || taken.iter().any(|b| b.overlaps(&spot)) || spots.iter().any(|&q| distance(p, q) < 1.6) {
                    continue;
                }
                let n = [-t[1], t[0]];
                heads.push((
                    vec![
                        [p[0] + 0.85 * t[0], p[1] + 0.85 * t[1]],
                        [p[0] - 0.6 * t[0] + 0.48 * n[0], p[1] - 0.6 * t[1] + 0.48 * n[1]],
                        [p[0] - 0.6 * t[0] - 0.48 * n[0], p[1] - 0.6 * t[1] - 0.48 * n[1]],
                    ],
                    true,
                ));
                spots.push(p);
                break;
            }
        }
    }
    scene.paths(heads, Style::area(STREAM));
}

/// Levels drawn as text, with as many decimals as the step between labelled levels needs; a power of ten apart for extreme numbers.
fn level_text(value: f64, step: f64) -> String {
    if !value.is_finite() {
        return String::new();
    }
    if value == 0.0 || value.abs() < 1e-9 * step.abs() {
        return "0".to_owned();
    }
    let power = value.abs().log10().floor();
    if !(-4.0..6.0).contains(&power) {
        let text = format!("{:.2}", value / 10f64.powf(power));
        let text = text.trim_end_matches('0').trim_end_matches('.').to_owned();
        return format!("{text}·10{}", font::superscript(power as i32)).replace('-', "−");
    }
    let multiple = step > 0.0 && (value / step - (value / step).round()).abs() < 1e-6;
    let text = if multiple {
        let mut decimals = (-(step.log10() + 1e-9).floor()).clamp(0.0, 9.0) as usize;
        if ((step * 10f64.powi(decimals as i32)).fract() - 0.5).abs() < 1e-6 {
            decimals += 1;
        }
        format!("{value:.decimals$}")
    } else {
        // Levels chosen by hand, finer ones inside a cell: three figures.
        let decimals = (2.0 - power).clamp(0.0, 9.0) as usize;
        let text = format!("{value:.decimals$}");
        if text.contains('.') { text.trim_end_matches('0').trim_end_matches('.').to_owned() } else { text }
    };
    text.replace('-', "−")
}

/// Levels labelled at most; of more, only every second, fourth or fifth ... round one is.
const MOST_LABELS: usize = 9;

/// Distance between labelled levels: the step times 1, 2, 4, 5, 10 ...; 0 when levels have no common step.
fn label_stride(contours: &[Contour], step: f64) -> f64 {
    let mut levels: Vec<i64> = contours
        .iter()
        .filter(|c| c.role == Role::Level && step > 0.0)
        .map(|c| (c.psi / step).round() as i64)
        .collect();
    levels.sort_unstable();
    levels.dedup();
    let fits = |n: i64| levels.iter().filter(|k| *k % n == 0).count() <= MOST_LABELS;
    [1, 2, 4, 5, 10, 20, 40, 50, 100].into_iter().find(|&n| fits(n)).unwrap_or(200) as f64 * step
}

/// A label of a level: where it stands and what it says.
#[derive(Debug, Clone)]
pub struct LevelLabel {
    /// Box with clearance; lines are cut there.
    pub spot: TextBox,
    /// The level.
    pub text: String,
}

/// Places levels along the lines, upright, each where the line is straight and nothing else stands; lines without such a place stay
/// without a label.
pub fn place_labels(
    plot: &Plot,
    contours: &[Contour],
    sign: f64,
    step: f64,
    size: f64,
    taken: &mut Vec<TextBox>,
) -> Vec<LevelLabel> {
    let mut labels = Vec::new();
    let [w, h] = plot.size();
    let frame = ([plot.at[0] + 0.6, plot.at[1] + 0.6], [plot.at[0] + w - 0.6, plot.at[1] + h - 0.6]);
    let mut labelled: Vec<(f64, [f64; 2])> = Vec::new();
    let stride = label_stride(contours, step);
    let wanted = |psi: f64| {
        stride == 0.0
            || ((psi / stride) - (psi / stride).round()).abs() < 1e-6
            || ((psi / step) - (psi / step).round()).abs() > 1e-6
    };
    let mut order: Vec<&Contour> = contours.iter().filter(|c| c.role == Role::Level && wanted(c.psi)).collect();
    order.sort_by(|a, b| b.length.total_cmp(&a.length));
    for contour in order {
        let text = level_text(sign * contour.psi, stride);
        let half = 0.5 * font::width(&font::spans(&text)) * size;
        let line = on_page(plot, contour);
        let total = line.length();
        if text.is_empty() || total < 6.0 * half {
            continue;
        }
        // One label a line and neighborhood: pieces of one level far apart may both carry it.
        let mut best: Option<(f64, TextBox)> = None;
        for k in 0..40 {
            let share = 0.08 + 0.84 * (f64::from((k * 17) % 40) + 0.5) / 40.0;
            let s = share * total;
            let (Some((p, t)), Some((a, ta)), Some((b, tb))) = (line.at(s), line.at(s - half), line.at(s + half))
            else {
                continue;
            };
            let chord = distance(a, b);
            let straight = (ta[0] * tb[0] + ta[1] * tb[1]).min(chord / (2.0 * half));
            if straight < 0.9 {
                continue;
            }
            let mut angle = t[1].atan2(t[0]).to_degrees();
            if angle.abs() > 90.0 {
                angle -= 180.0 * angle.signum();
            }
            let spot = TextBox { center: p, half: [half + CLEARANCE, 0.5 * size + 0.3 * CLEARANCE], angle };
            let inside = spot
                .corners()
                .iter()
                .all(|c| c[0] > frame.0[0] && c[0] < frame.1[0] && c[1] > frame.0[1] && c[1] < frame.1[1]);
            if !inside || taken.iter().any(|b| b.overlaps(&spot)) {
                continue;
            }
            if labelled.iter().any(|(psi, q)| *psi == contour.psi && distance(*q, p) < 25.0) {
                continue;
            }
            let cost = (1.0 - straight) * 10.0 + angle.abs() / 90.0 + (share - 0.5).abs();
            if best.as_ref().is_none_or(|(c, _)| cost < *c) {
                best = Some((cost, spot));
            }
        }
        if let Some((_, spot)) = best {
            labelled.push((contour.psi, spot.center));
            taken.push(spot);
            labels.push(LevelLabel { spot, text });
        }
    }
    labels
}

/// Writes the labels.
pub fn draw_labels(scene: &mut Scene, labels: &[LevelLabel], size: f64) {
    for LevelLabel { spot, text } in labels {
        let (s, c) = spot.angle.to_radians().sin_cos();
        let down = 0.5 * font::CAP_HEIGHT * size;
        let at = [spot.center[0] - s * down, spot.center[1] + c * down];
        let style = TextStyle { size, angle: spot.angle, anchor: Anchor::Middle, halo: true };
        scene.text(at, font::spans(text), style);
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn levels_carry_the_decimals_of_their_step_and_powers_only_when_extreme() {
        assert_eq!(level_text(-12.5, 2.5), "−12.5");
        assert_eq!(level_text(250.0, 250.0), "250");
        assert_eq!(level_text(0.0, 0.1), "0");
        assert_eq!(level_text(2.5e-8, 5e-9), "2.5·10⁻⁸");
        assert_eq!(level_text(0.12345, 0.0), "0.123");
        assert_eq!(level_text(12.5, 250.0), "12.5");
        assert_eq!(level_text(f64::NAN, 1.0), "");
    }

    #[test]
    fn thinning_keeps_the_shape_and_the_ends() {
        let circle: Vec<[f64; 2]> = (0..=2000)
            .map(|k| {
                let t = std::f64::consts::TAU * f64::from(k) / 2000.0;
                [20.0 * t.cos(), 20.0 * t.sin()]
            })
            .collect();
        let thinned = thin(&circle);
        assert!(thinned.len() < 300 && thinned.first() == circle.first() && thinned.last() == circle.last());
        for w in thinned.windows(2) {
            let middle = [0.5 * (w[0][0] + w[1][0]), 0.5 * (w[0][1] + w[1][1])];
            assert!(20.0 - middle[0].hypot(middle[1]) <= THINNED + 1e-3 * THINNED);
        }
    }

    #[test]
    fn a_line_is_cut_where_a_label_stands() {
        let spot = TextBox { center: [5.0, 0.0], half: [1.0, 0.5], angle: 0.0 };
        let pieces = cut(&[[0.0, 0.0], [4.5, 0.0], [10.0, 0.0]], &[spot]);
        let total: f64 = pieces.iter().map(|p| length(p)).sum();
        assert_eq!(pieces.len(), 2);
        approx::assert_abs_diff_eq!(total, 8.0, epsilon = 1e-12);
        let turned = TextBox { angle: 90.0, ..spot };
        let total: f64 = cut(&[[0.0, 0.0], [10.0, 0.0]], &[turned]).iter().map(|p| length(p)).sum();
        approx::assert_abs_diff_eq!(total, 9.0, epsilon = 1e-12);
    }
}
