//! turning
