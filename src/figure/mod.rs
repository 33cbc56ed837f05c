//! Layer 5, analysis -> picture.  May use: field, extract, analysis.

mod axes;
mod background;
mod color_map;
mod draw;
mod font;
mod lines;
mod raster;
mod scene;
mod svg;
mod symbols;

pub use background::Background;
pub use color_map::ColorMap;
pub use draw::{BACKGROUNDS, Figure, FigureInput, FigureOptions, background_of, caption_of, draw, step_of};
pub use font::typeset_unit;
pub use raster::FigureError;
pub use scene::{Item, Scene, TextBox};
