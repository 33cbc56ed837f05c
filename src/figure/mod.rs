//! Layer 5, analysis -> picture.  May use: field, extract, analysis.

mod axes;
mod background;
mod color_bar;
mod color_map;
mod draw;
mod font;
mod legend;
mod lines;
mod of_analysis;
mod raster;
mod scene;
mod solids;
mod svg;
mod symbols;

pub use background::Background;
pub use color_map::ColorMap;
pub use draw::{Figure, FigureInput, FigureOptions, draw};
pub use font::typeset_unit;
pub use of_analysis::{BACKGROUNDS, background_of, caption_of, step_of};
pub use raster::FigureError;
pub use scene::{Anchor, Ink, Item, Scene, Span, Style, TextBox, TextStyle};
