//! Flags a vector carries, and remarks: things the user should know that are not errors.

use std::fmt;

/// Bit field of a node, as written to `flag` (CF flag_masks).
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Flags(pub u8);

impl Flags {
    /// A vector was measured here.
    pub const MEASURED: Flags = Flags(1);
    /// The measured vector failed the screening and was not used.
    pub const SCREENED: Flags = Flags(2);
    /// The value in `u_fit`, `v_fit`, `psi` comes from the fit around a gap.
    pub const FILLED: Flags = Flags(4);
    /// Outside the hull of usable vectors.
    pub const EXTRAPOLATED: Flags = Flags(8);
    /// Inside a solid body.
    pub const SOLID: Flags = Flags(16);

    /// Bits and their names, in order.
    pub const MEANINGS: [(Flags, &'static str); 5] = [
        (Flags::MEASURED, "measured"),
        (Flags::SCREENED, "screened"),
        (Flags::FILLED, "filled"),
        (Flags::EXTRAPOLATED, "extrapolated"),
        (Flags::SOLID, "solid"),
    ];

    /// Whether all bits of `other` are set.
    pub fn has(self, other: Flags) -> bool {
        self.0 & other.0 == other.0
    }

    /// Union of both.
    #[must_use]
    pub fn with(self, other: Flags) -> Flags {
        Flags(self.0 | other.0)
    }
}

/// Topic of a remark; the name appears in JSON so that scripts can act on it.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Hash)]
#[non_exhaustive]
pub enum RemarkKind {
    /// Rows were flipped because y ran down.
    RowsFlipped,
    /// Columns were flipped because x ran down.
    ColumnsFlipped,
    /// Coordinates printed with few digits were taken as uniform.
    RoundedCoordinates,
    /// A patch of exactly (0, 0) vectors looks like masked points.
    ZeroPatch,
    /// No unit was declared.
    UnitsMissing,
    /// A unit was converted.
    UnitsConverted,
    /// Dimensions were reordered on reading.
    DimensionsReordered,
    /// More than one frame is present, one was taken.
    FrameChosen,
    /// Something in the file was left alone.
    Ignored,
    /// No standard uncertainty was declared.
    SigmaMissing,
    /// Declared and estimated sigma disagree.
    SigmaDisagrees,
    /// Overlap was not declared.
    OverlapMissing,
    /// The fluid falls into several separate parts.
    SeveralComponents,
    /// A solver stopped before its tolerance.
    NotConverged,
    /// Something could not be decided numerically.
    Undecided,
    /// Anything else worth knowing.
    Note,
}

impl RemarkKind {
    /// Stable name for machines.
    pub fn name(self) -> &'static str {
        match self {
            RemarkKind::RowsFlipped => "rows_flipped",
            RemarkKind::ColumnsFlipped => "columns_flipped",
            RemarkKind::RoundedCoordinates => "rounded_coordinates",
            RemarkKind::ZeroPatch => "zero_patch",
            RemarkKind::UnitsMissing => "units_missing",
            RemarkKind::UnitsConverted => "units_converted",
            RemarkKind::DimensionsReordered => "dimensions_reordered",
            RemarkKind::FrameChosen => "frame_chosen",
            RemarkKind::Ignored => "ignored",
            RemarkKind::SigmaMissing => "sigma_missing",
            RemarkKind::SigmaDisagrees => "sigma_disagrees",
            RemarkKind::OverlapMissing => "overlap_missing",
            RemarkKind::SeveralComponents => "several_components",
            RemarkKind::NotConverged => "not_converged",
            RemarkKind::Undecided => "undecided",
            RemarkKind::Note => "note",
        }
    }
}

/// Something the user should know, with advice; the same remark reaches terminal, JSON and figure.
#[derive(Debug, Clone, PartialEq)]
pub struct Remark {
    /// Topic.
    pub kind: RemarkKind,
    /// What was seen and what to do about it, one sentence or two.
    pub text: String,
}

impl Remark {
    /// Remark of a topic.
    pub fn new(kind: RemarkKind, text: impl Into<String>) -> Self {
        Self { kind, text: text.into() }
    }
}

impl fmt::Display for Remark {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(&self.text)
    }
}
