//! Rows of a text table become numbers, in parallel over pieces of fixed size.

use std::path::Path;

use rayon::prelude::*;

use super::super::error::IoError;
use super::layout::{Block, Delimiter, Layout, is_comment, split};
use super::names::Column;

/// Bytes parsed by one task; fixed, so that results do not depend on the number of threads.
const PIECE: usize = 1 << 19;

/// Rows of the wanted columns.
#[derive(Debug, Clone, Default)]
pub struct Table {
    /// Line of every row, counted from 1.
    pub lines: Vec<u32>,
    /// Values, one list a column in use.
    pub values: Vec<Vec<f64>>,
    /// How finely x and y are printed.
    pub printed: [Printed; 2],
}

/// Unit of the last digit of printed numbers: that of the numbers with the most significant digits, the coarsest of those.
#[derive(Debug, Clone, Copy, PartialEq, Default)]
pub struct Printed {
    digits: u32,
    place: i32,
}

impl Printed {
    /// Takes a number into account.
    fn note(&mut self, field: &str) {
        let (mut digits, mut decimals, mut exponent) = (0u32, 0i32, 0i32);
        let mut point = false;
        for (at, byte) in field.bytes().enumerate() {
            match byte {
                b'0'..=b'9' => {
                    decimals += i32::from(point);
                    digits += u32::from(byte != b'0' || digits > 0);
                }
                b'.' | b',' => point = true,
                b'e' | b'E' | b'd' | b'D' => {
                    exponent = field.get(at + 1..).and_then(|e| e.parse().ok()).unwrap_or(0);
                    break;
                }
                _ => {}
            }
        }
        let place = exponent - decimals;
        if digits > self.digits || digits == self.digits && place > self.place {
            *self = Self { digits, place };
        }
    }

    fn join(&mut self, other: Self) {
        if other.digits > self.digits || other.digits == self.digits && other.place > self.place {
            *self = other;
        }
    }

    /// The unit, `None` when no number was seen.
    pub fn resolution(self) -> Option<f64> {
        (self.digits > 0).then(|| 10f64.powi(self.place))
    }
}

/// Value of a field; empty and the gap marks of other programs are NaN, `None` what is no number.
pub fn parse(field: &str, decimal_comma: bool) -> Option<f64> {
    if let Ok(value) = field.parse() {
        return Some(value);
    }
    if field.is_empty() {
        return Some(f64::NAN);
    }
    let bytes = field.as_bytes();
    let swap = |from: [u8; 2], to: u8| {
        let mut copy = [0u8; 64];
        let copy = copy.get_mut(..bytes.len())?;
        for (c, &b) in copy.iter_mut().zip(bytes) {
            *c = if from.contains(&b) { to } else { b };
        }
        std::str::from_utf8(copy).ok()?.parse().ok()
    };
    if bytes.contains(&b',') {
        return if decimal_comma && !bytes.contains(&b'.') { swap([b',', b','], b'.') } else { None };
    }
    // Fortran exponents.
    if let Some(value) = swap([b'D', b'd'], b'e') {
        return Some(value);
    }
    matches!(
        field.to_ascii_lowercase().as_str(),
        "na" | "n/a" | "null" | "none" | "-" | "--" | "-nan" | "nan(ind)" | "-nan(ind)" | "#n/a"
    )
    .then_some(f64::NAN)
}

/// What is wrong in a line of a piece, counted from 0 within it.
struct Fault {
    line: usize,
    problem: String,
}

/// One parsed piece.
struct Piece {
    line_count: usize,
    table: Table,
    fault: Option<Fault>,
}

/// Reads the rows of a block.
///
/// # Errors
/// [`IoError`] naming the line.
pub fn read_rows(
    path: &Path,
    text: &str,
    block: &Block,
    layout: &Layout,
    columns: &[Column],
) -> Result<Table, IoError> {
    let text = &text[block.bytes.clone()];
    let mut pieces = Vec::new();
    let mut from = 0;
    while from < text.len() {
        let end = (from + PIECE).min(text.len());
        let end = text.as_bytes()[end..].iter().position(|&b| b == b'\n').map_or(text.len(), |k| end + k + 1);
        pieces.push(&text[from..end]);
        from = end;
    }
    let parsed: Vec<Piece> = pieces.par_iter().map(|piece| parse_piece(piece, layout, columns)).collect();
    let rows = parsed.iter().map(|p| p.table.lines.len()).sum();
    let mut table = Table {
        lines: Vec::with_capacity(rows),
        values: (0..columns.len()).map(|_| Vec::with_capacity(rows)).collect(),
        printed: Default::default(),
    };
    let mut line = block.line;
    for piece in parsed {
        if let Some(fault) = piece.fault {
            return Err(IoError::content(path, format!("line {}", line + fault.line), fault.problem));
        }
        table.lines.extend(piece.table.lines.iter().map(|k| line as u32 + k));
        for (all, part) in table.values.iter_mut().zip(&piece.table.values) {
            all.extend_from_slice(part);
        }
        for (all, part) in table.printed.iter_mut().zip(piece.table.printed) {
            all.join(part);
        }
        line += piece.line_count;
    }
    Ok(table)
}

/// Column in use with its place in the table.
struct Wanted {
    index: usize,
    slot: usize,
    role: &'static str,
}

fn parse_piece(text: &str, layout: &Layout, columns: &[Column]) -> Piece {
    let mut wanted: Vec<Wanted> =
        columns.iter().enumerate().map(|(slot, c)| Wanted { index: c.index, slot, role: c.role }).collect();
    wanted.sort_by_key(|w| w.index);
    let guess = text.len() / (8 * layout.fields.max(1));
    let mut piece = Piece {
        line_count: 0,
        table: Table {
            lines: Vec::with_capacity(guess),
            values: (0..columns.len()).map(|_| Vec::with_capacity(guess)).collect(),
            printed: Default::default(),
        },
        fault: None,
    };
    for raw in text.split_inclusive('\n') {
        let number = piece.line_count;
        piece.line_count += 1;
        let line = raw.trim_matches([' ', '\r', '\n']);
        if line.is_empty() || is_comment(line) {
            continue;
        }
        if let Err(problem) = parse_line(line, layout, &wanted, &mut piece.table) {
            piece.fault = Some(Fault { line: number, problem });
            return piece;
        }
        piece.table.lines.push(number as u32);
    }
    piece
}

fn parse_line(line: &str, layout: &Layout, wanted: &[Wanted], table: &mut Table) -> Result<(), String> {
    let mut next = 0;
    let mut count = 0;
    let mut last_empty = false;
    let mut take = |field: &str| -> Result<(), String> {
        last_empty = field.is_empty();
        if let Some(w) = wanted.get(next)
            && w.index == count
        {
            next += 1;
            let value = value_of(field, w.role, layout)?;
            match w.role {
                "x" => table.printed[0].note(field),
                "y" => table.printed[1].note(field),
                _ => {}
            }
            table.values[w.slot].push(value);
        }
        count += 1;
        Ok(())
    };
    if line.as_bytes().contains(&b'"') {
        split(line, layout.delimiter).iter().try_for_each(|field| take(field))?;
    } else {
        match layout.delimiter {
            Delimiter::Byte(b) => {
                let bytes = line.as_bytes();
                let mut from = 0;
                for at in 0..=bytes.len() {
                    if at == bytes.len() || bytes[at] == b {
                        take(line[from..at].trim_matches(' '))?;
                        from = at + 1;
                    }
                }
            }
            Delimiter::Blanks => line.split_ascii_whitespace().try_for_each(take)?,
        }
    }
    let width = wanted.last().map_or(0, |w| w.index + 1);
    if count < width {
        return Err(format!(
            "{count} fields; at least {width} are needed: the row may be cut off or a delimiter missing"
        ));
    }
    // One trailing delimiter, in some or all rows, is common practice in exports.
    let n = layout.fields;
    let trailing = count == n + 1 && last_empty || count + 1 == n && layout.ends_empty;
    if count != n && !trailing {
        return Err(format!(
            "{count} fields where the first row has {n}; the row may be cut off or a delimiter missing"
        ));
    }
    Ok(())
}

fn value_of(field: &str, role: &str, layout: &Layout) -> Result<f64, String> {
    let value = parse(field, layout.decimal_comma).ok_or_else(|| {
        let sign = if layout.decimal_comma { ", written with a decimal comma as in the rows before" } else { "" };
        format!("`{field}` in the column of {role} is not a number{sign}; mark gaps as empty or nan")
    })?;
    if value.is_infinite() {
        return Err(format!("infinite {role}; mark gaps as empty or nan"));
    }
    if value.is_nan() && matches!(role, "x" | "y") {
        return Err(format!("the position {role} is missing; a gap is a point without u and v"));
    }
    Ok(value)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn numbers_of_every_spelling_are_read_and_nothing_else() {
        for (text, value) in [
            ("1.5", 1.5),
            ("-1,5", -1.5),
            ("2,5e-1", 0.25),
            ("1.5D+02", 150.0),
            ("+.5", 0.5),
            ("7.", 7.0),
            ("1e3", 1e3),
        ] {
            assert_eq!(parse(text, true), Some(value), "{text}");
        }
        for text in ["", "nan", "NaN", "N/A", "--", "-nan(ind)"] {
            assert!(parse(text, false).unwrap().is_nan(), "{text}");
        }
        for text in ["1,5", "fast", "1.234,5", "0x10", "1 2", "2024-01-02"] {
            assert_eq!(parse(text, false), None, "{text}");
        }
        assert_eq!(parse("1.234,5", true), None);
    }

    #[test]
    fn the_last_printed_digit_is_that_of_the_longest_numbers() {
        let of = |list: &[&str]| {
            let mut p = Printed::default();
            list.iter().for_each(|f| p.note(f));
            p.resolution().unwrap()
        };
        let near = |a: f64, b: f64| approx::assert_relative_eq!(a, b, max_relative = 1e-12);
        near(of(&["4", "9", "13", "18"]), 1.0);
        near(of(&["0.000", "0.123", "10.250"]), 1e-3);
        near(of(&["0.5", "1", "1.5"]), 0.1);
        near(of(&["9.98765", "99.8765", "100.123"]), 1e-3); // six significant digits
        near(of(&["4.444E-01", "1.333E+00"]), 1e-3);
        near(of(&["-0,25", "0,5"]), 0.01);
    }
}
