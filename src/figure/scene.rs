//! Drawing list in millimeters, x to the right, y down; no file format.

use super::font;

/// A color with opacity.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Ink {
    /// Red, green, blue.
    pub rgb: [u8; 3],
    /// Opacity, 0 to 1.
    pub opacity: f64,
}

impl Ink {
    /// Opaque color.
    pub const fn solid(r: u8, g: u8, b: u8) -> Self {
        Self { rgb: [r, g, b], opacity: 1.0 }
    }

    /// The same color, less opaque.
    #[must_use]
    pub const fn faint(self, opacity: f64) -> Self {
        Self { rgb: self.rgb, opacity }
    }
}

/// How a path is drawn.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Style {
    /// Interior.
    pub fill: Option<Ink>,
    /// Line color and width.
    pub stroke: Option<(Ink, f64)>,
    /// Dash pattern.
    pub dash: Option<[f64; 2]>,
}

impl Style {
    /// A line.
    pub fn line(ink: Ink, width: f64) -> Self {
        Self { stroke: Some((ink, width)), ..Self::default() }
    }

    /// An area.
    pub fn area(ink: Ink) -> Self {
        Self { fill: Some(ink), ..Self::default() }
    }
}

/// Where a text hangs on its position.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Anchor {
    /// Begins there.
    Start,
    /// Is centered there.
    Middle,
    /// Ends there.
    End,
}

/// A stretch of text in one slant.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Span {
    /// What it says.
    pub text: String,
    /// Slanted letters.
    pub italic: bool,
}

/// How a text stands on the page.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TextStyle {
    /// Font size in millimeters.
    pub size: f64,
    /// Rotation in degrees, clockwise.
    pub angle: f64,
    /// Where it hangs.
    pub anchor: Anchor,
    /// Faint white rim that keeps it readable on a colored field.
    pub halo: bool,
}

impl TextStyle {
    /// Level text without rim.
    pub fn new(size: f64, anchor: Anchor) -> Self {
        Self { size, angle: 0.0, anchor, halo: false }
    }

    /// The same, rotated clockwise by degrees.
    #[must_use]
    pub fn turned(self, angle: f64) -> Self {
        Self { angle, ..self }
    }
}

/// One thing to draw.
#[derive(Debug, Clone, PartialEq)]
pub enum Item {
    /// Pieces of straight lines, each closed or open.
    Path {
        /// Pieces: vertices and whether they close.
        pieces: Vec<(Vec<[f64; 2]>, bool)>,
        /// Look.
        style: Style,
    },
    /// A line of text.
    Text {
        /// Baseline position.
        at: [f64; 2],
        /// What it says.
        spans: Vec<Span>,
        /// How it stands.
        style: TextStyle,
    },
    /// A PNG image stretched over a rectangle.
    Image {
        /// Upper left corner.
        at: [f64; 2],
        /// Width and height.
        size: [f64; 2],
        /// PNG file.
        png: Vec<u8>,
    },
    /// Everything until [`Item::EndClip`] is cut to a rectangle.
    Clip {
        /// Upper left corner.
        at: [f64; 2],
        /// Width and height.
        size: [f64; 2],
    },
    /// Ends the innermost clip.
    EndClip,
}

/// A box taken by a text, for the layout: center, half extents, rotation in degrees.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct TextBox {
    /// Center.
    pub center: [f64; 2],
    /// Half width and half height.
    pub half: [f64; 2],
    /// Rotation in degrees, clockwise.
    pub angle: f64,
}

impl TextBox {
    /// Box along the page.
    pub fn level(center: [f64; 2], half: [f64; 2]) -> Self {
        Self { center, half, angle: 0.0 }
    }

    /// Corners in order.
    pub fn corners(&self) -> [[f64; 2]; 4] {
        let (s, c) = self.angle.to_radians().sin_cos();
        [[-1.0, -1.0], [1.0, -1.0], [1.0, 1.0], [-1.0, 1.0]].map(|[a, b]| {
            let (x, y) = (a * self.half[0], b * self.half[1]);
            [self.center[0] + c * x - s * y, self.center[1] + s * x + c * y]
        })
    }

    /// Whether two boxes overlap (separating axes).
    pub fn overlaps(&self, other: &TextBox) -> bool {
        let apart = (self.center[0] - other.center[0]).hypot(self.center[1] - other.center[1]);
        if apart >= self.half[0].hypot(self.half[1]) + other.half[0].hypot(other.half[1]) {
            return false;
        }
        let (p, q) = (self.corners(), other.corners());
        [self.angle, self.angle + 90.0, other.angle, other.angle + 90.0].into_iter().all(|angle| {
            let (s, c) = angle.to_radians().sin_cos();
            let span = |corners: &[[f64; 2]; 4]| {
                corners.iter().map(|v| v[0] * c + v[1] * s).fold((f64::MAX, f64::MIN), |(a, b), t| (a.min(t), b.max(t)))
            };
            let ((a, b), (d, e)) = (span(&p), span(&q));
            a < e && d < b
        })
    }
}

/// A finished drawing.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Scene {
    /// Width in millimeters.
    pub width: f64,
    /// Height in millimeters.
    pub height: f64,
    /// Things in drawing order.
    pub items: Vec<Item>,
    /// Boxes of all texts.
    pub boxes: Vec<TextBox>,
}

impl Scene {
    /// Adds a path of one piece.
    pub fn path(&mut self, vertices: Vec<[f64; 2]>, closed: bool, style: Style) {
        self.items.push(Item::Path { pieces: vec![(vertices, closed)], style });
    }

    /// Adds a path of many pieces.
    pub fn paths(&mut self, pieces: Vec<(Vec<[f64; 2]>, bool)>, style: Style) {
        if !pieces.is_empty() {
            self.items.push(Item::Path { pieces, style });
        }
    }

    /// Adds a text at a baseline position and the box its ink takes.
    pub fn text(&mut self, at: [f64; 2], spans: Vec<Span>, style: TextStyle) {
        let ink = font::extent(&spans);
        if ink.width == 0.0 {
            return;
        }
        let half = 0.5 * ink.width * style.size;
        let (s, c) = style.angle.to_radians().sin_cos();
        let along = match style.anchor {
            Anchor::Start => half,
            Anchor::Middle => 0.0,
            Anchor::End => -half,
        };
        let down = 0.5 * (ink.below - ink.above) * style.size;
        let center = [at[0] + c * along - s * down, at[1] + s * along + c * down];
        let height = 0.5 * (ink.above + ink.below) * style.size;
        self.boxes.push(TextBox { center, half: [half, height], angle: style.angle });
        self.items.push(Item::Text { at, spans, style });
    }

    /// Adds a circle as a polygon fine enough for print.
    pub fn circle(&mut self, center: [f64; 2], radius: f64, style: Style) {
        self.path(arc(center, radius, 0.0, std::f64::consts::TAU, 48), true, style);
    }
}

/// Points on an arc, `from` to `to` in radians, clockwise on the page.
pub fn arc(center: [f64; 2], radius: f64, from: f64, to: f64, n: usize) -> Vec<[f64; 2]> {
    (0..=n)
        .map(|k| {
            let t = from + (to - from) * k as f64 / n as f64;
            [center[0] + radius * t.cos(), center[1] + radius * t.sin()]
        })
        .collect()
}
