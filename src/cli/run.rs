//! `isopsi run`: the whole job, every file.

use std::fs;
use std::path::Path;

use isopsi::analysis::{Analysis, Check, Features, FittedFlow};
use isopsi::field::Thickness;
use isopsi::figure::{BACKGROUNDS, ColorMap, Figure, FigureInput, background_of, caption_of, step_of};
use isopsi::io::IoError;
use isopsi::io::output::{ensure_writable, write_whole};
use isopsi::io::survey::NumberOrText;
use isopsi::report;
use serde_json::Value;

use super::args::Common;
use super::diagnostics::Failure;
use super::job::{Job, print, settings};

/// Files a run writes, the summary last: where it stands, the others are whole.
const FILES: [&str; 10] = [
    "summary.json",
    "field.h5",
    "stagnation.csv",
    "streamlines.csv",
    "lines.csv",
    "cells.csv",
    "figure.svg",
    "figure.pdf",
    "figure.png",
    "field.npz",
];

/// Does the whole job.
///
/// # Errors
/// [`Failure`].
pub fn run(common: &Common, out: &Path, overwrite: bool) -> Result<(), Failure> {
    let job = Job::open(common)?;
    let formats = formats(&job)?;
    prepare(&job, out, overwrite)?;
    let flow = job.fit()?;
    let check = job.check(&flow);
    let features = job.features(&flow);
    let analysis = Analysis { flow, check, features };
    let (flow, features, context) = (&analysis.flow, &analysis.features, &job.context);
    let drawing = if formats.is_empty() { None } else { Some(draw(&job, flow, &analysis.check, features)?) };
    isopsi::io::field_file::write_field(&out.join("field.h5"), &report::field_file(flow, &analysis.check, context))?;
    report::stagnation_table(flow, features, context).save(&out.join("stagnation.csv"))?;
    report::streamlines_table(flow, features, context).save(&out.join("streamlines.csv"))?;
    report::lines_table(flow, features, context).save(&out.join("lines.csv"))?;
    report::cells_table(flow, features, context).save(&out.join("cells.csv"))?;
    job.watch.lap("tables");
    if let Some(drawing) = drawing {
        for kind in &formats {
            let bytes = drawing.bytes(kind)?;
            write_whole(&out.join(format!("figure.{kind}")), |w| w.write_all(&bytes))?;
        }
        job.watch.lap("figure");
    }
    let summary = report::summary(&analysis, context, &job.provenance(), &job.watch.times());
    let text = format!("{summary:#}\n");
    write_whole(&out.join("summary.json"), |w| w.write_all(text.as_bytes()))?;
    job.messages.remarks(job.data.remarks.iter().chain(analysis.remarks()));
    if common.json { print(&text) } else { print(&report::summary_text(&analysis, context, &job.source_name(), out)) }
}

/// Figure formats asked for.
fn formats(job: &Job<'_>) -> Result<Vec<String>, Failure> {
    let Some(list) = &job.data.survey.figure.formats else {
        return Ok(["svg", "pdf", "png"].map(str::to_owned).to_vec());
    };
    let list: Vec<String> = list.list(true).into_iter().filter(|f| !f.is_empty() && f != "none").collect();
    match list.iter().find(|f| !matches!(f.as_str(), "svg" | "pdf" | "png")) {
        Some(bad) => Err(IoError::setting("[figure] formats", format!("`{bad}`; write svg, pdf, png, or none")).into()),
        None => Ok(list),
    }
}

/// Makes the folder, refuses results of other settings, checks that it can be written.
fn prepare(job: &Job<'_>, out: &Path, overwrite: bool) -> Result<(), Failure> {
    if out.is_file() {
        return Err(IoError::setting("--out", format!("{} is a file; `run` writes a folder", out.display())).into());
    }
    fs::create_dir_all(out).map_err(|e| IoError::system("create", out, e))?;
    ensure_writable(&out.join("summary.json"))?;
    let present: Vec<&str> = FILES.iter().copied().filter(|f| out.join(f).exists()).collect();
    for source in &job.data.sources {
        if present
            .iter()
            .any(|f| matches!((out.join(f).canonicalize(), source.path.canonicalize()), (Ok(a), Ok(b)) if a == b))
        {
            return Err(IoError::setting(
                "--out",
                format!("{} holds the input {}; choose another folder", out.display(), source.path.display()),
            )
            .into());
        }
    }
    if overwrite || present.is_empty() {
        return Ok(());
    }
    let same = fs::read_to_string(out.join("summary.json"))
        .ok()
        .and_then(|text| serde_json::from_str::<Value>(&text).ok())
        .is_some_and(|old| {
            let sums: Vec<&str> = job.data.sources.iter().map(|s| s.sha256.as_str()).collect();
            let old_sums: Vec<&str> = old["inputs"]
                .as_array()
                .map(|a| a.iter().filter_map(|i| i["sha256"].as_str()).collect())
                .unwrap_or_default();
            old["settings"] == settings(&job.data.survey)
                && old["version"] == env!("CARGO_PKG_VERSION")
                && sums == old_sums
        });
    if same {
        return Ok(());
    }
    Err(IoError::setting(
        "--out",
        format!(
            "{} holds results of other settings or inputs ({}); choose another folder or say --overwrite",
            out.display(),
            present.join(", ")
        ),
    )
    .into())
}

/// Draws the figure with the settings in force.
///
/// # Errors
/// [`Failure`] for settings the figure does not know.
pub fn draw(job: &Job<'_>, flow: &FittedFlow, check: &Check, features: &Features) -> Result<Figure, Failure> {
    let table = &job.data.survey.figure;
    let mut options = isopsi::figure::FigureOptions::default();
    match &table.width {
        None => {}
        Some(NumberOrText::Number(mm)) if (30.0..=1000.0).contains(mm) => options.width_mm = *mm,
        Some(NumberOrText::Text(name)) => {
            options.width_mm = match name.as_str() {
                "single" => 90.0,
                "wide" => 140.0,
                "double" => 190.0,
                other => {
                    return Err(IoError::setting(
                        "[figure] width",
                        format!("`{other}`; write single, wide, double or millimeters"),
                    )
                    .into());
                }
            };
        }
        Some(NumberOrText::Number(mm)) => {
            return Err(IoError::setting("[figure] width", format!("{mm} mm; expected 30 to 1000")).into());
        }
    }
    if let Some(size) = table.font_size {
        if !(4.0..=24.0).contains(&size) {
            return Err(IoError::setting("[figure] font_size", format!("{size} pt; expected 4 to 24")).into());
        }
        options.font_size_pt = size;
    }
    options.labels = table.labels.unwrap_or(true);
    if let Some(name) = &table.color_map {
        options.color_map = Some(ColorMap::of(name).ok_or_else(|| {
            IoError::setting("[figure] color_map", format!("`{name}`; known are {}", ColorMap::NAMES.join(", ")))
        })?);
    }
    let name = table.background.as_deref().unwrap_or("speed");
    let (units, sign) = (&job.context.units, job.context.psi_sign);
    let plane = flow.used.domain.thickness == Thickness::Uniform;
    let background = background_of(name, flow, check, units, plane, sign).ok_or_else(|| {
        IoError::setting("[figure] background", format!("`{name}`; known are {}", BACKGROUNDS.join(", ")))
    })?;
    let caption = caption_of(flow, check, features, units, plane, &report::zero_in_words(flow));
    let input = FigureInput {
        domain: &flow.used.domain,
        contours: &features.lines,
        points: &features.points,
        background,
        flags: Some(&flow.flags),
        units,
        psi_sign: sign,
        psi_step: step_of(features),
        caption,
    };
    Ok(isopsi::figure::draw(&input, &options)?)
}
