//! What a figure shows of an analysis: the field behind the lines, the step between levels, the caption.

use ndarray::{Array2, Zip};

use super::background::Background;
use super::font;
use crate::analysis::{Check, Features, FittedFlow};
use crate::field::{Sigma, UnitSystem};

/// Names of the fields that can stand behind the lines.
pub const BACKGROUNDS: [&str; 7] = ["none", "speed", "vorticity", "divergence", "divergence_z", "psi", "residual"];

/// The field of a name; `Some(None)` for "none", `None` for an unknown name.
pub fn background_of(
    name: &str,
    flow: &FittedFlow,
    check: &Check,
    units: &UnitSystem,
    plane: bool,
    sign: f64,
) -> Option<Option<Background>> {
    let map = &check.map;
    let make = |values: Array2<f64>, label: &str, unit: String, signed: bool| {
        Some(Some(Background { values, label: label.to_owned(), unit, signed }))
    };
    let hypot = |a: &Array2<f64>, b: &Array2<f64>| Zip::from(a).and(b).map_collect(|a, b| a.hypot(*b));
    match name {
        "none" => Some(None),
        "speed" => make(hypot(&flow.u_fit, &flow.v_fit), "speed", units.velocity(), false),
        "vorticity" => make(map.vorticity.clone(), "vorticity", units.rate(), true),
        "divergence" => make(map.divergence.clone(), "divergence", units.rate(), true),
        "divergence_z" if flow.used.sigma != Sigma::Unknown => {
            make(map.divergence_z(1.0), "divergence / its sigma", "1".to_owned(), true)
        }
        "divergence_z" => {
            let scale = check.report.sigma_estimated.map_or(f64::NAN, |e| e.sigma);
            make(map.divergence_z(scale), "divergence / its estimated sigma", "1".to_owned(), true)
        }
        "psi" => make(flow.surface_psi().mapv(|p| sign * p), "ψ", units.psi(plane), false),
        "residual" => make(
            hypot(&(&flow.used.u - &flow.u_fit), &(&flow.used.v - &flow.v_fit)),
            "residual speed",
            units.velocity(),
            false,
        ),
        _ => None,
    }
}

/// Levels drawn, their common step (0 when unequal).
pub fn step_of(features: &Features) -> f64 {
    let levels = &features.levels;
    let step = levels.windows(2).map(|w| w[1] - w[0]).fold(f64::INFINITY, f64::min);
    let equal = levels.windows(2).all(|w| {
        let n = (w[1] - w[0]) / step;
        (n - n.round()).abs() < 1e-6
    });
    if equal && step.is_finite() { step } else { 0.0 }
}

/// Caption of an analysis: step of psi, its zero, sigma, verdict.
pub fn caption_of(
    flow: &FittedFlow,
    check: &Check,
    features: &Features,
    units: &UnitSystem,
    plane: bool,
    zero: &str,
) -> String {
    let unit = font::typeset_unit(&units.psi(plane));
    let step = step_of(features);
    let step = if step > 0.0 {
        format!("Streamlines every {} {unit}", trim(step))
    } else {
        "Streamlines at chosen levels".to_owned()
    };
    let sigma = match flow.used.sigma.rms(&flow.used.valid) {
        Some(sigma) => format!("σ = {} {}", trim(sigma), font::typeset_unit(&units.velocity())),
        None => "σ not declared".to_owned(),
    };
    format!("{step}, ψ = 0 {zero}; {sigma}; verdict: {}.", check.report.verdict.name())
}

fn trim(value: f64) -> String {
    let digits = (3 - value.abs().max(1e-300).log10().floor() as i32).clamp(0, 12) as usize;
    let text = format!("{value:.digits$}");
    if text.contains('.') { text.trim_end_matches('0').trim_end_matches('.').to_owned() } else { text }
}
