//! What a person reads in the terminal.

use std::path::Path;

use super::ReportContext;
use super::summary::zero_in_words;
use super::tables::count_kind;
use crate::analysis::{Analysis, Check, FittedFlow};
use crate::extract::stagnation::StagnationKind;
use crate::field::{Flags, Thickness};
use crate::numerics::box_test::Verdict;

/// A number with four significant digits.
fn short(value: f64) -> String {
    if value == 0.0 {
        return "0".to_owned();
    }
    if !value.is_finite() {
        return "-".to_owned();
    }
    let digits = (3 - value.abs().log10().floor() as i32).clamp(0, 12) as usize;
    if value.abs() >= 1e6 || value.abs() < 1e-4 { format!("{value:.3e}") } else { format!("{value:.digits$}") }
}

fn count(flow: &FittedFlow, flag: Flags) -> usize {
    flow.flags.iter().filter(|f| f.has(flag)).count()
}

/// Vectors measured, screened, filled.
pub fn screening_line(flow: &FittedFlow) -> String {
    let (measured, screened, filled) =
        (count(flow, Flags::MEASURED), count(flow, Flags::SCREENED), count(flow, Flags::FILLED));
    let share = 100.0 * screened as f64 / measured.max(1) as f64;
    format!("vectors  {measured} measured, {screened} screened out ({share:.1} %), {filled} nodes filled from the fit")
}

/// psi, its zero, the solver.
pub fn fit_line(flow: &FittedFlow, context: &ReportContext) -> String {
    let unit = context.units.psi(flow.used.domain.thickness == Thickness::Uniform);
    let (low, high) = flow.surface.range().unwrap_or((f64::NAN, f64::NAN));
    let (a, b) = (context.psi_sign * low, context.psi_sign * high);
    format!(
        "psi      {} to {} {unit}, zero {}; {} (relative residual {:.1e})",
        short(a.min(b)),
        short(a.max(b)),
        zero_in_words(flow),
        flow.fit.solve.solver.name(),
        flow.fit.solve.relative_residual
    )
}

/// The verdict in one sentence.
pub fn verdict_sentence(check: &Check) -> String {
    let what = match check.report.verdict {
        Verdict::Consistent => "the vectors are consistent with plane incompressible flow",
        Verdict::Inconsistent => "the vectors are NOT consistent with plane incompressible flow",
        Verdict::Undecided => "whether the vectors are consistent with plane incompressible flow cannot be told",
    };
    format!("{}: {what}; {}", check.report.verdict.name(), check.report.reason.text())
}

/// `isopsi divergence` as text.
pub fn divergence_text(flow: &FittedFlow, check: &Check, context: &ReportContext) -> String {
    let report = &check.report;
    let (rate, velocity) = (context.units.rate(), context.units.velocity());
    let mut out = format!("verdict  {}\n", verdict_sentence(check));
    out += &format!("         p = {} over all box sizes\n", short(report.p));
    out += &format!(
        "rms      {} {rate} (noise alone: {} {rate})\n",
        short(report.divergence_rms),
        short(report.divergence_noise)
    );
    out += &match (report.sigma_declared, report.sigma_estimated) {
        (Some(d), Some(e)) => format!(
            "sigma    {} {velocity} declared, {}{} +- {} from the smallest boxes\n",
            short(d),
            if e.upper_bound { "at most " } else { "" },
            short(e.sigma),
            short(e.uncertainty)
        ),
        (None, Some(e)) => format!(
            "sigma    not declared; {}{} +- {} {velocity} from the smallest boxes\n",
            if e.upper_bound { "at most " } else { "" },
            short(e.sigma),
            short(e.uncertainty)
        ),
        (Some(d), None) => format!("sigma    {} {velocity} declared, no estimate from the data\n", short(d)),
        (None, None) => "sigma    not declared, no estimate from the data\n".to_owned(),
    };
    out += &format!(
        "overlap  {}{}\n",
        short(report.overlap),
        if flow.used.overlap.is_none() { " (not declared)" } else { "" }
    );
    out += &format!(
        "residual {:.3} % of the flux energy fits no stream function{}\n",
        100.0 * check.residual.share,
        check.residual.expected.map_or_else(String::new, |e| format!(" (noise alone: {:.3} %)", 100.0 * e))
    );
    out += "\nboxes of cells   number   outflow rms   of noise     T      p\n";
    for s in &report.scales {
        out += &format!(
            "{:>5} x {:<5} {:>10} {:>13} {:>10} {:>7} {:>7}\n",
            s.size,
            s.size,
            s.boxes,
            short(s.outflow_rms),
            short(s.noise_rms),
            if s.statistic.is_finite() { format!("{:.2}", s.statistic) } else { "-".to_owned() },
            short(s.p)
        );
    }
    out
}

/// The end of `isopsi run`: what a person can act on, in about ten lines.
pub fn summary_text(analysis: &Analysis, context: &ReportContext, source: &str, out: &Path) -> String {
    let (flow, features, check) = (&analysis.flow, &analysis.features, &analysis.check);
    let grid = flow.used.grid();
    let plural = |n: usize, one: &str| if n == 1 { format!("1 {one}") } else { format!("{n} {one}s") };
    let kind = |k: StagnationKind| plural(count_kind(features, k), k.name());
    let mut text = format!("{source}: {} x {} nodes\n", grid.nx(), grid.ny());
    text += &format!("verdict  {}\n", verdict_sentence(check));
    text += &format!("{}\n{}\n", screening_line(flow), fit_line(flow, context));
    text += &format!(
        "residual {:.2} % of the flux energy{}\n",
        100.0 * check.residual.share,
        check.residual.expected.map_or_else(String::new, |e| format!(", noise alone leaves {:.2} %", 100.0 * e))
    );
    text += &format!(
        "points   {}, {}, {}, {}\n",
        kind(StagnationKind::Center),
        kind(StagnationKind::Saddle),
        kind(StagnationKind::Separation),
        kind(StagnationKind::Attachment)
    );
    let unit = context.units.psi(flow.used.domain.thickness == Thickness::Uniform);
    let mut cells: Vec<_> = features.cells.iter().collect();
    cells.sort_by(|a, b| b.flux.total_cmp(&a.flux));
    for cell in cells.iter().take(3) {
        text += &format!(
            "cell     {} around ({}, {}): flux {} {unit}, area {} {}{}{}\n",
            cell.sense.name(),
            short(cell.x),
            short(cell.y),
            short(cell.flux),
            short(cell.area),
            context.units.label(2, 0),
            cell.wall_length.map_or_else(String::new, |l| format!(
                ", {} {} along the wall",
                short(l),
                context.units.position()
            )),
            if cell.notes.contains(&"open_at_edge") { ", cut off by the edge of the data" } else { "" }
        );
    }
    if cells.len() > 3 {
        text += &format!("         and {} smaller ones in cells.csv\n", cells.len() - 3);
    }
    text += &format!("written  {} (figure, tables, field.h5, summary.json)\n", out.display());
    text
}
