//! `isopsi inspect`: what was read and what looks doubtful; `--write` makes a survey file of it.

use std::path::Path;

use isopsi::field::{Axis, Side, Sigma, Thickness};
use isopsi::io::output::write_whole;
use isopsi::io::{Dataset, read};
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
        let text = survey_text(&data, path);
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

/// A commented survey file holding what was found; what is not known stands as a comment.
fn survey_text(data: &Dataset, at: &Path) -> String {
    let quote = |s: &str| toml::Value::String(s.to_owned()).to_string();
    let files: Vec<String> = data.sources.iter().map(|s| relative(&s.path, at)).collect();
    let known = |key: &str, value: Option<String>, example: &str, why: &str| match value {
        Some(value) => format!("{key} = {:28} # {why}\n", value),
        None => format!("# {key} = {example:26} # {why}\n"),
    };
    let mut out = String::from(
        "# Survey file: what was measured, and how well. Lines that begin with # are not in force.\n\n[data]\n",
    );
    out += &format!("files = {}\n", files.first().map_or_else(|| "\"\"".to_owned(), |f| quote(f)));
    if data.frames > 1 {
        out += &format!("frames = \"{}\" # of {} frames, counted from 0\n", data.field.frame.index, data.frames);
    }
    let s = &data.survey;
    if let Some(columns) = &s.data.columns {
        out += &format!("columns = {}\n", quote(&columns.list(true).join(",")));
    }
    if let Some(order) = &s.data.order {
        out += &format!("order = {}\n", quote(order));
    }
    if let Some(arrays) = &s.data.arrays {
        let list: Vec<String> = arrays.iter().map(|(role, path)| format!("{role} = {}", quote(path))).collect();
        out += &format!("arrays = {{ {} }}\n", list.join(", "));
    }
    out +=
        &known("zero", s.data.zero.as_deref().map(quote), "\"gap\"", "vectors of exactly (0, 0): \"value\" or \"gap\"");
    out += "\n[geometry]\n";
    out += &format!(
        "# found: x {} to {}, y {} to {}, {} by {} nodes\n",
        short(data.field.grid().x.first()),
        short(data.field.grid().x.last()),
        short(data.field.grid().y.first()),
        short(data.field.grid().y.last()),
        data.field.grid().nx(),
        data.field.grid().ny()
    );
    out += &known(
        "y",
        s.geometry.y.as_deref().map(quote),
        "\"down\"",
        "\"down\" when y and v count downwards, as in images",
    );
    out +=
        &known("scale", s.geometry.scale.as_deref().map(quote), "\"0.05 mm\"", "length of a pixel, for data in pixels");
    out += &known("interval", s.geometry.interval.as_deref().map(quote), "\"2 ms\"", "time between the two exposures");
    out += "\n[units]\n";
    let unit = |declared: &Option<String>, found: &Option<String>| {
        declared.clone().or_else(|| found.clone()).map(|u| quote(&u))
    };
    out += &known("length", unit(&s.units.length, &data.file_units.0), "\"mm\"", "unit of the coordinates in the data");
    out += &known(
        "velocity",
        unit(&s.units.velocity, &data.file_units.1),
        "\"mm/s\"",
        "unit of the velocities in the data",
    );
    out += "\n[noise]\n";
    let sigma = s.noise.sigma.as_ref().map(|v| quote(&v.to_string()));
    out += &known("sigma", sigma, "\"0.4 mm/s\"", "standard uncertainty (k = 1) of u and of v");
    let overlap = s.noise.overlap.as_ref().map(ToString::to_string);
    out += &known("overlap", overlap, "0.5", "share by which neighboring windows overlap");
    out += "\n# [[solid]]                      # a body; as often as needed\n# circle = { x = 0.0, y = 0.0, radius = 1.0 }\n# surface = \"no-slip\"            # slip, no-slip or free\n";
    out += "\n[walls]                         # impermeable sides\n";
    for (side, value) in
        [("bottom", &s.walls.bottom), ("top", &s.walls.top), ("left", &s.walls.left), ("right", &s.walls.right)]
    {
        out += &known(
            side,
            value.as_deref().map(quote),
            "\"no-slip at 0.0\"",
            "slip or no-slip; at: position, when off the outermost vectors",
        );
    }
    out
}

/// Path of a data file as seen from the survey file.
fn relative(file: &Path, survey: &Path) -> String {
    let folder = survey.parent().filter(|p| !p.as_os_str().is_empty()).unwrap_or(Path::new("."));
    if let (Ok(file), Ok(folder)) = (file.canonicalize(), folder.canonicalize()) {
        return match file.strip_prefix(&folder) {
            Ok(inside) => inside.display().to_string(),
            Err(_) => file.display().to_string(),
        };
    }
    file.display().to_string()
}
