//! Color bar: upright beside the plot, or lying below it when the plot is low.

use super::axes::{DARK, common_power, horizontal_ticks, vertical_ticks};
use super::background::{Background, color_range};
use super::color_map::ColorMap;
use super::font::{self, CAP_HEIGHT, quantity};
use super::legend::put_lines;
use super::raster::{FigureError, encode};
use super::scene::{Anchor, Item, Scene, Span, Style, TextStyle};

/// Thickness of the bar in millimeters.
const THICK: f64 = 3.0;

/// Distance from the plot in millimeters.
const GAP: f64 = 2.5;

/// Length of ticks in millimeters.
const TICK: f64 = 0.8;

/// Shades along the bar.
const SHADES: u32 = 128;

/// Tallest upright bar in millimeters; it stands in the middle of a taller plot.
const TALLEST: f64 = 100.0;

/// Longest lying bar in millimeters.
const LONGEST: f64 = 60.0;

/// Shortest lying bar in millimeters.
const SHORTEST: f64 = 25.0;

/// A color bar: what it explains, how it looks.
#[derive(Debug, Clone, Copy)]
pub struct ColorBar<'a> {
    /// The field.
    pub background: &'a Background,
    /// Its colors.
    pub map: ColorMap,
    /// Font size in millimeters.
    pub size: f64,
    /// Range of the colors.
    pub range: [f64; 2],
}

impl<'a> ColorBar<'a> {
    /// Bar of a field; `None` when it has no finite value.
    pub fn new(background: &'a Background, map: ColorMap, size: f64) -> Option<Self> {
        color_range(background).map(|(low, high)| Self { background, map, size, range: [low, high] })
    }

    fn label(&self, power: i32) -> Vec<Span> {
        quantity(&self.background.label, power, &self.background.unit)
    }

    fn label_width(&self) -> f64 {
        font::width(&self.label(common_power(self.range))) * self.size
    }

    /// Whether the bar lies below the plot: its label does not fit along an upright one.
    pub fn lies(&self, plot_height: f64) -> bool {
        self.label_width() > plot_height.min(TALLEST)
    }

    /// Room an upright bar takes beside the plot.
    pub fn room(&self, plot_height: f64) -> f64 {
        let ticks = vertical_ticks(self.range, plot_height.min(TALLEST), self.size);
        GAP + THICK + TICK + 1.4 + ticks.widest(self.size) + 1.4 * self.size
    }

    fn shades(&self, reverse: bool) -> Vec<[u8; 4]> {
        (0..SHADES)
            .map(|k| {
                let t = (f64::from(k) + 0.5) / f64::from(SHADES);
                let [r, g, b] = self.map.color(if reverse { 1.0 - t } else { t });
                [r, g, b, 255]
            })
            .collect()
    }

    fn put_bar(&self, scene: &mut Scene, at: [f64; 2], size: [f64; 2], png: Vec<u8>) {
        let ([x, y], [w, h]) = (at, size);
        scene.items.push(Item::Image { at, size, png });
        scene.path(vec![at, [x + w, y], [x + w, y + h], [x, y + h]], true, Style::line(DARK, 0.15));
    }

    fn share(&self, value: f64) -> f64 {
        (value - self.range[0]) / (self.range[1] - self.range[0])
    }

    /// Draws it upright, beside the right edge of the plot.
    ///
    /// # Errors
    /// [`FigureError`] for an image that cannot be made.
    pub fn draw_upright(&self, scene: &mut Scene, edge: [f64; 2], plot_height: f64) -> Result<(), FigureError> {
        let height = plot_height.min(TALLEST);
        let (x, y) = (edge[0] + GAP, edge[1] + 0.5 * (plot_height - height));
        self.put_bar(scene, [x, y], [THICK, height], encode(1, SHADES, &self.shades(true))?);
        let ticks = vertical_ticks(self.range, height, self.size);
        for &value in &ticks.values {
            let at = y + (1.0 - self.share(value)) * height;
            scene.path(vec![[x + THICK, at], [x + THICK + TICK, at]], false, Style::line(DARK, 0.15));
            let place = [x + THICK + TICK + 0.6, at + 0.5 * CAP_HEIGHT * self.size];
            scene.text(place, ticks.label(value), TextStyle::new(self.size, Anchor::Start));
        }
        let x = x + THICK + TICK + 1.4 + ticks.widest(self.size) + 1.1 * self.size;
        let style = TextStyle::new(self.size, Anchor::Middle).turned(-90.0);
        scene.text([x, y + 0.5 * height], self.label(ticks.power), style);
        Ok(())
    }

    /// Draws it lying with its label before it, or above it when there is no room; returns the lower edge.
    ///
    /// # Errors
    /// [`FigureError`] for an image that cannot be made.
    pub fn draw_lying(&self, scene: &mut Scene, left: f64, y: f64) -> Result<f64, FigureError> {
        let room = scene.width - 2.0 * self.size - left;
        let label_width = self.label_width();
        let beside = label_width + 2.0 + SHORTEST <= room;
        let label = self.label(common_power(self.range));
        let start = TextStyle::new(self.size, Anchor::Start);
        let mut top = y + 1.6;
        let mut x = left;
        if beside {
            scene.text([left, top + 0.5 * (THICK + CAP_HEIGHT * self.size)], label, start);
            x += label_width + 2.0;
        } else {
            let text: String = label.into_iter().map(|span| span.text).collect();
            let row = top + CAP_HEIGHT * self.size;
            top = put_lines(scene, &text, [left, row], room, self.size).unwrap_or(row) + 0.8 * self.size;
        }
        let length = (left + room - x).clamp(5.0, LONGEST);
        self.put_bar(scene, [x, top], [length, THICK], encode(SHADES, 1, &self.shades(false))?);
        let ticks = horizontal_ticks(self.range, length, self.size);
        for &value in &ticks.values {
            let at = x + self.share(value) * length;
            scene.path(vec![[at, top + THICK], [at, top + THICK + TICK]], false, Style::line(DARK, 0.15));
            let place = [at, top + THICK + TICK + 0.5 + CAP_HEIGHT * self.size];
            scene.text(place, ticks.label(value), TextStyle::new(self.size, Anchor::Middle));
        }
        Ok(top + THICK + TICK + 0.5 + 1.1 * self.size)
    }
}
