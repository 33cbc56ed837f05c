//! Layer 5, analysis -> tables, JSON, field file, text.  May use: field, io, numerics, extract, analysis.

mod field_file;
mod summary;
mod tables;
mod text;

use crate::field::UnitSystem;

pub use field_file::{clean_file, field_file, psi_file};
pub use summary::{Provenance, StageTime, divergence, summary, zero_in_words};
pub use tables::{cells_table, lines_table, stagnation_table, streamlines_table, table_json};
pub use text::{divergence_text, fit_line, screening_line, summary_text, verdict_sentence};

/// The usual caution, shown by `--help`, README and summary.
pub const CAUTION: &str = "Caution: results describe the measured field, nothing more. They are no basis for the safety of a dam, a \
spillway, a vessel or a patient without review by a qualified person, under local codes and licensed practice.";

/// What a report needs beside the analysis.
#[derive(Debug, Clone)]
pub struct ReportContext {
    /// Units of the results.
    pub units: UnitSystem,
    /// +1 for `u = d psi/dy`, -1 for `u = -d psi/dy`: every reported psi is multiplied by it.
    pub psi_sign: f64,
}

impl ReportContext {
    /// Convention in words, for attributes and summaries.
    pub fn sign_convention(&self) -> &'static str {
        if self.psi_sign < 0.0 { "u = -dpsi/dy, v = dpsi/dx" } else { "u = dpsi/dy, v = -dpsi/dx" }
    }
}
