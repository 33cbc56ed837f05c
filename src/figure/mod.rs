//! Layer 5, analysis -> picture.  May use: field, extract, analysis.
