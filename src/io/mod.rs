//! Layer 1, files -> field and results -> files; the only unit conversion and row flip of the crate.  May use: field.

mod assemble;
pub mod error;
pub mod field_file;
mod geometry;
#[cfg(feature = "hdf5")]
pub mod hdf5;
mod inputs;
#[cfg(feature = "hdf5")]
mod netcdf;
mod npy;
pub mod output;
mod quantity;
pub mod raw;
mod read;
pub mod request;
pub mod survey;
mod survey_text;
pub mod table;
mod text;

pub use error::{Blame, IoError};
pub use inputs::{FrameRange, natural};
pub use read::{Dataset, Source, read};
pub use survey::Survey;
pub use survey_text::commented_survey;
