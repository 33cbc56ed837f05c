//! Delimited text: layout finds header and delimiter, names say which column is what, rows become numbers, grid puts them on nodes.

mod grid;
mod layout;
mod names;
mod rows;

use std::fs;
use std::path::Path;

use self::grid::to_grid;
use self::layout::{Delimiter, Layout, find_blocks, find_layout};
use self::names::{Column, choose_columns, units_of};
use self::rows::{Table, read_rows};
use super::error::IoError;
use super::raw::RawFrame;
use super::request::ArrayRequest;
use crate::field::{Remark, RemarkKind};

/// Columns that are left alone are named when there are not more of them.
const MOST_NAMED: usize = 30;

/// Reads one frame of a text table.
///
/// Empty fields and `nan` are gaps; so are rows that are absent.  Rows may come in any order.  A file with several blocks (`ZONE`
/// lines), or with a column of times, holds several frames.
///
/// # Errors
/// [`IoError`] naming the line: no header and no `--columns`, missing columns, ragged rows, text in a number, infinite values, a
/// point given twice, points that do not lie on a rectilinear grid, a single row or column.
pub fn read_text(path: &Path, request: &ArrayRequest) -> Result<RawFrame, IoError> {
    let bytes = fs::read(path).map_err(|e| IoError::system("read", path, e))?;
    let text = decode(path, bytes)?;
    let text = text.strip_prefix('\u{feff}').unwrap_or(&text);
    let layout = find_layout(path, text, request)?;
    let columns = choose_columns(path, &layout, request)?;
    let blocks = find_blocks(text, &layout);
    let beyond = |frames: usize| {
        IoError::content(
            path,
            format!("frame {}", request.frame),
            format!("the file holds {frames} frames, counted from 0"),
        )
    };
    let block = if blocks.len() > 1 { request.frame } else { 0 };
    let range = blocks.get(block).ok_or_else(|| beyond(blocks.len()))?;
    let mut table = read_rows(path, text, range, &layout, &columns)?;
    let (frames, time) = if blocks.len() > 1 { (blocks.len(), None) } else { take_time(&mut table, &columns, request) };
    if request.frame >= frames {
        return Err(beyond(frames));
    }
    let mut frame = to_grid(path, &columns, table)?;
    frame.frames = frames;
    frame.frame = request.frame;
    frame.time = time;
    frame.units = units_of(&layout, &columns);
    frame.format = format_of(&layout);
    frame.found = columns.iter().map(|c| (c.role.to_owned(), place_of(&layout, c))).collect();
    let unused: Vec<&str> = layout
        .headings
        .iter()
        .enumerate()
        .filter(|(k, h)| !h.written.is_empty() && !columns.iter().any(|c| c.index == *k))
        .map(|(_, h)| h.written.as_str())
        .collect();
    if !unused.is_empty() && unused.len() <= MOST_NAMED {
        frame.remarks.push(Remark::new(RemarkKind::Ignored, format!("columns left alone: {}", unused.join(", "))));
    }
    Ok(frame)
}

/// Text of a file in UTF-8, UTF-16 with a byte order mark, or Latin-1; line ends of every kind.
fn decode(path: &Path, bytes: Vec<u8>) -> Result<String, IoError> {
    let wide = |convert: fn([u8; 2]) -> u16| {
        let units: Vec<u16> = bytes[2..].as_chunks::<2>().0.iter().map(|&pair| convert(pair)).collect();
        String::from_utf16(&units)
            .map_err(|_| IoError::content(path, "content", "begins like UTF-16 text but is not; save it as UTF-8"))
    };
    let text = if bytes.starts_with(&[0xff, 0xfe]) {
        wide(u16::from_le_bytes)?
    } else if bytes.starts_with(&[0xfe, 0xff]) {
        wide(u16::from_be_bytes)?
    } else {
        if bytes.iter().take(4096).any(|&b| b == 0) {
            return Err(IoError::content(
                path,
                "content",
                "holds zero bytes: not a text table (is the extension right?)",
            ));
        }
        match String::from_utf8(bytes) {
            Ok(text) => text,
            // Units such as the micro sign are often written in Latin-1.
            Err(e) => e.into_bytes().iter().map(|&b| b as char).collect(),
        }
    };
    // Files of old Macintosh programs end lines by a carriage return alone.
    Ok(if !text.contains('\n') && text.contains('\r') { text.replace('\r', "\n") } else { text })
}

/// Keeps the rows of the wanted frame when a column of times says that the table holds several; frames and the time.
fn take_time(table: &mut Table, columns: &[Column], request: &ArrayRequest) -> (usize, Option<f64>) {
    let Some(slot) = columns.iter().position(|c| c.role == "t") else { return (1, None) };
    let mut times = table.values[slot].clone();
    times.sort_unstable_by(f64::total_cmp);
    times.dedup();
    let Some(&wanted) = times.get(request.frame).filter(|t| t.is_finite()) else { return (times.len(), None) };
    if times.len() > 1 {
        let keep: Vec<bool> = table.values[slot].iter().map(|&t| t == wanted).collect();
        let mut k = keep.iter();
        table.lines.retain(|_| k.next() == Some(&true));
        for values in &mut table.values {
            let mut k = keep.iter();
            values.retain(|_| k.next() == Some(&true));
        }
    }
    (times.len(), Some(wanted))
}

fn format_of(layout: &Layout) -> String {
    format!(
        "text table, {}{}",
        match layout.delimiter {
            Delimiter::Byte(b',') => "commas",
            Delimiter::Byte(b';') => "semicolons",
            Delimiter::Byte(_) => "tabs",
            Delimiter::Blanks => "blanks",
        },
        if layout.decimal_comma { ", decimal comma" } else { "" }
    )
}

fn place_of(layout: &Layout, column: &Column) -> String {
    let name = layout.headings.get(column.index).map_or_else(String::new, |h| format!(" `{}`", h.written));
    format!("column {}{name}", column.index + 1)
}
