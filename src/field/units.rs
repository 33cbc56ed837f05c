//! Unit labels and factors.  Results use one coherent system: one length unit, one time unit.

/// Why a unit string was not understood.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum UnitError {
    /// Not a known length unit.
    #[error("unknown length unit `{got}`; known are {LENGTHS}")]
    Length {
        /// The string found.
        got: String,
    },
    /// Not a known time unit.
    #[error("unknown time unit `{got}`; known are {TIMES}")]
    Time {
        /// The string found.
        got: String,
    },
    /// Not of the form length per time.
    #[error("unknown velocity unit `{got}`; write it as `mm/s`, `m s-1` or `px/frame`")]
    Velocity {
        /// The string found.
        got: String,
    },
}

const LENGTHS: &str = "um, mm, cm, dm, m, km, in, ft, px";
const TIMES: &str = "us, ms, s, min, h, frame";

/// Canonical UDUNITS label of a length unit and its size in meters (`None` for pixels).
///
/// # Errors
/// [`UnitError::Length`] for an unknown string.
pub fn length_in_meters(text: &str) -> Result<(&'static str, Option<f64>), UnitError> {
    Ok(match text.trim() {
        "um" | "µm" | "μm" | "micron" | "microns" | "micrometer" | "micrometre" => ("um", Some(1e-6)),
        "mm" | "millimeter" | "millimeters" | "millimetre" => ("mm", Some(1e-3)),
        "cm" | "centimeter" | "centimeters" | "centimetre" => ("cm", Some(1e-2)),
        "dm" => ("dm", Some(1e-1)),
        "m" | "meter" | "meters" | "metre" | "metres" => ("m", Some(1.0)),
        "km" | "kilometer" | "kilometers" | "kilometre" => ("km", Some(1e3)),
        "in" | "inch" | "inches" => ("in", Some(0.0254)),
        "ft" | "foot" | "feet" => ("ft", Some(0.3048)),
        "px" | "pix" | "pixel" | "pixels" => ("pixel", None),
        other => return Err(UnitError::Length { got: other.to_owned() }),
    })
}

/// Canonical label of a time unit and its size in seconds (`None` for frames).
///
/// # Errors
/// [`UnitError::Time`] for an unknown string.
pub fn time_in_seconds(text: &str) -> Result<(&'static str, Option<f64>), UnitError> {
    Ok(match text.trim() {
        "us" | "µs" | "μs" | "microsecond" | "microseconds" => ("us", Some(1e-6)),
        "ms" | "millisecond" | "milliseconds" => ("ms", Some(1e-3)),
        "s" | "sec" | "second" | "seconds" => ("s", Some(1.0)),
        "min" | "minute" | "minutes" => ("min", Some(60.0)),
        "h" | "hr" | "hour" | "hours" => ("h", Some(3600.0)),
        "frame" | "frames" | "interval" => ("frame", None),
        other => return Err(UnitError::Time { got: other.to_owned() }),
    })
}

/// A velocity unit split into its length and time parts.
#[derive(Debug, Clone, PartialEq)]
pub struct VelocityUnit {
    /// Canonical length label and size in meters.
    pub length: (&'static str, Option<f64>),
    /// Canonical time label and size in seconds.
    pub time: (&'static str, Option<f64>),
}

/// Splits `mm/s`, `mm s-1`, `mm s^-1`, `mm*s**-1`, `mm.s-1` into length and time; a lone `px` means pixels per frame.
///
/// # Errors
/// [`UnitError`] for anything else.
pub fn parse_velocity_unit(text: &str) -> Result<VelocityUnit, UnitError> {
    let bad = || UnitError::Velocity { got: text.to_owned() };
    let text = text.trim();
    if let Ok(length @ ("pixel", None)) = length_in_meters(text) {
        return Ok(VelocityUnit { length, time: ("frame", None) });
    }
    if let Some((length, time)) = text.split_once('/').or_else(|| text.split_once(" per ")) {
        return Ok(VelocityUnit { length: length_in_meters(length)?, time: time_in_seconds(time)? });
    }
    let stripped =
        ["**-1", "^-1", "^{-1}", "-1", "⁻¹"].iter().find_map(|tail| text.strip_suffix(tail)).ok_or_else(bad)?;
    let (length, time) = stripped.rsplit_once([' ', '*', '.', '·']).ok_or_else(bad)?;
    Ok(VelocityUnit { length: length_in_meters(length)?, time: time_in_seconds(time)? })
}

/// The coherent unit system of a field; `None` means not declared ("arbitrary").
#[derive(Debug, Clone, PartialEq, Eq, Default)]
pub struct UnitSystem {
    /// Canonical length label.
    pub length: Option<String>,
    /// Canonical time label.
    pub time: Option<String>,
}

impl UnitSystem {
    /// Label shown where no unit was declared.
    pub const ARBITRARY: &'static str = "arbitrary";

    /// System of two labels.
    pub fn new(length: &str, time: &str) -> Self {
        Self { length: Some(length.to_owned()), time: Some(time.to_owned()) }
    }

    /// UDUNITS label of `length^l time^t`, for example `mm2 s-1`; `1` when both are 0, "arbitrary" when a needed part is
    /// unknown.
    pub fn label(&self, l: i32, t: i32) -> String {
        let part = |unit: &Option<String>, power: i32| -> Option<String> {
            match (power, unit) {
                (0, _) => Some(String::new()),
                (1, Some(unit)) => Some(unit.clone()),
                (_, Some(unit)) => Some(format!("{unit}{power}")),
                (_, None) => None,
            }
        };
        match (part(&self.length, l), part(&self.time, t)) {
            (Some(a), Some(b)) if a.is_empty() && b.is_empty() => "1".to_owned(),
            (Some(a), Some(b)) => format!("{a} {b}").trim().to_owned(),
            _ => Self::ARBITRARY.to_owned(),
        }
    }

    /// Label of positions.
    pub fn position(&self) -> String {
        self.label(1, 0)
    }

    /// Label of velocities.
    pub fn velocity(&self) -> String {
        self.label(1, -1)
    }

    /// Label of rates (divergence, vorticity, angular frequency).
    pub fn rate(&self) -> String {
        self.label(0, -1)
    }

    /// Label of times and periods.
    pub fn period(&self) -> String {
        self.label(0, 1)
    }

    /// Label of psi and fluxes: area per time for plane flow, volume per time with a thickness.
    pub fn psi(&self, plane: bool) -> String {
        self.label(if plane { 2 } else { 3 }, -1)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn every_spelling_of_a_velocity_unit_is_the_same_unit() {
        for text in ["mm/s", "mm s-1", "mm s^-1", "mm*s**-1", "mm.s-1", " mm / s "] {
            let unit = parse_velocity_unit(text).unwrap();
            assert_eq!((unit.length.0, unit.time.0), ("mm", "s"), "{text}");
        }
        assert_eq!(parse_velocity_unit("px").unwrap().time.0, "frame");
        assert!(parse_velocity_unit("furlong/s").is_err() && parse_velocity_unit("mm").is_err());
    }

    #[test] // UDUNITS spelling, as CF asks for
    fn labels_are_udunits() {
        let units = UnitSystem::new("mm", "s");
        assert_eq!(units.velocity(), "mm s-1");
        assert_eq!(units.psi(true), "mm2 s-1");
        assert_eq!(units.rate(), "s-1");
        assert_eq!(UnitSystem::default().velocity(), "arbitrary");
    }
}
