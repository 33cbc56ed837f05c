//! From data to page: scale, round ticks, frame, tick labels.

use super::font::{self, CAP_HEIGHT, quantity};
use super::scene::{Anchor, Ink, Scene, Span, Style, TextStyle};

/// Dark ink of axes and text.
pub const DARK: Ink = Ink::solid(0x1b, 0x1f, 0x24);

/// Margin at the left and right edge of the page, in millimeters.
pub const MARGIN: f64 = 1.5;

/// Length of ticks in millimeters; longer than the strokes of a wall.
const TICK: f64 = 1.2;

/// Distance from a tick to its label in millimeters.
const TICK_GAP: f64 = 0.6;

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

    /// Whether the y axis is too short for its label along it, which then stands above the plot.
    pub fn label_above(&self, unit: &str, size: f64) -> bool {
        font::width(&quantity("y", common_power(self.y), unit)) * size > self.size()[1]
    }
}

/// Ticks of an axis.
#[derive(Debug, Clone, PartialEq)]
pub struct Ticks {
    /// Positions, round, within the range.
    pub values: Vec<f64>,
    /// Power of ten taken out of the labels.
    pub power: i32,
    /// Decimals of the labels after that.
    decimals: usize,
}

impl Ticks {
    /// About `count` round ticks in a range; none for a range that is empty or not finite.
    pub fn new(range: [f64; 2], count: usize) -> Self {
        let [low, high] = range;
        let power = common_power(range);
        let none = Self { values: Vec::new(), power, decimals: 0 };
        let raw = (high - low) / count.max(1) as f64;
        if !raw.is_normal() || raw < 0.0 {
            return none;
        }
        let ten = 10f64.powf(raw.log10().floor());
        let Some(step) = [1.0, 2.0, 5.0, 10.0].into_iter().map(|m| m * ten).find(|s| *s >= raw * 0.999) else {
            return none;
        };
        let (first, last) = ((low / step - 1e-9).ceil(), (high / step + 1e-9).floor());
        // A range lost in the rounding of its position has no ticks to tell apart.
        if !(last - first <= 2.0 * count.max(1) as f64 + 2.0) || first.abs().max(last.abs()) > 1e12 {
            return none;
        }
        let decimals = (f64::from(power) - (step.log10() + 1e-9).floor()).clamp(0.0, 15.0) as usize;
        Self { values: (first as i64..=last as i64).map(|k| k as f64 * step).collect(), power, decimals }
    }

    /// Label of a tick.
    pub fn label(&self, value: f64) -> Vec<Span> {
        let scaled = value / 10f64.powi(self.power);
        let text = format!("{scaled:.0$}", self.decimals);
        let zero = text.chars().all(|c| matches!(c, '0' | '.' | '-'));
        font::spans(&if zero { "0".to_owned() } else { text.replace('-', "−") })
    }

    /// Width of the widest label at a font size.
    pub fn widest(&self, size: f64) -> f64 {
        self.values.iter().map(|&v| font::width(&self.label(v)) * size).fold(0.0, f64::max)
    }
}

/// Power of ten taken out of the labels of a range: 0 for everyday numbers.
pub fn common_power([low, high]: [f64; 2]) -> i32 {
    let largest = low.abs().max(high.abs());
    if largest.is_normal() && !(1e-2..1e5).contains(&largest) { largest.log10().floor() as i32 } else { 0 }
}

/// Ticks of the y axis for a plot height on the page.
pub fn vertical_ticks(range: [f64; 2], height: f64, size: f64) -> Ticks {
    let most = ((height / (3.2 * size)) as usize).clamp(1, 9);
    (1..=most)
        .rev()
        .map(|count| Ticks::new(range, count))
        .find(|t| t.values.len() < 2 || height / (range[1] - range[0]) * (t.values[1] - t.values[0]) > 1.6 * size)
        .unwrap_or_else(|| Ticks::new(range, 1))
}

/// Ticks of a horizontal axis of a length on the page: as many as stand with a letter between them.
pub fn horizontal_ticks(range: [f64; 2], length: f64, size: f64) -> Ticks {
    let most = ((length / (5.0 * size)) as usize).clamp(1, 9);
    let fits = |t: &Ticks| {
        let step = t.values.windows(2).map(|w| w[1] - w[0]).fold(f64::INFINITY, f64::min);
        t.widest(size) + size < step * length / (range[1] - range[0])
    };
    let mut ticks = (1..=most).rev().map(|count| Ticks::new(range, count)).find(fits).unwrap_or_else(|| {
        let mut one = Ticks::new(range, 1);
        one.values.truncate(1);
        one
    });
    if ticks.widest(size) > length + 4.0 * size {
        ticks.values.clear();
    }
    ticks
}

/// Room left of the plot for the labels of the y axis.
pub fn room_left(range: [f64; 2], height: f64, size: f64, above: bool) -> f64 {
    let label = if above { 0.0 } else { 1.4 + 1.3 * size };
    TICK + TICK_GAP + vertical_ticks(range, height, size).widest(size) + label
}

/// Room below the plot for the labels of the x axis.
pub fn room_below(size: f64) -> f64 {
    TICK + TICK_GAP + 2.0 + 2.0 * size
}

/// Frame, ticks and labels around the plot; `above`: the label of y stands above the frame, not along it.
pub fn draw_axes(scene: &mut Scene, plot: &Plot, unit: &str, size: f64, above: bool) {
    let [w, h] = plot.size();
    let [x0, y0] = plot.at;
    let thin = Style::line(DARK, 0.2);
    scene.path(vec![[x0, y0], [x0 + w, y0], [x0 + w, y0 + h], [x0, y0 + h]], true, thin.clone());
    let middle = TextStyle::new(size, Anchor::Middle);

    let ticks = horizontal_ticks(plot.x, w, size);
    for &t in &ticks.values {
        let p = plot.place([t, plot.y[0]]);
        scene.path(vec![p, [p[0], p[1] + TICK]], false, thin.clone());
        scene.text([p[0], p[1] + TICK + TICK_GAP + CAP_HEIGHT * size], ticks.label(t), middle);
    }
    let baseline = y0 + h + TICK + TICK_GAP + 1.2 + 1.7 * size;
    put_fitting(scene, [x0 + 0.5 * w, baseline], quantity("x", ticks.power, unit), middle, scene.width - 4.0);

    let ticks = vertical_ticks(plot.y, h, size);
    for &t in &ticks.values {
        let p = plot.place([plot.x[0], t]);
        scene.path(vec![p, [p[0] - TICK, p[1]]], false, thin.clone());
        let at = [p[0] - TICK - TICK_GAP, p[1] + 0.5 * CAP_HEIGHT * size];
        scene.text(at, ticks.label(t), TextStyle::new(size, Anchor::End));
    }
    let label = quantity("y", ticks.power, unit);
    let left = x0 - TICK - TICK_GAP - ticks.widest(size);
    if above {
        // Clear of the uppermost tick label.
        let x = left.max(MARGIN);
        let room = scene.width - x - MARGIN;
        put_fitting(scene, [x, y0 - 0.9 * size], label, TextStyle::new(size, Anchor::Start), room);
    } else {
        scene.text([left - 1.4 - 0.25 * size, y0 + 0.5 * h], label, middle.turned(-90.0));
    }
}

/// Adds a text, smaller when it is wider than `room`; a centered one is moved to stay on the page.
pub fn put_fitting(scene: &mut Scene, at: [f64; 2], spans: Vec<Span>, style: TextStyle, room: f64) {
    let width = font::width(&spans) * style.size;
    let fit = (room.max(1.0) / width).min(1.0);
    let half = 0.5 * width * fit;
    let x = match style.anchor {
        Anchor::Middle => {
            at[0].clamp((half + 1.0).min(0.5 * scene.width), (scene.width - half - 1.0).max(0.5 * scene.width))
        }
        _ => at[0],
    };
    scene.text([x, at[1]], spans, TextStyle { size: style.size * fit, ..style });
}

#[cfg(test)]
mod tests {
    use super::*;

    fn labels(range: [f64; 2], count: usize) -> (Vec<String>, i32) {
        let t = Ticks::new(range, count);
        (t.values.iter().map(|&v| t.label(v)[0].text.clone()).collect(), t.power)
    }

    #[test]
    fn ticks_are_round_and_inside() {
        assert_eq!(labels([-0.13, 1.07], 6), (["0", "0.2", "0.4", "0.6", "0.8", "1.0"].map(String::from).to_vec(), 0));
        assert_eq!(labels([-40.0, 40.0], 4).0, ["−40", "−20", "0", "20", "40"]);
    }

    #[test]
    fn a_power_of_ten_is_taken_out_of_large_and_small_numbers() {
        assert_eq!(labels([0.0, 2.5e-7], 3), (["0", "1", "2"].map(String::from).to_vec(), -7));
        assert_eq!(labels([0.0, 3.2e9], 3), (["0", "2"].map(String::from).to_vec(), 9));
        assert_eq!(labels([0.0, 1.2e6], 3), (["0", "0.5", "1.0"].map(String::from).to_vec(), 6));
    }

    #[test]
    fn ranges_without_extent_have_no_ticks() {
        for range in [[1.0, 1.0], [0.0, f64::INFINITY], [f64::NAN, 1.0], [0.0, 1e-320], [-f64::MAX, f64::MAX]] {
            assert!(Ticks::new(range, 5).values.is_empty(), "{range:?}");
        }
        assert!(Ticks::new([1e20, 1e20 + 3e4], 5).values.len() < 8);
    }
}
