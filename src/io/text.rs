//! Delimited text: finds header, delimiter and columns, then puts rows on a grid.

use std::fs;
use std::path::Path;

use ndarray::Array2;

use super::error::IoError;
use super::raw::{RawAxis, RawFrame, RawUnits};
use super::request::ArrayRequest;
use crate::field::{Remark, RemarkKind};

/// Coordinates closer than this share of their range are the same line of the grid.
const SAME_LINE: f64 = 1e-7;

/// At least this share of the nodes of the grid spanned by the coordinates must be listed; fewer rows do not make a grid.
const LEAST_COVERAGE: f64 = 0.2;

/// Lines looked at to find header and delimiter.
const HEAD_LINES: usize = 400;

/// How fields are separated.
#[derive(Debug, Clone, Copy, PartialEq)]
enum Delimiter {
    Byte(u8),
    Blanks,
}

/// One table in a file: header names and where its rows begin.
struct Layout {
    names: Vec<String>,
    delimiter: Delimiter,
    decimal_comma: bool,
    /// Number of the line, counted from 0, where rows may begin.
    first_row: usize,
    /// Whether a `VARIABLES` line names the columns: prose and keywords may then stand between blocks of rows, one block a frame.
    blocks: bool,
}

/// A row: line number counted from 1 and one value a role.
struct Rows {
    line: Vec<u32>,
    values: Vec<Vec<f64>>,
}

/// Reads one frame of a text table.
///
/// Empty fields and `nan` are gaps; so are rows that are absent.  Rows may come in any order.  A file with several blocks (`ZONE`
/// lines) holds one frame a block.
///
/// # Errors
/// [`IoError`] naming the line: no header and no `--columns`, missing columns, ragged rows, text in a number, infinite values, a
/// point given twice, points that do not lie on a rectilinear grid, a single row or column.
pub fn read_text(path: &Path, request: &ArrayRequest) -> Result<RawFrame, IoError> {
    let bytes = fs::read(path).map_err(|e| IoError::system("read", path, e))?;
    if bytes.iter().take(4096).any(|&b| b == 0) {
        return Err(IoError::content(path, "content", "holds zero bytes: not a text table (is the extension right?)"));
    }
    let text = match String::from_utf8(bytes) {
        Ok(text) => text,
        // Units such as the micro sign are often written in Latin-1.
        Err(e) => e.into_bytes().iter().map(|&b| b as char).collect(),
    };
    let text = text.strip_prefix('\u{feff}').unwrap_or(&text);
    let layout = find_layout(path, text, request)?;
    let columns = choose_columns(path, &layout, request)?;
    let blocks = block_count(text, &layout);
    if request.frame >= blocks {
        return Err(IoError::content(
            path,
            format!("frame {}", request.frame),
            format!("the file holds {blocks} frames, counted from 0"),
        ));
    }
    let (rows, digits) = read_rows(path, text, &layout, &columns, request.frame)?;
    let mut frame = to_grid(path, &columns, rows, digits)?;
    frame.frames = blocks;
    frame.frame = request.frame;
    frame.units = units_of(&layout.names, &columns);
    frame.format = format!(
        "text table, {}{}",
        match layout.delimiter {
            Delimiter::Byte(b',') => "commas",
            Delimiter::Byte(b';') => "semicolons",
            Delimiter::Byte(_) => "tabs",
            Delimiter::Blanks => "blanks",
        },
        if layout.decimal_comma { ", decimal comma" } else { "" }
    );
    frame.found = columns
        .iter()
        .map(|&(role, index)| {
            let name = layout.names.get(index).map_or_else(String::new, |n| format!(" `{n}`"));
            (role.to_owned(), format!("column {}{name}", index + 1))
        })
        .collect();
    let unused: Vec<&str> = layout
        .names
        .iter()
        .enumerate()
        .filter(|(k, n)| !n.is_empty() && !columns.iter().any(|&(_, index)| index == *k))
        .map(|(_, n)| n.as_str())
        .collect();
    if !unused.is_empty() && unused.len() <= 30 {
        frame.remarks.push(Remark::new(RemarkKind::Ignored, format!("columns left alone: {}", unused.join(", "))));
    }
    Ok(frame)
}

fn is_comment(line: &str) -> bool {
    line.starts_with('#') || line.starts_with('%')
}

/// Whether a line between rows cannot be a row: it begins with a letter (but not with `nan`).
fn is_prose(line: &str) -> bool {
    line.starts_with(|c: char| c.is_alphabetic() || c == '"')
        && !line.get(..3).is_some_and(|s| s.eq_ignore_ascii_case("nan"))
}

fn is_keyword(line: &str) -> bool {
    let upper = line.get(..line.len().min(9)).map(str::to_uppercase).unwrap_or_default();
    upper.starts_with("TITLE") || upper.starts_with("ZONE") || upper.starts_with("VARIABLES")
}

/// Fields of a line.
fn split(line: &str, delimiter: Delimiter) -> Vec<&str> {
    match delimiter {
        Delimiter::Byte(b) => line.split(b as char).map(|f| f.trim().trim_matches('"')).collect(),
        Delimiter::Blanks => line.split_whitespace().map(|f| f.trim_matches('"')).collect(),
    }
}

fn is_number(field: &str, decimal_comma: bool) -> bool {
    field.is_empty() || parse(field, decimal_comma).is_some()
}

fn parse(field: &str, decimal_comma: bool) -> Option<f64> {
    if field.is_empty() {
        return Some(f64::NAN);
    }
    if decimal_comma && field.contains(',') {
        return field.replace(',', ".").parse().ok();
    }
    if let Ok(value) = field.parse() {
        return Some(value);
    }
    // Fortran exponents, and the gap marks of other programs.
    if field.bytes().any(|b| b == b'D' || b == b'd') {
        return field.replace(['D', 'd'], "e").parse().ok();
    }
    matches!(
        field.to_ascii_lowercase().as_str(),
        "na" | "n/a" | "null" | "-" | "--" | "-nan" | "nan(ind)" | "-nan(ind)"
    )
    .then_some(f64::NAN)
}

/// Delimiter and decimal sign of a line.
fn guess(line: &str) -> (Delimiter, bool) {
    if line.contains(';') {
        let comma = line.split(';').any(|f| f.contains(',')) && !line.contains('.');
        return (Delimiter::Byte(b';'), comma);
    }
    if line.contains('\t') {
        return (Delimiter::Byte(b'\t'), line.contains(',') && !line.contains('.'));
    }
    if line.contains(',') {
        let tokens: Vec<&str> = line.split_whitespace().collect();
        let decimal =
            |t: &&str| t.split_once(',').is_some_and(|(a, b)| !a.is_empty() && !b.is_empty() && !b.contains(','));
        if tokens.len() > 1 && tokens.iter().filter(|t| t.contains(',')).all(decimal) && !line.contains('.') {
            return (Delimiter::Blanks, true);
        }
        return (Delimiter::Byte(b','), false);
    }
    (Delimiter::Blanks, false)
}

/// Finds header, delimiter and the first row.
fn find_layout(path: &Path, text: &str, request: &ArrayRequest) -> Result<Layout, IoError> {
    let mut header: Option<(usize, &str)> = None;
    let mut declared: Vec<String> = Vec::new();
    let mut in_variables = false;
    for (number, raw) in text.lines().enumerate().take(HEAD_LINES) {
        let line = raw.trim();
        if line.is_empty() || is_comment(line) {
            continue;
        }
        let upper = line.to_uppercase();
        if (upper.starts_with("VARIABLES") && line.contains('=')) || (in_variables && line.starts_with('"')) {
            in_variables = true;
            let list = line.split_once('=').map_or(line, |(_, list)| list);
            declared.extend(if list.contains('"') {
                list.split('"').skip(1).step_by(2).map(str::to_owned).collect::<Vec<_>>()
            } else {
                list.split([',', ' ']).filter(|s| !s.is_empty()).map(str::to_owned).collect()
            });
            continue;
        }
        in_variables = false;
        if is_keyword(line) {
            continue;
        }
        let (delimiter, decimal_comma) = guess(line);
        let fields = split(line, delimiter);
        let numeric = fields.len() > 1
            && fields.iter().all(|f| is_number(f, decimal_comma))
            && fields.iter().any(|f| !f.is_empty() && parse(f, decimal_comma).is_some_and(f64::is_finite));
        if numeric {
            let blocks = !declared.is_empty();
            let names: Vec<String> = if declared.is_empty() {
                header.map_or_else(Vec::new, |(_, h)| header_names(h, delimiter, fields.len()))
            } else {
                declared
            };
            return Ok(Layout { names, delimiter, decimal_comma, first_row: number, blocks });
        }
        header = Some((number, line));
    }
    // Only a header, or rows with text in them: say which.
    if let Some((number, line)) = header {
        let names = header_names(line, guess(line).0, 0);
        if request.columns.is_none() && roles_of(&names).iter().filter(|r| r.is_some()).count() >= 4 {
            return Err(IoError::content(
                path,
                format!("line {}", number + 1),
                "a header but no row of numbers after it",
            ));
        }
        return Err(IoError::content(
            path,
            format!("line {}", number + 1),
            format!("no row of numbers found in the first {HEAD_LINES} lines; expected a table of x, y, u, v"),
        ));
    }
    Err(IoError::content(path, "content", "the file is empty; expected a table with the columns x, y, u, v"))
}

/// Names in a header line that is split like its rows.
fn header_names(line: &str, delimiter: Delimiter, fields: usize) -> Vec<String> {
    let line = line.trim_start_matches(['#', '%', ' ']);
    let plain: Vec<String> = split(line, delimiter).into_iter().map(str::to_owned).collect();
    if plain.len() == fields || delimiter != Delimiter::Blanks {
        return plain;
    }
    // `x [mm] y [mm]` in a table of blanks: units in brackets belong to the name before.
    let mut names: Vec<String> = Vec::new();
    for word in plain {
        match names.last_mut() {
            Some(last) if word.starts_with(['[', '(']) => *last = format!("{last} {word}"),
            _ => names.push(word),
        }
    }
    names
}

/// Name without unit, lower case, and the unit in brackets or parentheses.
fn name_and_unit(header: &str) -> (String, Option<String>) {
    let header = header.trim().trim_matches('"');
    let (name, unit) = match header.find(['[', '(']) {
        Some(at) if at > 0 => {
            let unit = header[at + 1..].trim_end_matches([']', ')', ' ']);
            (&header[..at], Some(unit.trim().to_owned()))
        }
        _ => (header, None),
    };
    (name.trim().to_lowercase(), unit.filter(|u| !u.is_empty() && u != "-"))
}

/// Role of every column by its name.
fn roles_of(names: &[String]) -> Vec<Option<&'static str>> {
    names
        .iter()
        .map(|header| {
            let (name, _) = name_and_unit(header);
            Some(match name.replace([' ', '-', '.'], "_").as_str() {
                "x" | "xpos" | "x_pos" | "pos_x" | "x_position" | "position_x" | "x_coordinate" => "x",
                "y" | "ypos" | "y_pos" | "pos_y" | "y_position" | "position_y" | "y_coordinate" => "y",
                "u" | "vx" | "v_x" | "u_x" | "ux" | "velocity_u" | "velocity_x" | "x_velocity" | "u_velocity"
                | "mean_u" => "u",
                "v" | "vy" | "v_y" | "u_y" | "uy" | "velocity_v" | "velocity_y" | "y_velocity" | "v_velocity"
                | "mean_v" => "v",
                "sigma_u" | "e_u" | "u_sigma" | "sigma_vx" | "uncertainty_u" | "u_uncertainty" | "std_u_mean" => {
                    "sigma_u"
                }
                "sigma_v" | "e_v" | "v_sigma" | "sigma_vy" | "uncertainty_v" | "v_uncertainty" | "std_v_mean" => {
                    "sigma_v"
                }
                "valid" | "isvalid" | "is_valid" => "valid",
                "solid" | "body" => "solid",
                "depth" => "depth",
                _ => return None,
            })
        })
        .collect()
}

const POSITIONAL: [&str; 6] = ["x", "y", "u", "v", "sigma_u", "sigma_v"];

/// Which column holds which role.
fn choose_columns(path: &Path, layout: &Layout, request: &ArrayRequest) -> Result<Vec<(&'static str, usize)>, IoError> {
    if let Some(list) = &request.columns {
        let known = |name: &str| super::request::ROLES.into_iter().find(|r| r.eq_ignore_ascii_case(name));
        if list.iter().all(|name| name == "-" || known(name).is_some()) {
            let columns: Vec<(&'static str, usize)> =
                list.iter().enumerate().filter_map(|(k, name)| known(name).map(|role| (role, k))).collect();
            return complete(path, layout, columns, "columns");
        }
        if list.len() < 4 {
            return Err(IoError::setting(
                "columns",
                format!("{} given; at least the four of x, y, u, v are needed", list.len()),
            ));
        }
        let mut columns = Vec::new();
        for (name, role) in list.iter().zip(POSITIONAL) {
            let by_name = layout
                .names
                .iter()
                .position(|n| n.eq_ignore_ascii_case(name) || name_and_unit(n).0 == name.to_lowercase());
            let by_number = name.parse::<usize>().ok().and_then(|k| k.checked_sub(1));
            let index = by_name.or(by_number).ok_or_else(|| {
                IoError::setting(
                    "columns",
                    format!("{}: no column `{name}`; the header has {}", path.display(), layout.names.join(", ")),
                )
            })?;
            columns.push((role, index));
        }
        return complete(path, layout, columns, "columns");
    }
    if layout.names.is_empty() {
        return Err(IoError::content(
            path,
            format!("line {}", layout.first_row + 1),
            "no header line names the columns; add one, or say `--columns x,y,u,v` (role names in order, `-` for a column to skip)",
        ));
    }
    let mut columns: Vec<(&'static str, usize)> = Vec::new();
    for (index, role) in roles_of(&layout.names).into_iter().enumerate() {
        let Some(role) = role else { continue };
        if let Some(&(_, before)) = columns.iter().find(|(r, _)| *r == role) {
            return Err(IoError::content(
                path,
                "header",
                format!(
                    "two columns look like {role}: `{}` and `{}`; say which with `--columns` (names of x, y, u, v)",
                    layout.names[before], layout.names[index]
                ),
            ));
        }
        columns.push((role, index));
    }
    complete(path, layout, columns, "header")
}

fn complete(
    path: &Path,
    layout: &Layout,
    columns: Vec<(&'static str, usize)>,
    place: &str,
) -> Result<Vec<(&'static str, usize)>, IoError> {
    let missing: Vec<&str> =
        POSITIONAL[..4].iter().copied().filter(|role| !columns.iter().any(|(r, _)| r == role)).collect();
    if missing.is_empty() {
        return Ok(columns);
    }
    Err(IoError::content(
        path,
        place,
        format!(
            "no column for {}; found {}; name them with `--columns`, for example `--columns x,y,u,v`",
            missing.join(", "),
            if layout.names.is_empty() { "no names".to_owned() } else { layout.names.join(", ") }
        ),
    ))
}

/// Number of blocks of rows, at least 1.
fn block_count(text: &str, layout: &Layout) -> usize {
    if !layout.blocks {
        return 1;
    }
    let (mut count, mut between) = (1, false);
    for raw in text.lines().skip(layout.first_row) {
        let line = raw.trim();
        if line.is_empty() || is_comment(line) {
            continue;
        }
        if is_prose(line) {
            between = true;
        } else if between {
            between = false;
            count += 1;
        }
    }
    count
}

/// Printed decimals of x and y: the largest number seen, `None` when an exponent was printed.
#[derive(Clone, Copy)]
struct Digits {
    x: Option<u32>,
    y: Option<u32>,
}

fn read_rows(
    path: &Path,
    text: &str,
    layout: &Layout,
    columns: &[(&'static str, usize)],
    block: usize,
) -> Result<(Rows, Digits), IoError> {
    let mut rows = Rows { line: Vec::new(), values: vec![Vec::new(); columns.len()] };
    let mut digits = Digits { x: Some(0), y: Some(0) };
    let width = columns.iter().map(|&(_, k)| k + 1).max().unwrap_or(0);
    let mut expected: Option<usize> = None;
    let (mut current, mut between) = (0, false);
    let mut fields: Vec<&str> = Vec::with_capacity(16);
    for (number, raw) in text.lines().enumerate().skip(layout.first_row) {
        let line = raw.trim_matches([' ', '\r']);
        if line.is_empty() || is_comment(line) {
            continue;
        }
        if layout.blocks && is_prose(line) {
            between = true;
            continue;
        }
        if between {
            between = false;
            current += 1;
        }
        if current != block {
            if current > block {
                break;
            }
            continue;
        }
        fields.clear();
        match layout.delimiter {
            Delimiter::Byte(b) => fields.extend(line.split(b as char).map(str::trim)),
            Delimiter::Blanks => fields.extend(line.split_ascii_whitespace()),
        }
        let place = || format!("line {}", number + 1);
        match expected {
            None => expected = Some(fields.len()),
            Some(n) if n != fields.len() => {
                // One trailing delimiter is common practice in exports.
                let trailing =
                    fields.len() == n + 1 && fields[n].is_empty() || fields.len() + 1 == n && fields.len() >= width;
                if !trailing {
                    return Err(IoError::content(
                        path,
                        place(),
                        format!(
                            "{} fields where the rows before have {n}; the row may be cut off or a delimiter missing",
                            fields.len()
                        ),
                    ));
                }
            }
            Some(_) => {}
        }
        if fields.len() < width {
            return Err(IoError::content(
                path,
                place(),
                format!("{} fields; at least {width} are needed", fields.len()),
            ));
        }
        for (slot, &(role, index)) in rows.values.iter_mut().zip(columns) {
            let field = fields[index].trim_matches('"');
            let value = parse(field, layout.decimal_comma).ok_or_else(|| {
                IoError::content(
                    path,
                    place(),
                    format!("`{field}` in the column of {role} is not a number; mark gaps as empty or nan"),
                )
            })?;
            if value.is_infinite() {
                return Err(IoError::content(path, place(), format!("infinite {role}; mark gaps as empty or nan")));
            }
            match role {
                "x" => note_digits(&mut digits.x, field),
                "y" => note_digits(&mut digits.y, field),
                _ => {}
            }
            if value.is_nan() && matches!(role, "x" | "y") {
                return Err(IoError::content(
                    path,
                    place(),
                    format!("the position {role} is missing; a gap is a point without u and v"),
                ));
            }
            slot.push(value);
        }
        rows.line.push(number as u32 + 1);
    }
    if rows.line.is_empty() {
        return Err(IoError::content(path, format!("frame {block}"), "no rows"));
    }
    Ok((rows, digits))
}

fn note_digits(digits: &mut Option<u32>, field: &str) {
    let Some(most) = digits else { return };
    if field.bytes().any(|b| matches!(b, b'e' | b'E' | b'd' | b'D')) {
        *digits = None;
    } else if let Some(at) = field.find(['.', ',']) {
        *most = (*most).max((field.len() - at - 1) as u32);
    }
}

/// Distinct values in order, neighbors closer than [`SAME_LINE`] of the range joined.
fn distinct(values: &[f64]) -> Vec<f64> {
    let mut sorted = values.to_vec();
    sorted.sort_unstable_by(f64::total_cmp);
    sorted.dedup();
    let range = sorted[sorted.len() - 1] - sorted[0];
    sorted.dedup_by(|b, a| *b - *a <= SAME_LINE * range);
    sorted
}

fn index_of(lines: &[f64], value: f64) -> usize {
    let k = lines.partition_point(|&l| l < value);
    if k == 0 {
        return 0;
    }
    if k == lines.len() || value - lines[k - 1] <= lines[k] - value { k - 1 } else { k }
}

fn to_grid(path: &Path, columns: &[(&'static str, usize)], rows: Rows, digits: Digits) -> Result<RawFrame, IoError> {
    let column = |role: &str| columns.iter().position(|&(r, _)| r == role).map(|k| &rows.values[k]);
    let (Some(x), Some(y)) = (column("x"), column("y")) else {
        return Err(IoError::content(path, "header", "no column for x, y"));
    };
    let (xs, ys) = (distinct(x), distinct(y));
    let (nx, ny) = (xs.len(), ys.len());
    for (name, n) in [("x", nx), ("y", ny)] {
        if n < 2 {
            return Err(IoError::content(
                path,
                "points",
                format!(
                    "all {} points have the same {name}: a single line of points is not a plane field; at least 2 x 2 are needed",
                    x.len()
                ),
            ));
        }
    }
    if (nx as f64) * (ny as f64) * LEAST_COVERAGE > x.len() as f64 {
        let closest = |lines: &[f64]| {
            lines.windows(2).min_by(|a, b| (a[1] - a[0]).total_cmp(&(b[1] - b[0]))).map_or((0.0, 0.0), |w| (w[0], w[1]))
        };
        let ((xa, xb), (ya, yb)) = (closest(&xs), closest(&ys));
        return Err(IoError::content(
            path,
            "points",
            format!(
                "{} points have {nx} different x and {ny} different y: they do not lie on a rectilinear grid (nearest x: {xa} and {xb}; nearest y: {ya} and {yb}); resample them on a grid first",
                x.len()
            ),
        ));
    }
    let mut owner = Array2::<u32>::zeros((ny, nx));
    let mut arrays: Vec<Array2<f64>> = vec![Array2::from_elem((ny, nx), f64::NAN); columns.len()];
    for (row, (&xv, &yv)) in x.iter().zip(y).enumerate() {
        let node = [index_of(&ys, yv), index_of(&xs, xv)];
        if owner[node] != 0 {
            return Err(IoError::content(
                path,
                format!("line {}", rows.line[row]),
                format!(
                    "the point ({xv}, {yv}) was already given in line {}; every point may appear once",
                    owner[node]
                ),
            ));
        }
        owner[node] = rows.line[row];
        for (array, values) in arrays.iter_mut().zip(&rows.values) {
            array[node] = values[row];
        }
    }
    let mut take = |role: &str| columns.iter().position(|&(r, _)| r == role).map(|k| std::mem::take(&mut arrays[k]));
    let resolution = |d: Option<u32>| d.map(|d| 10f64.powi(-(d as i32)));
    Ok(RawFrame {
        u: take("u").unwrap_or_default(),
        v: take("v").unwrap_or_default(),
        sigma_u: take("sigma_u"),
        sigma_v: take("sigma_v"),
        valid: take("valid").map(|a| a.mapv(|v| v.is_finite() && v > 0.0)),
        solid: take("solid").map(|a| a.mapv(|v| if v.is_finite() && v > 0.0 { v as u16 } else { 0 })),
        depth: take("depth"),
        x: Some(RawAxis::Line(xs)),
        y: Some(RawAxis::Line(ys)),
        x_resolution: resolution(digits.x),
        y_resolution: resolution(digits.y),
        ..RawFrame::default()
    })
}

fn units_of(names: &[String], columns: &[(&'static str, usize)]) -> RawUnits {
    let unit = |role: &str| {
        columns.iter().find(|(r, _)| *r == role).and_then(|&(_, k)| names.get(k)).and_then(|n| name_and_unit(n).1)
    };
    RawUnits { length: unit("x").or_else(|| unit("y")), velocity: unit("u").or_else(|| unit("v")), time: None }
}
