//! Numbers with units in settings, and the factors that bring a file into one coherent unit system.

use super::error::IoError;
use super::raw::RawUnits;
use super::survey::Survey;
use crate::field::{
    Remark, RemarkKind, UnitSystem, VelocityUnit, length_in_meters, parse_velocity_unit, time_in_seconds,
};

/// Factors from the file's units to the units of the results.
#[derive(Debug, Clone, PartialEq)]
pub struct Scales {
    /// Multiplies coordinates.
    pub length_factor: f64,
    /// Multiplies velocities.
    pub velocity_factor: f64,
    /// Multiplies time stamps.
    pub time_factor: f64,
    /// Multiplies lengths in settings (bodies, walls), which are in the coordinates' unit after the pixel scale.
    pub output_factor: f64,
    /// Velocity of one pixel per frame in the units of the results, when scale and interval are known.
    pub pixel_velocity: Option<f64>,
    /// The units of the results.
    pub system: UnitSystem,
}

/// Splits `0.4 mm/s` into the number and the rest.
fn number_and_unit(text: &str) -> Option<(f64, &str)> {
    let text = text.trim();
    let end = text
        .char_indices()
        .find(|&(k, c)| {
            !(c.is_ascii_digit()
                || c == '.'
                || ((c == '-' || c == '+') && (k == 0 || text[..k].ends_with(['e', 'E'])))
                || ((c == 'e' || c == 'E')
                    && text[k + 1..].starts_with(|d: char| d.is_ascii_digit() || d == '-' || d == '+')))
        })
        .map_or(text.len(), |(k, _)| k);
    text[..end].parse().ok().map(|n| (n, text[end..].trim()))
}

/// A positive length: number, canonical label, meters.
///
/// # Errors
/// [`IoError::Setting`].
pub fn length(text: &str, place: &str) -> Result<(f64, (&'static str, Option<f64>)), IoError> {
    let bad = || {
        IoError::setting(
            place,
            format!("`{text}`; write a positive number and a length unit, for example \"0.052 mm\""),
        )
    };
    let (number, unit) = number_and_unit(text).ok_or_else(bad)?;
    let unit = length_in_meters(unit).map_err(|e| IoError::setting(place, e.to_string()))?;
    if number > 0.0 && number.is_finite() { Ok((number, unit)) } else { Err(bad()) }
}

/// A positive time.
///
/// # Errors
/// [`IoError::Setting`].
pub fn time(text: &str, place: &str) -> Result<(f64, (&'static str, Option<f64>)), IoError> {
    let bad =
        || IoError::setting(place, format!("`{text}`; write a positive number and a time unit, for example \"2 ms\""));
    let (number, unit) = number_and_unit(text).ok_or_else(bad)?;
    let unit = time_in_seconds(unit).map_err(|e| IoError::setting(place, e.to_string()))?;
    if number > 0.0 && number.is_finite() { Ok((number, unit)) } else { Err(bad()) }
}

/// One or two numbers with a velocity unit (`0.4 mm/s`, `0.4, 0.6 mm/s`, `0.1 px`) in the units of the results.
///
/// # Errors
/// [`IoError::Setting`].
pub fn pair(text: &str, scales: &Scales, place: &str) -> Result<(f64, f64), IoError> {
    let bad = || {
        IoError::setting(
            place,
            format!("`{text}`; write for example \"0.4 mm/s\", \"0.4, 0.6 mm/s\", \"0.1 px\", \"auto\" or \"file\""),
        )
    };
    let (first, second) = match text.split_once(',') {
        Some((first, second)) => (Some(first.trim().parse::<f64>().map_err(|_| bad())?), second),
        None => (None, text),
    };
    let (number, unit) = number_and_unit(second).ok_or_else(bad)?;
    let factor = if unit.is_empty() {
        scales.velocity_factor
    } else {
        let unit = parse_velocity_unit(unit).map_err(|e| IoError::setting(place, e.to_string()))?;
        match (unit.length.1, unit.time.1) {
            (None, None) => match (&scales.pixel_velocity, scales.system.length.as_deref()) {
                (Some(v), _) => *v,
                (None, Some("pixel")) => 1.0,
                _ => {
                    return Err(IoError::setting(
                        place,
                        format!("`{text}` is in pixels: give [geometry] scale and interval as well"),
                    ));
                }
            },
            _ => velocity_in(&unit, &scales.system, place)?,
        }
    };
    Ok((first.unwrap_or(number) * factor, number * factor))
}

/// Factor from a velocity unit to the system.
fn velocity_in(unit: &VelocityUnit, system: &UnitSystem, place: &str) -> Result<f64, IoError> {
    let mismatch = || {
        IoError::setting(
            place,
            format!(
                "cannot convert {} {}-1 to {}: declare the units of the data",
                unit.length.0,
                unit.time.0,
                system.velocity()
            ),
        )
    };
    let meters = system.length.as_deref().and_then(|l| length_in_meters(l).ok()).ok_or_else(mismatch)?;
    let seconds = system.time.as_deref().and_then(|t| time_in_seconds(t).ok()).ok_or_else(mismatch)?;
    let ratio = |a: (&str, Option<f64>), b: (&str, Option<f64>)| match (a.1, b.1) {
        (Some(a), Some(b)) => Ok(a / b),
        (None, None) if a.0 == b.0 => Ok(1.0),
        _ => Err(mismatch()),
    };
    Ok(ratio(unit.length, meters)? / ratio(unit.time, seconds)?)
}

impl Scales {
    /// Works out the factors from what the file says and what the settings say (which win).
    ///
    /// # Errors
    /// [`IoError::Setting`] for unknown units or a mixture that cannot be made coherent.
    pub fn new(survey: &Survey, found: &RawUnits, remarks: &mut Vec<Remark>) -> Result<Self, IoError> {
        let scale = survey.geometry.scale.as_deref().map(|t| length(t, "[geometry] scale")).transpose()?;
        let interval = survey.geometry.interval.as_deref().map(|t| time(t, "[geometry] interval")).transpose()?;
        let mut lengths = |declared: &Option<String>,
                           in_file: &Option<String>,
                           what: &str|
         -> Result<Option<(&'static str, Option<f64>)>, IoError> {
            match (declared, in_file) {
                (Some(text), _) => length_in_meters(text)
                    .map(Some)
                    .map_err(|e| IoError::setting(format!("[units] {what}"), e.to_string())),
                (None, Some(text)) => match length_in_meters(text) {
                    Ok(unit) => Ok(Some(unit)),
                    Err(_) => {
                        remarks.push(Remark::new(
                            RemarkKind::UnitsMissing,
                            format!("the unit `{text}` of the {what} in the file is not known; declare one in [units]"),
                        ));
                        Ok(None)
                    }
                },
                (None, None) => Ok(None),
            }
        };
        let mut length_unit = lengths(&survey.units.length, &found.length, "length")?;
        let mut velocity_unit = match (&survey.units.velocity, &found.velocity) {
            (Some(text), _) => {
                Some(parse_velocity_unit(text).map_err(|e| IoError::setting("[units] velocity", e.to_string()))?)
            }
            (None, Some(text)) => match parse_velocity_unit(text) {
                Ok(unit) => Some(unit),
                Err(_) => {
                    remarks.push(Remark::new(
                        RemarkKind::UnitsMissing,
                        format!("the unit `{text}` of the velocity in the file is not known; declare one in [units]"),
                    ));
                    None
                }
            },
            (None, None) => None,
        };
        let (mut length_factor, mut velocity_factor) = (1.0, 1.0);
        let mut pixel_velocity = None;
        if let Some((size, unit)) = scale {
            if unit.1.is_none() {
                return Err(IoError::setting("[geometry] scale", "the length of a pixel cannot be in pixels"));
            }
            let step = interval;
            // Data with a pixel scale are in pixels unless they say otherwise.
            if length_unit.is_none_or(|u| u.1.is_none()) {
                length_factor = size;
                length_unit = Some(unit);
            }
            if velocity_unit.as_ref().is_none_or(|u| u.length.1.is_none()) {
                velocity_factor = size;
                let per_frame = velocity_unit.as_ref().is_none_or(|u| u.time.1.is_none());
                let mut time_unit = velocity_unit.as_ref().map_or(("frame", None), |u| u.time);
                if per_frame && let Some((t, unit)) = step {
                    velocity_factor /= t;
                    time_unit = unit;
                }
                velocity_unit = Some(VelocityUnit { length: unit, time: time_unit });
            }
            if let Some((t, unit_t)) = step {
                pixel_velocity = Some((size / t, unit, unit_t));
            }
        }
        // One coherent system: the coordinates' length, the velocity's time.
        if let (Some(length), Some(velocity)) = (length_unit, &velocity_unit) {
            match (velocity.length.1, length.1) {
                (Some(a), Some(b)) => {
                    if velocity.length.0 != length.0 {
                        remarks.push(Remark::new(
                            RemarkKind::UnitsConverted,
                            format!(
                                "coordinates are in {}, velocities in {} {}-1: velocities were converted to {} {}-1",
                                length.0, velocity.length.0, velocity.time.0, length.0, velocity.time.0
                            ),
                        ));
                    }
                    velocity_factor *= a / b;
                }
                (None, None) => {}
                _ => {
                    return Err(IoError::setting(
                        "units",
                        format!(
                            "coordinates in {} and velocities in {} {}-1 do not fit together; give [geometry] scale (length of a pixel) and interval, or the right units",
                            length.0, velocity.length.0, velocity.time.0
                        ),
                    ));
                }
            }
        }
        if length_unit.is_none() || velocity_unit.is_none() {
            let what = match (length_unit, &velocity_unit) {
                (None, None) => "units",
                (None, _) => "length unit",
                _ => "velocity unit",
            };
            remarks.push(Remark::new(RemarkKind::UnitsMissing, format!("no {what} declared: such results are labelled \"arbitrary\" (`--length-unit mm --velocity-unit mm/s`)")));
        }
        let mut system = UnitSystem {
            length: length_unit.map(|u| u.0.to_owned()),
            time: velocity_unit.as_ref().map(|u| u.time.0.to_owned()),
        };
        let mut output_factor = 1.0;
        let mut time_factor = match (&found.time, velocity_unit.as_ref().and_then(|u| u.time.1)) {
            (Some(text), Some(seconds)) => time_in_seconds(text).ok().and_then(|t| t.1).map_or(1.0, |t| t / seconds),
            _ => 1.0,
        };
        if let Some(output) = &survey.units.output {
            let place = "[units] output";
            let (l, t) = output.split_once(',').ok_or_else(|| {
                IoError::setting(place, format!("`{output}`; write length,time, for example \"m,s\""))
            })?;
            let to_length = length_in_meters(l).map_err(|e| IoError::setting(place, e.to_string()))?;
            let to_time = time_in_seconds(t).map_err(|e| IoError::setting(place, e.to_string()))?;
            let from = (length_unit.and_then(|u| u.1), velocity_unit.as_ref().and_then(|u| u.time.1));
            let ((Some(from_length), Some(from_time)), Some(to_m), Some(to_s)) = (from, to_length.1, to_time.1) else {
                return Err(IoError::setting(
                    place,
                    format!(
                        "cannot convert to `{output}`: the data are in {}; declare real units first",
                        system.velocity()
                    ),
                ));
            };
            output_factor = from_length / to_m;
            length_factor *= output_factor;
            velocity_factor *= output_factor / (from_time / to_s);
            time_factor *= from_time / to_s;
            system = UnitSystem::new(to_length.0, to_time.0);
        }
        let pixel_velocity = match pixel_velocity {
            Some((value, length, time)) => {
                Some(value * velocity_in(&VelocityUnit { length, time }, &system, "[geometry] scale")?)
            }
            None => None,
        };
        Ok(Self { length_factor, velocity_factor, time_factor, output_factor, pixel_velocity, system })
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::io::survey::{GeometryTable, UnitsTable};

    fn survey(length: Option<&str>, velocity: Option<&str>, output: Option<&str>) -> Survey {
        let own = |t: Option<&str>| t.map(str::to_owned);
        Survey {
            units: UnitsTable { length: own(length), velocity: own(velocity), output: own(output) },
            ..Survey::default()
        }
    }

    #[test] // 1 m/s is 1000 mm/s
    fn meters_per_second_become_coherent_with_millimeters() {
        let s = Scales::new(&survey(Some("mm"), Some("m/s"), None), &RawUnits::default(), &mut Vec::new()).unwrap();
        assert_eq!((s.velocity_factor, s.system.velocity().as_str()), (1000.0, "mm s-1"));
        let s = Scales::new(&survey(Some("mm"), Some("m/s"), Some("cm,min")), &RawUnits::default(), &mut Vec::new())
            .unwrap();
        approx::assert_relative_eq!(s.velocity_factor, 6000.0, max_relative = 1e-14);
        approx::assert_relative_eq!(s.length_factor, 0.1, max_relative = 1e-14);
    }

    #[test] // 5 px in 2 ms at 0.05 mm a pixel is 125 mm/s
    fn pixels_take_scale_and_interval() {
        let mut with = survey(Some("px"), Some("px"), None);
        with.geometry =
            GeometryTable { scale: Some("0.05 mm".into()), interval: Some("0.002 s".into()), ..Default::default() };
        let s = Scales::new(&with, &RawUnits::default(), &mut Vec::new()).unwrap();
        approx::assert_relative_eq!(5.0 * s.velocity_factor, 125.0, max_relative = 1e-14);
        approx::assert_relative_eq!(pair("0.1 px", &s, "sigma").unwrap().0, 2.5, max_relative = 1e-14);
        assert_eq!(s.system.velocity(), "mm s-1");
    }

    #[test]
    fn sigma_takes_other_units_and_two_components() {
        let s = Scales::new(&survey(Some("mm"), Some("mm/s"), None), &RawUnits::default(), &mut Vec::new()).unwrap();
        assert_eq!(pair("0.001, 0.002 m/s", &s, "sigma").unwrap(), (1.0, 2.0));
        assert_eq!(pair("3e-1 mm/s", &s, "sigma").unwrap().0, 0.3);
        assert!(pair("much", &s, "sigma").is_err() && pair("1 px", &s, "sigma").is_err());
    }
}
