//! separatrix
