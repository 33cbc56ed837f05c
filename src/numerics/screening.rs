//! screening
