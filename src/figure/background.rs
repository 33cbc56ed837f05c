//! Background field as an image; nodes without a measurement are shown as such.

use ndarray::Array2;
use rayon::prelude::*;

use super::axes::Plot;
use super::color_map::ColorMap;
use super::raster::{FigureError, encode};
use super::scene::{Item, Scene};
use crate::field::{Domain, Flags};

/// Pixels along the longer side of the image.
const PIXELS: usize = 640;

/// Share of the values at either end that may exceed the color range: a few outliers must not wash out the rest.
const CLIPPED: f64 = 0.005;

/// A pixel is colored when of the bilinear weights outside bodies at least this share belongs to nodes with a value.
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

/// Color of places without a value.
pub const GAP: [u8; 3] = [0xea, 0xec, 0xee];

/// How far colors fade to white where the value comes from around a gap.
const FADED: f64 = 0.45;

/// What a node is to the picture.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Node {
    Measured,
    Filled,
    Missing,
    Solid,
}

/// Which kinds of gaps the image shows.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct GapsShown {
    /// Places without a value.
    pub missing: bool,
    /// Places whose value comes from around a gap.
    pub filled: bool,
}

/// Kinds of gaps among the nodes.
pub fn gaps_of(domain: &Domain, flags: Option<&Array2<Flags>>) -> GapsShown {
    let mut out = GapsShown::default();
    let (ny, nx) = domain.grid.shape();
    for j in 0..ny {
        for i in 0..nx {
            match node_of(domain, flags, j, i) {
                Node::Missing => out.missing = true,
                Node::Filled => out.filled = true,
                Node::Measured | Node::Solid => {}
            }
        }
    }
    out
}

fn node_of(domain: &Domain, flags: Option<&Array2<Flags>>, j: usize, i: usize) -> Node {
    if domain.covered.get([j, i]).is_some_and(|&c| c != 0) {
        return Node::Solid;
    }
    match flags.and_then(|f| f.get([j, i])) {
        None => Node::Measured,
        Some(f) if f.has(Flags::SOLID) => Node::Solid,
        Some(f) if f.has(Flags::FILLED) || f.has(Flags::EXTRAPOLATED) => Node::Filled,
        Some(f) if f.has(Flags::MEASURED) && !f.has(Flags::SCREENED) => Node::Measured,
        Some(_) => Node::Missing,
    }
}

/// The image, bilinear between nodes; pale where a value comes from around a gap, light gray where there is none.
///
/// # Errors
/// [`FigureError`] for an image that cannot be made.
pub fn draw_image(
    scene: &mut Scene,
    plot: &Plot,
    domain: &Domain,
    background: Option<&Background>,
    flags: Option<&Array2<Flags>>,
    map: ColorMap,
) -> Result<(), FigureError> {
    let grid = &domain.grid;
    let field = background.and_then(|b| color_range(b).map(|range| (b, range)));
    if field.is_none() && gaps_of(domain, flags) == GapsShown::default() {
        return Ok(());
    }
    // The image covers the plot; between the outermost nodes and a wall beyond them the colors of the nodes go on.
    let (lx, ly) = (plot.x[1] - plot.x[0], plot.y[1] - plot.y[0]);
    let longest = lx.max(ly);
    let pixels = |length: f64| ((PIXELS as f64 * length / longest) as usize).max(8);
    let (w, h) = (pixels(lx), pixels(ly));
    let mut image = vec![[0u8; 4]; w * h];
    image.par_chunks_mut(w).enumerate().for_each(|(r, row)| {
        let y = (plot.y[1] - (r as f64 + 0.5) / h as f64 * ly).clamp(grid.y.first(), grid.y.last());
        let Some((j, s)) = grid.y.locate(y) else { return };
        for (c, pixel) in row.iter_mut().enumerate() {
            let x = (plot.x[0] + (c as f64 + 0.5) / w as f64 * lx).clamp(grid.x.first(), grid.x.last());
            let Some((i, t)) = grid.x.locate(x) else { continue };
            let (mut sum, mut seen, mut filled, mut missing, mut solid) = (0.0, 0.0, 0.0, 0.0, 0.0);
            for ([j, i], share) in [
                ([j, i], (1.0 - s) * (1.0 - t)),
                ([j, i + 1], (1.0 - s) * t),
                ([j + 1, i], s * (1.0 - t)),
                ([j + 1, i + 1], s * t),
            ] {
                match node_of(domain, flags, j, i) {
                    Node::Missing => missing += share,
                    Node::Filled => filled += share,
                    Node::Solid => solid += share,
                    Node::Measured => {}
                }
                if let Some(value) = field.and_then(|(b, _)| b.values.get([j, i])).filter(|v| v.is_finite()) {
                    sum += share * value;
                    seen += share;
                }
            }
            // Beside a body the colors of the fluid go on up to its outline.
            let color = field
                .filter(|_| seen > 0.0 && seen >= SEEN * (1.0 - solid))
                .map(|(_, (low, high))| map.color((sum / seen - low) / (high - low)));
            *pixel = match color {
                _ if missing > 0.5 => opaque(GAP),
                Some(color) if filled > 0.5 => opaque(fade(color)),
                Some(color) => opaque(color),
                None if filled > 0.5 => opaque(fade(GAP)),
                None => [0; 4],
            };
        }
    });
    scene.items.push(Item::Image {
        at: plot.place([plot.x[0], plot.y[1]]),
        size: [lx * plot.scale, ly * plot.scale],
        png: encode(w as u32, h as u32, &image)?,
    });
    Ok(())
}

fn opaque([r, g, b]: [u8; 3]) -> [u8; 4] {
    [r, g, b, 255]
}

fn fade(color: [u8; 3]) -> [u8; 3] {
    color.map(|c| (255.0 - (255.0 - f64::from(c)) * (1.0 - FADED)).round() as u8)
}
