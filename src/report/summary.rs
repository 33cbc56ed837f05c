//! `summary.json`: what was done, with what, and what came out.

use serde_json::{Map, Value, json};

use super::tables::count_kind;
use super::{CAUTION, ReportContext};
use crate::analysis::{Analysis, Check, FittedFlow};
use crate::extract::stagnation::StagnationKind;
use crate::field::{Axis, Flags, Remark, Side, Sigma, Thickness};
use crate::numerics::solver::StopReason;
use crate::numerics::stream_function::PsiZero;

/// Where a result comes from.
#[derive(Debug, Clone, Default)]
pub struct Provenance {
    /// Command line as typed.
    pub command: String,
    /// Settings in full, as a survey file would hold them.
    pub settings: Value,
    /// Name, size in bytes and SHA-256 of every input.
    pub inputs: Vec<(String, u64, String)>,
    /// Remarks of reading.
    pub remarks: Vec<Remark>,
}

/// Seconds a stage took, measured by the caller.
#[derive(Debug, Clone, Copy)]
pub struct StageTime {
    /// Name of the stage.
    pub stage: &'static str,
    /// Seconds.
    pub seconds: f64,
}

/// The summary of a frame.
pub fn summary(analysis: &Analysis, context: &ReportContext, from: &Provenance, times: &[StageTime]) -> Value {
    let flow = &analysis.flow;
    let features = &analysis.features;
    let plane = flow.used.domain.thickness == Thickness::Uniform;
    let kinds: Map<String, Value> = [
        ("centers", StagnationKind::Center),
        ("saddles", StagnationKind::Saddle),
        ("attachments", StagnationKind::Attachment),
        ("separations", StagnationKind::Separation),
    ]
    .into_iter()
    .map(|(name, kind)| (name.to_owned(), json!(count_kind(features, kind))))
    .collect();
    let mut counts = kinds;
    counts.insert("lines".to_owned(), json!(features.lines.len()));
    counts.insert("cells".to_owned(), json!(features.cells.len()));
    let remarks: Vec<Value> = from
        .remarks
        .iter()
        .chain(analysis.remarks())
        .map(|remark| json!({"kind": remark.kind.name(), "text": remark.text}))
        .collect();
    json!({
        "program": "isopsi",
        "version": env!("CARGO_PKG_VERSION"),
        "command": from.command,
        "settings": from.settings,
        "inputs": from.inputs.iter().map(|(name, size, sha)| json!({"file": name, "bytes": size, "sha256": sha})).collect::<Vec<_>>(),
        "frame": {"index": flow.measured.frame.index, "time": number(flow.measured.frame.time), "source": flow.measured.frame.source},
        "grid": grid(flow),
        "units": {
            "length": context.units.position(),
            "velocity": context.units.velocity(),
            "psi": context.units.psi(plane),
            "rate": context.units.rate(),
        },
        "vectors": vectors(flow),
        "sigma": {
            "declared": number(flow.used.sigma.rms(&flow.used.valid)),
            "estimated": number(analysis.check.report.sigma_estimated.map(|l| l.sigma)),
            "overlap": number(flow.used.overlap),
        },
        "divergence": divergence(&analysis.check),
        "verdict": analysis.verdict().name(),
        "fit": fit(flow, &analysis.check, context),
        "counts": counts,
        "topology": {
            "index_sum": features.index_sum,
            "turning_number": number(features.turning.number.map(f64::from)),
        },
        "levels": features.levels.iter().map(|level| context.psi_sign * level).collect::<Vec<_>>(),
        "seconds": times.iter().map(|t| (t.stage.to_owned(), json!(t.seconds))).collect::<Map<String, Value>>(),
        "remarks": remarks,
        "caution": CAUTION,
    })
}

/// A number that may be missing: null, never zero.
fn number(value: Option<f64>) -> Value {
    value.filter(|v| v.is_finite()).map_or(Value::Null, |v| json!(v))
}

fn axis(axis: &Axis) -> Value {
    json!({"nodes": axis.len(), "first": axis.first(), "last": axis.last(), "spacing": axis.mean_step(), "uniform": axis.is_uniform()})
}

fn grid(flow: &FittedFlow) -> Value {
    let domain = &flow.used.domain;
    let thickness = match domain.thickness {
        Thickness::Uniform => "uniform",
        Thickness::Radius => "radius",
        Thickness::Map(_) => "map",
    };
    let walls: Vec<&str> = Side::ALL.into_iter().filter(|&s| domain.walls.get(s).is_some()).map(Side::name).collect();
    json!({
        "x": axis(&domain.grid.x),
        "y": axis(&domain.grid.y),
        "bodies": domain.bodies.len(),
        "walls": walls,
        "thickness": thickness,
    })
}

fn vectors(flow: &FittedFlow) -> Value {
    let count = |flag: Flags| flow.flags.iter().filter(|f| f.has(flag)).count();
    let nodes = flow.flags.len();
    let solid = count(Flags::SOLID);
    json!({
        "nodes": nodes,
        "solid": solid,
        "valid": count(Flags::MEASURED),
        "screened": count(Flags::SCREENED),
        "filled": count(Flags::FILLED),
        "gaps": nodes - solid - count(Flags::MEASURED),
    })
}

/// The divergence part, shared with `isopsi divergence --json`.
pub fn divergence(check: &Check) -> Value {
    let report = &check.report;
    let scales: Vec<Value> = report
        .scales
        .iter()
        .map(|s| {
            json!({
                "cells": s.size, "boxes": s.boxes, "outflow_rms": number(Some(s.outflow_rms)),
                "outflow_rms_of_noise": number(Some(s.noise_rms)), "statistic": number(Some(s.statistic)),
                "degrees_of_freedom": number(Some(s.degrees)), "p": number(Some(s.p)),
                "truncation_share": number(Some(s.truncation_share)),
            })
        })
        .collect();
    json!({
        "verdict": report.verdict.name(),
        "reason": report.reason.text(),
        "p": number(Some(report.p)),
        "rms": number(Some(report.divergence_rms)),
        "rms_of_noise": number(Some(report.divergence_noise)),
        "truncation_share": number(Some(report.truncation_share)),
        "sigma_declared": number(report.sigma_declared),
        "sigma_estimated": number(report.sigma_estimated.map(|l| l.sigma)),
        "sigma_estimated_uncertainty": number(report.sigma_estimated.map(|l| l.uncertainty)),
        "sigma_estimated_is_upper_bound": report.sigma_estimated.map(|l| l.upper_bound),
        "overlap": report.overlap,
        "overlap_estimated": number(report.overlap_estimated.map(|e| e.overlap)),
        "boxes": scales,
    })
}

fn fit(flow: &FittedFlow, check: &Check, context: &ReportContext) -> Value {
    let solve = &flow.fit.solve;
    let range = flow.surface.range().map(|(low, high)| {
        let (a, b) = (context.psi_sign * low, context.psi_sign * high);
        [a.min(b), a.max(b)]
    });
    json!({
        "solver": solve.solver.name(),
        "converged": solve.reason != StopReason::IterationLimit,
        "iterations": solve.iterations,
        "relative_residual": solve.relative_residual,
        "tolerance": solve.tolerance,
        "unknowns": solve.unknowns,
        "components": flow.fit.components,
        "residual_share": number(Some(check.residual.share)),
        "residual_share_expected_from_noise": number(check.residual.expected),
        "psi_range": range,
        "psi_zero": zero_in_words(flow),
        "sign": context.sign_convention(),
        "sigma_kind": match flow.used.sigma { Sigma::Unknown => "unknown", Sigma::Uniform { .. } => "uniform", Sigma::PerNode { .. } => "per vector" },
    })
}

/// Where psi is zero, in words.
pub fn zero_in_words(flow: &FittedFlow) -> String {
    match flow.fit.zero {
        PsiZero::Auto | PsiZero::Mean => "mean over the field".to_owned(),
        PsiZero::Axis => "on the axis".to_owned(),
        PsiZero::Wall(side) => format!("on the {} wall", side.name()),
        PsiZero::Body(body) => format!("on body {}", body + 1),
        PsiZero::Point { x, y } => format!("at ({x}, {y})"),
    }
}
