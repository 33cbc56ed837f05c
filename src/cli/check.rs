//! `isopsi divergence` and `isopsi flux`.

use isopsi::extract::contour::Scene;
use isopsi::extract::flux::flux_between;
use isopsi::field::Thickness;
use isopsi::report;
use serde_json::json;

use super::args::Required;
use super::diagnostics::Failure;
use super::job::{Job, print};

/// The incompressibility check.
///
/// # Errors
/// [`Failure`]; [`Failure::Verdict`] when `required` is another verdict.
pub fn divergence(job: &Job<'_>, required: Option<Required>) -> Result<(), Failure> {
    let flow = job.fit()?;
    let check = job.check(&flow);
    job.say(&flow);
    job.messages.remarks(check.remarks.iter());
    if job.common.json {
        print(&format!("{:#}\n", report::divergence(&check)))?;
    } else {
        print(&report::divergence_text(&flow, &check, &job.context))?;
    }
    let found = check.report.verdict.name();
    if let Some(required) = required {
        let required = match required {
            Required::Consistent => "consistent",
            Required::Inconsistent => "inconsistent",
            Required::Undecided => "undecided",
        };
        if found != required {
            return Err(Failure::Verdict { found, required });
        }
    }
    Ok(())
}

/// Flux between two points.
///
/// # Errors
/// [`Failure`].
pub fn flux(job: &Job<'_>, from: [f64; 2], to: [f64; 2]) -> Result<(), Failure> {
    let flow = job.fit()?;
    job.say(&flow);
    let scene = Scene { surface: &flow.extended, domain: &flow.used.domain, flags: &flow.flags };
    let sign = job.context.psi_sign;
    let flux =
        flux_between(&scene, &flow.filled(), &flow.fit.component, from, to, &flow.fit.body_psi, &flow.fit.wall_psi)?;
    let plane = flow.used.domain.thickness == Thickness::Uniform;
    let unit = job.context.units.psi(plane);
    let length = job.context.units.position();
    if job.common.json {
        let line = flux.by_line.as_ref().ok().copied();
        print(&format!(
            "{:#}\n",
            json!({
                "from": flux.from, "to": flux.to, "unit": unit,
                "psi_from": sign * flux.psi_from, "psi_to": sign * flux.psi_to,
                "flux": flux.by_psi, "flux_along_line": line,
                "why_not_along_line": flux.by_line.as_ref().err().map(ToString::to_string),
                "through_filled": flux.through_filled,
                "flux_around_axis": flux.around_axis,
            })
        ))?;
        return Ok(());
    }
    let mut text = format!(
        "flux from ({}, {}) to ({}, {}) {length}: {:.6} {unit}\n  psi {:.6} -> {:.6}\n",
        from[0],
        from[1],
        to[0],
        to[1],
        flux.by_psi,
        sign * flux.psi_from,
        sign * flux.psi_to
    );
    match &flux.by_line {
        Ok(value) => {
            text += &format!(
                "  along the straight line, from the vectors: {value:.6} {unit} (difference {:.2e})\n",
                value - flux.by_psi
            )
        }
        Err(reason) => text += &format!("  along the straight line: not formed, {reason}\n"),
    }
    if flux.through_filled {
        text += "  the line passes filled nodes: there the vectors come from the fit\n";
    }
    if let Some(whole) = flux.around_axis {
        text += &format!("  around the axis, 2 pi times: {whole:.6} {unit}\n");
    }
    text += "  positive: from the left to the right of the way\n";
    print(&text)
}
