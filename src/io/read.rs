//! INPUT... and settings -> one frame ready for analysis, with its provenance.

use std::fs::File;
use std::io::Read;
use std::path::{Path, PathBuf};

use sha2::{Digest, Sha256};

use super::assemble::assemble;
use super::error::IoError;
use super::inputs::{FrameRange, expand};
use super::raw::RawFrame;
use super::request::{ArrayRequest, ROLES};
use super::survey::{Survey, nearest};
use super::{npy, text};
use crate::field::{Remark, RemarkKind, UnitSystem, VelocityField};

/// A file that was read.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Source {
    /// Path as given.
    pub path: PathBuf,
    /// Size in bytes.
    pub size: u64,
    /// SHA-256 of the content, hexadecimal.
    pub sha256: String,
}

/// One frame with everything known about it.
#[derive(Debug, Clone)]
pub struct Dataset {
    /// The field.
    pub field: VelocityField,
    /// Units of the field.
    pub units: UnitSystem,
    /// Files read.
    pub sources: Vec<Source>,
    /// All files of the input, in the order of frames.
    pub files: Vec<PathBuf>,
    /// Frames available over all inputs.
    pub frames: usize,
    /// Settings in force: flags over survey file.
    pub survey: Survey,
    /// Format in one phrase.
    pub format: String,
    /// Role and place of every array used.
    pub found: Vec<(String, String)>,
    /// Unit strings found in the file: length, velocity.
    pub file_units: (Option<String>, Option<String>),
    /// What the user should know.
    pub remarks: Vec<Remark>,
}

/// Reads one frame.  `inputs` are data files, a folder, a glob, or one survey file; `flags` win over the survey file.
///
/// # Errors
/// [`IoError`] with file, place, what was found, what was expected.
pub fn read(inputs: &[PathBuf], flags: &Survey) -> Result<Dataset, IoError> {
    let is_survey = |p: &PathBuf| p.extension().is_some_and(|e| e.eq_ignore_ascii_case("toml"));
    let (survey, files) = match inputs {
        [] => {
            return Err(IoError::setting(
                "INPUT",
                "no input given; name data files, a folder, a quoted glob or a survey file",
            ));
        }
        [only] if is_survey(only) => {
            let survey = Survey::read(only)?.merge(flags.clone());
            let Some(files) = &survey.data.files else {
                return Err(IoError::setting(
                    format!("{}: [data] files", only.display()),
                    "missing: which files hold the data?",
                ));
            };
            let files: Vec<PathBuf> = files.list(false).into_iter().map(PathBuf::from).collect();
            (survey, files)
        }
        several if several.iter().any(is_survey) => {
            return Err(IoError::setting(
                "INPUT",
                "a survey file names the data itself; give it alone, or data files without it",
            ));
        }
        data => (flags.clone(), data.to_vec()),
    };
    let files = expand(&files)?;
    let wanted = match &survey.data.frames {
        Some(text) => FrameRange::parse(&text.to_string())?,
        None => FrameRange { first: 0, last: None, step: 1 },
    };
    let (file, frame_in_file) = if files.len() == 1 { (0, wanted.first) } else { (wanted.first, 0) };
    let Some(path) = files.get(file) else {
        return Err(IoError::setting(
            "frames",
            format!("frame {} asked for, the input holds {} files (counted from 0)", wanted.first, files.len()),
        ));
    };
    let mut request =
        ArrayRequest { order: survey.data.order.clone(), frame: frame_in_file, ..ArrayRequest::default() };
    if let Some(columns) = &survey.data.columns {
        request.columns = Some(columns.list(true));
    }
    if let Some(arrays) = &survey.data.arrays {
        for role in arrays.keys() {
            if !ROLES.contains(&role.as_str()) {
                let near = nearest(role, &ROLES).unwrap_or("u");
                return Err(IoError::setting(
                    "array",
                    format!("unknown role `{role}`; the nearest known one is `{near}` (known: {})", ROLES.join(", ")),
                ));
            }
        }
        request.arrays = arrays.clone();
    }
    let mut raw = read_raw(path, &request)?;
    let frames = if files.len() == 1 { raw.frames } else { files.len() };
    if frames > 1 {
        let index = if files.len() == 1 { raw.frame } else { file };
        if !matches!(wanted, FrameRange { first, last: Some(last), .. } if first == last) {
            raw.remarks.push(Remark::new(
                RemarkKind::FrameChosen,
                format!("the input holds {frames} frames; frame {index} is analyzed, `--frames N` takes another"),
            ));
        }
        raw.frame = index;
    }
    let found = raw.found.clone();
    let format = raw.format.clone();
    let file_units = (raw.units.length.clone(), raw.units.velocity.clone());
    let (field, units, remarks) = assemble(raw, &survey, path)?;
    let sources = vec![source(path)?];
    Ok(Dataset { field, units, sources, files, frames, survey, format, found, file_units, remarks })
}

/// Reads a file by its content; the extension only speaks when the content is plain text.
fn read_raw(path: &Path, request: &ArrayRequest) -> Result<RawFrame, IoError> {
    let mut head = Vec::new();
    File::open(path).and_then(|f| f.take(4096).read_to_end(&mut head)).map_err(|e| IoError::system("read", path, e))?;
    let hdf5 = [0usize, 512, 1024, 2048].iter().any(|&at| head.get(at..at + 8) == Some(b"\x89HDF\r\n\x1a\n"));
    if hdf5 {
        return read_hdf5(path, request);
    }
    if head.starts_with(b"\x93NUMPY") {
        return npy::read_npy(path, request);
    }
    if head.starts_with(b"PK\x03\x04") {
        return npy::read_npz(path, request);
    }
    if head.starts_with(b"CDF") {
        return Err(IoError::content(
            path,
            "content",
            "NetCDF classic format; convert it to NetCDF-4 first, for example `nccopy -k nc4 in.nc out.nc`",
        ));
    }
    if head.starts_with(b"MATLAB 5.0") {
        return Err(IoError::content(
            path,
            "content",
            "MATLAB format 5; save it as version 7.3 (`save file.mat u v x y -v7.3`)",
        ));
    }
    let extension = path.extension().map(|e| e.to_string_lossy().to_lowercase()).unwrap_or_default();
    match extension.as_str() {
        "npy" => {
            Err(IoError::content(path, "content", "not in the .npy format; the file may be cut off or of another kind"))
        }
        "npz" => npy::read_npz(path, request),
        "h5" | "hdf5" | "nc" | "nc4" | "mat" => Err(IoError::content(
            path,
            "content",
            "not an HDF5 file (no HDF5 signature); the file may be cut off or of another kind",
        )),
        _ if head.is_empty() => {
            Err(IoError::content(path, "content", "the file is empty; expected a table with the columns x, y, u, v"))
        }
        _ => text::read_text(path, request),
    }
}

#[cfg(feature = "hdf5")]
use super::hdf5::read_hdf5;

#[cfg(not(feature = "hdf5"))]
fn read_hdf5(path: &Path, _: &ArrayRequest) -> Result<RawFrame, IoError> {
    Err(IoError::content(path, "content", "an HDF5 file, but this build of isopsi has no HDF5 (feature `hdf5`)"))
}

fn source(path: &Path) -> Result<Source, IoError> {
    let failed = |e| IoError::system("read", path, e);
    let mut file = File::open(path).map_err(failed)?;
    let mut hasher = Sha256::new();
    let size = std::io::copy(&mut file, &mut hasher).map_err(failed)?;
    let sha256 = hasher.finalize().iter().map(|b| format!("{b:02x}")).collect();
    Ok(Source { path: path.to_owned(), size, sha256 })
}
