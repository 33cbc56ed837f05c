//! One publication figure: layout, layers from back to front.

use ndarray::Array2;

use super::axes::{MARGIN, Plot, draw_axes, room_below, room_left};
use super::background::{Background, draw_image, gaps_of};
use super::color_bar::ColorBar;
use super::color_map::ColorMap;
use super::legend::{Entry, draw_caption, draw_legend};
use super::lines::{draw_arrows, draw_labels, draw_lines, place_labels};
use super::raster::{FigureError, to_pdf, to_png};
use super::scene::{Item, Scene, TextBox};
use super::solids::{draw_bodies, draw_walls};
use super::svg::to_svg;
use super::symbols::{RADIUS, counter_clockwise, draw_symbol};
use crate::extract::contour::{Contour, Role};
use crate::extract::stagnation::{StagnationKind, StagnationPoint};
use crate::field::{Domain, Flags, Side, UnitSystem};

/// Millimeters per point.
const POINT: f64 = 25.4 / 72.0;

/// A figure is about this high at most, in millimeters; the plot shrinks instead.
const HIGHEST: f64 = 230.0;

/// Levels along the lines are this much smaller than other text.
const LEVEL_SIZE: f64 = 0.86;

/// With more stagnation points than this their marks are drawn smaller.
const MANY_POINTS: usize = 60;

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

impl FigureOptions {
    /// Width of one column in millimeters.
    pub const SINGLE: f64 = 90.0;
    /// Width of one column and a half.
    pub const WIDE: f64 = 140.0;
    /// Width of two columns.
    pub const DOUBLE: f64 = 190.0;
}

impl Default for FigureOptions {
    fn default() -> Self {
        Self { width_mm: Self::WIDE, font_size_pt: 7.5, labels: true, color_map: None, dpi: 300.0 }
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
    /// What every node is, to show gaps; `None`: every node was measured.
    pub flags: Option<&'a Array2<Flags>>,
    /// Units.
    pub units: &'a UnitSystem,
    /// Sign of the reported psi.
    pub psi_sign: f64,
    /// Step between levels, 0 when they are not equally spaced.
    pub psi_step: f64,
    /// Line under the figure.
    pub caption: String,
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

/// Draws the figure.
///
/// Layers from back to front: field, lines, arrow heads, bodies, walls, levels along the lines, frame and ticks, stagnation points; color
/// bar beside the plot (below a low one); legend and caption under it.  Positions that are not finite are left out.
///
/// # Errors
/// [`FigureError`]: no page has this size, the coordinates cannot be scaled to it, or an image cannot be made.
pub fn draw(input: &FigureInput<'_>, options: &FigureOptions) -> Result<Figure, FigureError> {
    let size = options.font_size_pt * POINT;
    if !((10.0..=5000.0).contains(&options.width_mm) && size > 0.0 && 4.0 * size < options.width_mm) {
        return Err(FigureError::Page { width_mm: options.width_mm, font_size_pt: options.font_size_pt });
    }
    let mut scene = Scene { width: options.width_mm, ..Scene::default() };
    let signed = input.background.as_ref().is_some_and(|b| b.signed);
    let map = options.color_map.unwrap_or(if signed { ColorMap::Vik } else { ColorMap::Cividis });
    let bar = input.background.as_ref().and_then(|b| ColorBar::new(b, map, size));
    let (plot, turned) = layout(input, options, size, bar.as_ref())?;

    scene.items.push(Item::Clip { at: plot.at, size: plot.size() });
    draw_image(&mut scene, &plot, input.domain, input.background.as_ref(), input.flags, map)?;
    let marks = marks_of(input, &plot);
    let radius = if marks.len() > MANY_POINTS { 0.6 * RADIUS } else { RADIUS };
    let mut taken: Vec<TextBox> = marks.iter().map(|(_, at)| TextBox::level(*at, [1.3 * radius; 2])).collect();
    let mut bodies = Scene::default();
    draw_bodies(&mut bodies, &plot, input.domain, &mut taken);
    taken.extend(along_separatrices(input.contours, &plot));
    let labels = if options.labels {
        place_labels(&plot, input.contours, input.psi_sign, input.psi_step, LEVEL_SIZE * size, &mut taken)
    } else {
        Vec::new()
    };
    let spots: Vec<TextBox> = labels.iter().map(|l| l.spot).collect();
    let dashed = draw_lines(&mut scene, &plot, input.contours, &spots);
    draw_arrows(&mut scene, &plot, input.contours, &taken);
    scene.items.append(&mut bodies.items);
    scene.items.push(Item::EndClip);
    draw_walls(&mut scene, &plot, input.domain);
    draw_labels(&mut scene, &labels, LEVEL_SIZE * size);
    draw_axes(&mut scene, &plot, &input.units.position(), size, turned.label_above);
    for (point, at) in &marks {
        draw_symbol(&mut scene, *at, point.kind, counter_clockwise(point), point.normal.unwrap_or([0.0, 1.0]), radius);
    }
    let [w, h] = plot.size();
    if let Some(bar) = bar.as_ref().filter(|_| !turned.bar_lies) {
        bar.draw_upright(&mut scene, [plot.at[0] + w, plot.at[1]], h)?;
    }
    let top = plot.at[1] + h + room_below(size);
    // Aligned with a wide plot; a narrow one stands in the middle of the page.
    let left = if plot.at[0] < 0.2 * options.width_mm { plot.at[0] } else { MARGIN };
    let lying = bar.as_ref().filter(|_| turned.bar_lies);
    scene.height = draw_below(&mut scene, input, &entries_of(input, dashed), lying, [left, top], size)? + 1.0;
    let svg = to_svg(&scene, &input.caption);
    Ok(Figure { scene, svg, dpi: options.dpi })
}

/// Lying color bar, legend and caption; returns the lower edge.
fn draw_below(
    scene: &mut Scene,
    input: &FigureInput<'_>,
    entries: &[Entry],
    lying: Option<&ColorBar<'_>>,
    [left, top]: [f64; 2],
    size: f64,
) -> Result<f64, FigureError> {
    let mut y = top;
    if let Some(bar) = lying {
        y = bar.draw_lying(scene, left, y)?;
    }
    y = draw_legend(scene, entries, left, y, size);
    Ok(draw_caption(scene, &input.caption, left, y, 0.92 * size))
}

/// What a plot that is too low for upright labels has elsewhere.
#[derive(Debug, Clone, Copy, Default)]
struct Turned {
    /// The label of the y axis stands above the plot.
    label_above: bool,
    /// The color bar lies below the plot.
    bar_lies: bool,
}

/// Place and scale of the plot.
fn layout(
    input: &FigureInput<'_>,
    options: &FigureOptions,
    size: f64,
    bar: Option<&ColorBar<'_>>,
) -> Result<(Plot, Turned), FigureError> {
    let grid = &input.domain.grid;
    let (mut x, mut y) = ([grid.x.first(), grid.x.last()], [grid.y.first(), grid.y.last()]);
    for side in Side::ALL {
        if let Some(at) = input.domain.walls.get(side).and_then(|w| w.at).filter(|at| at.is_finite()) {
            match side {
                Side::Bottom => y[0] = y[0].min(at),
                Side::Top => y[1] = y[1].max(at),
                Side::Left => x[0] = x[0].min(at),
                Side::Right => x[1] = x[1].max(at),
            }
        }
    }
    let (lx, ly) = (x[1] - x[0], y[1] - y[0]);
    let unit = input.units.position();
    let mut plot = Plot { x, y, at: [0.0, 0.0], scale: options.width_mm / lx };
    // Labels depend on the size of the plot and the plot on the room the labels leave: a few rounds settle it.  What was turned once
    // stays turned, else the rounds could go to and fro.
    let mut turned = Turned::default();
    for _ in 0..4 {
        let h = plot.size()[1];
        turned.label_above |= plot.label_above(&unit, size);
        turned.bar_lies |= bar.is_some_and(|b| b.lies(h));
        let above = turned.label_above;
        let left = MARGIN + room_left(y, h, size, above);
        let right = MARGIN + bar.filter(|_| !turned.bar_lies).map_or(0.6 * size, |b| b.room(h));
        let top = 1.0 + if above { 2.2 * size } else { 0.5 * size };
        let mut probe = Scene { width: options.width_mm, ..Scene::default() };
        let entries = entries_of(input, false);
        let below = draw_below(&mut probe, input, &entries, bar.filter(|_| turned.bar_lies), [left, 0.0], size)?;
        let width = (options.width_mm - left - right).max(MARGIN);
        let height = (HIGHEST - top - room_below(size) - below).max(0.25 * HIGHEST);
        plot.scale = (width / lx).min(height / ly);
        let spare = options.width_mm - left - plot.size()[0] - right;
        plot.at = [left + (0.5 * spare).max(0.0), top];
    }
    let [w, h] = plot.size();
    if [lx, ly, plot.scale].iter().all(|v| v.is_normal()) && w.is_finite() && h.is_finite() {
        Ok((plot, turned))
    } else {
        Err(FigureError::Range { x, y })
    }
}

/// Stagnation points with a place on the page.
fn marks_of<'a>(input: &FigureInput<'a>, plot: &Plot) -> Vec<(&'a StagnationPoint, [f64; 2])> {
    input
        .points
        .iter()
        .map(|p| (p, plot.place([p.x, p.y])))
        .filter(|(_, at)| at[0].is_finite() && at[1].is_finite())
        .collect()
}

/// Places along the separatrices that labels keep off.
fn along_separatrices(contours: &[Contour], plot: &Plot) -> Vec<TextBox> {
    let mut out = Vec::new();
    for line in contours.iter().filter(|c| c.role == Role::Separatrix) {
        let mut last = [f64::NAN; 2];
        for &v in &line.vertices {
            let p = plot.place(v);
            if !((p[0] - last[0]).hypot(p[1] - last[1]) < 1.0) {
                out.push(TextBox::level(p, [0.4, 0.4]));
                last = p;
            }
        }
    }
    out
}

/// What the legend explains: only what is there.
fn entries_of(input: &FigureInput<'_>, dashed: bool) -> Vec<Entry> {
    use StagnationKind::{Attachment, Center, Saddle, Separation};
    let gaps = gaps_of(input.domain, input.flags);
    let present = |kind| input.points.iter().any(|p| p.kind == kind);
    let points = [Center, Saddle, Separation, Attachment].into_iter().filter(|&kind| present(kind)).map(Entry::Point);
    let others = [
        (Entry::Separatrix, input.contours.iter().any(|c| c.role == Role::Separatrix)),
        (Entry::Filled, gaps.filled || dashed),
        (Entry::Missing, gaps.missing),
    ];
    points.chain(others.into_iter().filter(|(_, shown)| *shown).map(|(entry, _)| entry)).collect()
}
