//! Layer 1, files -> field and results -> files; the only unit conversion and row flip of the crate.  May use: field.

pub mod error;
pub mod raw;
