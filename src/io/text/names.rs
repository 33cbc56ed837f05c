//! Which column is what: names common in the trade, units beside them, and `--columns`.

use std::path::Path;

use super::super::error::IoError;
use super::super::raw::RawUnits;
use super::super::request::{ArrayRequest, ROLES};
use super::layout::Layout;
use crate::field::{length_in_meters, parse_velocity_unit};

/// A column in use.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Column {
    /// One of [`ROLES`].
    pub role: &'static str,
    /// Number of the column, counted from 0.
    pub index: usize,
}

/// A column as its header names it.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Heading {
    /// As written.
    pub written: String,
    /// Without unit, lower case.
    pub name: String,
    /// Unit, if there is one.
    pub unit: Option<String>,
}

impl Heading {
    /// Splits `x [mm]`, `u (m/s)`, `x_mm`, `u m/s` into name and unit.
    pub fn new(written: &str) -> Self {
        let written = written.trim().trim_matches('"').trim();
        let (name, unit) = match written.find(['[', '(']) {
            Some(at) if at > 0 => {
                (&written[..at], Some(written[at + 1..].trim_end_matches([']', ')', ' ']).trim().to_owned()))
            }
            _ => (written, None),
        };
        let heading = Self {
            written: written.to_owned(),
            name: name.trim_end_matches([' ', '_']).to_lowercase(),
            unit: unit.filter(|u| !matches!(u.as_str(), "" | "-" | "1")),
        };
        if heading.unit.is_none() && heading.role().is_none() {
            for (at, _) in written.match_indices([' ', '_', ',']) {
                let (name, unit) = (&written[..at], written[at + 1..].trim());
                if length_in_meters(unit).is_ok() || parse_velocity_unit(unit).is_ok() {
                    let shorter = Self { name: name.to_lowercase(), unit: Some(unit.to_owned()), ..heading.clone() };
                    if shorter.role().is_some() {
                        return shorter;
                    }
                }
            }
        }
        heading
    }

    /// Role by name.
    pub fn role(&self) -> Option<&'static str> {
        Some(match self.name.replace([' ', '-', '.', ':'], "_").as_str() {
            "x" | "xpos" | "x_pos" | "pos_x" | "x_position" | "position_x" | "x_coordinate" | "x_coord"
            | "coordinate_x" | "points_0" => "x",
            "y" | "ypos" | "y_pos" | "pos_y" | "y_position" | "position_y" | "y_coordinate" | "y_coord"
            | "coordinate_y" | "points_1" => "y",
            "u" | "vx" | "v_x" | "u_x" | "ux" | "velocity_u" | "velocity_x" | "x_velocity" | "u_velocity" | "vel_x"
            | "vel_u" | "mean_u" | "u_mean" | "u_0" | "velocity_0" => "u",
            "v" | "vy" | "v_y" | "u_y" | "uy" | "velocity_v" | "velocity_y" | "y_velocity" | "v_velocity" | "vel_y"
            | "vel_v" | "mean_v" | "v_mean" | "u_1" | "velocity_1" => "v",
            "sigma_u" | "e_u" | "u_sigma" | "sigma_vx" | "sigma_ux" | "uncertainty_u" | "u_uncertainty"
            | "uncertainty_vx" | "unc_u" | "std_u_mean" => "sigma_u",
            "sigma_v" | "e_v" | "v_sigma" | "sigma_vy" | "sigma_uy" | "uncertainty_v" | "v_uncertainty"
            | "uncertainty_vy" | "unc_v" | "std_v_mean" => "sigma_v",
            "valid" | "isvalid" | "is_valid" => "valid",
            "solid" | "body" => "solid",
            "depth" => "depth",
            // A capital T is the temperature of the trade.
            "t" if self.written.starts_with('t') => "t",
            "time" => "t",
            _ => return None,
        })
    }
}

/// How many of x, y, u, v a header line names.
pub fn score(headings: &[Heading]) -> usize {
    let roles: Vec<_> = headings.iter().filter_map(Heading::role).collect();
    POSITIONAL[..4].iter().filter(|role| roles.contains(role)).count()
}

/// Roles of `--columns` that are given by place.
const POSITIONAL: [&str; 6] = ["x", "y", "u", "v", "sigma_u", "sigma_v"];

/// Which column holds which role.
///
/// # Errors
/// [`IoError`] when a role is missing or named twice, or `--columns` names what is not there.
pub fn choose_columns(path: &Path, layout: &Layout, request: &ArrayRequest) -> Result<Vec<Column>, IoError> {
    if let Some(list) = &request.columns {
        return columns_as_told(path, layout, list);
    }
    if layout.headings.is_empty() {
        return Err(IoError::content(
            path,
            format!("line {}", layout.first_row.line),
            "no header line names the columns; add one, or say `--columns x,y,u,v` (role names in order, `-` for a column to skip)",
        ));
    }
    let mut columns: Vec<Column> = Vec::new();
    for (index, heading) in layout.headings.iter().enumerate() {
        let Some(role) = heading.role() else { continue };
        if let Some(before) = columns.iter().find(|c| c.role == role) {
            return Err(IoError::content(
                path,
                "header",
                format!(
                    "two columns look like {role}: `{}` and `{}`; say which with `--columns` (names of x, y, u, v)",
                    layout.headings[before.index].written, heading.written
                ),
            ));
        }
        columns.push(Column { role, index });
    }
    let missing = missing(&columns);
    if missing.is_empty() {
        return Ok(columns);
    }
    let found: Vec<&str> = layout.headings.iter().map(|h| h.written.as_str()).collect();
    Err(IoError::content(
        path,
        "header",
        format!(
            "no column for {}; found {}; name them with `--columns`, for example `--columns x,y,u,v`",
            missing.join(", "),
            found.join(", ")
        ),
    ))
}

fn missing(columns: &[Column]) -> Vec<&'static str> {
    POSITIONAL[..4].iter().copied().filter(|role| !columns.iter().any(|c| c.role == *role)).collect()
}

/// `--columns`: role names in the order of the columns, or names or numbers of the columns of x, y, u, v (sigma_u, sigma_v).
fn columns_as_told(path: &Path, layout: &Layout, list: &[String]) -> Result<Vec<Column>, IoError> {
    let role = |name: &str| ROLES.into_iter().find(|r| r.eq_ignore_ascii_case(name));
    let named = |name: &str| {
        let position = |test: &dyn Fn(&Heading) -> bool| layout.headings.iter().position(test);
        position(&|h| h.written.eq_ignore_ascii_case(name)).or_else(|| position(&|h| h.name == name.to_lowercase()))
    };
    let columns: Vec<Column> = if list.iter().all(|name| name == "-" || role(name).is_some()) {
        // A header with these very names says better than their order where they are.
        let by_header = list.iter().all(|name| named(name).is_some());
        list.iter()
            .enumerate()
            .filter_map(|(k, name)| {
                let index = if by_header { named(name)? } else { k };
                Some(Column { role: role(name)?, index })
            })
            .collect()
    } else {
        if list.len() < 4 {
            return Err(IoError::setting(
                "columns",
                format!("{} given; at least the four of x, y, u, v are needed", list.len()),
            ));
        }
        let mut columns = Vec::new();
        for (name, role) in list.iter().zip(POSITIONAL) {
            let by_number = || name.parse::<usize>().ok().and_then(|k| k.checked_sub(1));
            let index = named(name).or_else(by_number).ok_or_else(|| {
                let known: Vec<&str> = layout.headings.iter().map(|h| h.written.as_str()).collect();
                let known = if known.is_empty() {
                    "there is no header; write numbers, counted from 1".to_owned()
                } else {
                    format!("the header has {}", known.join(", "))
                };
                IoError::setting("columns", format!("{}: no column `{name}`; {known}", path.display()))
            })?;
            columns.push(Column { role, index });
        }
        columns
    };
    let missing = missing(&columns);
    if !missing.is_empty() {
        return Err(IoError::setting(
            "columns",
            format!("`{}` names no column for {}; for example `--columns x,y,u,v`", list.join(","), missing.join(", ")),
        ));
    }
    if let Some(beyond) = columns.iter().find(|c| c.index >= layout.fields) {
        return Err(IoError::setting(
            "columns",
            format!(
                "{}: column {} for {}, but the first row (line {}) has {} fields",
                path.display(),
                beyond.index + 1,
                beyond.role,
                layout.first_row.line,
                layout.fields
            ),
        ));
    }
    for (k, column) in columns.iter().enumerate() {
        if columns[..k].iter().any(|c| c.role == column.role || c.index == column.index) {
            return Err(IoError::setting(
                "columns",
                format!(
                    "`{}` names a role or a column twice ({}, column {})",
                    list.join(","),
                    column.role,
                    column.index + 1
                ),
            ));
        }
    }
    Ok(columns)
}

/// Unit strings of the columns in use.
pub fn units_of(layout: &Layout, columns: &[Column]) -> RawUnits {
    let unit = |role: &str| {
        let column = columns.iter().find(|c| c.role == role)?;
        layout.headings.get(column.index)?.unit.clone()
    };
    RawUnits { length: unit("x").or_else(|| unit("y")), velocity: unit("u").or_else(|| unit("v")), time: unit("t") }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_of_the_trade_are_known_with_their_units() {
        let as_read = |text: &str| {
            let h = Heading::new(text);
            (h.role(), h.unit)
        };
        let unit = |u: &str| Some(u.to_owned());
        assert_eq!(as_read("X [mm]"), (Some("x"), unit("mm")));
        assert_eq!(as_read("\"Velocity u (m/s)\""), (Some("u"), unit("m/s")));
        assert_eq!(as_read("Vy[m s-1]"), (Some("v"), unit("m s-1")));
        assert_eq!(as_read("y_mm"), (Some("y"), unit("mm")));
        assert_eq!(as_read("u_m/s"), (Some("u"), unit("m/s")));
        assert_eq!(as_read("x-coordinate"), (Some("x"), None));
        assert_eq!(as_read("Points:1"), (Some("y"), None));
        assert_eq!(as_read("e_V"), (Some("sigma_v"), None));
        assert_eq!(as_read("u_x"), (Some("u"), None));
        assert_eq!((as_read("t").0, as_read("T").0, as_read("Time [s]")), (Some("t"), None, (Some("t"), unit("s"))));
        assert_eq!(as_read("uu").0.or(as_read("x_c").0), None);
    }
}
