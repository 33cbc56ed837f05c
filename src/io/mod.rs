//! Layer 1, files -> field and results -> files; the only unit conversion and row flip of the crate.  May use: field.

mod assemble;
pub mod error;
mod geometry;
mod inputs;
mod npy;
mod quantity;
pub mod raw;
mod read;
pub mod request;
pub mod survey;
mod text;

pub use error::{Blame, IoError};
pub use inputs::{FrameRange, natural};
pub use read::{Dataset, Source, read};
pub use survey::Survey;
