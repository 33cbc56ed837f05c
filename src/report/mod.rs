//! Layer 5, analysis -> tables, JSON.  May use: field, io, numerics, extract, analysis.
