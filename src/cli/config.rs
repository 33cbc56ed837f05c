//! From raw arguments to settings: flags become a survey, a survey becomes options of the analysis.

use std::collections::BTreeMap;

use isopsi::analysis::AnalysisOptions;
use isopsi::extract::contour::TraceOptions;
use isopsi::extract::levels::LevelChoice;
use isopsi::field::Side;
use isopsi::io::IoError;
use isopsi::io::survey::{CircleTable, NumberOrText, OneOrMany, OneOrTwo, SolidTable, Survey};
use isopsi::numerics::screening::ScreenOptions;
use isopsi::numerics::stream_function::PsiZero;

use super::args::Common;

/// A text that may be a bare number.
fn number_or_text(text: &str) -> NumberOrText {
    text.trim().parse().map_or_else(|_| NumberOrText::Text(text.to_owned()), NumberOrText::Number)
}

/// Numbers separated by commas.
fn numbers(text: &str, flag: &str) -> Result<Vec<f64>, IoError> {
    text.split(',')
        .map(|t| {
            t.trim()
                .parse::<f64>()
                .map_err(|_| IoError::setting(flag, format!("`{text}`: `{}` is not a number", t.trim())))
        })
        .collect()
}

/// A point `X,Y`.
///
/// # Errors
/// [`IoError::Setting`].
pub fn point(text: &str, flag: &str) -> Result<[f64; 2], IoError> {
    match numbers(text, flag)?[..] {
        [x, y] if x.is_finite() && y.is_finite() => Ok([x, y]),
        _ => Err(IoError::setting(flag, format!("`{text}`; write two numbers, X,Y"))),
    }
}

/// Flags in the form of a survey.
///
/// # Errors
/// [`IoError::Setting`] naming the flag.
pub fn survey_of(common: &Common) -> Result<Survey, IoError> {
    let mut s = Survey::default();
    if !common.array.is_empty() {
        let mut arrays = BTreeMap::new();
        for text in &common.array {
            let (role, path) = text.split_once('=').ok_or_else(|| {
                IoError::setting("--array", format!("`{text}`; write ROLE=PATH, for example u=/run3/vx"))
            })?;
            arrays.insert(role.trim().to_owned(), path.trim().to_owned());
        }
        s.data.arrays = Some(arrays);
    }
    s.data.columns = common.columns.clone().map(OneOrMany::One);
    s.data.order = common.order.clone();
    s.data.frames = common.frames.clone().map(NumberOrText::Text);
    s.data.zero = common.zero.clone();
    if let Some(text) = &common.spacing {
        s.geometry.spacing = Some(match numbers(text, "--spacing")?[..] {
            [d] => OneOrTwo::One(d),
            [dx, dy] => OneOrTwo::Two([dx, dy]),
            _ => return Err(IoError::setting("--spacing", format!("`{text}`; write one number or DX,DY"))),
        });
    }
    if let Some(text) = &common.origin {
        s.geometry.origin = Some(point(text, "--origin")?);
    }
    s.geometry.y = common.y.clone();
    s.geometry.scale = common.scale.clone();
    s.geometry.interval = common.interval.clone();
    for text in &common.solid {
        s.solid.push(solid(text)?);
    }
    for text in &common.wall {
        let (side, kind) = text.split_once('=').ok_or_else(|| {
            IoError::setting("--wall", format!("`{text}`; write SIDE=SURFACE, for example bottom=no-slip"))
        })?;
        let slot = match side.trim() {
            "bottom" => &mut s.walls.bottom,
            "top" => &mut s.walls.top,
            "left" => &mut s.walls.left,
            "right" => &mut s.walls.right,
            other => {
                return Err(IoError::setting("--wall", format!("side `{other}`; write bottom, top, left or right")));
            }
        };
        *slot = Some(kind.trim().to_owned());
    }
    s.depth.thickness = common.thickness.clone();
    s.units.length = common.length_unit.clone();
    s.units.velocity = common.velocity_unit.clone();
    s.units.output = common.units.clone();
    s.noise.sigma = common.sigma.as_deref().map(number_or_text);
    s.noise.overlap = common.overlap.as_deref().map(number_or_text);
    s.ensemble.members = common.members;
    s.ensemble.seed = common.seed;
    s.screen.limit = common.screen_limit;
    s.screen.epsilon = common.screen_epsilon;
    s.screen.passes = common.screen_passes;
    s.screen.off = common.no_screen.then_some(true);
    s.fit.smoothing = common.smoothing.as_deref().map(number_or_text);
    s.fit.zero = common.psi_zero.clone();
    s.fit.sign = common.psi_sign.clone();
    s.streamlines.levels = common.levels.as_deref().map(|t| numbers(t, "--levels")).transpose()?;
    s.streamlines.count = common.count;
    s.streamlines.step = common.step;
    s.streamlines.tolerance = common.tolerance;
    s.figure.width = common.width.as_deref().map(number_or_text);
    s.figure.background = common.background.clone();
    s.figure.labels = common.no_labels.then_some(false);
    s.figure.formats = common.formats.clone().map(OneOrMany::One);
    s.figure.color_map = common.color_map.clone();
    s.figure.font_size = common.font_size;
    Ok(s)
}

/// `circle X,Y,R [SURFACE]`, `polygon X,Y X,Y X,Y ... [SURFACE]`, `mask FILE [SURFACE]`.
fn solid(text: &str) -> Result<SolidTable, IoError> {
    let bad = || {
        IoError::setting(
            "--solid",
            format!(
                "`{text}`; write \"circle X,Y,R\", \"polygon X,Y X,Y X,Y\" or \"mask FILE\", then slip, no-slip or free"
            ),
        )
    };
    let mut words: Vec<&str> = text.split_whitespace().collect();
    let mut table = SolidTable::default();
    if let Some(last @ ("slip" | "no-slip" | "free")) = words.last().copied() {
        table.surface = Some(last.to_owned());
        words.pop();
    }
    match words[..] {
        ["circle", numbers_text] => match numbers(numbers_text, "--solid")?[..] {
            [x, y, radius] => table.circle = Some(CircleTable { x, y, radius }),
            _ => return Err(bad()),
        },
        ["polygon", ref vertices @ ..] if vertices.len() >= 3 => {
            table.polygon = Some(vertices.iter().map(|v| point(v, "--solid")).collect::<Result<_, _>>()?);
        }
        ["mask", file] => table.mask = Some(file.to_owned()),
        _ => return Err(bad()),
    }
    Ok(table)
}

/// Options of the analysis from the settings in force.
///
/// # Errors
/// [`IoError::Setting`] naming the key.
pub fn options_of(survey: &Survey) -> Result<AnalysisOptions, IoError> {
    let mut options = AnalysisOptions::default();
    let positive = |value: Option<f64>, place: &str| match value {
        Some(v) if !(v > 0.0 && v.is_finite()) => {
            Err(IoError::setting(place, format!("{v}; expected a positive number")))
        }
        other => Ok(other),
    };
    let mut screen = ScreenOptions::default();
    if let Some(limit) = positive(survey.screen.limit, "[screen] limit")? {
        screen.limit = limit;
    }
    if let Some(epsilon) = positive(survey.screen.epsilon, "[screen] epsilon")? {
        screen.epsilon = Some(epsilon);
    }
    if let Some(passes) = survey.screen.passes {
        screen.passes = passes;
    }
    options.screen = (survey.screen.off != Some(true) && screen.passes > 0).then_some(screen);
    if let Some(zero) = &survey.fit.zero {
        options.fit.zero = psi_zero(zero)?;
    }
    match &survey.fit.smoothing {
        None => {}
        Some(NumberOrText::Text(text)) if text == "auto" || text == "none" => {}
        Some(NumberOrText::Number(s)) if *s >= 0.0 => {}
        Some(other) => {
            return Err(IoError::setting("[fit] smoothing", format!("`{other}`; write auto, none or a number from 0")));
        }
    }
    let lines = &survey.streamlines;
    let given = [lines.levels.is_some(), lines.count.is_some(), lines.step.is_some()];
    if given.iter().filter(|g| **g).count() > 1 {
        return Err(IoError::setting("[streamlines]", "give only one of levels, count, step"));
    }
    if let Some(levels) = &lines.levels {
        options.levels = LevelChoice::Explicit(levels.clone());
    } else if let Some(count) = lines.count {
        if count == 0 || count > 1000 {
            return Err(IoError::setting("[streamlines] count", format!("{count}; expected 1 to 1000")));
        }
        options.levels = LevelChoice::Count(count);
    } else if let Some(step) = positive(lines.step, "[streamlines] step")? {
        options.levels = LevelChoice::Step(step);
    }
    if let Some(tolerance) = positive(lines.tolerance, "[streamlines] tolerance")? {
        if !(1e-6..=0.5).contains(&tolerance) {
            return Err(IoError::setting(
                "[streamlines] tolerance",
                format!("{tolerance} node spacings; expected 0.000001 to 0.5"),
            ));
        }
        options.trace = TraceOptions { tolerance, ..options.trace };
    }
    Ok(options)
}

fn psi_zero(text: &str) -> Result<PsiZero, IoError> {
    let text = text.trim();
    if let Some(side) = Side::ALL.into_iter().find(|s| s.name() == text) {
        return Ok(PsiZero::Wall(side));
    }
    if text == "mean" {
        return Ok(PsiZero::Mean);
    }
    if let Some(number) = text.strip_prefix("body ").or_else(|| text.strip_prefix("solid ")) {
        return match number.trim().parse::<usize>() {
            Ok(k) if k > 0 => Ok(PsiZero::Body(k - 1)),
            _ => Err(IoError::setting("[fit] zero", format!("`{text}`; bodies are counted from 1: \"body 1\""))),
        };
    }
    match text {
        "wall" | "auto" => Ok(PsiZero::Auto),
        "solid" => Ok(PsiZero::Body(0)),
        "axis" => Ok(PsiZero::Axis),
        _ if text.contains(',') => point(text, "[fit] zero").map(|[x, y]| PsiZero::Point { x, y }),
        _ => Err(IoError::setting(
            "[fit] zero",
            format!("`{text}`; write mean, bottom, top, left, right, axis, \"body 1\", or a point \"X,Y\""),
        )),
    }
}

/// Sign of the reported psi.
///
/// # Errors
/// [`IoError::Setting`].
pub fn psi_sign(survey: &Survey) -> Result<f64, IoError> {
    match survey.fit.sign.as_deref() {
        None | Some("+") => Ok(1.0),
        Some("-") => Ok(-1.0),
        Some(other) => {
            Err(IoError::setting("[fit] sign", format!("`{other}`; write + (u = dpsi/dy) or - (u = -dpsi/dy)")))
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn solids_of_every_shape_are_read_from_flags() {
        assert_eq!(solid("circle 1,2,3 no-slip").unwrap().surface.as_deref(), Some("no-slip"));
        assert_eq!(solid("polygon 0,0 1,0 0,1").unwrap().polygon.unwrap().len(), 3);
        assert_eq!(solid("mask m.npy free").unwrap().mask.as_deref(), Some("m.npy"));
        for bad in ["circle 1,2", "square 1,2,3", "polygon 0,0 1,1", ""] {
            assert!(solid(bad).is_err(), "{bad}");
        }
    }

    #[test]
    fn places_of_zero_psi_are_understood() {
        assert_eq!(psi_zero("bottom").unwrap(), PsiZero::Wall(Side::Bottom));
        assert_eq!(psi_zero("body 2").unwrap(), PsiZero::Body(1));
        assert_eq!(psi_zero("1.5,-2").unwrap(), PsiZero::Point { x: 1.5, y: -2.0 });
        assert!(psi_zero("floor").is_err() && psi_zero("body 0").is_err());
    }
}
