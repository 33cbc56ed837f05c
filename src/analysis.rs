//! Layer 4, the whole job on one frame: screen, fit, check, extract.  May use: field, numerics, extract.
