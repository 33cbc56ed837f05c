//! Below the plot: what the marks mean, and the caption.

use super::axes::DARK;
use super::background::GAP;
use super::font::{self, CAP_HEIGHT};
use super::lines::FILLED_DASH;
use super::scene::{Anchor, Ink, Scene, Style, TextStyle};
use super::symbols::{RADIUS, draw_symbol};
use crate::extract::stagnation::StagnationKind;

/// Swatch of faded colors.
const PALE: [u8; 3] = [0xf7, 0xf8, 0xf9];

/// Something the legend explains.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Entry {
    /// Mark of a stagnation point.
    Point(StagnationKind),
    /// Heavy line.
    Separatrix,
    /// Dashed lines, pale colors: carried over from around a gap.
    Filled,
    /// Light gray places.
    Missing,
}

impl Entry {
    fn name(self) -> &'static str {
        match self {
            Entry::Point(kind) => kind.name(),
            Entry::Separatrix => "separatrix",
            Entry::Filled => "filled gap",
            Entry::Missing => "no data",
        }
    }

    /// Draws the mark with its center `at`.
    fn draw(self, scene: &mut Scene, at: [f64; 2]) {
        let [x, y] = at;
        let swatch = |scene: &mut Scene, [r, g, b]: [u8; 3]| {
            let corners = vec![[x - 1.7, y - 1.0], [x + 1.7, y - 1.0], [x + 1.7, y + 1.0], [x - 1.7, y + 1.0]];
            let style = Style { fill: Some(Ink::solid(r, g, b)), stroke: Some((DARK, 0.1)), dash: None };
            scene.path(corners, true, style);
        };
        let bar = vec![[x - 1.7, y], [x + 1.7, y]];
        match self {
            Entry::Point(kind @ (StagnationKind::Separation | StagnationKind::Attachment)) => {
                let base = y + 0.7;
                draw_symbol(scene, [x, base], kind, true, [0.0, 1.0], 0.9 * RADIUS);
                scene.path(vec![[x - 1.7, base], [x + 1.7, base]], false, Style::line(DARK, 0.3));
            }
            Entry::Point(kind) => draw_symbol(scene, at, kind, true, [0.0, 1.0], 0.9 * RADIUS),
            Entry::Separatrix => scene.path(bar, false, Style::line(DARK, 0.42)),
            Entry::Filled => {
                swatch(scene, PALE);
                scene.path(bar, false, Style { dash: Some(FILLED_DASH), ..Style::line(DARK, 0.18) });
            }
            Entry::Missing => swatch(scene, GAP),
        }
    }
}

/// Rows of entries from `left` down from `y`; returns the lower edge.
pub fn draw_legend(scene: &mut Scene, entries: &[Entry], left: f64, y: f64, size: f64) -> f64 {
    if entries.is_empty() {
        return y;
    }
    let right = scene.width - 2.0;
    let (mut x, mut row) = (left, y + 1.4 + CAP_HEIGHT * size);
    for entry in entries {
        let name = font::spans(entry.name());
        let needed = 4.6 + font::width(&name) * size;
        if x + needed > right && x > left {
            x = left;
            row += (1.8 * size).max(3.4);
        }
        entry.draw(scene, [x + 1.7, row - 0.38 * size]);
        scene.text([x + 4.6, row], name, TextStyle::new(size, Anchor::Start));
        x += needed + 3.2;
    }
    row + 0.5 * size
}

/// Caption broken into lines that fit; returns the lower edge.
pub fn draw_caption(scene: &mut Scene, caption: &str, left: f64, y: f64, size: f64) -> f64 {
    let room = scene.width - left - 2.0;
    put_lines(scene, caption, [left, y + 1.4 + CAP_HEIGHT * size], room, size).map_or(y, |row| row + 0.3 * size)
}

/// Text in lines no wider than `room`, the first on the baseline `at`; returns the last baseline, `None` for an empty text.
pub fn put_lines(scene: &mut Scene, text: &str, at: [f64; 2], room: f64, size: f64) -> Option<f64> {
    let mut last = None;
    for (k, line) in lines_of(text, room / size).iter().enumerate() {
        let row = at[1] + 1.45 * size * k as f64;
        scene.text([at[0], row], font::spans(line), TextStyle::new(size, Anchor::Start));
        last = Some(row);
    }
    last
}

/// Breaks a text at spaces into lines of at most `room` font sizes; longer words are broken anywhere.
fn lines_of(text: &str, room: f64) -> Vec<String> {
    let wide = |text: &str| font::width(&font::spans(text));
    let mut lines: Vec<String> = Vec::new();
    for word in text.split_whitespace() {
        match lines.last_mut() {
            Some(line) if wide(line) + wide(" ") + wide(word) <= room => {
                line.push(' ');
                line.push_str(word);
            }
            _ if wide(word) <= room => lines.push(word.to_owned()),
            _ => {
                let (mut line, mut used) = (String::new(), 0.0);
                for c in word.chars() {
                    let more = wide(c.encode_utf8(&mut [0; 4]));
                    if used + more > room && !line.is_empty() {
                        lines.push(std::mem::take(&mut line));
                        used = 0.0;
                    }
                    line.push(c);
                    used += more;
                }
                lines.push(line);
            }
        }
    }
    lines
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_caption_breaks_at_spaces_and_loses_no_word() {
        let text = "Streamlines every 250 mm² s⁻¹, ψ = 0 on the bottom wall";
        let lines = lines_of(text, 12.0);
        assert!(lines.len() > 2 && lines.join(" ") == text);
        assert!(lines.iter().all(|l| font::width(&font::spans(l)) <= 12.0));
    }

    #[test]
    fn a_word_longer_than_the_page_is_broken() {
        let lines = lines_of(&format!("a {} b", "x".repeat(60)), 10.0);
        assert_eq!(lines.concat().matches('x').count(), 60);
        assert!(lines.iter().all(|l| font::width(&font::spans(l)) <= 10.0));
    }
}
