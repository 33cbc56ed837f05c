//! What an HDF5 file holds: every dataset with shape, type and unit, and the roles its name allows.

use std::collections::HashMap;

use hdf5::types::VarLenArray;
use hdf5::{Dataset, File, Group};
use hdf5::{ObjectReference1, ReferencedObject};
use hdf5_sys::h5t::{H5T_class_t, H5T_order_t, H5T_sign_t, H5Tget_class, H5Tget_order, H5Tget_sign, H5Tget_size};

use super::attributes::{text, texts};
use super::order::{Role, role_of};
use crate::io::request::ROLES;

/// Objects beyond this number are not looked at.
const OBJECT_LIMIT: usize = 20_000;

/// Folders nested deeper than this are not looked into.
const DEPTH_LIMIT: usize = 32;

/// Datasets named in a message.
const LISTED: usize = 12;

/// Mark of a NetCDF-4 dimension that has no coordinate values.
const NO_VARIABLE: &str = "This is a netCDF dimension but not a netCDF variable";

/// What the elements of a dataset are.
#[derive(Debug, Clone, PartialEq)]
pub enum Class {
    /// Real numbers, described as `f32 big-endian`.
    Number(String),
    /// Anything else, described in words.
    Other(String),
}

/// A dataset.
#[derive(Debug)]
pub struct Entry {
    /// Path from the root, `/run3/u`.
    pub path: String,
    /// Length of every dimension.
    pub shape: Vec<usize>,
    /// Elements.
    pub class: Class,
    /// Unit as written.
    pub units: Option<String>,
    /// Written by MATLAB, whose first dimension is the last of the file.
    pub matlab: bool,
    /// The open dataset; `None` when the library cannot open it.
    pub dataset: Option<Dataset>,
    standard_name: Option<String>,
    /// A dimension without values.
    phantom: bool,
}

impl Entry {
    fn open(path: String, group: &Group, name: &str) -> Self {
        let mut entry = Self {
            path,
            shape: Vec::new(),
            class: Class::Other(String::new()),
            units: None,
            matlab: false,
            dataset: None,
            standard_name: None,
            phantom: false,
        };
        let dataset = match group.dataset(name) {
            Ok(dataset) => dataset,
            Err(e) => {
                entry.class = Class::Other(format!("damaged ({e})"));
                return entry;
            }
        };
        let Ok(space) = dataset.space() else {
            entry.class = Class::Other("damaged (no shape)".to_owned());
            return entry;
        };
        entry.shape = space.shape();
        entry.class = if space.is_null() { Class::Other("empty".to_owned()) } else { class_of(&dataset) };
        entry.units = text(&dataset, &["units", "unit", "Units", "Unit", "UNITS"]).or_else(|| unit_in_name(name));
        entry.matlab = text(&dataset, &["MATLAB_class"]).is_some();
        entry.standard_name = text(&dataset, &["standard_name"]);
        entry.phantom = text(&dataset, &["NAME"]).is_some_and(|n| n.starts_with(NO_VARIABLE));
        entry.dataset = Some(dataset);
        entry
    }

    /// Last part of the path.
    pub fn name(&self) -> &str {
        self.path.rsplit_once('/').map_or(self.path.as_str(), |(_, name)| name)
    }

    /// Path of the folder, empty for the root.
    pub fn folder(&self) -> &str {
        self.path.rsplit_once('/').map_or("", |(folder, _)| folder)
    }

    /// Whether the elements are real numbers.
    pub fn is_numeric(&self) -> bool {
        matches!(self.class, Class::Number(_))
    }

    /// Path, type and shape.
    pub fn describe(&self) -> String {
        let (Class::Number(kind) | Class::Other(kind)) = &self.class;
        format!("{}, {kind} {}", self.path, super::shape_text(&self.shape))
    }

    /// Why the elements cannot be used.
    pub fn unusable(&self) -> String {
        let (Class::Number(kind) | Class::Other(kind)) = &self.class;
        format!("holds {kind}; expected real numbers (floating point or integer, plain, not text or records)")
    }

    fn may_be(&self, role: &str) -> bool {
        if self.phantom {
            return false;
        }
        let name = plain(self.name());
        synonyms(role).contains(&name.as_str()) || self.standard_name.as_deref().is_some_and(|s| standard(role, s))
    }
}

/// All datasets of a file.
#[derive(Debug)]
pub struct Catalog {
    entries: Vec<Entry>,
    /// Further paths of the same dataset.
    aliases: HashMap<String, usize>,
    /// Written by a NetCDF-4 library or by its conventions.
    pub netcdf: bool,
}

impl Catalog {
    /// Walks the tree (`matlab`: of a MATLAB file), folders nearer to the root first; what cannot be opened is skipped.
    pub fn of(file: &File, matlab: bool) -> Self {
        let netcdf = ["_NCProperties", "Conventions"].iter().any(|name| text(file, &[name]).is_some());
        let mut catalog = Self { entries: Vec::new(), aliases: HashMap::new(), netcdf };
        let Ok(root) = file.group("/") else { return catalog };
        let mut seen: HashMap<String, Option<usize>> = HashMap::new();
        let mut level = vec![(String::new(), root)];
        let mut objects = 0;
        for _ in 0..DEPTH_LIMIT {
            let mut below = Vec::new();
            for (folder, group) in level {
                for name in group.member_names().unwrap_or_default() {
                    objects += 1;
                    // MATLAB keeps the contents of cells and objects in such folders.
                    if objects > OBJECT_LIMIT || name.starts_with('#') {
                        continue;
                    }
                    let path = format!("{folder}/{name}");
                    let Ok(info) = group.loc_info_by_name(&name) else { continue };
                    // Links to one object are one object, and a loop of folders ends.
                    let identity = format!("{} {:?}", info.fileno, info.token);
                    if let Some(known) = seen.get(&identity) {
                        if let Some(k) = *known {
                            catalog.add_name(path, k);
                        }
                        continue;
                    }
                    match info.loc_type {
                        hdf5::LocationType::Group => {
                            seen.insert(identity, None);
                            if let Ok(group) = group.group(&name) {
                                below.push((path, group));
                            }
                        }
                        hdf5::LocationType::Dataset => {
                            seen.insert(identity, Some(catalog.entries.len()));
                            let mut entry = Entry::open(path, &group, &name);
                            entry.matlab |= matlab;
                            catalog.entries.push(entry);
                        }
                        _ => {}
                    }
                }
            }
            level = below;
        }
        catalog
    }

    /// Notes a further path of a dataset; the one that says what it is becomes the first.
    fn add_name(&mut self, path: String, k: usize) {
        let Some(entry) = self.entries.get_mut(k) else { return };
        let says = |path: &str| {
            let name = plain(path.rsplit_once('/').map_or(path, |(_, name)| name));
            ROLES.iter().any(|role| synonyms(role).contains(&name.as_str()))
        };
        let other = if !says(&entry.path) && says(&path) { std::mem::replace(&mut entry.path, path) } else { path };
        self.aliases.insert(other, k);
    }

    /// Datasets that may have a role by their name or standard name.
    pub fn candidates(&self, role: &str) -> Vec<&Entry> {
        self.entries.iter().filter(|e| e.may_be(role)).collect()
    }

    /// The dataset at a path, with or without the first slash, or the only one of that bare name.
    pub fn get(&self, path: &str) -> Option<&Entry> {
        let full = format!("/{}", path.trim_matches('/'));
        if let Some(entry) = self.entries.iter().find(|e| e.path == full) {
            return Some(entry);
        }
        if let Some(&k) = self.aliases.get(&full) {
            return self.entries.get(k);
        }
        let mut named = self.entries.iter().filter(|e| e.name() == path);
        match (named.next(), named.next()) {
            (Some(only), None) => Some(only),
            _ => None,
        }
    }

    /// What there is, for messages.
    pub fn listing(&self) -> String {
        let shown: Vec<&Entry> = self.entries.iter().filter(|e| !e.phantom).collect();
        if shown.is_empty() {
            return "the file holds no datasets".to_owned();
        }
        let mut parts: Vec<String> = shown
            .iter()
            .take(LISTED)
            .map(|e| {
                let (Class::Number(kind) | Class::Other(kind)) = &e.class;
                format!("{} ({kind} {})", e.path, super::shape_text(&e.shape))
            })
            .collect();
        if shown.len() > LISTED {
            parts.push(format!("and {} more", shown.len() - LISTED));
        }
        format!("the file holds {}", parts.join(", "))
    }
}

/// What a file says about one dimension of a dataset.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Scale {
    /// Direction.
    pub role: Option<Role>,
    /// Dataset with the coordinates along it.
    pub path: Option<String>,
}

/// Dimension scales and labels of a dataset, one entry a dimension, or nothing.
pub fn scales_of(entry: &Entry) -> Vec<Scale> {
    let Some(dataset) = &entry.dataset else { return Vec::new() };
    let rank = entry.shape.len();
    let mut scales = vec![Scale::default(); rank];
    let lists = dataset
        .attr("DIMENSION_LIST")
        .ok()
        .filter(|a| a.shape() == [rank])
        .and_then(|a| a.read_raw::<VarLenArray<ObjectReference1>>().ok())
        .unwrap_or_default();
    for (scale, list) in scales.iter_mut().zip(&lists) {
        for reference in list.iter().take(4) {
            let Ok(ReferencedObject::Dataset(coordinates)) = dataset.dereference(reference) else { continue };
            let path = coordinates.name();
            let name = plain(path.rsplit_once('/').map_or(path.as_str(), |(_, name)| name));
            let has_values = !text(&coordinates, &["NAME"]).is_some_and(|n| n.starts_with(NO_VARIABLE));
            let by_axis = text(&coordinates, &["axis"]).and_then(|a| direction(&a.to_lowercase()));
            let by_name = ["x", "y", "t"].into_iter().find(|r| {
                synonyms(r).contains(&name.as_str())
                    || text(&coordinates, &["standard_name"]).is_some_and(|s| standard(r, &s))
            });
            let as_coordinate = by_axis.or(by_name.map(role_of));
            if scale.role.is_none() {
                scale.role = as_coordinate.or_else(|| direction(&name));
                scale.path = (has_values && as_coordinate.is_some()).then_some(path);
            }
        }
    }
    if let Some(labels) = texts(dataset, "DIMENSION_LABELS").filter(|l| l.len() == rank) {
        for (scale, label) in scales.iter_mut().zip(labels) {
            scale.role = scale.role.or_else(|| direction(&plain(&label)));
        }
    }
    scales
}

/// Direction meant by the name of a dimension.
fn direction(name: &str) -> Option<Role> {
    match name {
        "x" | "nx" | "i" | "ix" | "col" | "cols" | "column" | "columns" => Some(Role::X),
        "y" | "ny" | "j" | "iy" | "row" | "rows" => Some(Role::Y),
        "t" | "nt" | "time" | "times" | "frame" | "frames" => Some(Role::T),
        _ => None,
    }
}

/// Lower case, without unit in brackets, blanks, and signs.
fn plain(name: &str) -> String {
    let cut = name.find(['[', '(']).filter(|&k| k > 0).unwrap_or(name.len());
    name[..cut].chars().filter(|c| c.is_alphanumeric()).flat_map(char::to_lowercase).collect()
}

/// `mm/s` of `u [mm/s]`.
fn unit_in_name(name: &str) -> Option<String> {
    let (_, rest) = name.split_once(['[', '('])?;
    let (unit, _) = rest.split_once([']', ')'])?;
    (!unit.trim().is_empty()).then(|| unit.trim().to_owned())
}

/// Names in use for a role, as [`plain`] writes them.
fn synonyms(role: &str) -> &'static [&'static str] {
    match role {
        "u" => &[
            "u",
            "ux",
            "vx",
            "uvel",
            "velu",
            "velx",
            "xvel",
            "uvelocity",
            "velocityu",
            "velocityx",
            "xvelocity",
            "ucomponent",
            "uo",
        ],
        "v" => &[
            "v",
            "uy",
            "vy",
            "vvel",
            "velv",
            "vely",
            "yvel",
            "vvelocity",
            "velocityv",
            "velocityy",
            "yvelocity",
            "vcomponent",
            "vo",
        ],
        "x" => {
            &["x", "xc", "xcoord", "xcoordinate", "xcoordinates", "coordx", "xpos", "xposition", "posx", "positionx"]
        }
        "y" => {
            &["y", "yc", "ycoord", "ycoordinate", "ycoordinates", "coordy", "ypos", "yposition", "posy", "positiony"]
        }
        "t" => &["t", "time", "times", "timestamp", "timestamps"],
        "sigma_u" => &["sigmau", "usigma", "uncertaintyu", "uuncertainty"],
        "sigma_v" => &["sigmav", "vsigma", "uncertaintyv", "vuncertainty"],
        "valid" => &["valid", "isvalid", "validmask"],
        "solid" => &["solid", "solids", "body", "bodies"],
        "depth" => &["depth", "waterdepth", "thickness"],
        _ => &[],
    }
}

/// Whether a CF standard name says so (CF standard name table: `sea_water_x_velocity`, `eastward_wind` ...).
fn standard(role: &str, name: &str) -> bool {
    let name = name.trim();
    let (base, error) = match name.strip_suffix(" standard_error") {
        Some(base) => (base, true),
        None => (name, false),
    };
    let along = |axis: &str, cardinal: &str| {
        let moving = base.ends_with("_velocity") || base.ends_with("_wind") || base == format!("{axis}_wind");
        !base.contains(' ')
            && moving
            && (base.contains(&format!("{axis}_velocity"))
                || base.contains(&format!("{axis}_wind"))
                || base.starts_with(cardinal)
                || base.contains(&format!("_{cardinal}")))
    };
    match role {
        "u" => !error && along("x", "eastward"),
        "v" => !error && along("y", "northward"),
        "sigma_u" => error && along("x", "eastward"),
        "sigma_v" => error && along("y", "northward"),
        "x" => base == "projection_x_coordinate",
        "y" => base == "projection_y_coordinate",
        "t" => base == "time",
        "depth" => base == "sea_floor_depth_below_sea_surface",
        _ => false,
    }
}

/// Shape without dimensions of length 1.
pub fn tidy_shape(shape: &[usize]) -> Vec<usize> {
    shape.iter().copied().filter(|&n| n != 1).collect()
}

/// Whether a shape can be (y, x) or (time, y, x).
pub fn is_plane_like(shape: &[usize]) -> bool {
    let tidy = tidy_shape(shape);
    (2..=3).contains(&tidy.len()) && tidy.iter().all(|&n| n > 0)
}

fn class_of(dataset: &Dataset) -> Class {
    let Ok(kind) = dataset.dtype() else { return Class::Other("elements of an unknown type".to_owned()) };
    // SAFETY: plain queries of an open identifier, under the lock of the library.
    let (class, size, order, sign) = hdf5::sync::sync(|| unsafe {
        (H5Tget_class(kind.id()), H5Tget_size(kind.id()), H5Tget_order(kind.id()), H5Tget_sign(kind.id()))
    });
    let big = if order == H5T_order_t::H5T_ORDER_BE && size > 1 { " big-endian" } else { "" };
    match class {
        H5T_class_t::H5T_FLOAT => Class::Number(format!("f{}{big}", 8 * size)),
        H5T_class_t::H5T_INTEGER => {
            let letter = if sign == H5T_sign_t::H5T_SGN_NONE { 'u' } else { 'i' };
            Class::Number(format!("{letter}{}{big}", 8 * size))
        }
        // Python's bool.
        H5T_class_t::H5T_ENUM => {
            Class::Number(format!("enumeration of {size} byte{}", if size == 1 { "" } else { "s" }))
        }
        H5T_class_t::H5T_STRING => Class::Other("text".to_owned()),
        H5T_class_t::H5T_COMPOUND => Class::Other("records (compound type, for example complex numbers)".to_owned()),
        H5T_class_t::H5T_ARRAY => Class::Other("arrays as elements".to_owned()),
        H5T_class_t::H5T_VLEN => Class::Other("lists of varying length".to_owned()),
        H5T_class_t::H5T_REFERENCE => Class::Other("references to other objects".to_owned()),
        H5T_class_t::H5T_BITFIELD => Class::Other("bit fields".to_owned()),
        _ => Class::Other("elements of an unknown type".to_owned()),
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn names_in_use_are_recognized_in_any_case_and_with_units() {
        for name in ["u", "U", "vx", "velocity_x", "u_velocity", "x-velocity", "u [mm/s]", "Velocity u (m/s)", "Ux"] {
            assert!(synonyms("u").contains(&plain(name).as_str()), "{name}");
        }
        assert!(!synonyms("u").contains(&plain("u_fit").as_str()));
        assert_eq!(unit_in_name("u [mm/s]").as_deref(), Some("mm/s"));
        assert_eq!(unit_in_name("u"), None);
    }

    #[test] // names of the CF standard name table, from memory
    fn standard_names_tell_components_from_stresses_and_errors() {
        assert!(standard("u", "sea_water_x_velocity") && standard("v", "surface_northward_sea_water_velocity"));
        assert!(standard("u", "eastward_wind") && standard("u", "x_wind") && !standard("v", "x_wind"));
        assert!(!standard("u", "surface_downward_eastward_stress"));
        assert!(standard("sigma_u", "eastward_wind standard_error") && !standard("u", "eastward_wind standard_error"));
    }
}
