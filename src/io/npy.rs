//! NumPy files: .npy with both components, .npz with named arrays.  Of a series only the wanted frame is read.

use std::fs::File;
use std::io::{self, BufReader, Read};
use std::path::Path;

use half::f16;
use ndarray::Array2;

use super::error::IoError;
use super::raw::{NODE_LIMIT, RawAxis, RawFrame};
use super::request::ArrayRequest;
use crate::field::{Remark, RemarkKind};

/// Longest header that is read; NumPy writes far less.
const HEADER_LIMIT: usize = 1 << 20;

/// Rounding of positions in f16 and f32, in units of their epsilon: a few operations deep.
const ROUNDING: f64 = 4.0;

/// Reads one frame of a .npy file, `(2, ny, nx)` or `(nt, 2, ny, nx)`.
///
/// # Errors
/// [`IoError`] for another shape, an element type that is not a number, or a header that promises more than the file holds.
pub fn read_npy(path: &Path, request: &ArrayRequest) -> Result<RawFrame, IoError> {
    let swap = is_swapped(request)?;
    let mut array = open_file(path)?;
    let shape = array.header.shape.clone();
    let (frames, leads) = match shape[..] {
        [2, _, _] => (1, [vec![0], vec![1]]),
        [frames, 2, _, _] => (frames, [vec![request.frame, 0], vec![request.frame, 1]]),
        _ => {
            return Err(array.bad(format!("shape {shape:?}; expected (2, ny, nx) or (nt, 2, ny, nx)")));
        }
    };
    if request.frame >= frames {
        return Err(beyond(path, request.frame, frames));
    }
    let [u, v] = leads;
    let u = array.plane(&u)?;
    let mut array = open_file(path)?;
    let v = array.plane(&v)?;
    Ok(RawFrame {
        u: turned(u, swap),
        v: turned(v, swap),
        frames,
        frame: request.frame,
        format: format!("NumPy array, {}", array.header.label()),
        found: vec![("u, v".to_owned(), format!("{shape:?}"))],
        ..RawFrame::default()
    })
}

/// Reads one frame of a .npz file with u and v, and optionally x, y, t, sigma_u, sigma_v, valid, solid, depth.
///
/// # Errors
/// [`IoError`] for a file that is not an archive, missing arrays, or arrays whose shapes do not agree.
pub fn read_npz(path: &Path, request: &ArrayRequest) -> Result<RawFrame, IoError> {
    let file = File::open(path).map_err(|e| IoError::system("read", path, e))?;
    let archive = zip::ZipArchive::new(BufReader::new(file)).map_err(|e| {
        IoError::content(
            path,
            "content",
            format!("not a .npz archive ({e}); the file may be cut off or of another kind"),
        )
    })?;
    let mut archive = Archive { path, request, archive, found: Vec::new() };
    let (u_shape, v_shape) = (archive.shape("u")?, archive.shape("v")?);
    let (Some(u_shape), Some(v_shape)) = (&u_shape, &v_shape) else {
        let role = if u_shape.is_none() { "u" } else { "v" };
        let names = archive.names();
        return Err(IoError::content(
            path,
            "archive",
            format!(
                "no array `{role}`; it holds {}; name it with `--array {role}=NAME`",
                if names.is_empty() { "nothing".to_owned() } else { names.join(", ") }
            ),
        ));
    };
    if u_shape != v_shape {
        return Err(IoError::content(path, "arrays u, v", format!("shapes differ: u {u_shape:?}, v {v_shape:?}")));
    }
    let (frames, rows, columns) = match u_shape[..] {
        [ny, nx] => (1, ny, nx),
        [nt, ny, nx] => (nt, ny, nx),
        _ => {
            return Err(IoError::content(
                path,
                "array u",
                format!("shape {u_shape:?}; expected (ny, nx) or (nt, ny, nx)"),
            ));
        }
    };
    if request.frame >= frames {
        return Err(beyond(path, request.frame, frames));
    }
    let mut out = RawFrame { frames, frame: request.frame, format: "NumPy archive".to_owned(), ..RawFrame::default() };
    let mut swap = is_swapped(request)?;
    if request.order.is_none() && rows != columns {
        let lengths = (archive.shape("x")?, archive.shape("y")?);
        if lengths == (Some(vec![rows]), Some(vec![columns])) {
            swap = true;
            out.remarks.push(Remark::new(
                RemarkKind::DimensionsReordered,
                format!("x has {rows} positions and y {columns}: the arrays {u_shape:?} are taken as (x, y)"),
            ));
        }
    }
    let shape = if swap { (columns, rows) } else { (rows, columns) };
    let mut plane = |role: &str| -> Result<Option<Array2<f64>>, IoError> {
        let Some(array) = archive.plane(role, frames)? else { return Ok(None) };
        let array = turned(array, swap);
        if array.dim() == shape {
            Ok(Some(array))
        } else {
            Err(IoError::content(path, format!("array {role}"), format!("shape {:?}; u has {shape:?}", array.dim())))
        }
    };
    out.u = plane("u")?.unwrap_or_default();
    out.v = plane("v")?.unwrap_or_default();
    out.sigma_u = plane("sigma_u")?;
    out.sigma_v = plane("sigma_v")?;
    out.valid = plane("valid")?.map(|a| a.mapv(|v| v.is_finite() && v != 0.0));
    out.solid = plane("solid")?.map(|a| a.mapv(|v| if v.is_finite() && v > 0.0 { v as u16 } else { 0 }));
    out.depth = plane("depth")?;
    for (role, n) in [("x", shape.1), ("y", shape.0)] {
        let Some(own_shape) = archive.shape(role)? else { continue };
        let (axis, resolution) = if own_shape.len() == 1 {
            let (line, resolution) = archive.line(role)?.unwrap_or_default();
            if line.len() != n {
                return Err(IoError::content(
                    path,
                    format!("array {role}"),
                    format!(
                        "{} positions for {n} {} of u {shape:?}; if the arrays are transposed say `--order x,y`",
                        line.len(),
                        if role == "x" { "columns" } else { "rows" },
                    ),
                ));
            }
            (RawAxis::Line(line), resolution)
        } else {
            let mesh = turned(archive.plane(role, frames)?.unwrap_or_default(), swap);
            if mesh.dim() != shape {
                return Err(IoError::content(
                    path,
                    format!("array {role}"),
                    format!("shape {:?}; u has {shape:?}", mesh.dim()),
                ));
            }
            (RawAxis::Mesh(mesh), None)
        };
        if role == "x" {
            (out.x, out.x_resolution) = (Some(axis), resolution);
        } else {
            (out.y, out.y_resolution) = (Some(axis), resolution);
        }
    }
    if let Some((times, _)) = archive.line("t")? {
        out.time = times.get(request.frame).copied().filter(|t| t.is_finite());
    }
    out.found = archive.found;
    Ok(out)
}

/// Reads a mask or map: .npy of any number type.
///
/// # Errors
/// [`IoError`] as [`read_npy`], or for an array that is not plane.
pub fn read_npy_plane(path: &Path) -> Result<Array2<f64>, IoError> {
    let mut array = open_file(path)?;
    if array.header.shape.len() != 2 {
        return Err(array.bad(format!("shape {:?}; expected two dimensions (ny, nx)", array.header.shape)));
    }
    array.plane(&[])
}

fn beyond(path: &Path, frame: usize, frames: usize) -> IoError {
    IoError::content(path, format!("frame {frame}"), format!("the file holds {frames} frames, counted from 0"))
}

/// Whether `--order` says that x comes before y.
fn is_swapped(request: &ArrayRequest) -> Result<bool, IoError> {
    match request.order.as_deref().map(|o| o.replace([' ', ','], "")).as_deref() {
        None | Some("yx" | "tyx") => Ok(false),
        Some("xy" | "txy") => Ok(true),
        Some(other) => Err(IoError::setting(
            "order",
            format!("`{other}` is not an order of this file; write y,x or x,y, with t in front for a series"),
        )),
    }
}

fn turned(array: Array2<f64>, swap: bool) -> Array2<f64> {
    if swap { array.reversed_axes().as_standard_layout().into_owned() } else { array }
}

/// Arrays of a .npz file by role.
struct Archive<'a> {
    path: &'a Path,
    request: &'a ArrayRequest,
    archive: zip::ZipArchive<BufReader<File>>,
    found: Vec<(String, String)>,
}

impl Archive<'_> {
    fn names(&self) -> Vec<String> {
        self.archive.file_names().map(|n| n.trim_end_matches(".npy").to_owned()).collect()
    }

    /// Opens the array of a role; `None` when there is none.
    fn open(&mut self, role: &str) -> Result<Option<ArrayFile<'_, impl Read>>, IoError> {
        let names = self.names();
        let same = |n: &&String| n.eq_ignore_ascii_case(role) || (role == "t" && n.eq_ignore_ascii_case("time"));
        let name = match self.request.arrays.get(role) {
            Some(name) => name.trim_end_matches(".npy").to_owned(),
            None => match names.iter().find(same) {
                Some(name) => name.clone(),
                None => return Ok(None),
            },
        };
        let place = format!("array `{name}`");
        let entry = self.archive.by_name(&format!("{name}.npy")).map_err(|e| {
            let problem = if names.contains(&name) {
                format!("cannot be unpacked: {e}")
            } else {
                format!("not in the archive; it holds {}", names.join(", "))
            };
            IoError::content(self.path, &place, problem)
        })?;
        let stored = entry.size();
        ArrayFile::open(self.path, &name, entry, stored, |reader, n| {
            io::copy(&mut reader.by_ref().take(n), &mut io::sink()).map(drop)
        })
        .map(Some)
    }

    fn shape(&mut self, role: &str) -> Result<Option<Vec<usize>>, IoError> {
        Ok(self.open(role)?.map(|a| a.header.shape))
    }

    /// The wanted frame of an array with two or three dimensions.
    fn plane(&mut self, role: &str, frames: usize) -> Result<Option<Array2<f64>>, IoError> {
        let frame = self.request.frame;
        let Some(mut array) = self.open(role)? else { return Ok(None) };
        let lead = match array.header.shape[..] {
            [_, _] => vec![],
            [n, _, _] if n == frames => vec![frame],
            _ => {
                let problem = format!("shape {:?} does not fit u with {frames} frames", array.header.shape);
                return Err(array.bad(problem));
            }
        };
        let plane = array.plane(&lead)?;
        let label = format!("array `{}`, {}", array.name, array.header.label());
        drop(array);
        self.found.push((role.to_owned(), label));
        Ok(Some(plane))
    }

    /// All values of an array, and the resolution of its number type at the largest of them.
    fn line(&mut self, role: &str) -> Result<Option<(Vec<f64>, Option<f64>)>, IoError> {
        let Some(mut array) = self.open(role)? else { return Ok(None) };
        let values = array.all()?;
        let largest = values.iter().fold(0.0, |m: f64, v| m.max(v.abs()));
        let resolution = match array.header.kind.as_str() {
            "f4" => Some(ROUNDING * largest * f64::from(f32::EPSILON)),
            "f2" => Some(ROUNDING * largest * f64::from(f16::EPSILON)),
            _ => None,
        };
        let label = format!("array `{}`, {}", array.name, array.header.label());
        drop(array);
        self.found.push((role.to_owned(), label));
        Ok(Some((values, resolution)))
    }
}

/// What the header of a .npy file says.
struct Header {
    descr: String,
    kind: String,
    size: usize,
    big: bool,
    fortran: bool,
    shape: Vec<usize>,
}

impl Header {
    fn label(&self) -> String {
        format!("{} {:?}{}", self.descr, self.shape, if self.fortran { " in Fortran order" } else { "" })
    }
}

/// A .npy file, or one inside an archive, opened at its data.
struct ArrayFile<'a, R: Read> {
    path: &'a Path,
    name: String,
    header: Header,
    reader: R,
    skip: fn(&mut R, u64) -> io::Result<()>,
}

fn open_file(path: &Path) -> Result<ArrayFile<'_, BufReader<File>>, IoError> {
    let failed = |e| IoError::system("read", path, e);
    let file = File::open(path).map_err(failed)?;
    let size = file.metadata().map_err(failed)?.len();
    ArrayFile::open(path, "array", BufReader::new(file), size, |reader, n| {
        i64::try_from(n).map_err(io::Error::other).and_then(|n| reader.seek_relative(n))
    })
}

impl<'a, R: Read> ArrayFile<'a, R> {
    /// Reads the header and holds it against the number of bytes that are there.
    fn open(
        path: &'a Path,
        name: &str,
        mut reader: R,
        stored: u64,
        skip: fn(&mut R, u64) -> io::Result<()>,
    ) -> Result<Self, IoError> {
        let place = if name == "array" { "array".to_owned() } else { format!("array `{name}`") };
        let bad = |problem: String| IoError::content(path, &place, problem);
        let (header, start) = read_header(&mut reader).map_err(bad)?;
        let held = stored.saturating_sub(start);
        let count = header.shape.iter().try_fold(1u64, |n, &d| n.checked_mul(d as u64));
        let promised = count.and_then(|n| n.checked_mul(header.size as u64));
        if promised != Some(held) {
            return Err(bad(format!(
                "the header promises shape {:?} of `{}`, the file holds {held} bytes of data: it is cut off or its header is wrong",
                header.shape, header.descr
            )));
        }
        if header.shape.contains(&0) {
            return Err(bad(format!("shape {:?} holds nothing", header.shape)));
        }
        Ok(Self { path, name: name.to_owned(), header, reader, skip })
    }

    fn bad(&self, problem: String) -> IoError {
        IoError::content(
            self.path,
            if self.name == "array" { "array".to_owned() } else { format!("array `{}`", self.name) },
            problem,
        )
    }

    /// Values `first` to `first + count` in the order of the file.
    fn values(&mut self, first: usize, count: usize) -> Result<Vec<f64>, IoError> {
        if count > NODE_LIMIT {
            return Err(self.bad(format!(
                "{count} values at once, more than {NODE_LIMIT}; cut the region, or save a series in C order"
            )));
        }
        let size = self.header.size;
        let read = (self.skip)(&mut self.reader, first as u64 * size as u64)
            .and_then(|()| convert(&mut self.reader, &self.header, count));
        read.map_err(|e| self.bad(format!("cannot be read to its end: {e}")))
    }

    fn all(&mut self) -> Result<Vec<f64>, IoError> {
        let count = self.header.shape.iter().product();
        self.values(0, count)
    }

    /// The plane at the indices `lead` of the dimensions before the last two.
    fn plane(&mut self, lead: &[usize]) -> Result<Array2<f64>, IoError> {
        let shape = self.header.shape.clone();
        let (Some(&nx), Some(&ny)) = (shape.last(), shape.iter().rev().nth(1)) else {
            return Err(self.bad(format!("shape {shape:?}; expected two dimensions at least")));
        };
        let array = if self.header.fortran {
            // The first index runs fastest: a frame is scattered over the whole file.
            let values = self.all()?;
            let mut stride = 1;
            let mut start = 0;
            for (&index, &length) in lead.iter().zip(&shape) {
                start += index * stride;
                stride *= length;
            }
            Array2::from_shape_fn((ny, nx), |(j, i)| values[start + stride * (j + ny * i)])
        } else {
            let number = lead.iter().zip(&shape).fold(0, |n, (&index, &length)| n * length + index);
            let values = self.values(number * ny * nx, ny * nx)?;
            Array2::from_shape_vec((ny, nx), values).map_err(|e| self.bad(e.to_string()))?
        };
        Ok(array)
    }
}

/// Header and number of bytes before the data.
fn read_header(reader: &mut impl Read) -> Result<(Header, u64), String> {
    let mut fixed = [0u8; 10];
    reader.read_exact(&mut fixed).map_err(|_| "not in the .npy format".to_owned())?;
    if !fixed.starts_with(b"\x93NUMPY") {
        return Err("not in the .npy format".to_owned());
    }
    let cut = |_| "the header is cut off".to_owned();
    let (start, length) = match fixed[6] {
        1 => (10, usize::from(u16::from_le_bytes([fixed[8], fixed[9]]))),
        2 | 3 => {
            let mut more = [0u8; 2];
            reader.read_exact(&mut more).map_err(cut)?;
            (12, u32::from_le_bytes([fixed[8], fixed[9], more[0], more[1]]) as usize)
        }
        version => return Err(format!("format version {version} is not known")),
    };
    if length > HEADER_LIMIT {
        return Err(format!("a header of {length} bytes; the file is damaged"));
    }
    let mut text = vec![0u8; length];
    reader.read_exact(&mut text).map_err(cut)?;
    let text = String::from_utf8(text).map_err(|_| "the header is not text; the file is damaged".to_owned())?;
    let after = |key: &str| text.split_once(&format!("'{key}':")).map(|(_, rest)| rest.trim_start());
    let descr = after("descr").ok_or("the header names no element type")?;
    let Some((descr, _)) = descr.strip_prefix('\'').and_then(|d| d.split_once('\'')) else {
        return Err("a structured element type; expected plain numbers".to_owned());
    };
    let fortran = after("fortran_order").is_some_and(|f| f.starts_with("True"));
    let shape: Option<Vec<usize>> =
        after("shape").and_then(|s| s.strip_prefix('(')).and_then(|s| s.split_once(')')).and_then(|(list, _)| {
            list.split(',').map(str::trim).filter(|s| !s.is_empty()).map(|s| s.parse().ok()).collect()
        });
    let shape = shape.ok_or("the header names no shape")?;
    let kind = descr.trim_start_matches(['<', '>', '|', '=']).to_owned();
    let size = match kind.as_str() {
        "b1" | "i1" | "u1" => 1,
        "i2" | "u2" | "f2" => 2,
        "i4" | "u4" | "f4" => 4,
        "i8" | "u8" | "f8" => 8,
        _ => return Err(format!("element type `{descr}`; expected real numbers (f2 to f8, integers, bool)")),
    };
    let big = descr.starts_with('>');
    Ok((Header { descr: descr.to_owned(), kind, size, big, fortran, shape }, start + length as u64))
}

/// Reads `count` numbers; memory grows with what is really there.
fn convert(reader: &mut impl Read, header: &Header, count: usize) -> io::Result<Vec<f64>> {
    const PIECE: usize = 1 << 13;
    let mut out: Vec<f64> = Vec::with_capacity(count.min(1 << 20));
    let mut buffer = vec![0u8; PIECE * header.size];
    let mut left = count;
    while left > 0 {
        let now = left.min(PIECE);
        let bytes = &mut buffer[..now * header.size];
        reader.read_exact(bytes)?;
        macro_rules! push {
            ($type:ty, $convert:expr) => {{
                let convert = $convert;
                out.extend(
                    bytes.as_chunks::<{ size_of::<$type>() }>().0.iter().map(|&b| {
                        convert(if header.big { <$type>::from_be_bytes(b) } else { <$type>::from_le_bytes(b) })
                    }),
                );
            }};
        }
        match header.kind.as_str() {
            "f8" => push!(f64, |v: f64| v),
            "f4" => push!(f32, f64::from),
            "f2" => push!(f16, f64::from),
            "i1" => push!(i8, f64::from),
            "i2" => push!(i16, f64::from),
            "i4" => push!(i32, f64::from),
            "i8" => push!(i64, |v: i64| v as f64),
            "u2" => push!(u16, f64::from),
            "u4" => push!(u32, f64::from),
            "u8" => push!(u64, |v: u64| v as f64),
            _ => push!(u8, f64::from),
        }
        left -= now;
    }
    Ok(out)
}
