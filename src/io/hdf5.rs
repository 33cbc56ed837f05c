//! HDF5 of any kind: plain, NetCDF-4, MATLAB 7.3.  Finds arrays by name anywhere in the tree and reads one frame.

use std::path::Path;

use hdf5::types::{FixedAscii, FixedUnicode, TypeDescriptor, VarLenAscii, VarLenUnicode};
use hdf5::{Attribute, Dataset, File, Group, Hyperslab, Selection, SliceOrIndex};
use ndarray::{Array2, ArrayD, IxDyn};

use super::error::IoError;
use super::raw::{RawAxis, RawFrame, RawUnits};
use super::request::{ArrayRequest, ROLES};
use crate::field::{Remark, RemarkKind};

/// Largest number of nodes of one frame; more would not fit an ordinary machine.
pub const NODE_LIMIT: usize = 1 << 27;

/// Bytes of values a byte of file can stand for (deflate reaches about 1030); a file that claims more lies.
const MOST_PER_BYTE: u64 = 2000;

/// Datasets looked at; a file with more needs `--array`.
const DATASET_LIMIT: usize = 20_000;

/// Names by which a role is known, the plain one first.
fn names(role: &str) -> &'static [&'static str] {
    match role {
        "u" => &["u", "vx", "ux", "u_x", "v_x", "velocity_x", "x_velocity", "velocity_u", "u_velocity", "u_original"],
        "v" => &["v", "vy", "uy", "u_y", "v_y", "velocity_y", "y_velocity", "velocity_v", "v_velocity", "v_original"],
        "x" => &["x", "xc", "x_coordinate", "coordinate_x", "x_pos"],
        "y" => &["y", "yc", "y_coordinate", "coordinate_y", "y_pos"],
        "t" => &["t", "time", "times"],
        "sigma_u" => &["sigma_u", "u_sigma", "uncertainty_u", "u_uncertainty"],
        "sigma_v" => &["sigma_v", "v_sigma", "uncertainty_v", "v_uncertainty"],
        "valid" => &["valid"],
        "solid" => &["solid"],
        "depth" => &["depth"],
        _ => &[],
    }
}

/// CF standard names of a role.
fn standard_names(role: &str) -> &'static [&'static str] {
    match role {
        "u" => &[
            "x_wind",
            "eastward_wind",
            "sea_water_x_velocity",
            "eastward_sea_water_velocity",
            "surface_eastward_sea_water_velocity",
        ],
        "v" => &[
            "y_wind",
            "northward_wind",
            "sea_water_y_velocity",
            "northward_sea_water_velocity",
            "surface_northward_sea_water_velocity",
        ],
        "x" => &["projection_x_coordinate"],
        "y" => &["projection_y_coordinate"],
        "t" => &["time"],
        _ => &[],
    }
}

/// Reads one frame.
///
/// # Errors
/// [`IoError`] naming the dataset: damaged file, missing or ambiguous arrays, shapes that do not agree, values that are not numbers, a
/// shape larger than the file can hold.
pub fn read_hdf5(path: &Path, request: &ArrayRequest) -> Result<RawFrame, IoError> {
    hdf5::silence_errors(true);
    let size = std::fs::metadata(path).map_err(|e| IoError::system("read", path, e))?.len();
    let file = File::open(path).map_err(|e| {
        IoError::content(
            path,
            "content",
            format!("the HDF5 library cannot open it (cut off, damaged or of a newer format?): {}", brief(&e)),
        )
    })?;
    let matlab = starts_with(path, b"MATLAB 7.3");
    let mut all = Vec::new();
    collect(path, &file, 0, &mut all)?;
    let reader = Reader { path, size, all, request };
    reader.frame(matlab)
}

fn brief(e: &hdf5::Error) -> String {
    e.to_string().split(['\n', ':']).next().unwrap_or_default().to_owned()
}

fn starts_with(path: &Path, magic: &[u8]) -> bool {
    use std::io::Read;
    let mut head = vec![0; magic.len()];
    std::fs::File::open(path).and_then(|mut f| f.read_exact(&mut head)).is_ok() && head == magic
}

/// All datasets below a group.
fn collect(path: &Path, group: &Group, depth: usize, out: &mut Vec<Dataset>) -> Result<(), IoError> {
    if depth > 32 || out.len() > DATASET_LIMIT {
        return Ok(());
    }
    let failed =
        |e: hdf5::Error| IoError::content(path, group.name(), format!("the tree cannot be read: {}", brief(&e)));
    out.extend(group.datasets().map_err(failed)?);
    for inner in group.groups().map_err(failed)? {
        collect(path, &inner, depth + 1, out)?;
    }
    Ok(())
}

/// First number of an attribute.
fn number(dataset: &Dataset, name: &str) -> Option<f64> {
    let attribute = dataset.attr(name).ok()?;
    attribute.read_scalar::<f64>().ok().or_else(|| attribute.read_1d::<f64>().ok().and_then(|a| a.first().copied()))
}

/// Text of an attribute of any string type.
fn text(dataset: &Dataset, name: &str) -> Option<String> {
    let attribute: Attribute = dataset.attr(name).ok()?;
    let kind = attribute.dtype().ok()?.to_descriptor().ok()?;
    let first = |list: Vec<String>| list.into_iter().next();
    match kind {
        TypeDescriptor::VarLenUnicode => {
            attribute.read_scalar::<VarLenUnicode>().map(|t| t.to_string()).ok().or_else(|| {
                attribute
                    .read_raw::<VarLenUnicode>()
                    .ok()
                    .and_then(|v| first(v.iter().map(ToString::to_string).collect()))
            })
        }
        TypeDescriptor::VarLenAscii => {
            attribute.read_scalar::<VarLenAscii>().map(|t| t.to_string()).ok().or_else(|| {
                attribute
                    .read_raw::<VarLenAscii>()
                    .ok()
                    .and_then(|v| first(v.iter().map(ToString::to_string).collect()))
            })
        }
        TypeDescriptor::FixedAscii(_) => attribute.read_scalar::<FixedAscii<256>>().map(|t| t.to_string()).ok(),
        TypeDescriptor::FixedUnicode(_) => attribute.read_scalar::<FixedUnicode<256>>().map(|t| t.to_string()).ok(),
        _ => None,
    }
}

fn leaf(dataset: &Dataset) -> String {
    dataset.name().rsplit('/').next().unwrap_or_default().to_lowercase()
}

fn describe(dataset: &Dataset) -> String {
    let kind = dataset.dtype().and_then(|d| d.to_descriptor()).map_or_else(|_| "numbers".to_owned(), |d| d.to_string());
    format!("{}, {kind} {:?}", dataset.name(), dataset.shape())
}

struct Reader<'a> {
    path: &'a Path,
    size: u64,
    all: Vec<Dataset>,
    request: &'a ArrayRequest,
}

/// Which dimension of an array is time, y, x.
#[derive(Clone, Copy)]
struct Order {
    time: Option<usize>,
    y: usize,
    x: usize,
}

impl Reader<'_> {
    fn bad(&self, place: impl Into<String>, problem: impl Into<String>) -> IoError {
        IoError::content(self.path, place, problem)
    }

    /// Dataset of a role: named by the user, else found.
    fn find(&self, role: &str) -> Result<Option<&Dataset>, IoError> {
        if let Some(wanted) = self.request.arrays.get(role) {
            let wanted = format!("/{}", wanted.trim_start_matches('/'));
            return self.all.iter().find(|d| d.name() == wanted).map(Some).ok_or_else(|| {
                self.bad(format!("dataset {wanted}"), format!("not in the file; it holds {}", self.listing()))
            });
        }
        let exact: Vec<&Dataset> = self.all.iter().filter(|d| leaf(d) == names(role)[0]).collect();
        let found = if exact.is_empty() {
            self.all
                .iter()
                .filter(|d| {
                    names(role).contains(&leaf(d).as_str())
                        || text(d, "standard_name").is_some_and(|s| standard_names(role).contains(&s.as_str()))
                })
                .collect()
        } else {
            exact
        };
        match found[..] {
            [] => Ok(None),
            [only] => Ok(Some(only)),
            _ => {
                let list: Vec<String> = found.iter().map(|d| d.name()).collect();
                Err(self.bad(
                    format!("array {role}"),
                    format!(
                        "{} candidates: {}; say which with `--array {role}={}`",
                        list.len(),
                        list.join(", "),
                        list[0]
                    ),
                ))
            }
        }
    }

    fn listing(&self) -> String {
        let list: Vec<String> = self.all.iter().take(20).map(|d| format!("{} {:?}", d.name(), d.shape())).collect();
        let more = if self.all.len() > 20 { format!(" and {} more", self.all.len() - 20) } else { String::new() };
        if list.is_empty() { "no datasets".to_owned() } else { format!("{}{more}", list.join(", ")) }
    }

    fn needed(&self, role: &str) -> Result<&Dataset, IoError> {
        self.find(role)?.ok_or_else(|| {
            self.bad(
                format!("array {role}"),
                format!("not found; the file holds {}; name it with `--array {role}=/path`", self.listing()),
            )
        })
    }

    /// Refuses what is no number, or a shape the file cannot hold.
    fn guard(&self, dataset: &Dataset, values: usize) -> Result<(), IoError> {
        let kind = dataset.dtype().and_then(|d| d.to_descriptor());
        if let Ok(kind) = &kind
            && !matches!(
                kind,
                TypeDescriptor::Integer(_)
                    | TypeDescriptor::Unsigned(_)
                    | TypeDescriptor::Float(_)
                    | TypeDescriptor::Boolean
                    | TypeDescriptor::Enum(_)
            )
        {
            return Err(self.bad(format!("dataset {}", dataset.name()), format!("holds {kind}; expected real numbers")));
        }
        let bytes = (values as u64).saturating_mul(kind.map_or(8, |k| k.size().max(1)) as u64);
        if values > NODE_LIMIT || bytes / MOST_PER_BYTE > self.size.max(1) {
            return Err(self.bad(
                format!("dataset {}", dataset.name()),
                format!(
                    "claims shape {:?}, more than a file of {} bytes can hold (or than {NODE_LIMIT} nodes a frame)",
                    dataset.shape(),
                    self.size
                ),
            ));
        }
        Ok(())
    }

    /// Values of a selection, gaps as NaN, packing undone.
    fn values(&self, dataset: &Dataset, selection: Option<Selection>) -> Result<ArrayD<f64>, IoError> {
        let failed = |e: hdf5::Error| {
            self.bad(
                format!("dataset {}", dataset.name()),
                format!("cannot be read (cut off, or a filter this build does not know): {}", brief(&e)),
            )
        };
        let mut values = match selection {
            Some(selection) => dataset.read_slice::<f64, _, IxDyn>(selection),
            None => dataset.read_dyn::<f64>(),
        }
        .map_err(failed)?;
        let gaps: Vec<f64> = ["_FillValue", "missing_value"].into_iter().filter_map(|n| number(dataset, n)).collect();
        let (scale, offset) =
            (number(dataset, "scale_factor").unwrap_or(1.0), number(dataset, "add_offset").unwrap_or(0.0));
        values.mapv_inplace(|v| {
            // A fill value stored as f32 and compared as f64 may differ in its last digits.
            if gaps.iter().any(|g| v == *g || (v - g).abs() <= 1e-6 * g.abs()) { f64::NAN } else { v * scale + offset }
        });
        Ok(values)
    }

    fn order(
        &self,
        dataset: &Dataset,
        matlab: bool,
        x: Option<&Dataset>,
        y: Option<&Dataset>,
        remarks: &mut Vec<Remark>,
    ) -> Result<Order, IoError> {
        let shape = dataset.shape();
        let place = || format!("dataset {}", dataset.name());
        if let Some(order) = &self.request.order {
            let letters: Vec<char> =
                order.chars().filter(|c| c.is_alphabetic()).map(|c| c.to_ascii_lowercase()).collect();
            let at = |c: char| letters.iter().position(|l| *l == c);
            return match (at('y'), at('x'), letters.len() == shape.len()) {
                (Some(y), Some(x), true) => Ok(Order { time: at('t'), y, x }),
                _ => Err(IoError::setting(
                    "order",
                    format!(
                        "`{order}` does not fit {} of shape {shape:?}; name every dimension once, for example t,y,x",
                        dataset.name()
                    ),
                )),
            };
        }
        let long: Vec<usize> = (0..shape.len()).filter(|&d| shape[d] != 1).collect();
        let dims = match (shape.len(), long.len()) {
            (2, _) => vec![0, 1],
            (_, 2 | 3) => long.clone(),
            _ => return Err(self.bad(place(), format!("shape {shape:?}; expected (ny, nx) or (nt, ny, nx)"))),
        };
        let length =
            |d: Option<&Dataset>| d.filter(|d| d.shape().iter().filter(|n| **n != 1).count() <= 1).map(|d| d.size());
        let (nx, ny) = (length(x), length(y));
        let fits = |yd: usize, xd: usize| nx.is_none_or(|n| n == shape[xd]) && ny.is_none_or(|n| n == shape[yd]);
        let spatial = |a: usize, b: usize, time: Option<usize>, remarks: &mut Vec<Remark>| -> Option<Order> {
            let plain = Order { time, y: a, x: b };
            let turned = Order { time, y: b, x: a };
            // A mesh of coordinates shows by itself along which dimension x runs.
            if let Some(runs_along_first) = x.and_then(|x| self.x_runs_along_first(x)) {
                return Some(if runs_along_first { turned } else { plain });
            }
            match (fits(a, b), fits(b, a)) {
                (true, false) => Some(plain),
                (false, true) => Some(turned),
                (false, false) => None,
                (true, true) => {
                    if shape[a] == shape[b] || (nx.is_none() && ny.is_none()) {
                        remarks.push(Remark::new(
                            RemarkKind::DimensionsReordered,
                            format!(
                                "{}: the lengths do not tell rows from columns; taken as {}, `--order` says otherwise",
                                dataset.name(),
                                if matlab { "(x, y), as MATLAB stores them" } else { "(y, x)" }
                            ),
                        ));
                    }
                    Some(if matlab { turned } else { plain })
                }
            }
        };
        let found = match dims[..] {
            [a, b] => spatial(a, b, (0..shape.len()).find(|d| *d != a && *d != b), remarks),
            [a, b, c] => spatial(b, c, Some(a), remarks).or_else(|| spatial(a, b, Some(c), remarks)),
            _ => None,
        };
        found.ok_or_else(|| {
            self.bad(
                place(),
                format!(
                    "shape {shape:?} does not fit {} positions in x and {} in y; say `--order`",
                    nx.unwrap_or(0),
                    ny.unwrap_or(0)
                ),
            )
        })
    }

    /// Whether x, given as a mesh, varies along its first dimension; `None` for a line.
    fn x_runs_along_first(&self, x: &Dataset) -> Option<bool> {
        let shape: Vec<usize> = x.shape().into_iter().filter(|n| *n != 1).collect();
        if shape.len() != 2 || self.guard(x, x.size()).is_err() {
            return None;
        }
        let values = self.values(x, None).ok()?;
        let plane = values.into_shape_with_order((shape[0], shape[1])).ok()?;
        let change = |a: (usize, usize), b: (usize, usize)| (plane[b] - plane[a]).abs();
        Some(change((0, 0), (shape[0] - 1, 0)) > change((0, 0), (0, shape[1] - 1)))
    }

    /// One frame of an array as `(ny, nx)`.
    fn plane(&self, dataset: &Dataset, order: Order) -> Result<Array2<f64>, IoError> {
        let shape = dataset.shape();
        if shape.len() <= order.x.max(order.y) {
            return Err(
                self.bad(format!("dataset {}", dataset.name()), format!("shape {shape:?} does not fit that of u"))
            );
        }
        let (ny, nx) = (shape[order.y], shape[order.x]);
        self.guard(dataset, ny.saturating_mul(nx))?;
        let frames = order.time.map_or(1, |t| shape[t]);
        if self.request.frame >= frames.max(1) {
            return Err(self.bad(
                format!("frame {}", self.request.frame),
                format!("{} holds {frames} frames, counted from 0", dataset.name()),
            ));
        }
        let slices: Vec<SliceOrIndex> = (0..shape.len())
            .map(|d| {
                if d == order.y || d == order.x {
                    SliceOrIndex::from(0..shape[d])
                } else {
                    SliceOrIndex::Index(if order.time == Some(d) { self.request.frame } else { 0 })
                }
            })
            .collect();
        let values = self.values(dataset, Some(Selection::Hyperslab(Hyperslab::new(slices))))?;
        let mut plane = values
            .into_dimensionality::<ndarray::Ix2>()
            .map_err(|_| self.bad(format!("dataset {}", dataset.name()), "the frame is not plane"))?;
        if order.x < order.y {
            plane = plane.reversed_axes().as_standard_layout().into_owned();
        }
        Ok(plane)
    }

    fn frame(&self, matlab: bool) -> Result<RawFrame, IoError> {
        for role in self.request.arrays.keys() {
            if !ROLES.contains(&role.as_str()) {
                return Err(IoError::setting("array", format!("unknown role `{role}`")));
            }
        }
        let (u, v) = (self.needed("u")?, self.needed("v")?);
        if u.shape() != v.shape() {
            return Err(self.bad(
                "arrays u, v",
                format!("shapes differ: {} {:?}, {} {:?}", u.name(), u.shape(), v.name(), v.shape()),
            ));
        }
        let (x, y) = (self.find("x")?, self.find("y")?);
        for (role, coordinate) in [("x", x), ("y", y)] {
            if let Some(c) = coordinate {
                self.guard(c, c.size())
                    .map_err(|e| if c.size() == 0 { self.bad(format!("array {role}"), "is empty") } else { e })?;
            }
        }
        let mut remarks = Vec::new();
        let order = self.order(u, matlab, x, y, &mut remarks)?;
        let mut out = RawFrame {
            u: self.plane(u, order)?,
            v: self.plane(v, order)?,
            frame: self.request.frame,
            frames: order.time.map_or(1, |t| u.shape()[t]),
            format: format!(
                "HDF5{}{}",
                if matlab { " (MATLAB 7.3)" } else { "" },
                if u.is_chunked() { ", chunked" } else { "" }
            ),
            ..RawFrame::default()
        };
        out.found = vec![("u".to_owned(), describe(u)), ("v".to_owned(), describe(v))];
        out.units = RawUnits { velocity: text(u, "units").or_else(|| text(v, "units")), length: None, time: None };
        if order.x < order.y {
            remarks.push(Remark::new(
                RemarkKind::DimensionsReordered,
                "the arrays are stored as (x, y); they were turned to (y, x)",
            ));
        }
        for (role, coordinate, n) in [("x", x, out.u.ncols()), ("y", y, out.u.nrows())] {
            let Some(dataset) = coordinate else { continue };
            out.found.push((role.to_owned(), describe(dataset)));
            if out.units.length.is_none() {
                out.units.length = text(dataset, "units");
            }
            let values = self.values(dataset, None)?;
            let long: Vec<usize> = values.shape().iter().copied().filter(|k| *k != 1).collect();
            let axis = if long.len() <= 1 {
                if values.len() != n {
                    return Err(self.bad(
                        format!("dataset {}", dataset.name()),
                        format!(
                            "{} positions in {role} for {n} nodes; say `--order` if the arrays are transposed",
                            values.len()
                        ),
                    ));
                }
                RawAxis::Line(values.iter().copied().collect())
            } else {
                RawAxis::Mesh(
                    self.plane(dataset, Order { time: None, ..order }).or_else(|_| self.plane(dataset, order))?,
                )
            };
            if role == "x" { out.x = Some(axis) } else { out.y = Some(axis) }
        }
        if let Some(t) = self.find("t")? {
            self.guard(t, t.size())?;
            out.time = self.values(t, None)?.iter().nth(self.request.frame).copied().filter(|t| t.is_finite());
            out.units.time = text(t, "units").and_then(|u| u.split_whitespace().next().map(str::to_owned));
            out.found.push(("t".to_owned(), describe(t)));
        }
        let shape = out.u.dim();
        for role in ["sigma_u", "sigma_v", "valid", "solid", "depth"] {
            let Some(dataset) = self.find(role)? else { continue };
            let dims = dataset.shape().len();
            let drop_time = Order {
                time: None,
                y: order.y - usize::from(dims + 1 == u.shape().len() && order.time.is_some_and(|t| t < order.y)),
                x: order.x - usize::from(dims + 1 == u.shape().len() && order.time.is_some_and(|t| t < order.x)),
            };
            let array = self.plane(dataset, if dims == u.shape().len() { order } else { drop_time })?;
            if array.dim() != shape {
                return Err(self
                    .bad(format!("dataset {}", dataset.name()), format!("shape {:?}; u has {shape:?}", array.dim())));
            }
            out.found.push((role.to_owned(), describe(dataset)));
            match role {
                "sigma_u" => out.sigma_u = Some(array),
                "sigma_v" => out.sigma_v = Some(array),
                "valid" => out.valid = Some(array.mapv(|v| v.is_finite() && v != 0.0)),
                "solid" => out.solid = Some(array.mapv(|v| if v.is_finite() && v > 0.0 { v as u16 } else { 0 })),
                _ => out.depth = Some(array),
            }
        }
        out.remarks = remarks;
        Ok(out)
    }
}
