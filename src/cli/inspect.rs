//! `isopsi inspect`: what was read and what looks doubtful; `--write` makes a survey file of it.

use std::path::Path;

use isopsi::field::{Axis, Side, Sigma, Thickness};
use isopsi::io::output::write_whole;
use isopsi::io::{Dataset, commented_survey, read};
use serde_json::{Value, json};

use super::args::Common;
use super::config::survey_of;
use super::diagnostics::{Failure, Messages};
use super::job::print;

/// Describes the input.
///
/// # Errors
/// [`Failure`].
pub fn inspect(common: &Common, write: Option<&Path>) -> Result<(), Failure> {
    let data = read(&common.inputs, &survey_of(common)?)?;
    if let Some(path) = write {
        if path.exists() {
            return Err(isopsi::io::IoError::setting(
                "--write",
                format!("{} exists; choose another name or remove it", path.display()),
            )
            .into());
        }
        let text = commented_survey(&data, path);
        write_whole(path, |w| w.write_all(text.as_bytes()))?;
        Messages::new(common.quiet).line(&format!("wrote {}", path.display()));
    }
    if common.json { print(&format!("{:#}\n", describe(&data))) } else { print(&text(&data)) }
}

fn range(values: impl Iterator<Item = f64>) -> Option<(f64, f64)> {
    values.filter(|v| v.is_finite()).fold(None, |range, v| match range {
        None => Some((v, v)),
        Some((a, b)) => Some((f64::min(a, v), f64::max(b, v))),
    })
}

fn axis_json(axis: &Axis) -> Value {
    json!({"nodes": axis.len(), "first": axis.first(), "last": axis.last(), "spacing": axis.mean_step(), "uniform": axis.is_uniform()})
}

fn solid_count(data: &Dataset) -> usize {
    data.field.domain.covered.iter().filter(|c| **c != 0).count()
}

fn describe(data: &Dataset) -> Value {
    let field = &data.field;
    let nodes = field.grid().node_count();
    json!({
        "files": data.sources.iter().map(|s| json!({"file": s.path.display().to_string(), "bytes": s.size, "sha256": s.sha256})).collect::<Vec<_>>(),
        "format": data.format,
        "arrays": data.found.iter().map(|(role, place)| json!({"role": role, "place": place})).collect::<Vec<_>>(),
        "frames": data.frames,
        "frame": field.frame.index,
        "time": field.frame.time,
        "grid": {"x": axis_json(&field.grid().x), "y": axis_json(&field.grid().y)},
        "units": {"length": data.units.position(), "velocity": data.units.velocity()},
        "vectors": {"nodes": nodes, "valid": field.valid_count(), "solid": solid_count(data), "gaps": nodes - field.valid_count() - solid_count(data)},
        "u": range(field.u.iter().copied()).map(|(a, b)| [a, b]),
        "v": range(field.v.iter().copied()).map(|(a, b)| [a, b]),
        "sigma": field.sigma.rms(&field.valid),
        "overlap": field.overlap,
        "remarks": data.remarks.iter().map(|r| json!({"kind": r.kind.name(), "text": r.text})).collect::<Vec<_>>(),
    })
}

fn axis_line(name: &str, axis: &Axis, unit: &str) -> String {
    let kind = if axis.is_uniform() { "uniform" } else { "stretched, mean" };
    format!(
        "{name}        {} nodes, {} to {} {unit}, {kind} spacing {:.6}\n",
        axis.len(),
        short(axis.first()),
        short(axis.last()),
        axis.mean_step()
    )
}

/// Up to 9 significant digits.
fn short(value: f64) -> String {
    format!("{value:.9}").trim_end_matches('0').trim_end_matches('.').to_owned()
}

fn text(data: &Dataset) -> String {
    let field = &data.field;
    let nodes = field.grid().node_count();
    let (length, velocity) = (data.units.position(), data.units.velocity());
    let mut out = String::new();
    for source in &data.sources {
        out += &format!("file     {} ({} bytes)\n", source.path.display(), source.size);
    }
    out += &format!("format   {}\n", data.format);
    for (role, place) in &data.found {
        out += &format!("{role:8} {place}\n");
    }
    if data.frames > 1 {
        out += &format!("frames   {} (this is frame {})\n", data.frames, field.frame.index);
    }
    out += &axis_line("x", &field.grid().x, &length);
    out += &axis_line("y", &field.grid().y, &length);
    let solid = solid_count(data);
    out += &format!(
        "vectors  {} usable of {nodes} nodes, {solid} in bodies, {} gaps\n",
        field.valid_count(),
        nodes - solid - field.valid_count()
    );
    for (name, array) in [("u", &field.u), ("v", &field.v)] {
        if let Some((low, high)) = range(array.iter().copied()) {
            out += &format!("{name}        {low:.6} to {high:.6} {velocity}\n");
        }
    }
    out += &match field.sigma.rms(&field.valid) {
        Some(sigma) => format!(
            "sigma    {sigma:.6} {velocity}{}\n",
            if matches!(field.sigma, Sigma::PerNode { .. }) {
                " (root mean square, given for every vector)"
            } else {
                ""
            }
        ),
        None => "sigma    not declared\n".to_owned(),
    };
    out += &match field.overlap {
        Some(overlap) => format!("overlap  {overlap}\n"),
        None => "overlap  not declared\n".to_owned(),
    };
    let walls: Vec<&str> =
        Side::ALL.into_iter().filter(|&s| field.domain.walls.get(s).is_some()).map(Side::name).collect();
    if !walls.is_empty() {
        out += &format!("walls    {}\n", walls.join(", "));
    }
    if field.domain.thickness != Thickness::Uniform {
        out += &format!(
            "depth    {}\n",
            if field.domain.thickness == Thickness::Radius { "axisymmetric about y = 0" } else { "map" }
        );
    }
    if data.remarks.is_empty() {
        out += "nothing looks doubtful\n";
    } else {
        out += "worth a look:\n";
        for remark in &data.remarks {
            out += &format!("  - {remark}\n");
        }
    }
    out
}
