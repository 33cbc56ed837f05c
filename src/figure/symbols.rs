//! Marks of stagnation points: told apart by shape alone.

use super::axes::DARK;
use super::scene::{Ink, Scene, Style, arc};
use crate::extract::stagnation::{StagnationKind, StagnationPoint};

/// White.
pub const WHITE: Ink = Ink::solid(255, 255, 255);

/// Size of a mark in millimeters (radius).
pub const RADIUS: f64 = 1.25;

/// Draws the mark of a kind at a place on the page.
///
/// Center: a dot with an arrow running round it in its sense.  Saddle: a star of four hollow points.  Separation: a dark
/// half-disc on the wall with a stem into the flow; attachment: the same, white, without the stem.
pub fn draw_symbol(
    scene: &mut Scene,
    at: [f64; 2],
    kind: StagnationKind,
    counter_clockwise: bool,
    normal: [f64; 2],
    radius: f64,
) {
    let line = |w: f64| Style { fill: Some(WHITE), stroke: Some((DARK, w)), dash: None };
    match kind {
        StagnationKind::Center => {
            scene.circle(at, 1.25 * radius, Style::area(WHITE.faint(0.8)));
            scene.circle(at, 0.3 * radius, Style::area(DARK));
            // Page angles run clockwise; a counter-clockwise arrow goes the other way.
            let turn = if counter_clockwise { -1.0 } else { 1.0 };
            let (from, to) = (-0.4 * turn, 4.3 * turn);
            scene.path(arc(at, 0.88 * radius, from, to, 24), false, Style::line(DARK, 0.26));
            let tip = [at[0] + 0.88 * radius * to.cos(), at[1] + 0.88 * radius * to.sin()];
            let tangent = [-turn * to.sin(), turn * to.cos()];
            let across = [to.cos(), to.sin()];
            let head = 0.45 * radius;
            scene.path(
                vec![
                    [tip[0] + 1.3 * head * tangent[0], tip[1] + 1.3 * head * tangent[1]],
                    [tip[0] + 0.62 * head * across[0], tip[1] + 0.62 * head * across[1]],
                    [tip[0] - 0.62 * head * across[0], tip[1] - 0.62 * head * across[1]],
                ],
                true,
                Style::area(DARK),
            );
        }
        StagnationKind::Saddle => {
            let star = (0..8)
                .map(|k| {
                    let t = std::f64::consts::FRAC_PI_4 * f64::from(k);
                    let r = if k % 2 == 0 { 1.15 * radius } else { 0.36 * radius };
                    [at[0] + r * t.cos(), at[1] + r * t.sin()]
                })
                .collect();
            scene.path(star, true, line(0.25));
        }
        StagnationKind::Separation | StagnationKind::Attachment => {
            let n = [normal[0], -normal[1]];
            let start = n[1].atan2(n[0]) - std::f64::consts::FRAC_PI_2;
            let disc = arc(at, 0.85 * radius, start, start + std::f64::consts::PI, 20);
            if kind == StagnationKind::Separation {
                let end = [at[0] + 1.7 * radius * n[0], at[1] + 1.7 * radius * n[1]];
                scene.path(vec![at, end], false, Style::line(DARK, 0.3));
                scene.path(disc, true, Style { fill: Some(DARK), stroke: Some((WHITE, 0.12)), dash: None });
            } else {
                scene.path(disc, true, line(0.3));
            }
        }
    }
}

/// Whether a center turns counter-clockwise.
pub fn counter_clockwise(point: &StagnationPoint) -> bool {
    point.rate > 0.0
}
