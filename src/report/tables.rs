//! The tables of a run: stagnation points, streamlines, lines, cells.

use super::ReportContext;
use crate::analysis::{Features, FittedFlow};
use crate::extract::contour::VertexFlag;
use crate::extract::stagnation::StagnationKind;
use crate::field::{Thickness, UnitSystem};
use crate::io::table::{Table, Value};

/// Units line of a table from column names: positions, areas, rates ... ; columns without unit are left out.
fn units_of(columns: &[&str], units: &UnitSystem, plane: bool) -> Vec<(String, String)> {
    columns
        .iter()
        .filter_map(|&name| {
            let unit = match name {
                "x" | "y" | "sigma_x" | "sigma_y" | "sigma_n" | "length" | "wall_length" => units.position(),
                "psi" | "sigma_psi" | "persistence" | "flux" | "sigma_flux" => units.psi(plane),
                "rate" => units.rate(),
                "period" | "period_mid" => units.period(),
                "area" | "sigma_area" => units.label(2, 0),
                _ => return None,
            };
            Some((name.to_owned(), unit))
        })
        .collect()
}

fn plane(flow: &FittedFlow) -> bool {
    flow.used.domain.thickness == Thickness::Uniform
}

fn optional(value: Option<f64>) -> Value {
    value.map_or(Value::Empty, Value::Real)
}

/// `stagnation.csv`: a row a point; columns of the ensemble are empty.
pub fn stagnation_table(flow: &FittedFlow, features: &Features, context: &ReportContext) -> Table {
    const COLUMNS: [&str; 17] = [
        "frame",
        "id",
        "kind",
        "x",
        "y",
        "psi",
        "sigma_psi",
        "sigma_x",
        "sigma_y",
        "rho_xy",
        "rate",
        "period",
        "persistence",
        "z",
        "share",
        "flag",
        "notes",
    ];
    let mut table = Table::new(&COLUMNS, units_of(&COLUMNS, &context.units, plane(flow)));
    for point in &features.points {
        table.push(vec![
            Value::Int(flow.measured.frame.index as i64),
            Value::Int(point.id as i64),
            Value::Text(point.kind.name().to_owned()),
            Value::Real(point.x),
            Value::Real(point.y),
            Value::Real(context.psi_sign * point.psi),
            Value::Empty,
            Value::Empty,
            Value::Empty,
            Value::Empty,
            Value::Real(point.rate),
            optional(point.period()),
            Value::Empty,
            Value::Empty,
            Value::Empty,
            Value::Empty,
            Value::Text(point.notes.join(";")),
        ]);
    }
    table
}

/// `streamlines.csv`: a row a vertex.
pub fn streamlines_table(flow: &FittedFlow, features: &Features, context: &ReportContext) -> Table {
    const COLUMNS: [&str; 10] = ["frame", "line", "role", "psi", "closed", "vertex", "x", "y", "sigma_n", "flag"];
    let mut table = Table::new(&COLUMNS, units_of(&COLUMNS, &context.units, plane(flow)));
    for (number, line) in features.lines.iter().enumerate() {
        for (vertex, (&[x, y], flag)) in line.vertices.iter().zip(&line.flags).enumerate() {
            table.push(vec![
                Value::Int(flow.measured.frame.index as i64),
                Value::Int(number as i64 + 1),
                Value::Text(line.role.name().to_owned()),
                Value::Real(context.psi_sign * line.psi),
                Value::Int(i64::from(line.closed)),
                Value::Int(vertex as i64),
                Value::Real(x),
                Value::Real(y),
                Value::Empty,
                Value::Text(match flag {
                    VertexFlag::Measured => "measured".to_owned(),
                    VertexFlag::Filled => "filled".to_owned(),
                }),
            ]);
        }
    }
    table
}

/// `lines.csv`: a row a line.
pub fn lines_table(flow: &FittedFlow, features: &Features, context: &ReportContext) -> Table {
    const COLUMNS: [&str; 9] = ["frame", "line", "role", "psi", "closed", "length", "area", "period", "measured_share"];
    let mut table = Table::new(&COLUMNS, units_of(&COLUMNS, &context.units, plane(flow)));
    for (number, line) in features.lines.iter().enumerate() {
        table.push(vec![
            Value::Int(flow.measured.frame.index as i64),
            Value::Int(number as i64 + 1),
            Value::Text(line.role.name().to_owned()),
            Value::Real(context.psi_sign * line.psi),
            Value::Int(i64::from(line.closed)),
            Value::Real(line.length),
            optional(line.area),
            optional(line.period),
            Value::Real(line.measured_share),
        ]);
    }
    table
}

/// `cells.csv`: a row a recirculation cell; the length along a wall from separation to attachment stands in `wall_length`.
pub fn cells_table(flow: &FittedFlow, features: &Features, context: &ReportContext) -> Table {
    const COLUMNS: [&str; 17] = [
        "frame",
        "cell",
        "center_id",
        "bound_id",
        "sense",
        "area",
        "sigma_area",
        "flux",
        "sigma_flux",
        "period_mid",
        "x",
        "y",
        "flag",
        "wall_length",
        "separation_id",
        "attachment_id",
        "notes",
    ];
    let mut table = Table::new(&COLUMNS, units_of(&COLUMNS, &context.units, plane(flow)));
    let id = |id: Option<usize>| id.map_or(Value::Empty, |id| Value::Int(id as i64));
    for cell in &features.cells {
        table.push(vec![
            Value::Int(flow.measured.frame.index as i64),
            Value::Int(cell.id as i64),
            Value::Int(cell.center_id as i64),
            id(cell.bound_id),
            Value::Text(cell.sense.name().to_owned()),
            Value::Real(cell.area),
            Value::Empty,
            Value::Real(cell.flux),
            Value::Empty,
            Value::Real(cell.period_mid),
            Value::Real(cell.x),
            Value::Real(cell.y),
            Value::Empty,
            optional(cell.wall_length),
            id(cell.wall_points.map(|(separation, _)| separation)),
            id(cell.wall_points.map(|(_, attachment)| attachment)),
            Value::Text(cell.notes.join(";")),
        ]);
    }
    table
}

/// Number of points of a kind.
pub fn count_kind(features: &Features, kind: StagnationKind) -> usize {
    features.points.iter().filter(|p| p.kind == kind).count()
}

/// A table as a JSON array of objects; empty cells are null.
pub fn table_json(table: &Table) -> serde_json::Value {
    let rows = table.rows().iter().map(|row| {
        let object = table.columns().iter().zip(row).map(|(name, value)| {
            let value = match value {
                Value::Int(i) => serde_json::json!(i),
                Value::Real(r) if r.is_finite() => serde_json::json!(r),
                Value::Text(t) => serde_json::json!(t),
                Value::Empty | Value::Real(_) => serde_json::Value::Null,
            };
            (name.clone(), value)
        });
        serde_json::Value::Object(object.collect())
    });
    serde_json::Value::Array(rows.collect())
}
