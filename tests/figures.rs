//! Figures: layout without overlaps, the same bytes every time, files other programs open.

#![cfg(feature = "figure")]

use std::process::Command;

use isopsi::extract::contour::{Contour, Role, Scene, TraceOptions, trace_contours};
use isopsi::extract::levels::{LevelChoice, choose_levels, round_step};
use isopsi::extract::separatrix::trace_separatrices;
use isopsi::extract::stagnation::{
    Boundary, StagnationKind, StagnationOptions, StagnationPoint, find_stagnation_points, number_points,
};
use isopsi::field::{Axis, Body, Domain, Flags, Grid, Shape, Side, Surface, UnitSystem, Wall, Walls};
use isopsi::figure::{Background, Figure, FigureError, FigureInput, FigureOptions, Item, TextBox, draw};
use isopsi::numerics::surface::PsiSurface;
use ndarray::Array2;

/// Everything a figure shows, made from an analytic stream function.
struct Subject {
    domain: Domain,
    flags: Array2<Flags>,
    contours: Vec<Contour>,
    points: Vec<StagnationPoint>,
    background: Option<Background>,
    units: UnitSystem,
    step: f64,
    caption: String,
}

impl Subject {
    fn new(domain: Domain, psi: impl Fn(f64, f64) -> f64) -> Self {
        let grid = &domain.grid;
        let (x, y) = (&grid.x, &grid.y);
        let values = Array2::from_shape_fn(grid.shape(), |(j, i)| psi(x.at(i), y.at(j)));
        let flags =
            Array2::from_shape_fn(
                grid.shape(),
                |(j, i)| {
                    if domain.is_solid(j, i) { Flags::SOLID } else { Flags::MEASURED }
                },
            );
        let surface = PsiSurface::new(grid, &values);
        let points = number_points(find_stagnation_points(&surface, &domain, &StagnationOptions::default()).points);
        let points: Vec<_> =
            points.into_iter().filter(|p| !domain.bodies.iter().any(|b| b.shape.contains(p.x, p.y))).collect();
        let levels = choose_levels(&surface, &LevelChoice::Count(22), &[]);
        let step = levels.windows(2).map(|w| w[1] - w[0]).fold(f64::INFINITY, f64::min);
        let step = if step.is_finite() { round_step(step) } else { 0.0 };
        let scene = Scene { surface: &surface, domain: &domain, flags: &flags };
        let centers: Vec<[f64; 2]> =
            points.iter().filter(|p| p.kind == StagnationKind::Center).map(|p| [p.x, p.y]).collect();
        let mut contours = trace_contours(&scene, &levels, &centers, &TraceOptions::default());
        contours.extend(trace_separatrices(&scene, &points, &TraceOptions::default()));
        let speed = Array2::from_shape_fn(grid.shape(), |(j, i)| {
            if domain.is_solid(j, i) {
                return f64::NAN;
            }
            surface.psi_x()[[j, i]].hypot(surface.psi_y()[[j, i]])
        });
        let background =
            Some(Background { values: speed, label: "speed".into(), unit: "mm s-1".into(), signed: false });
        Self {
            flags,
            contours,
            points,
            background,
            units: UnitSystem::new("mm", "s"),
            step,
            caption: "Streamlines of an analytic flow, ψ = 0 on the axis; σ not declared.".into(),
            domain,
        }
    }

    fn draw_with(&self, options: &FigureOptions) -> Result<Figure, FigureError> {
        let input = FigureInput {
            domain: &self.domain,
            contours: &self.contours,
            points: &self.points,
            background: self.background.clone(),
            flags: Some(&self.flags),
            units: &self.units,
            psi_sign: 1.0,
            psi_step: self.step,
            caption: self.caption.clone(),
        };
        draw(&input, options)
    }

    fn draw(&self) -> Figure {
        self.draw_with(&FigureOptions::default()).expect("the figure can be drawn")
    }
}

fn rectangle(x: [f64; 2], y: [f64; 2], nx: usize, ny: usize) -> Grid {
    let axis = |[a, b]: [f64; 2], n: usize| Axis::uniform(a, (b - a) / (n - 1) as f64, n).expect("an axis");
    Grid::new(axis(x, nx), axis(y, ny))
}

/// Taylor-Green vortices, psi = A cos x cos y: centers and saddles alternate.
fn taylor_green(x: [f64; 2], y: [f64; 2], nx: usize, ny: usize) -> Subject {
    Subject::new(Domain::open(rectangle(x, y, nx, ny)), |x, y| 10.0 * x.cos() * y.cos())
}

/// Uniform flow past a circle of radius 1 on a slip wall (its mirror image below), with a smoothed vortex and its images behind
/// (Milne-Thomson's circle theorem, from memory).
fn bump() -> Subject {
    let wall = Walls { bottom: Some(Wall { surface: Surface::Slip, at: None }), ..Walls::default() };
    let body = Body { shape: Shape::Circle { x: 0.0, y: 0.0, radius: 1.0 }, surface: Surface::Slip };
    let domain = Domain::open(rectangle([-2.5, 6.0], [0.0, 3.2], 171, 65)).with_body(body).with_walls(wall);
    let (cx, cy, strength) = (2.1_f64, 0.75_f64, 1.4);
    let r2 = cx * cx + cy * cy;
    let (ix, iy) = (cx / r2, cy / r2);
    let log = |x: f64, y: f64, a: f64, b: f64| 0.5 * ((x - a).powi(2) + (y - b).powi(2) + 0.05).ln();
    let mut subject = Subject::new(domain, |x, y| {
        let r = (x * x + y * y).max(0.3);
        let images = log(x, y, cx, cy) - log(x, y, cx, -cy) - log(x, y, ix, iy) + log(x, y, ix, -iy);
        60.0 * (y * (1.0 - 1.0 / r) + strength * images)
    });
    let on_wall = |x: f64, kind| StagnationPoint {
        id: 0,
        kind,
        x,
        y: 0.0,
        psi: 0.0,
        rate: f64::NAN,
        directions: None,
        index: 0,
        boundary: Some(Boundary::Side(Side::Bottom)),
        normal: Some([0.0, 1.0]),
        notes: Vec::new(),
    };
    subject.points.extend([on_wall(3.6, StagnationKind::Attachment), on_wall(1.35, StagnationKind::Separation)]);
    for j in 30..40 {
        for i in 100..118 {
            subject.flags[[j, i]] = Flags::FILLED;
        }
    }
    for j in 44..52 {
        for i in 140..155 {
            subject.flags[[j, i]] = Flags(0);
        }
    }
    subject
}

/// Subjects that try the layout, with their names.
fn subjects() -> Vec<(&'static str, Subject)> {
    let mut out = vec![
        ("vortices", taylor_green([0.0, 12.0], [0.0, 8.0], 121, 81)),
        ("bump", bump()),
        ("tall", taylor_green([0.0, 2.0], [0.0, 12.0], 41, 241)),
        ("wide", taylor_green([0.0, 24.0], [0.0, 4.0], 241, 41)),
        ("three by three", taylor_green([0.5, 2.0], [0.3, 1.8], 3, 3)),
        ("200 points", taylor_green([0.0, 38.0], [0.0, 38.0], 151, 151)),
    ];
    let grid = rectangle([3e7, 3.8e7], [-2e7, 3e7], 61, 41);
    out.push(("huge", Subject::new(Domain::open(grid), |x, y| 1e12 * (x / 2e6).sin() * (y / 3e6).cos())));
    let grid = rectangle([-2e-7, 3e-7], [1e-9, 3e-7], 61, 41);
    out.push(("tiny", Subject::new(Domain::open(grid), |x, y| 1e-12 * (x / 4e-8).sin() * (y / 6e-8).cos())));
    let grid = rectangle([1e6, 1e6 + 3.0], [5e5, 5e5 + 2.0], 61, 41);
    out.push(("far away", Subject::new(Domain::open(grid), |x, y| ((x - 1e6) * 3.0).sin() * ((y - 5e5) * 3.0).cos())));
    let mut long = taylor_green([0.0, 20.0], [0.0, 4.0], 121, 41);
    long.units = UnitSystem::new("length units of an old instrument nobody remembers", "frame");
    if let Some(b) = &mut long.background {
        b.unit = "length units of an old instrument nobody remembers frame-1".into();
        b.label = "root of the mean square of the speed over all frames of the series".into();
    }
    long.caption = "Long ".repeat(80) + &"x".repeat(400);
    out.push(("long words", long));
    let mut bare = taylor_green([0.0, 6.0], [0.0, 4.0], 31, 21);
    bare.background = None;
    bare.points.clear();
    bare.contours.clear();
    bare.caption.clear();
    out.push(("bare", bare));
    out
}

/// Every start has its end, in order; attributes are quoted; text holds no bare `<` or `&`.
fn well_formed(xml: &str) -> Result<(), String> {
    let mut open: Vec<&str> = Vec::new();
    let mut rest = xml;
    while let Some(at) = rest.find('<') {
        let text = &rest[..at];
        if text.contains('>') || text.match_indices('&').any(|(k, _)| !text[k..].contains(';')) {
            return Err(format!("bare sign in `{text}`"));
        }
        let end = rest[at..].find('>').ok_or("a tag does not end")?;
        let tag = &rest[at + 1..at + end];
        if !tag.matches('"').count().is_multiple_of(2) {
            return Err(format!("quotes in `{tag}`"));
        }
        if let Some(name) = tag.strip_prefix('/') {
            if open.pop() != Some(name) {
                return Err(format!("`{name}` closes nothing"));
            }
        } else if !tag.ends_with('/') {
            open.push(tag.split(' ').next().unwrap_or(""));
        }
        rest = &rest[at + end + 1..];
    }
    if open.is_empty() { Ok(()) } else { Err(format!("{open:?} stay open")) }
}

/// No coordinate is written as NaN or inf; images may hold these letters by chance.
fn numbers_are_finite(svg: &str) -> bool {
    svg.split("base64,").enumerate().all(|(k, part)| {
        let outside = if k == 0 { part } else { part.split_once('"').map_or("", |(_, rest)| rest) };
        !outside.contains("NaN") && !outside.contains("inf")
    })
}

fn overlaps(boxes: &[TextBox]) -> usize {
    boxes.iter().enumerate().map(|(k, a)| boxes[..k].iter().filter(|b| a.overlaps(b)).count()).sum()
}

#[test]
fn texts_never_overlap_and_stay_on_the_page_whatever_the_domain() {
    for (name, subject) in subjects() {
        for width_mm in [FigureOptions::SINGLE, FigureOptions::DOUBLE] {
            for font_size_pt in [6.0, 7.5, 12.0] {
                let figure = subject
                    .draw_with(&FigureOptions { width_mm, font_size_pt, ..FigureOptions::default() })
                    .unwrap_or_else(|e| panic!("{name}: {e}"));
                let scene = &figure.scene;
                assert_eq!(overlaps(&scene.boxes), 0, "{name}, {width_mm} mm, {font_size_pt} pt");
                for corner in scene.boxes.iter().flat_map(|b| b.corners()) {
                    let inside = (0.0..=scene.width).contains(&corner[0]) && (0.0..=scene.height).contains(&corner[1]);
                    assert!(inside, "{name}, {width_mm} mm, {font_size_pt} pt: {corner:?} of {}", scene.height);
                }
                assert!(scene.height <= 260.0, "{name}: {} mm high", scene.height);
                assert!(numbers_are_finite(figure.svg()), "{name}");
            }
        }
    }
}

/// Place of a text along a line.
fn halo_text(item: &Item) -> Option<[f64; 2]> {
    match item {
        Item::Text { at, style, .. } if style.halo => Some(*at),
        _ => None,
    }
}

#[test]
fn labels_keep_off_the_marks_of_points_and_off_bodies() {
    let subject = bump();
    let figure = subject.draw();
    let clip = figure.scene.items.iter().find_map(|i| match i {
        Item::Clip { at, size } => Some((*at, *size)),
        _ => None,
    });
    let (at, size) = clip.expect("the plot is clipped");
    let place = |x: f64, y: f64| [at[0] + (x + 2.5) / 8.5 * size[0], at[1] + (3.2 - y) / 3.2 * size[1]];
    // Aspect 1:1, y up.
    approx::assert_abs_diff_eq!(size[0] / 8.5, size[1] / 3.2, epsilon = 1e-9);
    // A point put where a label stood drives the label away.
    let labels: Vec<[f64; 2]> = figure.scene.items.iter().filter_map(halo_text).collect();
    assert!(labels.len() >= 4, "{labels:?}");
    let mut crowded = bump();
    for at_label in labels {
        let [x, y] = [at_label[0] - at[0], at_label[1] - at[1]];
        let (x, y) = (-2.5 + x / size[0] * 8.5, 3.2 - y / size[1] * 3.2);
        crowded.points.push(StagnationPoint { x, y, kind: StagnationKind::Saddle, ..crowded.points[0].clone() });
    }
    let figure = crowded.draw();
    assert!(figure.scene.items.iter().filter_map(halo_text).count() >= 4, "labels find other places");
    for point in &crowded.points {
        let mark = TextBox::level(place(point.x, point.y), [1.0, 1.0]);
        assert!(!figure.scene.boxes.iter().any(|b| b.overlaps(&mark)), "{point:?}");
    }
    let body = TextBox::level(place(0.0, 0.4), [size[0] / 8.5 * 0.7, size[1] / 3.2 * 0.35]);
    assert!(!figure.scene.boxes.iter().any(|b| b.overlaps(&body)));
}

#[test]
fn every_kind_of_point_and_gap_present_is_explained_and_no_other() {
    let explained = |subject: &Subject| -> Vec<String> {
        let names = ["center", "saddle", "separation", "attachment", "separatrix", "filled gap", "no data"];
        let figure = subject.draw();
        names.into_iter().filter(|n| figure.svg().contains(&format!(">{n}<"))).map(str::to_owned).collect()
    };
    assert_eq!(explained(&bump()), ["center", "separation", "attachment", "filled gap", "no data"].map(str::to_owned));
    assert_eq!(
        explained(&taylor_green([0.0, 12.0], [0.0, 8.0], 61, 41)),
        ["center", "saddle", "separatrix"].map(str::to_owned)
    );
}

#[test]
fn the_same_figure_has_the_same_bytes_in_every_format() {
    let (a, b) = (bump().draw(), bump().draw());
    for kind in ["svg", "pdf", "png"] {
        assert!(a.bytes(kind).expect(kind) == b.bytes(kind).expect(kind), "{kind}");
    }
}

#[test]
fn hostile_text_stays_text() {
    let mut subject = taylor_green([0.0, 6.0], [0.0, 4.0], 31, 21);
    let evil = "<script>alert(\"1\")</script> & ]]> ' \u{0} \u{8} \u{fffe} --> &#0; \u{1F600}";
    subject.caption = evil.into();
    subject.units = UnitSystem::new("<b>mm</b>&", "\"s'");
    if let Some(b) = &mut subject.background {
        b.label = evil.into();
        b.unit = evil.into();
    }
    let figure = subject.draw();
    well_formed(figure.svg()).expect("well-formed");
    assert!(!figure.svg().contains("<script") && figure.svg().contains("&lt;script&gt;"));
    assert!(!figure.svg().contains(|c: char| c.is_control() && c != '\n'));
    for kind in ["pdf", "png"] {
        assert!(!figure.bytes(kind).expect(kind).is_empty());
    }
}

#[test]
fn svg_is_well_formed_small_and_has_live_text() {
    for (name, subject) in subjects() {
        let figure = subject.draw();
        well_formed(figure.svg()).unwrap_or_else(|e| panic!("{name}: {e}"));
        assert!(figure.svg().len() < 3_000_000, "{name}: {} bytes", figure.svg().len());
    }
    let svg = bump().draw().svg().to_owned();
    assert!(svg.contains("<text") && svg.contains("'DejaVu Sans', sans-serif"));
    assert!(svg.contains("mm s⁻¹") && !svg.contains("s-1"), "units are typeset");
}

#[test] // PNG: width and height are the first two numbers of IHDR (PNG specification, from memory)
fn png_has_the_size_asked_for() {
    for (width_mm, dpi) in [(90.0, 300.0), (140.0, 150.0), (190.0, 96.0)] {
        let figure = bump().draw_with(&FigureOptions { width_mm, dpi, ..FigureOptions::default() }).expect("drawn");
        let png = figure.bytes("png").expect("png");
        let number = |at: usize| u32::from_be_bytes([png[at], png[at + 1], png[at + 2], png[at + 3]]);
        assert_eq!(number(16), (width_mm / 25.4 * dpi).round() as u32);
        assert_eq!(number(20), (figure.scene.height / 25.4 * dpi).round() as u32);
    }
}

#[test]
fn pdf_embeds_its_fonts_and_carries_no_clock() {
    let pdf = bump().draw().bytes("pdf").expect("pdf");
    let text = String::from_utf8_lossy(&pdf);
    assert!(pdf.starts_with(b"%PDF-1.") && text.trim_end().ends_with("%%EOF"));
    assert!(text.contains("DejaVuSans") && text.contains("/FontFile"), "fonts are embedded");
    assert!(!text.contains("CreationDate") && !text.contains("ModDate"));
}

#[test]
fn pages_without_room_and_coordinates_without_scale_are_errors() {
    let subject = taylor_green([0.0, 6.0], [0.0, 4.0], 31, 21);
    for (width_mm, font_size_pt) in [(0.0, 7.0), (f64::NAN, 7.0), (90.0, 0.0), (90.0, 400.0), (1e9, 7.0)] {
        let options = FigureOptions { width_mm, font_size_pt, ..FigureOptions::default() };
        assert!(matches!(subject.draw_with(&options), Err(FigureError::Page { .. })), "{width_mm} {font_size_pt}");
    }
    let mut far = taylor_green([0.0, 6.0], [0.0, 4.0], 31, 21);
    let axis = Axis::from_nodes(vec![-1.7e308, 0.0, 1.7e308]).expect("finite nodes");
    far.domain = Domain::open(Grid::new(axis.clone(), axis));
    assert!(matches!(far.draw_with(&FigureOptions::default()), Err(FigureError::Range { .. })));
    let huge = FigureOptions { dpi: 1e6, ..FigureOptions::default() };
    let drawn = subject.draw_with(&huge).expect("the drawing itself has no pixels");
    assert!(matches!(drawn.bytes("png"), Err(FigureError::TooLarge { .. })));
}

#[test]
fn vertices_and_points_that_are_not_finite_are_left_out() {
    let mut subject = taylor_green([0.0, 6.0], [0.0, 4.0], 31, 21);
    for line in &mut subject.contours {
        let middle = line.vertices.len() / 2;
        line.vertices[middle] = [f64::NAN, f64::INFINITY];
        line.flags.clear();
    }
    subject.points[0].x = f64::NAN;
    if let Some(b) = &mut subject.background {
        b.values[[3, 3]] = f64::INFINITY;
    }
    subject.contours.push(Contour {
        role: Role::Level,
        psi: f64::NAN,
        closed: true,
        vertices: Vec::new(),
        flags: Vec::new(),
        length: f64::NAN,
        area: None,
        period: None,
        period_by_area: None,
        measured_share: 0.0,
        from_point: None,
    });
    let figure = subject.draw();
    well_formed(figure.svg()).expect("well-formed");
    assert!(numbers_are_finite(figure.svg()));
    // The writer would put 0 for them: none may reach it.
    for item in &figure.scene.items {
        if let Item::Path { pieces, .. } = item {
            assert!(pieces.iter().flat_map(|(line, _)| line).flatten().all(|t| t.is_finite()));
        }
    }
}

/// Gray values of a binary PPM or of a PNG turned into one.
fn gray(ppm: &[u8]) -> (usize, usize, Vec<f64>) {
    let mut words = Vec::new();
    let mut at = 0;
    while words.len() < 4 {
        let end = at + ppm[at..].iter().position(u8::is_ascii_whitespace).expect("a header");
        words.push(String::from_utf8_lossy(&ppm[at..end]).into_owned());
        at = end + 1;
    }
    let (w, h): (usize, usize) = (words[1].parse().expect("width"), words[2].parse().expect("height"));
    let gray = ppm[at..].chunks_exact(3).map(|p| p.iter().map(|&c| f64::from(c)).sum::<f64>() / 3.0).collect();
    (w, h, gray)
}

/// Means over boxes of 8 by 8 pixels, so that edges may differ by a fraction of a pixel.
fn coarse((w, h, gray): &(usize, usize, Vec<f64>)) -> (usize, Vec<f64>) {
    let (cw, ch) = (w / 8, h / 8);
    let mean = |r: usize, c: usize| (0..64).map(|k| gray[(8 * r + k / 8) * w + 8 * c + k % 8]).sum::<f64>() / 64.0;
    (cw, (0..ch).flat_map(|r| (0..cw).map(move |c| (r, c))).map(|(r, c)| mean(r, c)).collect())
}

/// pdftoppm (Poppler) reads the PDF independently of what made it.
#[test]
fn pdf_and_png_show_the_same_picture() {
    let required = std::env::var_os("ISOPSI_REQUIRE_TOOLS").is_some();
    let folder = tempfile::tempdir().expect("a folder");
    let figure = bump().draw_with(&FigureOptions { dpi: 150.0, ..FigureOptions::default() }).expect("drawn");
    let pdf = folder.path().join("a.pdf");
    std::fs::write(&pdf, figure.bytes("pdf").expect("pdf")).expect("written");
    let ran = Command::new("pdftoppm").args(["-r", "150"]).arg(&pdf).arg(folder.path().join("a")).status();
    match ran {
        Ok(status) => assert!(status.success(), "pdftoppm refuses the file"),
        Err(e) if required => panic!("pdftoppm is required here: {e}"),
        Err(_) => return,
    }
    let page = std::fs::read_dir(folder.path())
        .expect("listed")
        .filter_map(|e| Some(e.ok()?.path()))
        .find(|p| p.extension().is_some_and(|e| e == "ppm"))
        .expect("a page");
    let from_pdf = gray(&std::fs::read(page).expect("read"));
    let png = figure.bytes("png").expect("png");
    let map = resvg::tiny_skia::Pixmap::decode_png(&png).expect("decoded");
    let values = map.pixels().iter().map(|p| (f64::from(p.red()) + f64::from(p.green()) + f64::from(p.blue())) / 3.0);
    let from_png = (map.width() as usize, map.height() as usize, values.collect());
    let ((w, a), (v, b)) = (coarse(&from_pdf), coarse(&from_png));
    assert_eq!(w, v);
    let differences: Vec<f64> = a.iter().zip(&b).map(|(a, b)| (a - b).abs()).collect();
    let mean = differences.iter().sum::<f64>() / differences.len() as f64;
    // Hinting and a shift below a pixel remain; a missing layer, font or image differs by tens of gray levels.
    assert!(mean < 3.0, "mean difference {mean:.2} of 255");
}
