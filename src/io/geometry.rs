//! Bodies, walls and masks from the settings.

use std::fs;
use std::path::Path;

use ndarray::Array2;

use super::error::IoError;
use super::npy::read_npy_plane;
use super::survey::{SolidTable, Survey};
use crate::field::{Body, Shape, Surface, Wall, Walls};

/// Surface by name.
///
/// # Errors
/// [`IoError::Setting`].
pub fn surface(name: &str, place: &str) -> Result<Surface, IoError> {
    match name.trim() {
        "slip" => Ok(Surface::Slip),
        "no-slip" => Ok(Surface::NoSlip),
        "free" => Ok(Surface::Free),
        other => Err(IoError::setting(place, format!("surface `{other}`; write slip, no-slip or free"))),
    }
}

/// Body of a `[[solid]]` table; lengths are multiplied by `factor`.
///
/// # Errors
/// [`IoError::Setting`] unless exactly one shape is given and it is sensible.
pub fn body(table: &SolidTable, place: &str, factor: f64) -> Result<Body, IoError> {
    let given = [table.circle.is_some(), table.polygon.is_some(), table.mask.is_some()];
    if given.iter().filter(|g| **g).count() != 1 {
        return Err(IoError::setting(place, "give exactly one of circle, polygon, mask"));
    }
    let default = if table.mask.is_some() { Surface::Free } else { Surface::Slip };
    let surface = table.surface.as_deref().map_or(Ok(default), |s| surface(s, place))?;
    let shape = if let Some(circle) = &table.circle {
        if !(circle.radius > 0.0 && circle.radius.is_finite() && circle.x.is_finite() && circle.y.is_finite()) {
            return Err(IoError::setting(
                place,
                format!("radius {} at ({}, {}); a circle needs a positive radius", circle.radius, circle.x, circle.y),
            ));
        }
        Shape::Circle { x: circle.x * factor, y: circle.y * factor, radius: circle.radius * factor }
    } else if let Some(vertices) = &table.polygon {
        if vertices.len() < 3 || vertices.iter().flatten().any(|c| !c.is_finite()) {
            return Err(IoError::setting(
                place,
                format!("a polygon needs at least 3 finite vertices, found {}", vertices.len()),
            ));
        }
        let area: f64 = (0..vertices.len())
            .map(|k| {
                let ([a, b], [c, d]) = (vertices[k], vertices[(k + 1) % vertices.len()]);
                a * d - c * b
            })
            .sum();
        if area == 0.0 {
            return Err(IoError::setting(place, "the polygon encloses no area"));
        }
        Shape::Polygon { vertices: vertices.iter().map(|v| v.map(|c| c * factor)).collect() }
    } else {
        Shape::Nodes
    };
    Ok(Body { shape, surface })
}

/// Walls of the settings; `slip`, `no-slip`, or with ` at POSITION`.
///
/// # Errors
/// [`IoError::Setting`].
pub fn walls(survey: &Survey, factor: f64) -> Result<Walls, IoError> {
    let wall = |side: &str, text: &Option<String>| -> Result<Option<Wall>, IoError> {
        let Some(text) = text else { return Ok(None) };
        let place = format!("[walls] {side}");
        let (kind, at) = match text.split_once(" at ") {
            Some((kind, at)) => {
                let at: f64 = at
                    .trim()
                    .parse()
                    .map_err(|_| IoError::setting(&place, format!("`{text}`; write for example \"no-slip at 0.0\"")))?;
                (kind, Some(at * factor))
            }
            None => (text.as_str(), None),
        };
        match surface(kind, &place)? {
            Surface::Free => Err(IoError::setting(place, "a free side is no wall; leave it out")),
            surface => Ok(Some(Wall { surface, at })),
        }
    };
    Ok(Walls {
        bottom: wall("bottom", &survey.walls.bottom)?,
        top: wall("top", &survey.walls.top)?,
        left: wall("left", &survey.walls.left)?,
        right: wall("right", &survey.walls.right)?,
    })
}

/// Mask of every `[[solid]]`, `None` for shapes; in the order of rows of the data file.
///
/// # Errors
/// [`IoError`] when a mask cannot be read or has another shape than the data.
pub fn masks(survey: &Survey, shape: (usize, usize)) -> Result<Vec<Option<Array2<bool>>>, IoError> {
    survey
        .solid
        .iter()
        .map(|table| match &table.mask {
            None => Ok(None),
            Some(file) => Ok(Some(plane_file(Path::new(file), shape, "mask")?.mapv(|v| v.is_finite() && v != 0.0))),
        })
        .collect()
}

/// A plane of numbers: .npy, or text with a row a line.
///
/// # Errors
/// [`IoError`].
pub fn plane_file(path: &Path, shape: (usize, usize), what: &str) -> Result<Array2<f64>, IoError> {
    let array = if path.extension().is_some_and(|e| e.eq_ignore_ascii_case("npy")) {
        read_npy_plane(path)?
    } else {
        let text = fs::read_to_string(path).map_err(|e| IoError::system("read", path, e))?;
        let mut values = Vec::new();
        let mut rows = 0;
        for (number, line) in text.lines().enumerate() {
            let line = line.trim();
            if line.is_empty() || line.starts_with(['#', '%']) {
                continue;
            }
            rows += 1;
            for field in line.split([',', ';', '\t', ' ']).filter(|f| !f.is_empty()) {
                values.push(field.parse::<f64>().map_err(|_| {
                    IoError::content(
                        path,
                        format!("line {}", number + 1),
                        format!("`{field}` is not a number; a {what} holds a row of numbers a line"),
                    )
                })?);
            }
        }
        let columns = values.len().checked_div(rows).unwrap_or(0);
        Array2::from_shape_vec((rows, columns), values).map_err(|_| {
            IoError::content(path, "rows", format!("ragged: the rows of the {what} have different lengths"))
        })?
    };
    if array.dim() != shape {
        return Err(IoError::content(
            path,
            "shape",
            format!("the {what} has {:?} rows and columns, the data {shape:?}", array.dim()),
        ));
    }
    Ok(array)
}
