//! Background field as an image, and its color bar.

use ndarray::Array2;

use super::axes::{DARK, Plot, common_power, put_text, superscript, tick_text, ticks};
use super::color_map::ColorMap;
use super::font::{self, CAP_HEIGHT, typeset_unit};
use super::raster::{FigureError, encode};
use super::scene::{Anchor, Item, Scene, Style};
use crate::field::Grid;

/// Pixels along the longer side of the image.
const PIXELS: usize = 640;

/// Share of the values at either end that may exceed the color range: a few outliers must not wash out the rest.
const CLIPPED: f64 = 0.005;

/// A pixel is colored when nodes with at least this share of the bilinear weights carry a value.
const SEEN: f64 = 0.25;

/// A field shown by color.
#[derive(Debug, Clone)]
pub struct Background {
    /// Values at the nodes, NaN where there is none.
    pub values: Array2<f64>,
    /// Name in words.
    pub label: String,
    /// Unit in UDUNITS form.
    pub unit: String,
    /// Whether zero is its natural middle.
    pub signed: bool,
}

/// Range of the colors.
pub fn color_range(background: &Background) -> Option<(f64, f64)> {
    let mut values: Vec<f64> = background.values.iter().copied().filter(|v| v.is_finite()).collect();
    if values.is_empty() {
        return None;
    }
    values.sort_unstable_by(f64::total_cmp);
    let n = values.len();
    let cut = (n as f64 * CLIPPED) as usize;
    let (mut low, mut high) = (values[cut], values[n - 1 - cut]);
    if background.signed {
        let most = low.abs().max(high.abs());
        (low, high) = (-most, most);
    } else if low > 0.0 && low < 0.3 * high {
        low = 0.0;
    }
    if !(high > low) {
        let pad = if low == 0.0 { 1.0 } else { 0.5 * low.abs() };
        (low, high) = (low - pad, high + pad);
    }
    Some((low, high))
}

/// The image, bilinear between nodes, clear where a node is missing.
///
/// # Errors
/// [`FigureError`] for an image that cannot be made.
pub fn draw_image(
    scene: &mut Scene,
    plot: &Plot,
    grid: &Grid,
    background: &Background,
    map: ColorMap,
) -> Result<(), FigureError> {
    let Some((low, high)) = color_range(background) else { return Ok(()) };
    // The image covers the plot; between the outermost nodes and a wall beyond them the colors of the nodes go on.
    let (lx, ly) = (plot.x[1] - plot.x[0], plot.y[1] - plot.y[0]);
    let longest = lx.max(ly);
    let pixels = |length: f64| ((PIXELS as f64 * length / longest) as usize).max(8);
    let (w, h) = (pixels(lx), pixels(ly));
    let mut image = vec![[0u8; 4]; w * h];
    for r in 0..h {
        let y = (plot.y[1] - (r as f64 + 0.5) / h as f64 * ly).clamp(grid.y.first(), grid.y.last());
        let Some((j, s)) = grid.y.locate(y) else { continue };
        for c in 0..w {
            let x = (plot.x[0] + (c as f64 + 0.5) / w as f64 * lx).clamp(grid.x.first(), grid.x.last());
            let Some((i, t)) = grid.x.locate(x) else { continue };
            let (mut sum, mut weight) = (0.0, 0.0);
            for (node, share) in [
                ([j, i], (1.0 - s) * (1.0 - t)),
                ([j, i + 1], (1.0 - s) * t),
                ([j + 1, i], s * (1.0 - t)),
                ([j + 1, i + 1], s * t),
            ] {
                let value = background.values[node];
                if value.is_finite() {
                    sum += share * value;
                    weight += share;
                }
            }
            if weight >= SEEN {
                let [red, green, blue] = map.color((sum / weight - low) / (high - low));
                image[r * w + c] = [red, green, blue, 255];
            }
        }
    }
    let upper_left = plot.place([plot.x[0], plot.y[1]]);
    scene.items.push(Item::Image {
        at: upper_left,
        size: [lx * plot.scale, ly * plot.scale],
        png: encode(w as u32, h as u32, &image)?,
    });
    Ok(())
}

/// Color bar of a height at a place, with ticks and label; returns its width.
///
/// # Errors
/// [`FigureError`] for an image that cannot be made.
pub fn draw_bar(
    scene: &mut Scene,
    at: [f64; 2],
    height: f64,
    background: &Background,
    map: ColorMap,
    size: f64,
) -> Result<f64, FigureError> {
    let Some((low, high)) = color_range(background) else { return Ok(0.0) };
    const WIDTH: f64 = 3.0;
    let shades: Vec<[u8; 4]> = (0..128)
        .map(|k| {
            let [r, g, b] = map.color(1.0 - (f64::from(k) + 0.5) / 128.0);
            [r, g, b, 255]
        })
        .collect();
    scene.items.push(Item::Image { at, size: [WIDTH, height], png: encode(1, 128, &shades)? });
    scene.path(
        vec![at, [at[0] + WIDTH, at[1]], [at[0] + WIDTH, at[1] + height], [at[0], at[1] + height]],
        true,
        Style::line(DARK, 0.15),
    );
    let power = common_power(low, high);
    let (values, decimals) = ticks(low, high, ((height / (3.0 * size)) as usize).clamp(1, 8));
    let mut widest: f64 = 0.0;
    for value in values {
        let y = at[1] + (high - value) / (high - low) * height;
        let text = tick_text(value, decimals, power);
        widest = widest.max(font::width(&text, false) * size);
        scene.path(vec![[at[0] + WIDTH, y], [at[0] + WIDTH + 0.8, y]], false, Style::line(DARK, 0.15));
        put_text(
            scene,
            [at[0] + WIDTH + 1.4, y + 0.5 * CAP_HEIGHT * size],
            &text,
            size,
            0.0,
            Anchor::Start,
            false,
            false,
        );
    }
    let ten = if power == 0 { String::new() } else { format!("10{} ", superscript(power)) };
    let unit =
        if background.unit == "1" { String::new() } else { format!(" ({ten}{})", typeset_unit(&background.unit)) };
    let label = format!("{}{unit}", background.label);
    // The label runs along the bar; one longer than the bar shrinks to fit.
    let fit = (height / (font::width(&label, false) * size)).min(1.0);
    let x = at[0] + WIDTH + 2.2 + widest + CAP_HEIGHT * size;
    put_text(scene, [x, at[1] + 0.5 * height], &label, size * fit, -90.0, Anchor::Middle, false, false);
    Ok(x - at[0])
}
