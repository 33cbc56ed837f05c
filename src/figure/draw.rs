//! One publication figure: layout, layers from back to front, legend, caption.

use ndarray::{Array2, Zip};

use super::axes::{DARK, Plot, draw_axes, put_text};
use super::background::{Background, draw_bar, draw_image};
use super::color_map::ColorMap;
use super::font::{self, CAP_HEIGHT};
use super::lines::{draw_arrows, draw_labels, draw_lines};
use super::raster::{FigureError, to_pdf, to_png};
use super::scene::{Anchor, Ink, Item, Scene, Style, TextBox};
use super::svg::to_svg;
use super::symbols::{RADIUS, counter_clockwise, draw_symbol};
use crate::analysis::{Check, Features, FittedFlow};
use crate::extract::contour::{Contour, Role};
use crate::extract::stagnation::{StagnationKind, StagnationPoint};
use crate::field::{Domain, Shape, Side, Sigma, UnitSystem};

/// Gray of bodies.
const BODY: Ink = Ink::solid(0xc6, 0xcb, 0xd1);

/// Millimeters per point.
const POINT: f64 = 25.4 / 72.0;

/// A drawing is never higher than this, in millimeters; it shrinks instead.
const HIGHEST: f64 = 230.0;

/// Look of a figure.
#[derive(Debug, Clone, PartialEq)]
pub struct FigureOptions {
    /// Width in millimeters.
    pub width_mm: f64,
    /// Font size in points.
    pub font_size_pt: f64,
    /// Whether levels are written along the lines.
    pub labels: bool,
    /// Color map of the background; `None`: cividis, vik for signed fields.
    pub color_map: Option<ColorMap>,
    /// Resolution of PNG files, pixels an inch.
    pub dpi: f64,
}

impl Default for FigureOptions {
    fn default() -> Self {
        Self { width_mm: 140.0, font_size_pt: 7.5, labels: true, color_map: None, dpi: 300.0 }
    }
}

/// What is drawn.
#[derive(Debug, Clone)]
pub struct FigureInput<'a> {
    /// Grid, bodies, walls.
    pub domain: &'a Domain,
    /// Streamlines, separatrices.
    pub contours: &'a [Contour],
    /// Stagnation points.
    pub points: &'a [StagnationPoint],
    /// Field behind the lines.
    pub background: Option<Background>,
    /// Units.
    pub units: &'a UnitSystem,
    /// Sign of the reported psi.
    pub psi_sign: f64,
    /// Step between levels, 0 when they are not equally spaced.
    pub psi_step: f64,
    /// Line under the figure.
    pub caption: String,
}

/// Names of the fields that can stand behind the lines.
pub const BACKGROUNDS: [&str; 7] = ["none", "speed", "vorticity", "divergence", "divergence_z", "psi", "residual"];

/// The field of a name; `Some(None)` for "none", `None` for an unknown name.
pub fn background_of(
    name: &str,
    flow: &FittedFlow,
    check: &Check,
    units: &UnitSystem,
    plane: bool,
    sign: f64,
) -> Option<Option<Background>> {
    let map = &check.map;
    let make = |values: Array2<f64>, label: &str, unit: String, signed: bool| {
        Some(Some(Background { values, label: label.to_owned(), unit, signed }))
    };
    let hypot = |a: &Array2<f64>, b: &Array2<f64>| Zip::from(a).and(b).map_collect(|a, b| a.hypot(*b));
    match name {
        "none" => Some(None),
        "speed" => make(hypot(&flow.u_fit, &flow.v_fit), "speed", units.velocity(), false),
        "vorticity" => make(map.vorticity.clone(), "vorticity", units.rate(), true),
        "divergence" => make(map.divergence.clone(), "divergence", units.rate(), true),
        "divergence_z" if flow.used.sigma != Sigma::Unknown => {
            make(map.divergence_z(1.0), "divergence / its sigma", "1".to_owned(), true)
        }
        "divergence_z" => {
            let scale = check.report.sigma_estimated.map_or(f64::NAN, |e| e.sigma);
            make(map.divergence_z(scale), "divergence / its estimated sigma", "1".to_owned(), true)
        }
        "psi" => make(flow.surface_psi().mapv(|p| sign * p), "ψ", units.psi(plane), false),
        "residual" => make(
            hypot(&(&flow.used.u - &flow.u_fit), &(&flow.used.v - &flow.v_fit)),
            "residual speed",
            units.velocity(),
            false,
        ),
        _ => None,
    }
}

/// A drawn figure.
#[derive(Debug, Clone)]
pub struct Figure {
    /// The drawing.
    pub scene: Scene,
    svg: String,
    dpi: f64,
}

impl Figure {
    /// SVG document.
    pub fn svg(&self) -> &str {
        &self.svg
    }

    /// File of a kind: svg, pdf or png.
    ///
    /// # Errors
    /// [`FigureError`].
    pub fn bytes(&self, kind: &str) -> Result<Vec<u8>, FigureError> {
        match kind {
            "pdf" => to_pdf(&self.svg, self.scene.width, self.scene.height),
            "png" => to_png(&self.svg, self.scene.width, self.scene.height, self.dpi),
            _ => Ok(self.svg.clone().into_bytes()),
        }
    }
}

/// Levels drawn, their common step (0 when unequal).
pub fn step_of(features: &Features) -> f64 {
    let levels = &features.levels;
    let step = levels.windows(2).map(|w| w[1] - w[0]).fold(f64::INFINITY, f64::min);
    let equal = levels.windows(2).all(|w| {
        let n = (w[1] - w[0]) / step;
        (n - n.round()).abs() < 1e-6
    });
    if equal && step.is_finite() { step } else { 0.0 }
}

/// Draws the figure.
///
/// # Errors
/// [`FigureError`].
pub fn draw(input: &FigureInput<'_>, options: &FigureOptions) -> Result<Figure, FigureError> {
    let size = options.font_size_pt * POINT;
    let mut scene = Scene { width: options.width_mm, ..Scene::default() };
    let mut plot = layout(input, options, size);
    let [_, plot_height] = plot.size();
    // Narrow plots stand in the middle of the page.
    let bar = if input.background.is_some() { 8.0 + 4.0 * size } else { 2.0 };
    let used = plot.at[0] + plot.size()[0] + bar;
    plot.at[0] += (0.5 * (options.width_mm - used)).max(0.0);
    let map = options.color_map.unwrap_or(if input.background.as_ref().is_some_and(|b| b.signed) {
        ColorMap::Vik
    } else {
        ColorMap::Cividis
    });

    scene.items.push(Item::Clip { at: plot.at, size: plot.size() });
    if let Some(background) = &input.background {
        draw_image(&mut scene, &plot, &input.domain.grid, background, map)?;
    }
    draw_lines(&mut scene, &plot, input.contours);
    let mut taken: Vec<TextBox> = input
        .points
        .iter()
        .map(|p| TextBox { center: plot.place([p.x, p.y]), half: [1.3 * RADIUS, 1.3 * RADIUS], angle: 0.0 })
        .collect();
    draw_bodies(&mut scene, &plot, input, &mut taken);
    // Labels keep off the separatrices as well.
    for line in input.contours.iter().filter(|c| c.role == Role::Separatrix) {
        let mut last = [f64::NAN; 2];
        for &v in &line.vertices {
            let p = plot.place(v);
            if !((p[0] - last[0]).hypot(p[1] - last[1]) < 1.0) {
                taken.push(TextBox { center: p, half: [0.4, 0.4], angle: 0.0 });
                last = p;
            }
        }
    }
    scene.items.push(Item::EndClip);
    draw_walls(&mut scene, &plot, input.domain);
    if options.labels {
        draw_labels(&mut scene, &plot, input.contours, input.psi_sign, input.psi_step, 0.86 * size, &mut taken);
    }
    draw_arrows(&mut scene, &plot, input.contours, &taken);
    draw_axes(&mut scene, &plot, &input.units.position(), size);
    for point in input.points {
        let radius = RADIUS * if input.points.len() > 60 { 0.6 } else { 1.0 };
        draw_symbol(
            &mut scene,
            plot.place([point.x, point.y]),
            point.kind,
            counter_clockwise(point),
            point.normal.unwrap_or([0.0, 1.0]),
            radius,
        );
    }
    if let Some(background) = &input.background {
        let at = [plot.at[0] + plot.size()[0] + 2.5, plot.at[1]];
        draw_bar(&mut scene, at, plot_height, background, map, size)?;
    }
    let mut y = plot.at[1] + plot_height + 3.2 + 2.0 * size;
    y = draw_legend(&mut scene, input, y, size, options.width_mm);
    y = draw_caption(&mut scene, &input.caption, y, 0.92 * size, options.width_mm);
    scene.height = y + 1.0;
    let svg = to_svg(&scene, &input.caption);
    Ok(Figure { scene, svg, dpi: options.dpi })
}

/// Place and scale of the plot.
fn layout(input: &FigureInput<'_>, options: &FigureOptions, size: f64) -> Plot {
    let grid = &input.domain.grid;
    let (mut x, mut y) = ([grid.x.first(), grid.x.last()], [grid.y.first(), grid.y.last()]);
    for side in Side::ALL {
        if let Some(at) = input.domain.walls.get(side).and_then(|w| w.at) {
            match side {
                Side::Bottom => y[0] = y[0].min(at),
                Side::Top => y[1] = y[1].max(at),
                Side::Left => x[0] = x[0].min(at),
                Side::Right => x[1] = x[1].max(at),
            }
        }
    }
    let left = 5.0 + 5.2 * size;
    let right = if input.background.is_some() { 8.0 + 4.6 * size } else { 3.0 };
    let width = (options.width_mm - left - right).max(10.0);
    let scale = (width / (x[1] - x[0])).min((HIGHEST - 30.0) / (y[1] - y[0]));
    Plot { x, y, at: [left, 2.0 + CAP_HEIGHT * size], scale }
}

fn draw_bodies(scene: &mut Scene, plot: &Plot, input: &FigureInput<'_>, taken: &mut Vec<TextBox>) {
    let domain = input.domain;
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
                let mut squares = Vec::new();
                for ((j, i), &label) in domain.covered.indexed_iter() {
                    if label as usize == k + 1 {
                        let (wx, wy) = (0.5 * domain.grid.x.mean_step(), 0.5 * domain.grid.y.mean_step());
                        let (x, y) = (domain.grid.x.at(i), domain.grid.y.at(j));
                        let corners = [[x - wx, y - wy], [x + wx, y - wy], [x + wx, y + wy], [x - wx, y + wy]];
                        squares.push((corners.iter().map(|&c| plot.place(c)).collect(), true));
                    }
                }
                scene.paths(squares, Style { fill: Some(BODY), stroke: Some((BODY, 0.1)), dash: None });
                continue;
            }
        };
        let page: Vec<[f64; 2]> = outline.into_iter().map(|v| plot.place(v)).collect();
        let span = |k: usize| page.iter().map(|v| v[k]).fold((f64::MAX, f64::MIN), |(a, b), t| (a.min(t), b.max(t)));
        let ((a, b), (c, d)) = (span(0), span(1));
        taken.push(TextBox {
            center: [0.5 * (a + b), 0.5 * (c + d)],
            half: [0.5 * (b - a), 0.5 * (d - c)],
            angle: 0.0,
        });
        scene.path(page, true, style.clone());
    }
}

/// Walls: a heavy line with short strokes on the solid side.
fn draw_walls(scene: &mut Scene, plot: &Plot, domain: &Domain) {
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
        scene.paths(strokes, Style::line(DARK, 0.16));
    }
}

/// Row of the kinds that are present; returns the lower edge.
fn draw_legend(scene: &mut Scene, input: &FigureInput<'_>, y: f64, size: f64, width: f64) -> f64 {
    let mut entries: Vec<(&str, Option<StagnationKind>)> = Vec::new();
    for (kind, name) in [
        (StagnationKind::Center, "center"),
        (StagnationKind::Saddle, "saddle"),
        (StagnationKind::Separation, "separation"),
        (StagnationKind::Attachment, "attachment"),
    ] {
        if input.points.iter().any(|p| p.kind == kind) {
            entries.push((name, Some(kind)));
        }
    }
    if input.contours.iter().any(|c| c.role == Role::Separatrix) {
        entries.push(("separatrix", None));
    }
    if entries.is_empty() {
        return y;
    }
    let (mut x, mut row) = (5.0, y + 1.2 + CAP_HEIGHT * size);
    for (name, kind) in entries {
        let needed = 5.5 + font::width(name, false) * size;
        if x + needed > width && x > 5.0 {
            x = 5.0;
            row += 1.9 * size;
        }
        let middle = [x + 1.6, row - 0.5 * CAP_HEIGHT * size];
        match kind {
            Some(kind) => {
                let base = if matches!(kind, StagnationKind::Separation | StagnationKind::Attachment) {
                    [middle[0], middle[1] + 0.6]
                } else {
                    middle
                };
                draw_symbol(scene, base, kind, true, [0.0, 1.0], 0.9 * RADIUS);
            }
            None => scene.path(vec![[x, middle[1]], [x + 3.4, middle[1]]], false, Style::line(DARK, 0.42)),
        }
        put_text(scene, [x + 4.2, row], name, size, 0.0, Anchor::Start, false, false);
        x += needed + 3.5;
    }
    row + 0.6 * size
}

/// Caption broken into lines that fit; returns the lower edge.
fn draw_caption(scene: &mut Scene, caption: &str, y: f64, size: f64, width: f64) -> f64 {
    let mut row = y + 1.2 + CAP_HEIGHT * size;
    let mut line = String::new();
    let room = width - 7.0;
    let mut lines = Vec::new();
    for word in caption.split_whitespace() {
        let longer = if line.is_empty() { word.to_owned() } else { format!("{line} {word}") };
        if !line.is_empty() && font::width(&longer, false) * size > room {
            lines.push(std::mem::replace(&mut line, word.to_owned()));
        } else {
            line = longer;
        }
    }
    if !line.is_empty() {
        lines.push(line);
    }
    if lines.is_empty() {
        return y;
    }
    for text in lines {
        // A word longer than the page shrinks.
        let fit = (room / (font::width(&text, false) * size)).min(1.0);
        put_text(scene, [5.0, row], &text, size * fit, 0.0, Anchor::Start, false, false);
        row += 1.5 * size;
    }
    row - 0.9 * size
}

/// Caption of an analysis: step of psi, its zero, sigma, verdict.
pub fn caption_of(
    flow: &FittedFlow,
    check: &Check,
    features: &Features,
    units: &UnitSystem,
    plane: bool,
    zero: &str,
) -> String {
    let unit = font::typeset_unit(&units.psi(plane));
    let step = step_of(features);
    let step = if step > 0.0 {
        format!("Streamlines every {} {unit}", trim(step))
    } else {
        "Streamlines at chosen levels".to_owned()
    };
    let sigma = match flow.used.sigma.rms(&flow.used.valid) {
        Some(sigma) => format!("σ = {} {}", trim(sigma), font::typeset_unit(&units.velocity())),
        None => "σ not declared".to_owned(),
    };
    format!("{step}, ψ = 0 {zero}; {sigma}; verdict: {}.", check.report.verdict.name())
}

fn trim(value: f64) -> String {
    let digits = (3 - value.abs().max(1e-300).log10().floor() as i32).clamp(0, 12) as usize;
    let text = format!("{value:.digits$}");
    if text.contains('.') { text.trim_end_matches('0').trim_end_matches('.').to_owned() } else { text }
}
