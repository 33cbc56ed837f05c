//! A commented survey file holding what was found; what is not known stands as a comment.

use std::path::{Path, PathBuf};

use serde::Serialize;

use super::read::Dataset;
use super::survey::Survey;

/// Keys that people change most, with an example and a line of advice; the others are written when they are set.
const HINTS: [(&str, &[(&str, &str, &str)]); 6] = [
    ("data", &[("zero", "\"gap\"", "vectors of exactly (0, 0): \"value\" or \"gap\"")]),
    (
        "geometry",
        &[
            ("y", "\"down\"", "\"down\" when y and v count downwards, as in images"),
            ("scale", "\"0.05 mm\"", "length of a pixel, for data in pixels"),
            ("interval", "\"2 ms\"", "time between the two exposures"),
        ],
    ),
    (
        "units",
        &[
            ("length", "\"mm\"", "unit of the coordinates in the data"),
            ("velocity", "\"mm/s\"", "unit of the velocities in the data"),
            ("output", "\"m,s\"", "units of the results, when others are wanted"),
        ],
    ),
    (
        "noise",
        &[
            ("sigma", "\"0.4 mm/s\"", "standard uncertainty (k = 1) of u and of v; \"auto\" estimates it"),
            ("overlap", "0.5", "share by which neighboring windows overlap"),
        ],
    ),
    (
        "walls",
        &[
            ("bottom", "\"no-slip at 0.0\"", "slip or no-slip; at: its position, when off the outermost vectors"),
            ("top", "\"slip\"", ""),
            ("left", "\"slip\"", ""),
            ("right", "\"slip\"", ""),
        ],
    ),
    (
        "depth",
        &[("thickness", "\"radius\"", "\"uniform\", \"radius\" (axisymmetric about y = 0), or a depth map file")],
    ),
];

/// Column where the advice begins.
const ADVICE: usize = 34;

/// Text of a survey file for a dataset, to be written at `at`: files are named relative to it.  Reading it gives the settings in
/// force, with the units found in the data.
pub fn commented_survey(data: &Dataset, at: &Path) -> String {
    let mut survey = data.survey.clone();
    survey.data.files = None;
    survey.units.length = survey.units.length.or_else(|| data.file_units.0.clone());
    survey.units.velocity = survey.units.velocity.or_else(|| data.file_units.1.clone());
    for mask in survey.solid.iter_mut().filter_map(|s| s.mask.as_mut()) {
        *mask = relative(Path::new(mask.as_str()), at);
    }
    if let Some(map) = survey.depth.thickness.as_mut().filter(|t| !matches!(t.as_str(), "uniform" | "radius" | "file"))
    {
        *map = relative(Path::new(map.as_str()), at);
    }
    let mut out = String::from(
        "# Survey file: what was measured, and how well. Lines that begin with # are not in force.\n\n[data]\n",
    );
    out += &files(&data.files, at);
    if data.frames > 1 && survey.data.frames.is_none() {
        out += &format!("# frames = \"0..{}\" # counted from 0\n", data.frames - 1);
    }
    for table in tables(&survey) {
        if table.name != "data" {
            out += &format!("\n[{}]\n", table.name);
        }
        if table.name == "geometry" {
            let (x, y) = (&data.field.grid().x, &data.field.grid().y);
            out += &format!(
                "# found: x {:.6} to {:.6} ({} nodes), y {:.6} to {:.6} ({} nodes) in {}\n",
                x.first(),
                x.last(),
                x.len(),
                y.first(),
                y.last(),
                y.len(),
                data.units.position()
            );
        }
        out += &table.text;
        if table.name == "noise" {
            out += &solids(&survey);
        }
    }
    out
}

fn files(files: &[PathBuf], at: &Path) -> String {
    let names: Vec<String> = files.iter().map(|f| relative(f, at)).collect();
    match &names[..] {
        [only] => format!("files = {}\n", quoted(only)),
        names => format!("files = [{}]\n", names.iter().map(|n| quoted(n)).collect::<Vec<_>>().join(", ")),
    }
}

fn quoted(text: &str) -> String {
    toml::Value::String(text.to_owned()).to_string()
}

/// A table of the file without its heading.
struct Table {
    name: &'static str,
    text: String,
}

/// The tables with hints, then the others that hold something.
fn tables(survey: &Survey) -> Vec<Table> {
    let set = [
        ("data", pairs(&survey.data)),
        ("geometry", pairs(&survey.geometry)),
        ("units", pairs(&survey.units)),
        ("noise", pairs(&survey.noise)),
        ("walls", pairs(&survey.walls)),
        ("depth", pairs(&survey.depth)),
        ("screen", pairs(&survey.screen)),
        ("fit", pairs(&survey.fit)),
        ("ensemble", pairs(&survey.ensemble)),
        ("streamlines", pairs(&survey.streamlines)),
        ("figure", pairs(&survey.figure)),
    ];
    let mut tables = Vec::new();
    for (name, mut pairs) in set {
        let hints = HINTS.iter().find(|(table, _)| *table == name).map_or(&[][..], |(_, hints)| *hints);
        if hints.is_empty() && pairs.is_empty() {
            continue;
        }
        let mut text = String::new();
        for (key, example, advice) in hints {
            let line = match pairs.iter().position(|(k, _)| k == key) {
                Some(at) => {
                    let (key, value) = pairs.remove(at);
                    format!("{key} = {value}")
                }
                None => format!("# {key} = {example}"),
            };
            text += &if advice.is_empty() { format!("{line}\n") } else { format!("{line:ADVICE$} # {advice}\n") };
        }
        for (key, value) in pairs {
            text += &format!("{key} = {value}\n");
        }
        tables.push(Table { name, text });
    }
    tables
}

/// Keys that are set, with their values on one line.
fn pairs(table: &impl Serialize) -> Vec<(String, String)> {
    match toml::Value::try_from(table) {
        Ok(toml::Value::Table(table)) => table.into_iter().map(|(key, value)| (key, value.to_string())).collect(),
        _ => Vec::new(),
    }
}

fn solids(survey: &Survey) -> String {
    if survey.solid.is_empty() {
        return "\n# [[solid]]                        # a body; as often as needed\n# circle = { x = 0.0, y = 0.0, radius = 1.0 }\n# surface = \"no-slip\"              # slip, no-slip or free\n".to_owned();
    }
    let body = |solid| {
        let lines: String = pairs(solid).iter().map(|(key, value)| format!("{key} = {value}\n")).collect();
        format!("\n[[solid]]\n{lines}")
    };
    survey.solid.iter().map(body).collect()
}

/// Path of a file as seen from the survey file.
fn relative(file: &Path, survey: &Path) -> String {
    let folder = survey.parent().filter(|p| !p.as_os_str().is_empty()).unwrap_or(Path::new("."));
    if let (Ok(file), Ok(folder)) = (file.canonicalize(), folder.canonicalize()) {
        return file.strip_prefix(&folder).unwrap_or(&file).display().to_string();
    }
    file.display().to_string()
}
