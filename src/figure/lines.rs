//! Streamlines on the page: weight by role, arrow heads, levels written along them.

use super::axes::{DARK, Plot, put_text};
use super::font;
use super::scene::{Anchor, Ink, Scene, Style, TextBox};
use crate::extract::contour::{Contour, Role};

/// Ink of ordinary streamlines.
const STREAM: Ink = Ink::solid(0x2b, 0x37, 0x48);

/// Lines shorter than this on the page, in millimeters, carry no arrow.
const ARROW_LENGTH: f64 = 9.0;

/// Labels keep this distance from other marks, in millimeters.
const CLEARANCE: f64 = 0.5;

/// Draws all lines; walls are drawn elsewhere.
pub fn draw_lines(scene: &mut Scene, plot: &Plot, contours: &[Contour]) {
    for (role, style) in [(Role::Level, Style::line(STREAM, 0.18)), (Role::Separatrix, Style::line(DARK, 0.42))] {
        let pieces: Vec<(Vec<[f64; 2]>, bool)> = contours
            .iter()
            .filter(|c| c.role == role)
            .map(|c| (c.vertices.iter().map(|&v| plot.place(v)).collect(), c.closed))
            .collect();
        scene.paths(pieces, style);
    }
}

/// Place and direction at a distance along a page polyline.
fn at_length(line: &[[f64; 2]], mut s: f64) -> Option<([f64; 2], [f64; 2])> {
    for w in line.windows(2) {
        let (dx, dy) = (w[1][0] - w[0][0], w[1][1] - w[0][1]);
        let l = dx.hypot(dy);
        if s <= l && l > 0.0 {
            return Some(([w[0][0] + s / l * dx, w[0][1] + s / l * dy], [dx / l, dy / l]));
        }
        s -= l;
    }
    None
}

fn length(line: &[[f64; 2]]) -> f64 {
    line.windows(2).map(|w| (w[1][0] - w[0][0]).hypot(w[1][1] - w[0][1])).sum()
}

/// Page polyline of a contour, closed ones come back to their start.
fn on_page(plot: &Plot, contour: &Contour) -> Vec<[f64; 2]> {
    let mut line: Vec<[f64; 2]> = contour.vertices.iter().map(|&v| plot.place(v)).collect();
    if contour.closed
        && let Some(&first) = line.first()
    {
        line.push(first);
    }
    line
}

/// Small arrow heads that show which way the fluid goes, off the labels.
pub fn draw_arrows(scene: &mut Scene, plot: &Plot, contours: &[Contour], taken: &[TextBox]) {
    let mut heads = Vec::new();
    for contour in contours.iter().filter(|c| c.role == Role::Level) {
        let line = on_page(plot, contour);
        let total = length(&line);
        if total < ARROW_LENGTH {
            continue;
        }
        for share in [0.35, 0.6, 0.2, 0.8] {
            let Some((p, t)) = at_length(&line, share * total) else { continue };
            let spot = TextBox { center: p, half: [0.9, 0.9], angle: 0.0 };
            if taken.iter().any(|b| b.overlaps(&spot)) {
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
            break;
        }
    }
    scene.paths(heads, Style::area(STREAM));
}

/// Level of a line as text, with as many decimals as the step between levels needs.
fn level_text(value: f64, step: f64) -> String {
    let decimals = if step > 0.0 { (-(step.log10() + 1e-9).floor()).max(0.0) as usize } else { 2 };
    let decimals = if step > 0.0 && ((step * 10f64.powi(decimals as i32)).fract() - 0.5).abs() < 1e-6 {
        decimals + 1
    } else {
        decimals
    };
    let text = if decimals > 5 || value.abs() >= 1e6 {
        let power = value.abs().log10().floor() as i32;
        format!("{:.1}·10{}", value / 10f64.powi(power), super::axes::superscript(power))
    } else {
        format!("{value:.decimals$}")
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

/// Writes levels along the lines, upright, each where the line is straight and nothing else stands; lines without such a place stay
/// without a label.
pub fn draw_labels(
    scene: &mut Scene,
    plot: &Plot,
    contours: &[Contour],
    sign: f64,
    step: f64,
    size: f64,
    taken: &mut Vec<TextBox>,
) {
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
        let text = level_text(sign * contour.psi, step);
        let half = 0.5 * font::width(&text, false) * size;
        let line = on_page(plot, contour);
        let total = length(&line);
        if total < 6.0 * half {
            continue;
        }
        // One label a line and neighborhood: pieces of one level far apart may both carry it.
        let mut best: Option<(f64, TextBox)> = None;
        for k in 0..40 {
            let share = 0.08 + 0.84 * (f64::from((k * 17) % 40) + 0.5) / 40.0;
            let s = share * total;
            let (Some((p, t)), Some((a, ta)), Some((b, tb))) =
                (at_length(&line, s), at_length(&line, s - half), at_length(&line, s + half))
            else {
                continue;
            };
            let chord = (b[0] - a[0]).hypot(b[1] - a[1]);
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
            if labelled.iter().any(|(psi, q)| *psi == contour.psi && (q[0] - p[0]).hypot(q[1] - p[1]) < 25.0) {
                continue;
            }
            let cost = (1.0 - straight) * 10.0 + angle.abs() / 90.0 + (share - 0.5).abs();
            if best.as_ref().is_none_or(|(c, _)| cost < *c) {
                best = Some((cost, spot));
            }
        }
        if let Some((_, spot)) = best {
            let (s, c) = spot.angle.to_radians().sin_cos();
            let down = 0.5 * font::CAP_HEIGHT * size;
            let at = [spot.center[0] - s * down, spot.center[1] + c * down];
            put_text(scene, at, &text, size, spot.angle, Anchor::Middle, false, true);
            labelled.push((contour.psi, spot.center));
            taken.push(spot);
        }
    }
}
