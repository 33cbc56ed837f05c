//! Header, delimiter, decimal sign and blocks of a text table.

use std::borrow::Cow;
use std::ops::Range;
use std::path::Path;

use super::super::error::IoError;
use super::super::request::ArrayRequest;
use super::names::{Heading, score};
use super::rows::parse;
use crate::field::{length_in_meters, parse_velocity_unit, time_in_seconds};

/// Lines that are no comment looked at to find the header and the first row.
const HEAD_LINES: usize = 400;

/// Rows looked at to find the decimal sign.
const SAMPLE_ROWS: usize = 200;

/// How fields are separated.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Delimiter {
    /// By this byte.
    Byte(u8),
    /// By any number of blanks and tabs.
    Blanks,
}

/// A place in the text.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Place {
    /// Number of bytes before the line.
    pub byte: usize,
    /// Number of the line, counted from 1.
    pub line: usize,
}

/// What was found before the first row.
#[derive(Debug, Clone)]
pub struct Layout {
    /// Names of the columns; empty without header.
    pub headings: Vec<Heading>,
    /// Delimiter.
    pub delimiter: Delimiter,
    /// Whether numbers are written as 0,5.
    pub decimal_comma: bool,
    /// The first row.
    pub first_row: Place,
    /// Fields of the first row.
    pub fields: usize,
    /// Whether the last of them is empty.
    pub ends_empty: bool,
    /// Whether a `VARIABLES` line names the columns: prose and keywords may then stand between blocks of rows, one block a frame.
    pub blocks: bool,
}

/// Whether a line is a comment.
pub fn is_comment(line: &str) -> bool {
    line.starts_with(['#', '%'])
}

/// Whether a line between rows cannot be a row: it begins with a letter (but not with `nan`).
fn is_prose(line: &str) -> bool {
    line.starts_with(|c: char| c.is_alphabetic() || c == '"')
        && !line.get(..3).is_some_and(|s| s.eq_ignore_ascii_case("nan"))
}

fn is_keyword(line: &str) -> bool {
    let begins = |word: &str| line.get(..word.len()).is_some_and(|s| s.eq_ignore_ascii_case(word));
    ["TITLE", "ZONE", "VARIABLES"].into_iter().any(begins)
}

/// Fields of a line; delimiters between quotes do not count.
pub fn split(line: &str, delimiter: Delimiter) -> Vec<Cow<'_, str>> {
    let clean = |field: &'_ str| -> String { field.trim().trim_matches('"').trim().to_owned() };
    if line.contains('"') {
        let (mut fields, mut from, mut quoted) = (Vec::new(), 0, false);
        for (at, byte) in line.bytes().enumerate() {
            let ends = match delimiter {
                Delimiter::Byte(b) => byte == b,
                Delimiter::Blanks => byte.is_ascii_whitespace(),
            };
            if byte == b'"' {
                quoted = !quoted;
            } else if ends && !quoted {
                fields.push(&line[from..at]);
                from = at + 1;
            }
        }
        fields.push(&line[from..]);
        if delimiter == Delimiter::Blanks {
            fields.retain(|f| !f.trim().is_empty());
        }
        return fields.into_iter().map(|f| Cow::Owned(clean(f))).collect();
    }
    match delimiter {
        Delimiter::Byte(b) => line.split(b as char).map(|f| Cow::Borrowed(f.trim())).collect(),
        Delimiter::Blanks => line.split_whitespace().map(Cow::Borrowed).collect(),
    }
}

/// Delimiter of a line.
fn guess(line: &str) -> Delimiter {
    if line.contains(';') {
        return Delimiter::Byte(b';');
    }
    if line.contains('\t') {
        return Delimiter::Byte(b'\t');
    }
    if line.contains(',') {
        let tokens: Vec<&str> = line.split_whitespace().collect();
        let decimal =
            |t: &&str| t.split_once(',').is_some_and(|(a, b)| !a.is_empty() && !b.is_empty() && !b.contains(','));
        if tokens.len() > 1 && tokens.iter().filter(|t| t.contains(',')).all(decimal) && !line.contains('.') {
            return Delimiter::Blanks;
        }
        return Delimiter::Byte(b',');
    }
    Delimiter::Blanks
}

/// Lines with their place.
fn lines(text: &str) -> impl Iterator<Item = (Place, &str)> {
    let mut byte = 0;
    text.split('\n').enumerate().map(move |(number, line)| {
        let place = Place { byte, line: number + 1 };
        byte += line.len() + 1;
        (place, line)
    })
}

/// Whether all fields are numbers or empty, and one at least is a finite number.
fn is_row(fields: &[Cow<'_, str>], delimiter: Delimiter) -> bool {
    let comma = delimiter != Delimiter::Byte(b',');
    let mut finite = false;
    fields.len() > 1
        && fields.iter().all(|f| {
            let value = parse(f, comma);
            finite |= value.is_some_and(f64::is_finite);
            value.is_some()
        })
        && finite
}

/// A line that may be the header.
struct Candidate<'a> {
    line: usize,
    text: &'a str,
    comment: bool,
}

/// Finds header, delimiter and the first row.
///
/// # Errors
/// [`IoError`] when there is no row.
pub fn find_layout(path: &Path, text: &str, request: &ArrayRequest) -> Result<Layout, IoError> {
    let mut candidates: Vec<Candidate> = Vec::new();
    let mut declared: Vec<String> = Vec::new();
    let mut unit_line = "";
    let (mut in_variables, mut looked) = (false, 0);
    for (place, raw) in lines(text) {
        let line = raw.trim();
        if line.is_empty() {
            continue;
        }
        if is_comment(line) {
            let inside = line.trim_start_matches(['#', '%', ' ', '\t']);
            match inside.strip_prefix("units:") {
                Some(list) => unit_line = list,
                None => candidates.push(Candidate { line: place.line, text: inside, comment: true }),
            }
            continue;
        }
        looked += 1;
        if looked > HEAD_LINES {
            break;
        }
        if (line.get(..9).is_some_and(|s| s.eq_ignore_ascii_case("VARIABLES")) && line.contains('='))
            || (in_variables && line.starts_with('"'))
        {
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
        // A row may begin or end with an empty field: its tabs must stay.
        let line = raw.trim_matches([' ', '\r']);
        let delimiter = guess(line);
        let fields = split(line, delimiter);
        if !is_row(&fields, delimiter) {
            candidates.push(Candidate { line: place.line, text: line, comment: false });
            continue;
        }
        let blocks = !declared.is_empty();
        let mut headings: Vec<Heading> = if blocks {
            declared.iter().map(|name| Heading::new(name)).collect()
        } else {
            choose_header(&candidates, delimiter, fields.len())
        };
        declare_units(&mut headings, unit_line);
        let decimal_comma = delimiter != Delimiter::Byte(b',') && decimal_comma(&text[place.byte..], delimiter);
        let ends_empty = fields.last().is_some_and(|f| f.is_empty());
        let fields = fields.len();
        return Ok(Layout { headings, delimiter, decimal_comma, first_row: place, fields, ends_empty, blocks });
    }
    // Only a header, or rows with text in them: say which.
    let Some(last) = candidates.iter().rfind(|c| !c.comment).or(candidates.last()) else {
        return Err(IoError::content(
            path,
            "content",
            "the file is empty; expected a table with the columns x, y, u, v",
        ));
    };
    let headings = header_names(last.text, guess(last.text), 0);
    let problem = if request.columns.is_none() && score(&headings) == 4 {
        "a header but no row of numbers after it".to_owned()
    } else {
        format!("no row of numbers found in the first {HEAD_LINES} lines; expected a table of x, y, u, v")
    };
    Err(IoError::content(path, format!("line {}", last.line), problem))
}

/// Whether the rows write numbers as 0,5: a comma in a field of the sample, and no point.
fn decimal_comma(rows: &str, delimiter: Delimiter) -> bool {
    let mut comma = false;
    for (_, line) in lines(rows).take(SAMPLE_ROWS).filter(|(_, l)| !is_comment(l.trim())) {
        for field in split(line, delimiter) {
            if field.contains('.') && parse(&field, false).is_some() {
                return false;
            }
            comma |= field.contains(',') && parse(&field, true).is_some();
        }
    }
    comma
}

/// The header among the lines before the first row: the one that names most of x, y, u, v, else the last that fits the rows.
fn choose_header(candidates: &[Candidate], delimiter: Delimiter, fields: usize) -> Vec<Heading> {
    // A comment is a header only when it names the columns; prose in comments is common.
    const LEAST_IN_COMMENT: usize = 3;
    let mut best: Option<(usize, usize, Vec<Heading>)> = None;
    for (k, candidate) in candidates.iter().enumerate() {
        let headings = header_names(candidate.text, delimiter, fields);
        let points = score(&headings);
        let fits = if candidate.comment {
            points >= LEAST_IN_COMMENT && headings.len() == fields
        } else {
            points >= 2 || headings.len().abs_diff(fields) <= 1
        };
        if fits && best.as_ref().is_none_or(|(most, _, _)| points >= *most && (points > 0 || *most == 0)) {
            best = Some((points, k, headings));
        }
    }
    let Some((_, at, mut headings)) = best else { return Vec::new() };
    // A line of units below the names.
    if let Some(next) = candidates.get(at + 1) {
        let units = header_names(next.text, delimiter, fields);
        let is_unit = |unit: &str| {
            length_in_meters(unit).is_ok() || parse_velocity_unit(unit).is_ok() || time_in_seconds(unit).is_ok()
        };
        let bare = |h: &Heading| h.written.trim_matches(['[', ']', '(', ')', ' ']).to_owned();
        let bare: Vec<String> = units.iter().map(bare).collect();
        if bare.len() == headings.len() && bare.iter().any(|u| is_unit(u)) {
            for (heading, unit) in headings.iter_mut().zip(bare) {
                if heading.unit.is_none() && !unit.is_empty() && unit != "-" {
                    heading.unit = Some(unit);
                }
            }
        }
    }
    headings
}

/// Names in a header line that is split like its rows.
fn header_names(line: &str, delimiter: Delimiter, fields: usize) -> Vec<Heading> {
    // Some programs separate names in another way than numbers.
    for delimiter in [delimiter, guess(line)] {
        let names = split(line, delimiter);
        if names.len() == fields {
            return names.iter().map(|name| Heading::new(name)).collect();
        }
    }
    let plain = split(line, delimiter);
    if delimiter != Delimiter::Blanks {
        return plain.iter().map(|name| Heading::new(name)).collect();
    }
    // `x [mm] y [mm]` in a table of blanks: units in brackets belong to the name before.
    let mut names: Vec<String> = Vec::new();
    let mut open = false;
    for word in plain {
        let begins = word.starts_with(['[', '(']);
        match names.last_mut() {
            Some(last) if begins || open => *last = format!("{last} {word}"),
            _ => names.push(word.clone().into_owned()),
        }
        open = (open || word.contains(['[', '('])) && !word.contains([']', ')']);
    }
    names.iter().map(|name| Heading::new(name)).collect()
}

/// Units of a comment line `units: x=mm, y=mm, u=mm s-1`.
fn declare_units(headings: &mut [Heading], list: &str) {
    for (name, unit) in list.split(',').filter_map(|entry| entry.split_once('=')) {
        let (name, unit) = (name.trim().to_lowercase(), unit.trim());
        for heading in headings.iter_mut().filter(|h| h.name == name && h.unit.is_none()) {
            heading.unit = Some(unit.to_owned()).filter(|u| !matches!(u.as_str(), "" | "1" | "arbitrary"));
        }
    }
}

/// A block of rows.
#[derive(Debug, Clone, PartialEq)]
pub struct Block {
    /// Its bytes.
    pub bytes: Range<usize>,
    /// Number of its first line, counted from 1.
    pub line: usize,
}

/// The blocks of rows, at least one.
pub fn find_blocks(text: &str, layout: &Layout) -> Vec<Block> {
    let first = layout.first_row;
    if !layout.blocks {
        return vec![Block { bytes: first.byte..text.len(), line: first.line }];
    }
    let mut blocks: Vec<Block> = Vec::new();
    let mut open = false;
    for (place, raw) in lines(&text[first.byte..]) {
        let line = raw.trim_start();
        if line.is_empty() || is_comment(line) {
            continue;
        }
        let at = first.byte + place.byte;
        if is_prose(line) {
            open = false;
        } else if open {
            if let Some(block) = blocks.last_mut() {
                block.bytes.end = at + raw.len();
            }
        } else {
            open = true;
            blocks.push(Block { bytes: at..at + raw.len(), line: first.line + place.line - 1 });
        }
    }
    blocks
}
