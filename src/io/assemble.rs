//! From arrays as found to a velocity field: axes, flips, units, gaps, bodies, walls, thickness, sigma.

use std::collections::VecDeque;
use std::path::Path;
use std::sync::Arc;

use ndarray::{Array2, Axis as Dim};

use super::error::IoError;
use super::geometry;
use super::quantity::{Scales, pair};
use super::raw::{RawAxis, RawFrame};
use super::survey::{NumberOrText, OneOrTwo, Survey};
use crate::field::{
    Axis, Body, Domain, Grid, Remark, RemarkKind, Shape, Sigma, Surface, Thickness, UnitSystem, VelocityField,
};

/// A connected patch of at least this many vectors of exactly (0, 0) is pointed out.
const ZERO_PATCH: usize = 9;

/// Positions of a mesh may depart from a rectilinear grid by this share of the mean step.
const MESH_TOLERANCE: f64 = 1e-3;

/// Coordinates count as printed from a uniform axis when a straight line through them stays within this share of the last digit
/// (one half, and a little for the slope being fitted).
const PRINTED_TOLERANCE: f64 = 0.6;

/// Rounding of coordinates is mentioned when it is more than this share of a step.
const WORTH_SAYING: f64 = 1e-4;

/// Builds the field, its units and the remarks.
///
/// # Errors
/// [`IoError`] for settings or arrays that contradict each other.
pub fn assemble(
    mut raw: RawFrame,
    survey: &Survey,
    path: &Path,
) -> Result<(VelocityField, UnitSystem, Vec<Remark>), IoError> {
    let mut remarks = std::mem::take(&mut raw.remarks);
    let shape = raw.u.dim();
    if raw.v.dim() != shape {
        return Err(IoError::content(path, "arrays u, v", format!("shapes differ: u {shape:?}, v {:?}", raw.v.dim())));
    }
    if shape.0 < 2 || shape.1 < 2 {
        return Err(IoError::content(
            path,
            "arrays u, v",
            format!("{} rows and {} columns; a plane field needs at least 2 x 2", shape.0, shape.1),
        ));
    }
    refuse_infinite(&raw, path)?;
    refuse_other_shapes(&raw, path)?;
    let masks = geometry::masks(survey, shape)?;
    let mut layers = Layers { depth: raw.depth.take(), masks, ..Layers::default() };
    if let Some(file) = &survey.depth.thickness
        && !matches!(file.as_str(), "uniform" | "radius" | "file")
    {
        layers.depth = Some(geometry::plane_file(Path::new(file), shape, "depth map")?);
    }
    layers.u = std::mem::take(&mut raw.u);
    layers.v = std::mem::take(&mut raw.v);
    layers.valid = raw.valid.take();
    layers.solid = raw.solid.take();
    layers.sigma = match (raw.sigma_u.take(), raw.sigma_v.take()) {
        (Some(u), Some(v)) => Some((u, v)),
        (None, None) => None,
        (u, _) => {
            let (there, absent) = if u.is_some() { ("sigma_u", "sigma_v") } else { ("sigma_v", "sigma_u") };
            remarks.push(Remark::new(
                RemarkKind::Ignored,
                format!("the file holds {there} but no {absent}; it was left alone"),
            ));
            None
        }
    };

    let down = match survey.geometry.y.as_deref() {
        None | Some("up") => false,
        Some("down") => true,
        Some(other) => return Err(IoError::setting("[geometry] y", format!("`{other}`; write up or down"))),
    };
    let scales = Scales::new(survey, &raw.units, &mut remarks)?;
    let [origin, spacing] = placing(survey)?;
    let mut x =
        axis_positions(raw.x.as_ref(), 1, shape.1, raw.x_resolution, origin[0], spacing[0], path, &mut remarks)?;
    let mut y =
        axis_positions(raw.y.as_ref(), 0, shape.0, raw.y_resolution, origin[1], spacing[1], path, &mut remarks)?;
    if down {
        y.iter_mut().for_each(|y| *y = -*y);
        layers.v.mapv_inplace(|v| -v);
    }
    if y.len() > 1 && y[1] < y[0] {
        y.reverse();
        layers.flip(0);
        if !down {
            remarks.push(Remark::new(
                RemarkKind::RowsFlipped,
                "y runs down in the file; rows were flipped so that y grows with the row",
            ));
        }
    }
    if x.len() > 1 && x[1] < x[0] {
        x.reverse();
        layers.flip(1);
        remarks.push(Remark::new(
            RemarkKind::ColumnsFlipped,
            "x runs down in the file; columns were flipped so that x grows with the column",
        ));
    }
    let axis = |name: &str, nodes: Vec<f64>| {
        Axis::from_nodes(nodes.into_iter().map(|p| p * scales.length_factor).collect())
            .map_err(|e| IoError::content(path, format!("{name} coordinates"), e.to_string()))
    };
    let grid = Grid::new(axis("x", x)?, axis("y", y)?);

    layers.u *= scales.velocity_factor;
    layers.v *= scales.velocity_factor;
    let zero_is_gap = mark_gaps(&mut layers, survey)?;
    let domain = domain(grid, &mut layers, survey, &scales, path)?;
    if !zero_is_gap {
        point_out_zeros(&layers, &domain, &mut remarks);
    }
    let valid = layers.valid.clone();
    let mut field = VelocityField::new(Arc::new(domain), layers.u, layers.v)
        .map_err(|e| IoError::content(path, "arrays u, v", e.to_string()))?;
    if let Some(valid) = valid {
        field = field.without(|j, i| !valid[[j, i]]);
    }
    field.sigma = sigma(survey, layers.sigma, &scales, &field, path, &mut remarks)?;
    field.overlap = overlap(survey)?;
    field.frame.index = raw.frame;
    field.frame.time = raw.time.map(|t| t * scales.time_factor);
    field.frame.source = path.file_name().map(|n| n.to_string_lossy().into_owned()).unwrap_or_default();
    if field.valid_count() == 0 {
        return Err(IoError::content(
            path,
            "arrays u, v",
            format!("all {} nodes are gaps: no usable vector", shape.0 * shape.1),
        ));
    }
    Ok((field, scales.system, remarks))
}

/// Arrays that are flipped together.
#[derive(Default)]
struct Layers {
    u: Array2<f64>,
    v: Array2<f64>,
    valid: Option<Array2<bool>>,
    solid: Option<Array2<u16>>,
    sigma: Option<(Array2<f64>, Array2<f64>)>,
    depth: Option<Array2<f64>>,
    masks: Vec<Option<Array2<bool>>>,
}

impl Layers {
    fn flip(&mut self, dim: usize) {
        fn turn<T: Clone>(a: &mut Array2<T>, dim: usize) {
            a.invert_axis(Dim(dim));
            *a = a.as_standard_layout().into_owned();
        }
        turn(&mut self.u, dim);
        turn(&mut self.v, dim);
        if let Some(a) = &mut self.valid {
            turn(a, dim);
        }
        if let Some(a) = &mut self.solid {
            turn(a, dim);
        }
        if let Some((a, b)) = &mut self.sigma {
            turn(a, dim);
            turn(b, dim);
        }
        if let Some(a) = &mut self.depth {
            turn(a, dim);
        }
        for mask in self.masks.iter_mut().flatten() {
            turn(mask, dim);
        }
    }
}

fn refuse_infinite(raw: &RawFrame, path: &Path) -> Result<(), IoError> {
    for (name, array) in [("u", &raw.u), ("v", &raw.v)] {
        let bad: Vec<(usize, usize)> =
            array.indexed_iter().filter(|(_, v)| v.is_infinite()).map(|(at, _)| at).collect();
        if let Some((j, i)) = bad.first() {
            return Err(IoError::content(
                path,
                format!("array {name}"),
                format!("{} infinite values, the first in row {j}, column {i}; mark gaps as NaN", bad.len()),
            ));
        }
    }
    Ok(())
}

fn refuse_other_shapes(raw: &RawFrame, path: &Path) -> Result<(), IoError> {
    let shape = raw.u.dim();
    let others = [
        ("sigma_u", raw.sigma_u.as_ref().map(Array2::dim)),
        ("sigma_v", raw.sigma_v.as_ref().map(Array2::dim)),
        ("valid", raw.valid.as_ref().map(Array2::dim)),
        ("solid", raw.solid.as_ref().map(Array2::dim)),
        ("depth", raw.depth.as_ref().map(Array2::dim)),
    ];
    for (name, other) in others {
        if let Some(other) = other.filter(|other| *other != shape) {
            return Err(IoError::content(path, format!("array {name}"), format!("shape {other:?}; u has {shape:?}")));
        }
    }
    Ok(())
}

/// Origin and spacing from the settings, as `[x, y]`.
fn placing(survey: &Survey) -> Result<[[Option<f64>; 2]; 2], IoError> {
    let origin = survey.geometry.origin.map_or([None; 2], |o| o.map(Some));
    let spacing = match survey.geometry.spacing {
        None => [None; 2],
        Some(OneOrTwo::One(d)) => [Some(d); 2],
        Some(OneOrTwo::Two(d)) => d.map(Some),
    };
    if let Some(bad) = spacing.iter().flatten().find(|d| !(**d > 0.0 && d.is_finite())) {
        return Err(IoError::setting("[geometry] spacing", format!("{bad}; a spacing is a positive number")));
    }
    if let Some(bad) = origin.iter().flatten().find(|d| !d.is_finite()) {
        return Err(IoError::setting("[geometry] origin", format!("{bad} is not a position")));
    }
    Ok([origin, spacing])
}

/// Positions along one dimension, in the order and unit of the file.
fn axis_positions(
    raw: Option<&RawAxis>,
    dim: usize,
    n: usize,
    resolution: Option<f64>,
    origin: Option<f64>,
    spacing: Option<f64>,
    path: &Path,
    remarks: &mut Vec<Remark>,
) -> Result<Vec<f64>, IoError> {
    let name = if dim == 1 { "x" } else { "y" };
    if raw.is_none() || spacing.is_some() {
        let (start, step) = (origin.unwrap_or(0.0), spacing.unwrap_or(1.0));
        if spacing.is_none() {
            remarks.push(Remark::new(
                RemarkKind::Note,
                format!("the file holds no {name} coordinates; node numbers are used, `--spacing` and `--origin` set real ones"),
            ));
        }
        // A file whose coordinates run down keeps doing so; the origin is the smallest position.
        let down = match raw {
            Some(RawAxis::Line(line)) => line.last() < line.first(),
            Some(RawAxis::Mesh(mesh)) => {
                mesh.last() < mesh.first() && mesh.index_axis(Dim(1 - dim), 0).len() == n && {
                    let lane = mesh.index_axis(Dim(1 - dim), 0);
                    lane.last() < lane.first()
                }
            }
            None => false,
        };
        return Ok((0..n).map(|k| start + step * if down { n - 1 - k } else { k } as f64).collect());
    }
    let mut line = match raw {
        Some(RawAxis::Line(line)) => line.clone(),
        Some(RawAxis::Mesh(mesh)) => line_of_mesh(mesh, dim, path)?,
        None => Vec::new(),
    };
    if line.len() != n {
        return Err(IoError::content(
            path,
            format!("{name} coordinates"),
            format!("{} positions for {n} nodes", line.len()),
        ));
    }
    if let Some(k) = line.iter().position(|p| !p.is_finite()) {
        return Err(IoError::content(
            path,
            format!("{name} coordinates"),
            format!("position {k} is {}, not a number", line[k]),
        ));
    }
    if let Some(origin) = origin {
        let shift = origin - line[0].min(line[n - 1]);
        line.iter_mut().for_each(|p| *p += shift);
    }
    if let Some(q) = resolution {
        straighten(&mut line, q, name, remarks);
    }
    Ok(line)
}

/// Positions of a mesh along one dimension, which must not vary along the other.
fn line_of_mesh(mesh: &Array2<f64>, dim: usize, path: &Path) -> Result<Vec<f64>, IoError> {
    let across = 1 - dim;
    let line: Vec<f64> = mesh
        .axis_iter(Dim(dim))
        .map(|lane| {
            let finite: Vec<f64> = lane.iter().copied().filter(|p| p.is_finite()).collect();
            finite.iter().sum::<f64>() / finite.len() as f64
        })
        .collect();
    let step = ((line[line.len() - 1] - line[0]) / (line.len() - 1) as f64).abs();
    let name = if dim == 1 { "x" } else { "y" };
    for (k, lane) in mesh.axis_iter(Dim(dim)).enumerate() {
        if let Some((m, p)) = lane.iter().enumerate().find(|(_, p)| (**p - line[k]).abs() > MESH_TOLERANCE * step) {
            let (j, i) = if across == 0 { (m, k) } else { (k, m) };
            return Err(IoError::content(
                path,
                format!("{name} coordinates"),
                format!(
                    "not rectilinear: {name} = {p} in row {j}, column {i}, where its line has {} on average; resample on a rectilinear grid, or say `--order x,y` if the arrays are transposed",
                    line[k]
                ),
            ));
        }
    }
    Ok(line)
}

/// Replaces positions printed with few digits by the uniform axis they were rounded from.
fn straighten(line: &mut [f64], q: f64, name: &str, remarks: &mut Vec<Remark>) {
    let n = line.len();
    if n < 3 {
        return;
    }
    let mean = (n - 1) as f64 / 2.0;
    let center = line.iter().sum::<f64>() / n as f64;
    let (mut sxy, mut sxx) = (0.0, 0.0);
    for (k, p) in line.iter().enumerate() {
        sxy += (k as f64 - mean) * (p - center);
        sxx += (k as f64 - mean).powi(2);
    }
    let slope = sxy / sxx;
    let worst =
        line.iter().enumerate().map(|(k, p)| (p - center - slope * (k as f64 - mean)).abs()).fold(0.0, f64::max);
    let scale = line[0].abs().max(line[n - 1].abs());
    if worst > 8.0 * f64::EPSILON * scale && worst <= PRINTED_TOLERANCE * q && worst < 0.2 * slope.abs() {
        for (k, p) in line.iter_mut().enumerate() {
            *p = center + slope * (k as f64 - mean);
        }
        if q > WORTH_SAYING * slope.abs() {
            remarks.push(Remark::new(
                RemarkKind::RoundedCoordinates,
                format!(
                    "{name} is printed to {q} and uniform within that; taken as {n} nodes {:.6} apart",
                    slope.abs()
                ),
            ));
        }
    }
}

/// Turns (0, 0) marks into gaps when the settings say so, which it returns.
fn mark_gaps(layers: &mut Layers, survey: &Survey) -> Result<bool, IoError> {
    match survey.data.zero.as_deref() {
        None | Some("value") => return Ok(false),
        Some("gap") => {}
        Some(other) => return Err(IoError::setting("[data] zero", format!("`{other}`; write value or gap"))),
    }
    for (u, v) in layers.u.iter_mut().zip(layers.v.iter_mut()) {
        if *u == 0.0 && *v == 0.0 {
            (*u, *v) = (f64::NAN, f64::NAN);
        }
    }
    Ok(true)
}

/// Points out patches of exactly (0, 0) in the fluid.
fn point_out_zeros(layers: &Layers, domain: &Domain, remarks: &mut Vec<Remark>) {
    let usable = |at| layers.valid.as_ref().is_none_or(|valid| valid[at]) && domain.covered[at] == 0;
    let zero = Array2::from_shape_fn(layers.u.dim(), |at| layers.u[at] == 0.0 && layers.v[at] == 0.0 && usable(at));
    let largest = largest_patch(&zero);
    if largest >= ZERO_PATCH {
        let total = zero.iter().filter(|z| **z).count();
        remarks.push(Remark::new(
            RemarkKind::ZeroPatch,
            format!(
                "{total} vectors are exactly (0, 0), {largest} of them in one patch: if they mark masked points say `--zero gap` (zero = \"gap\"); they were taken as values"
            ),
        ));
    }
}

/// Size of the largest 4-connected patch that is more than one node thick (a wall row at rest is no patch).
fn largest_patch(zero: &Array2<bool>) -> usize {
    let (ny, nx) = zero.dim();
    let mut seen = Array2::from_elem((ny, nx), false);
    let mut largest = 0;
    for (start, &is_zero) in zero.indexed_iter() {
        if !is_zero || seen[start] {
            continue;
        }
        let (mut queue, mut size, mut thick) = (VecDeque::from([start]), 0, false);
        seen[start] = true;
        while let Some((j, i)) = queue.pop_front() {
            size += 1;
            thick |= j + 1 < ny && i + 1 < nx && zero[[j + 1, i]] && zero[[j, i + 1]] && zero[[j + 1, i + 1]];
            for (jj, ii) in [(j.wrapping_sub(1), i), (j + 1, i), (j, i.wrapping_sub(1)), (j, i + 1)] {
                if jj < ny && ii < nx && zero[[jj, ii]] && !seen[[jj, ii]] {
                    seen[[jj, ii]] = true;
                    queue.push_back((jj, ii));
                }
            }
        }
        if thick {
            largest = largest.max(size);
        }
    }
    largest
}

fn domain(grid: Grid, layers: &mut Layers, survey: &Survey, scales: &Scales, path: &Path) -> Result<Domain, IoError> {
    let shape = grid.shape();
    let mut domain = Domain::open(grid);
    let masks = std::mem::take(&mut layers.masks);
    for (number, (table, mask)) in survey.solid.iter().zip(masks).enumerate() {
        let place = format!("[[solid]] {}", number + 1);
        let body = geometry::body(table, &place, scales.output_factor)?;
        let mask = mask.unwrap_or_else(|| {
            let grid = &domain.grid;
            Array2::from_shape_fn(shape, |(j, i)| body.shape.contains(grid.x.at(i), grid.y.at(j)))
        });
        refuse_overlap(&domain, &body, &mask, &place)?;
        if !add_nodes(&mut domain, body, &mask) {
            return Err(IoError::setting(
                place,
                format!(
                    "the body covers no node of the grid (x {} to {}, y {} to {}); check position and unit, or whether another body covers it",
                    domain.grid.x.first(),
                    domain.grid.x.last(),
                    domain.grid.y.first(),
                    domain.grid.y.last()
                ),
            ));
        }
    }
    if let Some(solid) = &layers.solid {
        let mut labels: Vec<u16> = solid.iter().copied().filter(|l| *l > 0).collect();
        labels.sort_unstable();
        labels.dedup();
        for label in labels {
            let body = Body { shape: Shape::Nodes, surface: Surface::Free };
            add_nodes(&mut domain, body, &solid.mapv(|l| l == label));
        }
    }
    domain.walls = geometry::walls(survey, scales.output_factor)?;
    domain.thickness = match survey.depth.thickness.as_deref() {
        None | Some("uniform") => Thickness::Uniform,
        Some("radius") => Thickness::Radius,
        Some(_) => {
            let mut depth = layers.depth.take().ok_or_else(|| {
                IoError::setting(
                    "[depth] thickness",
                    format!("\"file\", but {} holds no array or column `depth`", path.display()),
                )
            })?;
            depth *= scales.length_factor;
            if let Some((at, h)) = depth.indexed_iter().find(|(_, h)| h.is_infinite() || **h < 0.0) {
                return Err(IoError::content(
                    path,
                    "depth map",
                    format!("depth {h} in row {}, column {}; a depth is a positive number", at.0, at.1),
                ));
            }
            for (at, h) in depth.indexed_iter() {
                if !(h.is_finite() && *h > 0.0) {
                    layers.u[at] = f64::NAN;
                    layers.v[at] = f64::NAN;
                }
            }
            Thickness::Map(depth)
        }
    };
    Ok(domain)
}

/// Adds a body on the nodes of a mask that no earlier body covers; `false` when there is none.
fn add_nodes(domain: &mut Domain, body: Body, mask: &Array2<bool>) -> bool {
    let label = domain.bodies.len() as u16 + 1;
    let mut any = false;
    for (at, covered) in domain.covered.indexed_iter_mut() {
        if mask[at] && *covered == 0 {
            *covered = label;
            any = true;
        }
    }
    if any {
        domain.bodies.push(body);
    }
    any
}

/// Two bodies that tie the flow to themselves cannot share nodes; a hole without a tie (a shadow) may overlap anything.
fn refuse_overlap(domain: &Domain, body: &Body, mask: &Array2<bool>, place: &str) -> Result<(), IoError> {
    if body.surface == Surface::Free {
        return Ok(());
    }
    let tied = |label: u16| {
        let number = usize::from(label).checked_sub(1)?;
        domain.bodies.get(number).filter(|b| b.surface != Surface::Free).map(|_| number + 1)
    };
    let shared =
        mask.indexed_iter().filter(|(_, inside)| **inside).find_map(|(at, _)| Some((at, tied(domain.covered[at])?)));
    match shared {
        None => Ok(()),
        Some(((j, i), number)) => Err(IoError::setting(
            place,
            format!(
                "overlaps body {number} at ({}, {}); draw touching bodies as one polygon or mask",
                domain.grid.x.at(i),
                domain.grid.y.at(j)
            ),
        )),
    }
}

fn sigma(
    survey: &Survey,
    arrays: Option<(Array2<f64>, Array2<f64>)>,
    scales: &Scales,
    field: &VelocityField,
    path: &Path,
    remarks: &mut Vec<Remark>,
) -> Result<Sigma, IoError> {
    let place = "[noise] sigma";
    let per_node = |arrays: (Array2<f64>, Array2<f64>), remarks: &mut Vec<Remark>| -> Result<Sigma, IoError> {
        let mut out = [arrays.0, arrays.1];
        for (name, array) in ["sigma_u", "sigma_v"].into_iter().zip(&mut out) {
            *array *= scales.velocity_factor;
            let good: Vec<f64> = array
                .iter()
                .zip(&field.valid)
                .filter(|(s, ok)| **ok && **s > 0.0 && s.is_finite())
                .map(|(s, _)| *s)
                .collect();
            let bad = field.valid_count() - good.len();
            if bad * 2 > field.valid_count() {
                return Err(IoError::content(
                    path,
                    name,
                    format!("{bad} of {} values are not positive numbers", field.valid_count()),
                ));
            }
            if bad > 0 {
                let least = good.iter().copied().fold(f64::INFINITY, f64::min);
                for (s, ok) in array.iter_mut().zip(&field.valid) {
                    if *ok && !(*s > 0.0 && s.is_finite()) {
                        *s = least;
                    }
                }
                remarks.push(Remark::new(
                    RemarkKind::Note,
                    format!("{bad} values of {name} are zero or missing (rounded away?); the smallest positive one, {least}, stands in"),
                ));
            }
        }
        let [u, v] = out;
        Ok(Sigma::PerNode { u, v })
    };
    match &survey.noise.sigma {
        None => match arrays {
            Some(arrays) => {
                remarks.push(Remark::new(
                    RemarkKind::Note,
                    "sigma of every vector is taken from the file (standard uncertainty, k = 1)",
                ));
                per_node(arrays, remarks)
            }
            None => {
                remarks.push(Remark::new(
                    RemarkKind::SigmaMissing,
                    "no sigma is declared; it is estimated from the data, and the verdict stays cautious (`--sigma \"0.4 mm/s\"`)",
                ));
                Ok(Sigma::Unknown)
            }
        },
        Some(NumberOrText::Number(value)) => {
            uniform(*value * scales.velocity_factor, *value * scales.velocity_factor, place)
        }
        Some(NumberOrText::Text(text)) => match text.trim() {
            "auto" => Ok(Sigma::Unknown),
            "file" => match arrays {
                Some(arrays) => per_node(arrays, remarks),
                None => Err(IoError::setting(
                    place,
                    format!("\"file\", but {} holds no sigma_u and sigma_v", path.display()),
                )),
            },
            text => {
                let (u, v) = pair(text, scales, place)?;
                uniform(u, v, place)
            }
        },
    }
}

fn uniform(u: f64, v: f64, place: &str) -> Result<Sigma, IoError> {
    if u > 0.0 && v > 0.0 && u.is_finite() && v.is_finite() {
        Ok(Sigma::Uniform { u, v })
    } else {
        Err(IoError::setting(place, format!("{u}, {v}: a standard uncertainty is a positive number")))
    }
}

fn overlap(survey: &Survey) -> Result<Option<f64>, IoError> {
    let bad =
        |text: &str| IoError::setting("[noise] overlap", format!("`{text}`; write a share from 0 to below 1, or auto"));
    match &survey.noise.overlap {
        None => Ok(None),
        Some(NumberOrText::Text(text)) if text == "auto" => Ok(None),
        Some(NumberOrText::Text(text)) => match text.parse::<f64>() {
            Ok(value) if (0.0..1.0).contains(&value) => Ok(Some(value)),
            _ => Err(bad(text)),
        },
        Some(NumberOrText::Number(value)) if (0.0..1.0).contains(value) => Ok(Some(*value)),
        Some(NumberOrText::Number(value)) => Err(bad(&value.to_string())),
    }
}
