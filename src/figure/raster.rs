//! SVG -> PNG and PDF, with the fonts of this crate only.

use std::sync::Arc;

use krilla::geom::Size;
use krilla::page::PageSettings;
use krilla::{Document, SerializeSettings};
use krilla_svg::{SurfaceExt, SvgSettings};
use resvg::tiny_skia::{Pixmap, Transform};
use resvg::usvg::{Options, Tree, fontdb};

use super::font::{FAMILY, OBLIQUE, REGULAR};

/// Why a figure could not be written.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum FigureError {
    /// The SVG was not understood: a defect of this program.
    #[error("the drawing cannot be converted: {reason}")]
    Svg {
        /// What the parser said.
        reason: String,
    },
    /// No text fits on the page.
    #[error(
        "a figure {width_mm} mm wide with letters of {font_size_pt} pt cannot be laid out; choose 30 to 1000 mm and 4 to 24 pt"
    )]
    Page {
        /// Width of the page.
        width_mm: f64,
        /// Font size.
        font_size_pt: f64,
    },
    /// The coordinates cannot be scaled to a page.
    #[error("coordinates from {x:?} by {y:?} cannot be drawn to scale")]
    Range {
        /// Range of x.
        x: [f64; 2],
        /// Range of y.
        y: [f64; 2],
    },
    /// The image would be too large.
    #[error("an image of {width} x {height} pixels is too large; choose a smaller width")]
    TooLarge {
        /// Pixels.
        width: u32,
        /// Pixels.
        height: u32,
    },
    /// The PDF could not be finished.
    #[error("the PDF cannot be finished: {reason}")]
    Pdf {
        /// What the library said.
        reason: String,
    },
}

/// Images larger than this many pixels on a side are refused.
const LARGEST: u32 = 30_000;

fn tree(svg: &str) -> Result<Tree, FigureError> {
    let mut fonts = fontdb::Database::new();
    fonts.load_font_data(REGULAR.to_vec());
    fonts.load_font_data(OBLIQUE.to_vec());
    fonts.set_sans_serif_family(FAMILY);
    let options = Options { fontdb: Arc::new(fonts), font_family: FAMILY.to_owned(), ..Options::default() };
    Tree::from_str(svg, &options).map_err(|e| FigureError::Svg { reason: e.to_string() })
}

/// PNG of an SVG whose size is stated in millimeters, at `dpi` pixels an inch.
///
/// # Errors
/// [`FigureError`].
pub fn to_png(svg: &str, width_mm: f64, height_mm: f64, dpi: f64) -> Result<Vec<u8>, FigureError> {
    let tree = tree(svg)?;
    let pixels = |mm: f64| (mm / 25.4 * dpi).round().max(1.0) as u32;
    let (width, height) = (pixels(width_mm), pixels(height_mm));
    if width > LARGEST || height > LARGEST {
        return Err(FigureError::TooLarge { width, height });
    }
    let mut pixmap = Pixmap::new(width, height).ok_or(FigureError::TooLarge { width, height })?;
    let scale = Transform::from_scale(width as f32 / tree.size().width(), height as f32 / tree.size().height());
    resvg::render(&tree, scale, &mut pixmap.as_mut());
    pixmap.encode_png().map_err(|e| FigureError::Svg { reason: e.to_string() })
}

/// PDF of one page of the stated size, fonts embedded, the same bytes every time.
///
/// # Errors
/// [`FigureError`].
pub fn to_pdf(svg: &str, width_mm: f64, height_mm: f64) -> Result<Vec<u8>, FigureError> {
    let tree = tree(svg)?;
    let points = |mm: f64| (mm / 25.4 * 72.0) as f32;
    let size = Size::from_wh(points(width_mm), points(height_mm))
        .ok_or_else(|| FigureError::Pdf { reason: "the page has no size".to_owned() })?;
    let mut document = Document::new_with(SerializeSettings::default());
    let mut page = document.start_page_with(PageSettings::new(size));
    let mut surface = page.surface();
    surface
        .draw_svg(&tree, size, SvgSettings::default())
        .ok_or_else(|| FigureError::Pdf { reason: "the drawing was refused".to_owned() })?;
    surface.finish();
    page.finish();
    document.finish().map_err(|e| FigureError::Pdf { reason: format!("{e:?}") })
}

/// A PNG image from rows of red, green, blue, opacity.
///
/// # Errors
/// [`FigureError`].
pub fn encode(width: u32, height: u32, pixels: &[[u8; 4]]) -> Result<Vec<u8>, FigureError> {
    let mut pixmap = Pixmap::new(width, height).ok_or(FigureError::TooLarge { width, height })?;
    for (target, &[r, g, b, a]) in pixmap.pixels_mut().iter_mut().zip(pixels) {
        *target = resvg::tiny_skia::ColorU8::from_rgba(r, g, b, a).premultiply();
    }
    pixmap.encode_png().map_err(|e| FigureError::Svg { reason: e.to_string() })
}
