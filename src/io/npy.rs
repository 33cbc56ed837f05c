//! NumPy files: .npy with both components, .npz with named arrays.

use std::fs;
use std::io::{Cursor, Read};
use std::path::Path;

use half::f16;
use ndarray::{Array1, Array2, ArrayD, Axis, Ix1, Ix2, IxDyn, ShapeBuilder};

use super::error::IoError;
use super::raw::{RawAxis, RawFrame};
use super::request::ArrayRequest;

/// Reads one frame of a .npy file, `(2, ny, nx)` or `(nt, 2, ny, nx)`.
///
/// # Errors
/// [`IoError`] for another shape, an element type that is not a number, or a header that promises more than the file holds.
pub fn read_npy(path: &Path, request: &ArrayRequest) -> Result<RawFrame, IoError> {
    let bytes = fs::read(path).map_err(|e| IoError::system("read", path, e))?;
    let (array, kind) = parse(path, "array", &bytes)?;
    let wrong = || {
        IoError::content(path, "array", format!("shape {:?}; expected (2, ny, nx) or (nt, 2, ny, nx)", array.shape()))
    };
    let components = match array.ndim() {
        3 if array.shape()[0] == 2 => array.view().insert_axis(Axis(0)),
        4 if array.shape()[1] == 2 => array.view(),
        _ => return Err(wrong()),
    };
    let frames = components.shape()[0];
    if request.frame >= frames {
        return Err(IoError::content(
            path,
            format!("frame {}", request.frame),
            format!("the file holds {frames} frames, counted from 0"),
        ));
    }
    let frame = components.index_axis_move(Axis(0), request.frame);
    let part =
        |k: usize| frame.index_axis(Axis(0), k).into_dimensionality::<Ix2>().map(|a| a.to_owned()).map_err(|_| wrong());
    Ok(RawFrame {
        u: part(0)?,
        v: part(1)?,
        frames,
        frame: request.frame,
        format: format!("NumPy array, {kind}"),
        found: vec![("u, v".to_owned(), format!("{:?}", array.shape()))],
        ..RawFrame::default()
    })
}

/// Reads one frame of a .npz file with u and v, and optionally x, y, t, sigma_u, sigma_v, valid, solid, depth.
///
/// # Errors
/// [`IoError`] for a file that is not an archive, missing arrays, or arrays whose shapes do not agree.
pub fn read_npz(path: &Path, request: &ArrayRequest) -> Result<RawFrame, IoError> {
    let bytes = fs::read(path).map_err(|e| IoError::system("read", path, e))?;
    let mut archive = zip::ZipArchive::new(Cursor::new(&bytes)).map_err(|e| {
        IoError::content(
            path,
            "content",
            format!("not a .npz archive ({e}); the file may be cut off or of another kind"),
        )
    })?;
    let names: Vec<String> = archive.file_names().map(|n| n.trim_end_matches(".npy").to_owned()).collect();
    let mut load = |role: &str| -> Result<Option<(ArrayD<f64>, String)>, IoError> {
        let wanted = request.arrays.get(role);
        let name = match wanted {
            Some(name) => name.clone(),
            None => match names
                .iter()
                .find(|n| n.eq_ignore_ascii_case(role) || (role == "t" && n.eq_ignore_ascii_case("time")))
            {
                Some(name) => name.clone(),
                None => return Ok(None),
            },
        };
        let mut entry = match archive.by_name(&format!("{name}.npy")) {
            Ok(entry) => entry,
            Err(_) => {
                return Err(IoError::content(
                    path,
                    format!("array `{name}`"),
                    format!("not in the archive; it holds {}", names.join(", ")),
                ));
            }
        };
        let mut content = Vec::new();
        entry
            .read_to_end(&mut content)
            .map_err(|e| IoError::content(path, format!("array `{name}`"), format!("cannot be unpacked: {e}")))?;
        let (array, kind) = parse(path, &name, &content)?;
        Ok(Some((array, format!("array `{name}`, {kind}"))))
    };
    let missing = |role: &str| {
        IoError::content(
            path,
            "archive",
            format!(
                "no array `{role}`; it holds {}; name it with `--array {role}=NAME`",
                if names.is_empty() { "nothing".to_owned() } else { names.join(", ") }
            ),
        )
    };
    let u = load("u")?.ok_or_else(|| missing("u"))?;
    let v = load("v")?.ok_or_else(|| missing("v"))?;
    if u.0.shape() != v.0.shape() {
        return Err(IoError::content(
            path,
            "arrays u, v",
            format!("shapes differ: u {:?}, v {:?}", u.0.shape(), v.0.shape()),
        ));
    }
    let swap = match request.order.as_deref().map(|o| o.replace([' ', ','], "")) {
        None => false,
        Some(order) => match order.as_str() {
            "yx" | "tyx" => false,
            "xy" | "txy" => true,
            other => {
                return Err(IoError::setting(
                    "order",
                    format!("`{other}` is not an order of this file; write y,x or x,y, with t in front for a series"),
                ));
            }
        },
    };
    let frames = if u.0.ndim() == 3 { u.0.shape()[0] } else { 1 };
    if !(2..=3).contains(&u.0.ndim()) {
        return Err(IoError::content(
            path,
            "array u",
            format!("shape {:?}; expected (ny, nx) or (nt, ny, nx)", u.0.shape()),
        ));
    }
    if request.frame >= frames {
        return Err(IoError::content(
            path,
            format!("frame {}", request.frame),
            format!("the file holds {frames} frames, counted from 0"),
        ));
    }
    let mut found = vec![("u".to_owned(), u.1.clone()), ("v".to_owned(), v.1.clone())];
    let plane = |role: &str, array: ArrayD<f64>| -> Result<Array2<f64>, IoError> {
        let shape = array.shape().to_vec();
        let array =
            if array.ndim() == 3 && shape[0] == frames { array.index_axis_move(Axis(0), request.frame) } else { array };
        let array = array.into_dimensionality::<Ix2>().map_err(|_| {
            IoError::content(path, format!("array {role}"), format!("shape {shape:?} does not fit u {:?}", u.0.shape()))
        })?;
        let array = if swap { array.reversed_axes().as_standard_layout().into_owned() } else { array };
        Ok(array)
    };
    let mut out = RawFrame { frames, frame: request.frame, format: "NumPy archive".to_owned(), ..RawFrame::default() };
    out.u = plane("u", u.0.clone())?;
    out.v = plane("v", v.0)?;
    let fits = |role: &str, array: &Array2<f64>| {
        if array.dim() == out.u.dim() {
            Ok(())
        } else {
            Err(IoError::content(
                path,
                format!("array {role}"),
                format!("shape {:?}; u has {:?}", array.dim(), out.u.dim()),
            ))
        }
    };
    let mut optional = Vec::new();
    for role in ["sigma_u", "sigma_v", "valid", "solid", "depth"] {
        let array = match load(role)? {
            Some((array, kind)) => {
                found.push((role.to_owned(), kind));
                let array = plane(role, array)?;
                fits(role, &array)?;
                Some(array)
            }
            None => None,
        };
        optional.push(array);
    }
    let mut axes = Vec::new();
    for (role, n) in [("x", out.u.ncols()), ("y", out.u.nrows())] {
        axes.push(match load(role)? {
            None => None,
            Some((array, kind)) => {
                found.push((role.to_owned(), kind));
                if array.ndim() == 1 {
                    if array.len() != n {
                        return Err(IoError::content(
                            path,
                            format!("array {role}"),
                            format!(
                                "{} positions for {n} {} of u {:?}; if the arrays are transposed say `--order x,y`",
                                array.len(),
                                if role == "x" { "columns" } else { "rows" },
                                out.u.dim()
                            ),
                        ));
                    }
                    Some(RawAxis::Line(
                        array.into_dimensionality::<Ix1>().map(|a: Array1<f64>| a.to_vec()).unwrap_or_default(),
                    ))
                } else {
                    let mesh = plane(role, array)?;
                    fits(role, &mesh)?;
                    Some(RawAxis::Mesh(mesh))
                }
            }
        });
    }
    if let Some((times, kind)) = load("t")? {
        found.push(("t".to_owned(), kind));
        out.time = times.iter().nth(request.frame).copied().filter(|t| t.is_finite());
    }
    let mut optional = optional.into_iter();
    let mut next = || optional.next().flatten();
    out.sigma_u = next();
    out.sigma_v = next();
    out.valid = next().map(|a| a.mapv(|v| v.is_finite() && v != 0.0));
    out.solid = next().map(|a| a.mapv(|v| if v.is_finite() && v > 0.0 { v as u16 } else { 0 }));
    out.depth = next();
    let mut axes = axes.into_iter();
    out.x = axes.next().flatten();
    out.y = axes.next().flatten();
    out.found = found;
    Ok(out)
}

/// Reads a mask: .npy of any number type.
///
/// # Errors
/// [`IoError`] as [`read_npy`], or for an array that is not plane.
pub fn read_npy_plane(path: &Path) -> Result<Array2<f64>, IoError> {
    let bytes = fs::read(path).map_err(|e| IoError::system("read", path, e))?;
    let (array, _) = parse(path, "array", &bytes)?;
    let shape = array.shape().to_vec();
    array
        .into_dimensionality::<Ix2>()
        .map_err(|_| IoError::content(path, "array", format!("shape {shape:?}; expected two dimensions (ny, nx)")))
}

/// Array and element type of a .npy image in memory.
fn parse(path: &Path, name: &str, bytes: &[u8]) -> Result<(ArrayD<f64>, String), IoError> {
    let place = || format!("array `{name}`");
    let bad = |problem: String| IoError::content(path, place(), problem);
    if bytes.len() < 10 || &bytes[..6] != b"\x93NUMPY" {
        return Err(bad("not in the .npy format".to_owned()));
    }
    let (start, length): (usize, usize) = match bytes[6] {
        1 => (10, usize::from(u16::from_le_bytes([bytes[8], bytes[9]]))),
        2 | 3 if bytes.len() >= 12 => (12, u32::from_le_bytes([bytes[8], bytes[9], bytes[10], bytes[11]]) as usize),
        version => return Err(bad(format!("format version {version} is not known"))),
    };
    let header = bytes
        .get(start..start.saturating_add(length))
        .and_then(|h| std::str::from_utf8(h).ok())
        .ok_or_else(|| bad("the header is cut off".to_owned()))?;
    let after = |key: &str| header.split_once(&format!("'{key}':")).map(|(_, rest)| rest.trim_start());
    let descr = after("descr").ok_or_else(|| bad("the header names no element type".to_owned()))?;
    let Some(descr) = descr.strip_prefix('\'').and_then(|d| d.split_once('\'')).map(|(d, _)| d) else {
        return Err(bad("a structured element type; expected plain numbers".to_owned()));
    };
    let fortran = after("fortran_order").is_some_and(|f| f.starts_with("True"));
    let shape: Option<Vec<usize>> = after("shape")
        .and_then(|s| s.strip_prefix('('))
        .and_then(|s| s.split_once(')'))
        .map(|(list, _)| {
            list.split(',').map(str::trim).filter(|s| !s.is_empty()).map(str::parse).collect::<Result<_, _>>()
        })
        .and_then(Result::ok);
    let shape = shape.ok_or_else(|| bad("the header names no shape".to_owned()))?;
    let kind = &descr[descr.len().min(1)..];
    if !kind.starts_with(['f', 'i', 'u', 'b']) {
        return Err(bad(format!("element type `{descr}`; expected real numbers (f2 to f8, integers, bool)")));
    }
    let size: usize = kind.get(1..).and_then(|s| s.parse().ok()).unwrap_or(0);
    let data = &bytes[start + length..];
    let count = shape.iter().try_fold(1usize, |n, &d| n.checked_mul(d));
    let promised = count.and_then(|n| n.checked_mul(size.max(1)));
    if promised != Some(data.len()) {
        return Err(bad(format!(
            "the header promises shape {shape:?} of `{descr}`, the file holds {} bytes of data: it is cut off or its header is wrong",
            data.len()
        )));
    }
    let big = descr.starts_with('>');
    macro_rules! read {
        ($type:ty, $convert:expr) => {{
            const N: usize = size_of::<$type>();
            let convert = $convert;
            data.chunks_exact(N)
                .map(|chunk| {
                    let mut b = [0u8; N];
                    b.copy_from_slice(chunk);
                    convert(if big { <$type>::from_be_bytes(b) } else { <$type>::from_le_bytes(b) })
                })
                .collect::<Vec<f64>>()
        }};
    }
    let values = match kind {
        "f8" => read!(f64, |v| v),
        "f4" => read!(f32, f64::from),
        "f2" => read!(f16, f64::from),
        "i1" => read!(i8, f64::from),
        "i2" => read!(i16, f64::from),
        "i4" => read!(i32, f64::from),
        "i8" => read!(i64, |v| v as f64),
        "u1" | "b1" => read!(u8, f64::from),
        "u2" => read!(u16, f64::from),
        "u4" => read!(u32, f64::from),
        "u8" => read!(u64, |v| v as f64),
        other => return Err(bad(format!("element type `{other}`; expected real numbers (f2 to f8, integers, bool)"))),
    };
    if shape.contains(&0) {
        return Err(bad(format!("shape {shape:?} holds nothing")));
    }
    let array = if fortran {
        ArrayD::from_shape_vec(IxDyn(&shape).f(), values).map(|a| a.as_standard_layout().into_owned())
    } else {
        ArrayD::from_shape_vec(IxDyn(&shape), values)
    };
    let array = array.map_err(|e| bad(e.to_string()))?;
    Ok((array, format!("{descr} {shape:?}{}", if fortran { " in Fortran order" } else { "" })))
}
