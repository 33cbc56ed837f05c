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
        self.join(Self { digits, place: exponent - decimals });
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
    let any_quotes = text.contains('"');
    for raw in text.split_inclusive('\n') {
        let number = piece.line_count;
        piece.line_count += 1;
        let bytes = raw.as_bytes();
        let from = bytes.iter().position(|&b| b != b' ').unwrap_or(bytes.len());
        let to = bytes.iter().rposition(|&b| !matches!(b, b' ' | b'\r' | b'\n')).map_or(from, |k| (k + 1).max(from));
        let line = &raw[from..to];
        if line.is_empty() || is_comment(line) {
            continue;
        }
        let read = if any_quotes && line.contains('"') {
            let fields = split(line, layout.delimiter);
            let last_empty = fields.last().is_some_and(|f| f.is_empty());
            wanted
                .iter()
                .try_for_each(|w| fields.get(w.index).map_or(Ok(()), |field| take(field, w, layout, &mut piece.table)))
                .map(|()| (fields.len(), last_empty))
        } else {
            match layout.delimiter {
                Delimiter::Byte(b) => parse_delimited(line, b, layout, &wanted, &mut piece.table),
                Delimiter::Blanks => parse_blanks(line, layout, &wanted, &mut piece.table),
            }
        };
        if let Err(problem) = read.and_then(|(count, last_empty)| check_count(count, last_empty, layout, &wanted)) {
            piece.fault = Some(Fault { line: number, problem });
            return piece;
        }
        piece.table.lines.push(number as u32);
    }
    piece
}

/// Number of fields, and whether the last is empty.
type Fields = Result<(usize, bool), String>;

fn parse_delimited(line: &str, delimiter: u8, layout: &Layout, wanted: &[Wanted], table: &mut Table) -> Fields {
    let bytes = line.as_bytes();
    let is_end = |b: u8| b == delimiter;
    let (mut at, mut count, mut next) = (0, 0, 0);
    loop {
        let end = match wanted.get(next).filter(|w| w.index == count) {
            None => end_of_field(bytes, at, is_end),
            Some(w) => {
                next += 1;
                match scan(bytes, at, layout.decimal_comma, is_end) {
                    Some((number, end)) => {
                        keep(number, w, table);
                        end
                    }
                    None => {
                        let end = end_of_field(bytes, at, is_end);
                        take(line[at..end].trim(), w, layout, table)?;
                        end
                    }
                }
            }
        };
        count += 1;
        if end >= bytes.len() {
            return Ok((count, line[at..].trim().is_empty()));
        }
        at = end + 1;
    }
}

fn parse_blanks(line: &str, layout: &Layout, wanted: &[Wanted], table: &mut Table) -> Fields {
    let bytes = line.as_bytes();
    let is_end = |b: u8| b.is_ascii_whitespace();
    let (mut at, mut count, mut next) = (0, 0, 0);
    loop {
        while at < bytes.len() && is_end(bytes[at]) {
            at += 1;
        }
        if at == bytes.len() {
            return Ok((count, false));
        }
        let mut end = None;
        if let Some(w) = wanted.get(next).filter(|w| w.index == count) {
            next += 1;
            match scan(bytes, at, layout.decimal_comma, is_end) {
                Some((number, after)) => {
                    keep(number, w, table);
                    end = Some(after);
                }
                None => take(&line[at..end_of_field(bytes, at, is_end)], w, layout, table)?,
            }
        }
        at = end.unwrap_or_else(|| end_of_field(bytes, at, is_end));
        count += 1;
    }
}

fn end_of_field(bytes: &[u8], from: usize, is_end: impl Fn(u8) -> bool) -> usize {
    bytes[from..].iter().position(|&b| is_end(b)).map_or(bytes.len(), |k| from + k)
}

/// A number with what is known of its spelling.
#[derive(Clone, Copy)]
struct Number {
    value: f64,
    printed: Printed,
}

/// Powers of ten that are exact in f64.
const EXACT_POWERS: [f64; 23] = [
    1e0, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9, 1e10, 1e11, 1e12, 1e13, 1e14, 1e15, 1e16, 1e17, 1e18, 1e19, 1e20,
    1e21, 1e22,
];

/// Reads a plain number up to the end of its field; `None` for anything that needs a closer look.
///
/// Correctly rounded: digits and power of ten are both exact in f64, so that one operation gives the value (Clinger 1990, PLDI,
/// "How to read floating point numbers accurately").
fn scan(bytes: &[u8], from: usize, decimal_comma: bool, is_end: impl Fn(u8) -> bool) -> Option<(Number, usize)> {
    const MOST_DIGITS: u32 = 19;
    let mut at = from;
    let mut byte = || {
        let b = bytes.get(at).copied();
        at += 1;
        b
    };
    let mut b = byte();
    while b == Some(b' ') && !is_end(b' ') {
        b = byte();
    }
    let negative = b == Some(b'-');
    if negative || b == Some(b'+') {
        b = byte();
    }
    let (mut mantissa, mut digits, mut decimals) = (0u64, 0u32, 0i32);
    let (mut point, mut any, mut exponent) = (false, false, 0i32);
    loop {
        match b {
            Some(d @ b'0'..=b'9') => {
                any = true;
                mantissa = mantissa.wrapping_mul(10).wrapping_add(u64::from(d - b'0'));
                digits += u32::from(mantissa != 0);
                decimals += i32::from(point);
                if digits > MOST_DIGITS {
                    return None;
                }
            }
            Some(b'.') if !point => point = true,
            Some(b',') if decimal_comma && !point => point = true,
            _ => break,
        }
        b = byte();
    }
    if let Some(b'e' | b'E') = b {
        b = byte();
        let minus = b == Some(b'-');
        if minus || b == Some(b'+') {
            b = byte();
        }
        let mut some = false;
        while let Some(d @ b'0'..=b'9') = b {
            exponent = exponent.saturating_mul(10).saturating_add(i32::from(d - b'0'));
            some = true;
            b = byte();
        }
        if !some || exponent > 400 {
            return None;
        }
        if minus {
            exponent = -exponent;
        }
    }
    while b == Some(b' ') && !is_end(b' ') {
        b = byte();
    }
    if !any || b.is_some_and(|b| !is_end(b)) || mantissa > 1 << 53 {
        return None;
    }
    let place = exponent - decimals;
    let power = *EXACT_POWERS.get(place.unsigned_abs() as usize)?;
    let size = if place < 0 { mantissa as f64 / power } else { mantissa as f64 * power };
    let value = if negative { -size } else { size };
    Some((Number { value, printed: Printed { digits, place } }, at - 1))
}

fn keep(number: Number, w: &Wanted, table: &mut Table) {
    match w.role {
        "x" => table.printed[0].join(number.printed),
        "y" => table.printed[1].join(number.printed),
        _ => {}
    }
    table.values[w.slot].push(number.value);
}

/// Reads a field of any spelling.
fn take(field: &str, w: &Wanted, layout: &Layout, table: &mut Table) -> Result<(), String> {
    let value = value_of(field, w.role, layout)?;
    match w.role {
        "x" => table.printed[0].note(field),
        "y" => table.printed[1].note(field),
        _ => {}
    }
    table.values[w.slot].push(value);
    Ok(())
}

fn check_count(count: usize, last_empty: bool, layout: &Layout, wanted: &[Wanted]) -> Result<(), String> {
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

    #[test] // the standard library is correctly rounded
    fn the_quick_reader_agrees_with_the_exact_one_bit_by_bit_or_declines() {
        let mut state = 7u64;
        let mut read = 0;
        for k in 0..40_000 {
            state = state.wrapping_mul(6_364_136_223_846_793_005).wrapping_add(1_442_695_040_888_963_407);
            let value = (state >> 11) as f64 / 1e12 * if k % 2 == 0 { -1.0 } else { 1e-7 };
            let text = match k % 5 {
                0 => format!("{value}"),
                1 => format!("{value:.3}"),
                2 => format!("{value:.6e}"),
                3 => format!("{:.12}", value * 1e-6),
                _ => format!("{:+}", (value as i64) % 100_000),
            };
            let line = format!("{text},1");
            if let Some((number, end)) = scan(line.as_bytes(), 0, false, |b| b == b',') {
                read += 1;
                assert_eq!(number.value.to_bits(), text.parse::<f64>().unwrap().to_bits(), "{text}");
                assert_eq!(end, text.len());
                let mut printed = Printed::default();
                printed.note(&text);
                let mut quick = Printed::default();
                quick.join(number.printed);
                assert_eq!(printed, quick, "{text}");
            }
        }
        assert!(read > 20_000, "{read}");
        for text in ["", "-", ".", "e5", "1e", "1e+", "1.2.3", "1x", "nan", "inf", "1,5", "12345678901234567890"] {
            assert!(scan(format!("{text};").as_bytes(), 0, false, |b| b == b';').is_none(), "{text}");
        }
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
