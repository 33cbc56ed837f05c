//! From INPUT... to a list of data files in natural order.

use std::cmp::Ordering;
use std::fs;
use std::path::{Path, PathBuf};

use super::error::IoError;

/// Extensions of data files, used when a folder is read.
pub const EXTENSIONS: [&str; 11] = ["csv", "tsv", "txt", "dat", "npy", "npz", "h5", "hdf5", "nc", "mat", "nc4"];

/// Expands folders and globs; several files are frames in natural order (frame2 before frame10).
///
/// # Errors
/// [`IoError`] for a missing file, a folder without data files, a glob that matches nothing, or a mixture of kinds.
pub fn expand(inputs: &[PathBuf]) -> Result<Vec<PathBuf>, IoError> {
    let mut files = Vec::new();
    for input in inputs {
        let text = input.to_string_lossy();
        if input.is_dir() {
            let entries = fs::read_dir(input).map_err(|e| IoError::system("list", input, e))?;
            let mut found = Vec::new();
            for entry in entries {
                let path = entry.map_err(|e| IoError::system("list", input, e))?.path();
                let known =
                    path.extension().is_some_and(|e| EXTENSIONS.contains(&e.to_string_lossy().to_lowercase().as_str()));
                if known && path.is_file() {
                    found.push(path);
                }
            }
            if found.is_empty() {
                return Err(IoError::setting(
                    format!("input folder {text}"),
                    format!("holds no data files; expected names ending in .{}", EXTENSIONS.join(" .")),
                ));
            }
            files.extend(found);
        } else if !input.exists() && text.contains(['*', '?', '[']) {
            let found: Vec<PathBuf> = glob::glob(&text)
                .map_err(|e| IoError::setting(format!("input {text}"), format!("not a valid pattern: {e}")))?
                .filter_map(Result::ok)
                .filter(|p| p.is_file())
                .collect();
            if found.is_empty() {
                return Err(IoError::setting(format!("input {text}"), "the pattern matches no file"));
            }
            files.extend(found);
        } else {
            files.push(input.clone());
        }
    }
    files.sort_by(|a, b| natural(&a.to_string_lossy(), &b.to_string_lossy()));
    files.dedup();
    let kind = |p: &Path| p.extension().map(|e| e.to_string_lossy().to_lowercase()).unwrap_or_default();
    if let Some(odd) = files.iter().find(|f| kind(f) != kind(&files[0])) {
        return Err(IoError::setting(
            "input",
            format!(
                "files of different kinds cannot be frames of one series: {} and {}; name the files of one kind",
                files[0].display(),
                odd.display()
            ),
        ));
    }
    Ok(files)
}

/// Order in which runs of digits compare as numbers.
pub fn natural(a: &str, b: &str) -> Ordering {
    let (mut a, mut b) = (a.chars().peekable(), b.chars().peekable());
    loop {
        match (a.peek().copied(), b.peek().copied()) {
            (None, None) => return Ordering::Equal,
            (None, _) => return Ordering::Less,
            (_, None) => return Ordering::Greater,
            (Some(x), Some(y)) if x.is_ascii_digit() && y.is_ascii_digit() => {
                let number = |it: &mut std::iter::Peekable<std::str::Chars<'_>>| {
                    let mut digits = String::new();
                    while let Some(d) = it.next_if(char::is_ascii_digit) {
                        digits.push(d);
                    }
                    let trimmed = digits.trim_start_matches('0').to_owned();
                    (trimmed.len(), trimmed, digits.len())
                };
                let (m, n) = (number(&mut a), number(&mut b));
                if m != n {
                    return m.cmp(&n);
                }
            }
            (Some(x), Some(y)) => {
                if x != y {
                    return x.cmp(&y);
                }
                a.next();
                b.next();
            }
        }
    }
}

/// Frames asked for: `7`, `10..200` (both ends) or `10..200:5`.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct FrameRange {
    /// First frame.
    pub first: usize,
    /// Last frame; `None`: to the end.
    pub last: Option<usize>,
    /// Step.
    pub step: usize,
}

impl FrameRange {
    /// Parses a range.
    ///
    /// # Errors
    /// [`IoError::Setting`] for anything else.
    pub fn parse(text: &str) -> Result<Self, IoError> {
        let bad = || {
            IoError::setting(
                "frames",
                format!("`{text}` is not a frame number or range; write 7, 10..200 or 10..200:5 (counted from 0)"),
            )
        };
        let number = |s: &str| s.trim().parse::<usize>().map_err(|_| bad());
        let (range, step) = match text.split_once(':') {
            Some((range, step)) => (range, number(step)?),
            None => (text, 1),
        };
        let parsed = match range.split_once("..") {
            Some((first, "")) => Self { first: number(first)?, last: None, step },
            Some((first, last)) => Self { first: number(first)?, last: Some(number(last)?), step },
            None => {
                let only = number(range)?;
                Self { first: only, last: Some(only), step }
            }
        };
        if parsed.step == 0 || parsed.last.is_some_and(|last| last < parsed.first) {
            return Err(bad());
        }
        Ok(parsed)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn frame2_comes_before_frame10() {
        let mut names = ["frame10.csv", "frame2.csv", "frame02.csv", "frame1.csv"];
        names.sort_by(|a, b| natural(a, b));
        assert_eq!(names, ["frame1.csv", "frame2.csv", "frame02.csv", "frame10.csv"]);
    }

    #[test]
    fn ranges_are_read_and_nonsense_is_refused() {
        assert_eq!(FrameRange::parse("10..200:5").unwrap(), FrameRange { first: 10, last: Some(200), step: 5 });
        assert_eq!(FrameRange::parse("7").unwrap().last, Some(7));
        for bad in ["", "x", "5..2", "1..9:0", "-3"] {
            assert!(FrameRange::parse(bad).is_err(), "{bad}");
        }
    }
}
