//! Layer 5, analysis -> tables, JSON.  May use: field, extract, analysis.
