//! helmholtz
