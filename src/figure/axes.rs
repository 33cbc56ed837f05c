//! From data to page: scale, round ticks, frame, tick labels.

use super::font::{self, CAP_HEIGHT};
use super::scene::{Anchor, Ink, Item, Scene, Style, TextBox};

/// Dark ink of axes and text.
pub const DARK: Ink = Ink::solid(0x1b, 0x1f, 0x24);

/// The plot on the page: data range and place.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Plot {
    /// Data range in x.
    pub x: [f64; 2],
    /// Data range in y.
    pub y: [f64; 2],
    /// Left edge and upper edge on the page.
    pub at: [f64; 2],
    /// Millimeters per data unit, the same in both directions.
    pub scale: f64,
}

impl Plot {
    /// Size on the page.
    pub fn size(&self) -> [f64; 2] {
        [(self.x[1] - self.x[0]) * self.scale, (self.y[1] - self.y[0]) * self.scale]
    }

    /// Place of a data point on the page.
    pub fn place(&self, p: [f64; 2]) -> [f64; 2] {
        [self.at[0] + (p[0] - self.x[0]) * self.scale, self.at[1] + (self.y[1] - p[1]) * self.scale]
    }
}

/// Round tick positions in a range, about `count` of them, and the decimals they need.
pub fn ticks(low: f64, high: f64, count: usize) -> (Vec<f64>, usize) {
    let raw = (high - low) / count.max(1) as f64;
    if !(raw > 0.0 && raw.is_finite()) {
        return (vec![low], 2);
    }
    let power = 10f64.powf(raw.log10().floor());
    let step = [1.0, 2.0, 5.0, 10.0].into_iter().map(|m| m * power).find(|s| *s >= raw * 0.999).unwrap_or(10.0 * power);
    let decimals = (-step.log10().floor()).max(0.0) as usize;
    let first = (low / step - 1e-9).ceil() as i64;
    let last = (high / step + 1e-9).floor() as i64;
    ((first..=last).map(|k| k as f64 * step).collect(), decimals)
}

/// A tick as text: few digits, a power of ten apart for very large and small numbers.
pub fn tick_text(value: f64, decimals: usize, power: i32) -> String {
    let scaled = value / 10f64.powi(power);
    let text = format!("{scaled:.0$}", (decimals as i32 + power).max(0) as usize);
    let text = if text.trim_start_matches('-').chars().all(|c| c == '0' || c == '.') { "0".to_owned() } else { text };
    text.replace('-', "−")
}

/// Power of ten taken out of the tick labels of an axis.
pub fn common_power(low: f64, high: f64) -> i32 {
    let largest = low.abs().max(high.abs());
    if largest > 0.0 && !(1e-2..1e5).contains(&largest) { largest.log10().floor() as i32 } else { 0 }
}

/// Adds a text and the box it takes.
pub fn put_text(
    scene: &mut Scene,
    at: [f64; 2],
    text: &str,
    size: f64,
    angle: f64,
    anchor: Anchor,
    italic: bool,
    halo: bool,
) {
    let half = 0.5 * font::width(text, italic) * size;
    let (s, c) = angle.to_radians().sin_cos();
    let along = match anchor {
        Anchor::Start => half,
        Anchor::Middle => 0.0,
        Anchor::End => -half,
    };
    let up = -0.5 * CAP_HEIGHT * size;
    let center = [at[0] + c * along - s * up, at[1] + s * along + c * up];
    scene.boxes.push(TextBox { center, half: [half, 0.5 * CAP_HEIGHT * size], angle });
    scene.items.push(Item::Text { at, text: text.to_owned(), size, angle, anchor, italic, halo });
}

/// Frame, ticks and labels around the plot.
pub fn draw_axes(scene: &mut Scene, plot: &Plot, unit: &str, size: f64) {
    let [w, h] = plot.size();
    let [x0, y0] = plot.at;
    let thin = Style::line(DARK, 0.2);
    scene.path(vec![[x0, y0], [x0 + w, y0], [x0 + w, y0 + h], [x0, y0 + h]], true, thin.clone());
    let unit = font::typeset_unit(unit);
    let label = |name: &str, power: i32| {
        let ten = if power == 0 { String::new() } else { format!("10{} ", superscript(power)) };
        format!("{name} ({ten}{unit})")
    };
    // Horizontal: as many ticks as fit with a letter between.
    let px = common_power(plot.x[0], plot.x[1]);
    let mut count = ((w / (5.0 * size)) as usize).clamp(2, 9);
    let (mut xs, mut dx) = ticks(plot.x[0], plot.x[1], count);
    while count > 1 && xs.len() > 1 {
        let widest = xs.iter().map(|&t| font::width(&tick_text(t, dx, px), false) * size).fold(0.0, f64::max);
        if widest + size < (xs[1] - xs[0]) * plot.scale {
            break;
        }
        count -= 1;
        (xs, dx) = ticks(plot.x[0], plot.x[1], count);
    }
    for &t in &xs {
        let p = plot.place([t, plot.y[0]]);
        scene.path(vec![p, [p[0], p[1] + 1.2]], false, thin.clone());
        put_text(
            scene,
            [p[0], p[1] + 1.6 + CAP_HEIGHT * size],
            &tick_text(t, dx, px),
            size,
            0.0,
            Anchor::Middle,
            false,
            false,
        );
    }
    put_text(
        scene,
        [x0 + 0.5 * w, y0 + h + 2.2 + 1.95 * size],
        &label("x", px),
        size,
        0.0,
        Anchor::Middle,
        false,
        false,
    );
    let py = common_power(plot.y[0], plot.y[1]);
    let (ys, dy) = ticks(plot.y[0], plot.y[1], ((h / (3.2 * size)) as usize).clamp(1, 9));
    let mut widest: f64 = 0.0;
    for &t in &ys {
        let p = plot.place([plot.x[0], t]);
        let text = tick_text(t, dy, py);
        widest = widest.max(font::width(&text, false) * size);
        scene.path(vec![p, [p[0] - 1.2, p[1]]], false, thin.clone());
        put_text(scene, [p[0] - 1.8, p[1] + 0.5 * CAP_HEIGHT * size], &text, size, 0.0, Anchor::End, false, false);
    }
    put_text(scene, [x0 - 3.0 - widest, y0 + 0.5 * h], &label("y", py), size, -90.0, Anchor::Middle, false, false);
}

/// A whole number as superscript.
pub fn superscript(power: i32) -> String {
    font::typeset_unit(&format!("x{power}")).trim_start_matches('x').to_owned()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn ticks_are_round_and_inside() {
        let (t, d) = ticks(-0.13, 1.07, 6);
        assert_eq!((t.first().copied(), t.last().copied(), d), (Some(0.0), Some(1.0), 1));
        assert_eq!(tick_text(-0.0, 1, 0), "0");
        assert_eq!(tick_text(2.5e-7, 8, -7), "2.5");
        assert_eq!(superscript(-7), "⁻⁷");
    }
}
