//! The survey file: names the data and everything known about it.  Also the form in which flags reach the readers.

use std::collections::BTreeMap;
use std::fs;
use std::path::Path;

use serde::{Deserialize, Serialize};

use super::error::IoError;

/// One string or several.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(untagged, expecting = "expected a text in quotes or a list of texts")]
pub enum OneOrMany {
    /// One.
    One(String),
    /// Several.
    Many(Vec<String>),
}

impl OneOrMany {
    /// All of them; a single string is split at commas when `split` is set.
    pub fn list(&self, split: bool) -> Vec<String> {
        match self {
            OneOrMany::One(text) if split => text.split(',').map(|s| s.trim().to_owned()).collect(),
            OneOrMany::One(text) => vec![text.clone()],
            OneOrMany::Many(list) => list.clone(),
        }
    }
}

/// A number, or a string such as "auto" or a number with a unit.
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(untagged, expecting = "expected a number or a text in quotes")]
pub enum NumberOrText {
    /// A bare number.
    Number(f64),
    /// Text.
    Text(String),
}

impl std::fmt::Display for NumberOrText {
    fn fmt(&self, f: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
        match self {
            NumberOrText::Number(n) => write!(f, "{n}"),
            NumberOrText::Text(t) => f.write_str(t),
        }
    }
}

/// One number or a pair.
#[derive(Debug, Clone, Copy, PartialEq, Serialize, Deserialize)]
#[serde(untagged, expecting = "expected a number or a pair of numbers, [dx, dy]")]
pub enum OneOrTwo {
    /// The same for x and y.
    One(f64),
    /// For x and for y.
    Two([f64; 2]),
}

macro_rules! table {
    ($(#[$doc:meta])* $name:ident { $($(#[$field_doc:meta])* $field:ident : $type:ty),* $(,)? }) => {
        $(#[$doc])*
        #[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
        #[serde(deny_unknown_fields, default)]
        pub struct $name {
            $($(#[$field_doc])* #[serde(skip_serializing_if = "Option::is_none")] pub $field: Option<$type>,)*
        }

        impl $name {
            fn merge(self, flags: Self) -> Self {
                Self { $($field: flags.$field.or(self.$field),)* }
            }
        }
    };
}

table!(
    /// `[data]`
    DataTable {
        /// Files, a folder or a glob.
        files: OneOrMany,
        /// Where arrays are: role = path.
        arrays: BTreeMap<String, String>,
        /// Columns of a text table.
        columns: OneOrMany,
        /// Order of dimensions.
        order: String,
        /// Frames to take.
        frames: NumberOrText,
        /// "value" or "gap".
        zero: String,
    }
);
table!(
    /// `[geometry]`
    GeometryTable {
        /// Node spacing.
        spacing: OneOrTwo,
        /// Position of the first node.
        origin: [f64; 2],
        /// "up" or "down".
        y: String,
        /// Length of a pixel.
        scale: String,
        /// Time between exposures.
        interval: String,
    }
);
table!(
    /// `[units]`
    UnitsTable {
        /// Of coordinates in the data.
        length: String,
        /// Of velocities in the data.
        velocity: String,
        /// Of the results, "mm,s".
        output: String,
    }
);
table!(
    /// `[noise]`
    NoiseTable {
        /// Standard uncertainty.
        sigma: NumberOrText,
        /// Overlap of neighboring windows.
        overlap: NumberOrText,
    }
);
table!(
    /// `[walls]`
    WallsTable {
        /// Wall at the smallest y.
        bottom: String,
        /// Wall at the largest y.
        top: String,
        /// Wall at the smallest x.
        left: String,
        /// Wall at the largest x.
        right: String,
    }
);
table!(
    /// `[depth]`
    DepthTable {
        /// "uniform", "radius" or a depth map file.
        thickness: String,
    }
);
table!(
    /// `[screen]`
    ScreenTable {
        /// Limit of the normalized median test.
        limit: f64,
        /// Noise level of that test in units of sigma.
        epsilon: f64,
        /// Passes.
        passes: usize,
        /// Take every vector as it is.
        off: bool,
    }
);
table!(
    /// `[fit]`
    FitTable {
        /// "auto", "none" or a number.
        smoothing: NumberOrText,
        /// Where psi is zero.
        zero: String,
        /// "+" or "-".
        sign: String,
    }
);
table!(
    /// `[ensemble]`
    EnsembleTable {
        /// Members.
        members: usize,
        /// Seed.
        seed: u64,
    }
);
table!(
    /// `[streamlines]`
    StreamlinesTable {
        /// Explicit levels.
        levels: Vec<f64>,
        /// About how many.
        count: usize,
        /// Flux step.
        step: f64,
        /// Largest offset in node spacings.
        tolerance: f64,
    }
);
table!(
    /// `[figure]`
    FigureTable {
        /// Width by name or in millimeters.
        width: NumberOrText,
        /// Background field.
        background: String,
        /// Whether levels are labelled.
        labels: bool,
        /// Files `run` writes.
        formats: OneOrMany,
        /// Color map.
        color_map: String,
        /// Font size in points.
        font_size: f64,
    }
);

/// `circle = { x, y, radius }`
#[derive(Debug, Clone, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct CircleTable {
    /// Center.
    pub x: f64,
    /// Center.
    pub y: f64,
    /// Radius.
    pub radius: f64,
}

/// `[[solid]]`: exactly one of circle, polygon, mask.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct SolidTable {
    /// A circle.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub circle: Option<CircleTable>,
    /// Vertices of a polygon.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub polygon: Option<Vec<[f64; 2]>>,
    /// A mask file: rows of 0 and 1, or .npy.
    #[serde(skip_serializing_if = "Option::is_none")]
    pub mask: Option<String>,
    /// "slip", "no-slip" or "free".
    #[serde(skip_serializing_if = "Option::is_none")]
    pub surface: Option<String>,
}

/// A whole survey file.
#[derive(Debug, Clone, Default, PartialEq, Serialize, Deserialize)]
#[serde(deny_unknown_fields, default)]
pub struct Survey {
    /// `[data]`
    pub data: DataTable,
    /// `[geometry]`
    pub geometry: GeometryTable,
    /// `[units]`
    pub units: UnitsTable,
    /// `[noise]`
    pub noise: NoiseTable,
    /// `[[solid]]`
    #[serde(skip_serializing_if = "Vec::is_empty")]
    pub solid: Vec<SolidTable>,
    /// `[walls]`
    pub walls: WallsTable,
    /// `[depth]`
    pub depth: DepthTable,
    /// `[screen]`
    pub screen: ScreenTable,
    /// `[fit]`
    pub fit: FitTable,
    /// `[ensemble]`
    pub ensemble: EnsembleTable,
    /// `[streamlines]`
    pub streamlines: StreamlinesTable,
    /// `[figure]`
    pub figure: FigureTable,
}

impl Survey {
    /// Reads a survey file; paths in it become relative to the working folder.
    ///
    /// # Errors
    /// [`IoError`] naming file, line, table and key; an unknown key names the nearest known one.
    pub fn read(path: &Path) -> Result<Self, IoError> {
        let bytes = fs::read(path).map_err(|e| IoError::system("read", path, e))?;
        let text = String::from_utf8(bytes)
            .map_err(|_| IoError::setting(path.display().to_string(), "a survey file must be UTF-8 text"))?;
        let mut survey: Survey = toml::from_str(&text).map_err(|e| {
            let start = e.span().map_or(0, |span| span.start);
            IoError::setting(format!("{}: {}", path.display(), place(&text, start)), explain(e.message()))
        })?;
        let folder = path.parent().unwrap_or(Path::new(""));
        let anchor = |name: &mut String| *name = folder.join(&*name).to_string_lossy().into_owned();
        match &mut survey.data.files {
            Some(OneOrMany::One(name)) => anchor(name),
            Some(OneOrMany::Many(names)) => names.iter_mut().for_each(anchor),
            None => {}
        }
        survey.solid.iter_mut().filter_map(|s| s.mask.as_mut()).for_each(anchor);
        if let Some(thickness) = &mut survey.depth.thickness
            && !matches!(thickness.as_str(), "uniform" | "radius" | "file")
        {
            anchor(thickness);
        }
        Ok(survey)
    }

    /// Settings of `flags` win over those of the file; bodies of both are kept.
    #[must_use]
    pub fn merge(self, flags: Survey) -> Self {
        let mut solid = self.solid;
        solid.extend(flags.solid);
        Self {
            data: self.data.merge(flags.data),
            geometry: self.geometry.merge(flags.geometry),
            units: self.units.merge(flags.units),
            noise: self.noise.merge(flags.noise),
            solid,
            walls: self.walls.merge(flags.walls),
            depth: self.depth.merge(flags.depth),
            screen: self.screen.merge(flags.screen),
            fit: self.fit.merge(flags.fit),
            ensemble: self.ensemble.merge(flags.ensemble),
            streamlines: self.streamlines.merge(flags.streamlines),
            figure: self.figure.merge(flags.figure),
        }
    }
}

/// Line, table and key at a byte of a survey file.
fn place(text: &str, byte: usize) -> String {
    let before = text.get(..byte).unwrap_or(text);
    let number = before.matches('\n').count();
    let mut place = format!("line {}", number + 1);
    let is_table = |line: &&str| line.trim_start().starts_with('[') && line.trim_end().ends_with(']');
    let line = text.lines().nth(number).unwrap_or_default();
    if is_table(&line) {
        return place;
    }
    if let Some(table) = text.lines().take(number).filter(is_table).last() {
        place += &format!(", {}", table.trim());
    }
    if let Some((key, _)) = line.split_once('=') {
        place += &format!(" {}", key.trim());
    }
    place
}

/// Turns a message about an unknown key into one that names the nearest known key.
fn explain(message: &str) -> String {
    let mut quoted = message.split('`').skip(1).step_by(2);
    if message.starts_with("unknown field")
        && let Some(found) = quoted.next()
    {
        let known: Vec<&str> = quoted.collect();
        if let Some(near) = nearest(found, &known) {
            return format!(
                "unknown key `{found}`; the nearest known one is `{near}` (known here: {})",
                known.join(", ")
            );
        }
    }
    // Words of the language instead of those of the program.
    [
        ("a boolean", "true or false"),
        ("boolean", "true or false"),
        ("usize", "a whole number from 0"),
        ("u64", "a whole number from 0"),
    ]
    .into_iter()
    .chain([("f64", "a number"), ("a string", "a text in quotes"), ("string", "text")])
    .fold(message.replace('\n', " "), |text, (from, to)| match text.split_once("expected ") {
        Some((found, expected)) if expected.starts_with(from) => {
            format!("{found}expected {to}{}", &expected[from.len()..])
        }
        _ => text,
    })
    .trim()
    .to_owned()
}

/// The candidate most like a word.
pub fn nearest<'a>(word: &str, candidates: &[&'a str]) -> Option<&'a str> {
    candidates.iter().copied().min_by_key(|c| strsim::damerau_levenshtein(&word.to_lowercase(), c))
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn an_unknown_key_names_the_nearest_one_with_its_line() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("s.toml");
        fs::write(&path, "[noise]\nsigma = \"0.4 mm/s\"\noverlapp = 0.5\n").unwrap();
        let text = Survey::read(&path).unwrap_err().to_string();
        assert!(
            text.contains("line 3, [noise]") && text.contains("`overlapp`") && text.contains("`overlap`"),
            "{text}"
        );
    }

    #[test]
    fn a_wrong_type_is_named_with_table_key_and_what_was_expected() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("s.toml");
        for (content, parts) in [
            ("[geometry]\nspacing = \"wide\"\n", ["line 2, [geometry] spacing", "a pair of numbers"]),
            ("[noise]\nsigma = true\n", ["line 2, [noise] sigma", "a number or a text in quotes"]),
            ("[screen]\npasses = -1\n", ["line 2, [screen] passes", "a whole number from 0"]),
            ("[screen]\nlimit = \"2\"\n", ["line 2, [screen] limit", "expected a number"]),
            ("[units]\nlength = 3\n", ["line 2, [units] length", "a text in quotes"]),
            ("[figure]\nlabels = 3\n", ["line 2, [figure] labels", "true or false"]),
            ("[[solid]]\n\ncircle = { x = 1, y = 2 }\n", ["line 3, [[solid]] circle", "radius"]),
            ("[noise]\nsigma = 1\nsigma = 2\n", ["line 3, [noise] sigma", "duplicate"]),
        ] {
            fs::write(&path, content).unwrap();
            let text = Survey::read(&path).unwrap_err().to_string();
            assert!(parts.iter().all(|p| text.contains(p)), "{content}: {text}");
        }
    }

    #[test]
    fn flags_win_and_paths_are_relative_to_the_survey() {
        let folder = tempfile::tempdir().unwrap();
        let path = folder.path().join("s.toml");
        fs::write(&path, "[data]\nfiles = \"a.csv\"\n[noise]\nsigma = 0.3\noverlap = 0.5\n").unwrap();
        let flags =
            Survey { noise: NoiseTable { sigma: Some(NumberOrText::Number(0.7)), overlap: None }, ..Survey::default() };
        let merged = Survey::read(&path).unwrap().merge(flags);
        assert_eq!(merged.noise.sigma, Some(NumberOrText::Number(0.7)));
        assert_eq!(merged.noise.overlap, Some(NumberOrText::Number(0.5)));
        assert!(merged.data.files.unwrap().list(false)[0].ends_with("/a.csv"));
    }
}
