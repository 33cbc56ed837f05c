//! Commands that write one file: clean, psi, stagnation, streamlines, figure.

use std::path::Path;

use isopsi::io::IoError;
use isopsi::io::field_file::write_field;
use isopsi::io::output::write_whole;
use isopsi::io::table::Table;
use isopsi::report;

use super::args::Common;
use super::diagnostics::Failure;
use super::job::{Job, print};
use super::run::draw;

/// Extension of a file in lower case.
fn extension(path: &Path) -> String {
    path.extension().map(|e| e.to_string_lossy().to_lowercase()).unwrap_or_default()
}

fn known_extension(out: &Path, known: &[&str]) -> Result<String, Failure> {
    let found = extension(out);
    if known.contains(&found.as_str()) {
        return Ok(found);
    }
    Err(IoError::setting(
        "--out",
        format!("{}: the extension decides the format; known here are .{}", out.display(), known.join(" .")),
    )
    .into())
}

/// The screened and filled field.
///
/// # Errors
/// [`Failure`].
pub fn clean(common: &Common, out: &Path) -> Result<(), Failure> {
    known_extension(out, &["csv", "npz", "npy", "h5", "nc"])?;
    let job = Job::open(common)?;
    job.guard_output(out)?;
    let flow = job.fit()?;
    job.say(&flow);
    write_field(out, &report::clean_file(&flow, &job.context))?;
    job.messages.line(&report::screening_line(&flow));
    Ok(())
}

/// The stream function.
///
/// # Errors
/// [`Failure`].
pub fn psi(common: &Common, out: &Path) -> Result<(), Failure> {
    known_extension(out, &["h5", "nc", "npz", "csv"])?;
    let job = Job::open(common)?;
    job.guard_output(out)?;
    let flow = job.fit()?;
    job.say(&flow);
    write_field(out, &report::psi_file(&flow, &job.context))?;
    job.messages.line(&report::fit_line(&flow, &job.context));
    Ok(())
}

fn give(job: &Job<'_>, table: &Table, out: Option<&Path>) -> Result<(), Failure> {
    if let Some(out) = out {
        table.save(out)?;
        return Ok(());
    }
    if job.common.json {
        return print(&format!("{:#}\n", report::table_json(table)));
    }
    let mut text = Vec::new();
    table.write(&mut text)?;
    print(&String::from_utf8_lossy(&text))
}

/// The table of stagnation points.
///
/// # Errors
/// [`Failure`].
pub fn stagnation(common: &Common, out: Option<&Path>) -> Result<(), Failure> {
    let job = Job::open(common)?;
    if let Some(out) = out {
        job.guard_output(out)?;
    }
    let flow = job.fit()?;
    let features = job.features(&flow);
    job.say(&flow);
    job.messages.remarks(features.remarks.iter());
    give(&job, &report::stagnation_table(&flow, &features, &job.context), out)
}

/// The streamlines.
///
/// # Errors
/// [`Failure`].
pub fn streamlines(common: &Common, out: Option<&Path>) -> Result<(), Failure> {
    let job = Job::open(common)?;
    if let Some(out) = out {
        job.guard_output(out)?;
    }
    let flow = job.fit()?;
    let features = job.features(&flow);
    job.say(&flow);
    job.messages.remarks(features.remarks.iter());
    give(&job, &report::streamlines_table(&flow, &features, &job.context), out)
}

/// One figure.
///
/// # Errors
/// [`Failure`].
pub fn figure(common: &Common, out: &Path) -> Result<(), Failure> {
    let kind = known_extension(out, &["svg", "pdf", "png"])?;
    let job = Job::open(common)?;
    job.guard_output(out)?;
    let flow = job.fit()?;
    let check = job.check(&flow);
    let features = job.features(&flow);
    job.say(&flow);
    job.messages.remarks(features.remarks.iter());
    let bytes = draw(&job, &flow, &check, &features)?.bytes(&kind)?;
    write_whole(out, |w| w.write_all(&bytes))?;
    Ok(())
}
