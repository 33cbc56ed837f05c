//! Bodies and walls.

use super::axes::{DARK, Plot};
use super::scene::{Ink, Scene, Style, TextBox};
use crate::field::{Axis, Domain, Shape, Side};

/// Gray of bodies.
const BODY: Ink = Ink::solid(0xc6, 0xcb, 0xd1);

/// Draws bodies and adds what they cover to the places taken.
pub fn draw_bodies(scene: &mut Scene, plot: &Plot, domain: &Domain, taken: &mut Vec<TextBox>) {
    let style = Style { fill: Some(BODY), stroke: Some((DARK, 0.3)), dash: None };
    for (k, body) in domain.bodies.iter().enumerate() {
        let outline: Vec<[f64; 2]> = match &body.shape {
            Shape::Circle { x, y, radius } => (0..144)
                .map(|k| {
                    let t = std::f64::consts::TAU * f64::from(k) / 144.0;
                    [x + radius * t.cos(), y + radius * t.sin()]
                })
                .collect(),
            Shape::Polygon { vertices } => vertices.clone(),
            Shape::Nodes => {
                draw_nodes(scene, plot, domain, k + 1, taken);
                continue;
            }
        };
        let page: Vec<[f64; 2]> = outline.into_iter().map(|v| plot.place(v)).collect();
        if page.iter().flatten().any(|t| !t.is_finite()) {
            continue;
        }
        taken.extend(bounding_box(&page));
        scene.path(page, true, style.clone());
    }
}

fn bounding_box(page: &[[f64; 2]]) -> Option<TextBox> {
    let span = |k: usize| page.iter().map(|v| v[k]).fold((f64::MAX, f64::MIN), |(a, b), t| (a.min(t), b.max(t)));
    let ((a, b), (c, d)) = (span(0), span(1));
    (!page.is_empty()).then(|| TextBox::level([0.5 * (a + b), 0.5 * (c + d)], [0.5 * (b - a), 0.5 * (d - c)]))
}

/// A body of which only the covered nodes are known: the strips that belong to them, outlined where fluid begins.
fn draw_nodes(scene: &mut Scene, plot: &Plot, domain: &Domain, label: usize, taken: &mut Vec<TextBox>) {
    let grid = &domain.grid;
    let covered = |j: usize, i: usize| domain.covered.get([j, i]).is_some_and(|&c| usize::from(c) == label);
    let edges = |axis: &Axis| -> Vec<f64> {
        let inner = (1..axis.len()).map(|i| 0.5 * (axis.at(i - 1) + axis.at(i)));
        [axis.first()].into_iter().chain(inner).chain([axis.last()]).collect()
    };
    let (xs, ys) = (edges(&grid.x), edges(&grid.y));
    let (mut strips, mut rim) = (Vec::new(), Vec::new());
    let (ny, nx) = grid.shape();
    for j in 0..ny {
        let mut i = 0;
        while i < nx {
            if !covered(j, i) {
                i += 1;
                continue;
            }
            let start = i;
            while i < nx && covered(j, i) {
                for (beyond, from, to) in [
                    (j > 0 && !covered(j - 1, i), [xs[i], ys[j]], [xs[i + 1], ys[j]]),
                    (j + 1 < ny && !covered(j + 1, i), [xs[i], ys[j + 1]], [xs[i + 1], ys[j + 1]]),
                    (i > 0 && !covered(j, i - 1), [xs[i], ys[j]], [xs[i], ys[j + 1]]),
                    (i + 1 < nx && !covered(j, i + 1), [xs[i + 1], ys[j]], [xs[i + 1], ys[j + 1]]),
                ] {
                    if beyond {
                        rim.push((vec![plot.place(from), plot.place(to)], false));
                    }
                }
                i += 1;
            }
            let corners = [[xs[start], ys[j]], [xs[i], ys[j]], [xs[i], ys[j + 1]], [xs[start], ys[j + 1]]];
            strips.push((corners.map(|c| plot.place(c)).to_vec(), true));
        }
    }
    taken.extend(strips.iter().filter_map(|(strip, _)| bounding_box(strip)));
    scene.paths(strips, Style { fill: Some(BODY), stroke: Some((BODY, 0.1)), dash: None });
    scene.paths(rim, Style::line(DARK, 0.3));
}

/// Walls: a heavy line with short strokes on the solid side.
pub fn draw_walls(scene: &mut Scene, plot: &Plot, domain: &Domain) {
    let [w, h] = plot.size();
    let [x0, y0] = plot.at;
    for side in Side::ALL {
        if domain.walls.get(side).is_none() {
            continue;
        }
        let (start, along, out, length) = match side {
            Side::Bottom => ([x0, y0 + h], [1.0, 0.0], [0.0, 1.0], w),
            Side::Top => ([x0, y0], [1.0, 0.0], [0.0, -1.0], w),
            Side::Left => ([x0, y0], [0.0, 1.0], [-1.0, 0.0], h),
            Side::Right => ([x0 + w, y0], [0.0, 1.0], [1.0, 0.0], h),
        };
        let at = |s: f64, d: f64| [start[0] + s * along[0] + d * out[0], start[1] + s * along[1] + d * out[1]];
        scene.path(vec![at(0.0, 0.0), at(length, 0.0)], false, Style::line(DARK, 0.55));
        let strokes = (0..(length / 1.6) as usize)
            .map(|k| (vec![at(1.6 * k as f64 + 0.5, 0.9), at(1.6 * k as f64 + 1.3, 0.1)], false))
            .collect();
        scene.paths(strokes, Style::line(DARK, 0.14));
    }
}
