//! divergence
