//! flux
