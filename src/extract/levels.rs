//! levels
