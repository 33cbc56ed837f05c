//! HDF5 files (also NetCDF-4 and MATLAB v7.3) -> one raw frame.
//!
//! Shapes are checked against [`NODE_LIMIT`] and the length of the file before anything is read; only the frame asked for is
//! read.  The C library behind the crate runs one call at a time, whatever the number of threads.

mod attributes;
mod catalog;
mod order;
mod values;

use std::io::Read;
use std::path::Path;

use hdf5::File;
use ndarray::{Array2, ArrayD, Ix2};

use super::error::IoError;
use super::raw::{RawAxis, RawFrame, RawUnits};
use super::request::ArrayRequest;
use crate::field::{Remark, RemarkKind};
use catalog::{Catalog, Entry, is_plane_like, tidy_shape};
use order::{Known, Layout};

/// Largest number of nodes of a frame, of a coordinate or of a chunk that is read (1 GiB as f64): a file of a few kilobytes
/// can claim any shape.
pub const NODE_LIMIT: usize = 1 << 27;

/// Reads one frame of an HDF5 file.
///
/// u, v and, where present, x, y, t, sigma_u, sigma_v, valid, solid and depth are found by name or CF standard_name anywhere in
/// the tree; `request.arrays` names them outright, `request.order` the order of the dimensions.  Values equal to the fill value are gaps.
///
/// # Errors
/// [`IoError::System`] when the file cannot be opened, [`IoError::Content`] with the dataset for everything that cannot be used.
pub fn read_hdf5(path: &Path, request: &ArrayRequest) -> Result<RawFrame, IoError> {
    // The system's own refusals first: they are clearer than the library's.
    let length =
        std::fs::File::open(path).and_then(|f| f.metadata()).map_err(|e| IoError::system("read", path, e))?.len();
    values::prepare_library();
    let file =
        File::open(path).map_err(|e| IoError::content(path, "content", values::opening_problem(&e.to_string())))?;
    let reader = Reader { path, length, catalog: Catalog::of(&file, starts_with(path, b"MATLAB 7.3")), request };
    reader.frame()
}

fn starts_with(path: &Path, mark: &[u8]) -> bool {
    let mut head = vec![0; mark.len()];
    std::fs::File::open(path).and_then(|mut f| f.read_exact(&mut head)).is_ok() && head == mark
}

/// An open file and what is asked of it.
struct Reader<'a> {
    path: &'a Path,
    length: u64,
    catalog: Catalog,
    request: &'a ArrayRequest,
}

impl Reader<'_> {
    fn bad(&self, place: &str, problem: impl Into<String>) -> IoError {
        IoError::content(self.path, format!("dataset {place}"), problem)
    }

    fn frame(&self) -> Result<RawFrame, IoError> {
        let (u, v) = self.components()?;
        for entry in [u, v] {
            self.numeric(entry)?;
            if !is_plane_like(&entry.shape) {
                return Err(self.bad(&entry.path, wrong_rank(&entry.shape)));
            }
        }
        if tidy_shape(&u.shape) != tidy_shape(&v.shape) {
            return Err(self.bad(
                &v.path,
                format!(
                    "shapes differ: {} here, {} in {}; u and v must cover the same nodes; `--array v=/path` names another",
                    shape_text(&v.shape),
                    shape_text(&u.shape),
                    u.path
                ),
            ));
        }
        let scales = catalog::scales_of(u);
        let beside = |role: &str| self.optional(role, u);
        let x = self.coordinate("x", u, &scales)?;
        let y = self.coordinate("y", u, &scales)?;
        let t = self.coordinate("t", u, &scales)?;
        let mut remarks = Vec::new();
        let known = Known {
            labels: scales.iter().map(|s| s.role).collect(),
            x: lengths(&x),
            y: lengths(&y),
            t: lengths(&t),
            x_changes_along: self.direction_of_mesh(x)?,
        };
        let layout = Layout::decide(&u.shape, &known, self.request.order.as_deref(), u.matlab, &mut remarks).map_err(
            |problem| match problem {
                order::Problem::Setting(text) => IoError::setting("order", text),
                order::Problem::Content(text) => self.bad(&u.path, text),
            },
        )?;
        let frames = layout.frames;
        if self.request.frame >= frames {
            return Err(IoError::content(
                self.path,
                format!("frame {}", self.request.frame),
                format!("the file holds {frames} frame{}, counted from 0", if frames == 1 { "" } else { "s" }),
            ));
        }
        let mut found = vec![("u".to_owned(), u.describe()), ("v".to_owned(), v.describe())];
        let mut out = RawFrame { frames, frame: self.request.frame, format: self.format(u), ..RawFrame::default() };
        out.u = self.plane(u, &layout)?;
        out.v = self.plane(v, &layout)?;
        for role in ["sigma_u", "sigma_v", "valid", "solid", "depth"] {
            let Some((entry, insisted)) = beside(role)? else { continue };
            if !insisted && (!entry.is_numeric() || layout.selection(&entry.shape, 0).is_none()) {
                remarks.push(Remark::new(
                    RemarkKind::Ignored,
                    format!(
                        "{} {} does not fit the nodes of u and was left alone",
                        entry.path,
                        shape_text(&entry.shape)
                    ),
                ));
                continue;
            }
            self.numeric(entry)?;
            let plane = self.plane(entry, &layout)?;
            found.push((role.to_owned(), entry.describe()));
            match role {
                "sigma_u" => out.sigma_u = Some(plane),
                "sigma_v" => out.sigma_v = Some(plane),
                "valid" => out.valid = Some(plane.mapv(|p| p.is_finite() && p != 0.0)),
                "solid" => out.solid = Some(self.bodies(entry, &plane)?),
                _ => out.depth = Some(plane),
            }
        }
        out.x = self.axis("x", x, &layout, &mut found)?;
        out.y = self.axis("y", y, &layout, &mut found)?;
        out.time = self.time(t, &layout, &mut found, &mut remarks)?;
        out.units = self.units(u, v, x, y, t)?;
        out.found = found;
        out.remarks = remarks;
        Ok(out)
    }

    /// u and v; when one of them is named, the other one is looked for beside it first.
    fn components(&self) -> Result<(&Entry, &Entry), IoError> {
        let mut u = self.candidates("u")?;
        let mut v = self.candidates("v")?;
        let beside = |list: &mut Vec<&Entry>, partner: &[&Entry]| {
            if let [partner] = partner
                && list.iter().any(|e| e.folder() == partner.folder())
            {
                list.retain(|e| e.folder() == partner.folder());
            }
        };
        let named = |role: &str| self.request.arrays.contains_key(role);
        if named("u") && !named("v") {
            beside(&mut v, &u);
        } else if named("v") && !named("u") {
            beside(&mut u, &v);
        }
        let pick = |role: &str, list: &[&Entry]| match list {
            [] => Err(IoError::content(
                self.path,
                format!("array {role}"),
                format!("not found by name; {}; name it with `--array {role}=/path`", self.catalog.listing()),
            )),
            [_] => Ok(0),
            several => Err(self.several(role, several)),
        };
        let (u, v) = (u[pick("u", &u)?], v[pick("v", &v)?]);
        if u.path == v.path {
            return Err(self.bad(&u.path, "named for both u and v"));
        }
        Ok((u, v))
    }

    fn several(&self, role: &str, candidates: &[&Entry]) -> IoError {
        let paths: Vec<&str> = candidates.iter().map(|e| e.path.as_str()).collect();
        IoError::content(
            self.path,
            format!("array {role}"),
            format!("{} candidates: {}; say which with `--array {role}={}`", paths.len(), paths.join(", "), paths[0]),
        )
    }

    /// The dataset named for a role, or every one that could have it.
    fn candidates(&self, role: &str) -> Result<Vec<&Entry>, IoError> {
        if let Some(wanted) = self.request.arrays.get(role) {
            return Ok(vec![self.named(role, wanted)?]);
        }
        let all = self.catalog.candidates(role);
        let fitting: Vec<&Entry> = all.iter().copied().filter(|e| e.is_numeric() && is_plane_like(&e.shape)).collect();
        Ok(if fitting.is_empty() { all } else { fitting })
    }

    fn named(&self, role: &str, wanted: &str) -> Result<&Entry, IoError> {
        self.catalog.get(wanted).ok_or_else(|| {
            IoError::content(
                self.path,
                format!("dataset {wanted}"),
                format!("not in the file (asked for by `--array {role}={wanted}`); {}", self.catalog.listing()),
            )
        })
    }

    /// The dataset of an optional role and whether it must fit: beside u, else in a folder above, else nowhere.
    fn optional(&self, role: &str, u: &Entry) -> Result<Option<(&Entry, bool)>, IoError> {
        if let Some(wanted) = self.request.arrays.get(role) {
            return Ok(Some((self.named(role, wanted)?, true)));
        }
        let all = self.catalog.candidates(role);
        let mut folder = u.folder();
        loop {
            let here: Vec<&Entry> = all.iter().copied().filter(|e| e.folder() == folder).collect();
            match here.as_slice() {
                [] => {}
                // A one-dimensional `depth` is an axis of its own, not a map.
                [only] => return Ok(Some((only, role != "depth" && folder == u.folder()))),
                several => {
                    // The plain name goes before its synonyms.
                    let plain: Vec<&Entry> =
                        several.iter().copied().filter(|e| e.name().eq_ignore_ascii_case(role)).collect();
                    let [only] = plain.as_slice() else { return Err(self.several(role, several)) };
                    return Ok(Some((only, role != "depth" && folder == u.folder())));
                }
            }
            match folder.rsplit_once('/') {
                Some((above, _)) => folder = above,
                None => return Ok(None),
            }
        }
    }

    /// Coordinate of a role: named, attached to u as a dimension scale, or found beside or above it.
    fn coordinate<'e>(
        &'e self,
        role: &str,
        u: &Entry,
        scales: &[catalog::Scale],
    ) -> Result<Option<&'e Entry>, IoError> {
        if self.request.arrays.contains_key(role) {
            return Ok(self.optional(role, u)?.map(|(entry, _)| entry));
        }
        let attached = scales.iter().filter(|s| s.role == Some(order::role_of(role))).find_map(|s| s.path.as_deref());
        if let Some(entry) = attached.and_then(|path| self.catalog.get(path)).filter(|e| e.is_numeric()) {
            return Ok(Some(entry));
        }
        Ok(self.optional(role, u)?.map(|(entry, _)| entry).filter(|e| e.is_numeric()))
    }

    /// Dimension along which a plane mesh of x positions changes more.
    fn direction_of_mesh(&self, x: Option<&Entry>) -> Result<Option<usize>, IoError> {
        let Some(entry) = x.filter(|e| tidy_shape(&e.shape).len() == 2) else { return Ok(None) };
        let Ok(mesh) = self.all(entry)?.into_shape_with_order(tidy_shape(&entry.shape)) else { return Ok(None) };
        let Ok(mesh) = mesh.into_dimensionality::<Ix2>() else { return Ok(None) };
        let change = |a: f64, b: f64| if (b - a).is_finite() { (b - a).abs() } else { 0.0 };
        let along = |dim: usize| -> f64 {
            mesh.axis_windows(ndarray::Axis(dim), 2)
                .into_iter()
                .map(|pair| {
                    let (first, second) =
                        (pair.index_axis(ndarray::Axis(dim), 0), pair.index_axis(ndarray::Axis(dim), 1));
                    first.iter().zip(second).map(|(&a, &b)| change(a, b)).sum::<f64>()
                })
                .sum()
        };
        let (down, across) = (along(0), along(1));
        Ok((down != across).then_some(usize::from(across > down)))
    }

    fn numeric(&self, entry: &Entry) -> Result<(), IoError> {
        if entry.is_numeric() { Ok(()) } else { Err(self.bad(&entry.path, entry.unusable())) }
    }

    /// Values at the nodes of the frame, rows along y.
    fn plane(&self, entry: &Entry, layout: &Layout) -> Result<Array2<f64>, IoError> {
        if entry.shape.iter().all(|&n| n == 1) {
            let value = self.all(entry)?.first().copied().unwrap_or(f64::NAN);
            return Ok(Array2::from_elem((layout.ny, layout.nx), value));
        }
        let selection = layout.selection(&entry.shape, self.request.frame).ok_or_else(|| {
            self.bad(
                &entry.path,
                format!(
                    "shape {} does not fit u, which has {} rows and {} columns",
                    shape_text(&entry.shape),
                    layout.ny,
                    layout.nx
                ),
            )
        })?;
        let array = values::read(entry, Some(selection), self.length).map_err(|p| self.bad(&entry.path, p))?;
        let shape = array.shape().to_vec();
        let plane = array
            .into_dimensionality::<Ix2>()
            .map_err(|_| self.bad(&entry.path, format!("shape {shape:?} is not plane")))?;
        Ok(if layout.transposed { plane.reversed_axes().as_standard_layout().into_owned() } else { plane })
    }

    fn all(&self, entry: &Entry) -> Result<ArrayD<f64>, IoError> {
        self.numeric(entry)?;
        values::read(entry, None, self.length).map_err(|p| self.bad(&entry.path, p))
    }

    fn bodies(&self, entry: &Entry, plane: &Array2<f64>) -> Result<Array2<u16>, IoError> {
        if let Some(bad) = plane.iter().find(|b| b.is_finite() && !(0.0..=f64::from(u16::MAX)).contains(*b)) {
            return Err(self.bad(&entry.path, format!("body number {bad}; expected 0 for fluid, 1, 2 ... for bodies")));
        }
        Ok(plane.mapv(|b| if b.is_finite() { b as u16 } else { 0 }))
    }

    fn axis(
        &self,
        role: &str,
        entry: Option<&Entry>,
        layout: &Layout,
        found: &mut Vec<(String, String)>,
    ) -> Result<Option<RawAxis>, IoError> {
        let Some(entry) = entry else { return Ok(None) };
        found.push((role.to_owned(), entry.describe()));
        let n = if role == "x" { layout.nx } else { layout.ny };
        let tidy = tidy_shape(&entry.shape);
        if tidy.len() >= 2 {
            self.numeric(entry)?;
            return self.plane(entry, layout).map(|mesh| Some(RawAxis::Mesh(mesh)));
        }
        let line: Vec<f64> = self.all(entry)?.iter().copied().collect();
        if line.len() != n {
            return Err(self.bad(
                &entry.path,
                format!("{} positions along {role} for {n} nodes; `--array {role}=/path` names another, `--order` the order of the dimensions", line.len()),
            ));
        }
        Ok(Some(RawAxis::Line(line)))
    }

    fn time(
        &self,
        entry: Option<&Entry>,
        layout: &Layout,
        found: &mut Vec<(String, String)>,
        remarks: &mut Vec<Remark>,
    ) -> Result<Option<f64>, IoError> {
        let Some(entry) = entry else { return Ok(None) };
        let count: usize = entry.shape.iter().product();
        if count != layout.frames {
            if self.request.arrays.contains_key("t") {
                return Err(self.bad(&entry.path, format!("{count} times for {} frames", layout.frames)));
            }
            remarks.push(Remark::new(
                RemarkKind::Ignored,
                format!("{} holds {count} values for {} frames and was not taken as time", entry.path, layout.frames),
            ));
            return Ok(None);
        }
        found.push(("t".to_owned(), entry.describe()));
        Ok(self.all(entry)?.iter().nth(self.request.frame).copied().filter(|t| t.is_finite()))
    }

    /// Units as written; those of u and v, and of x and y, must agree.
    fn units(
        &self,
        u: &Entry,
        v: &Entry,
        x: Option<&Entry>,
        y: Option<&Entry>,
        t: Option<&Entry>,
    ) -> Result<RawUnits, IoError> {
        let same = |a: Option<&Entry>, b: Option<&Entry>| -> Result<Option<String>, IoError> {
            let (first, second) = (a.and_then(|e| e.units.clone()), b.and_then(|e| e.units.clone()));
            match (first, second, b) {
                (Some(p), Some(q), Some(entry)) if p != q => Err(self.bad(
                    &entry.path,
                    format!("unit `{q}` differs from `{p}` of its partner; both must be in one unit"),
                )),
                (p, q, _) => Ok(p.or(q)),
            }
        };
        Ok(RawUnits {
            velocity: same(Some(u), Some(v))?,
            length: same(x, y)?,
            // CF: `seconds since 2024-05-01`.
            time: t.and_then(|e| e.units.as_deref()).and_then(|text| text.split_whitespace().next()).map(str::to_owned),
        })
    }

    fn format(&self, u: &Entry) -> String {
        let kind = if u.matlab {
            "MATLAB v7.3 (HDF5)"
        } else if self.catalog.netcdf {
            "NetCDF-4 (HDF5)"
        } else {
            "HDF5"
        };
        match values::packing(u) {
            Some(packing) => format!("{kind}, {packing}"),
            None => kind.to_owned(),
        }
    }
}

/// Shape of a coordinate without dimensions of length 1.
fn lengths(entry: &Option<&Entry>) -> Option<Vec<usize>> {
    entry.map(|e| tidy_shape(&e.shape))
}

fn shape_text(shape: &[usize]) -> String {
    let parts: Vec<String> = shape.iter().map(usize::to_string).collect();
    format!("({})", parts.join(", "))
}

fn wrong_rank(shape: &[usize]) -> String {
    let n = tidy_shape(shape).len();
    if shape.contains(&0) {
        return format!("shape {} holds nothing", shape_text(shape));
    }
    let advice = if n < 2 && shape.len() > 1 {
        "; a plane field needs at least 2 x 2 nodes"
    } else if n < 2 {
        "; a list of scattered points is read from a table (.csv)"
    } else {
        "; take one plane and one component"
    };
    format!(
        "shape {}: {n} dimension{} longer than 1; expected (ny, nx) or (nt, ny, nx){advice}",
        shape_text(shape),
        if n == 1 { "" } else { "s" }
    )
}
