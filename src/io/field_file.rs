//! Fields at the nodes -> HDF5 (NetCDF-4), .npz, .npy or .csv, by the extension.

use std::io::{self, BufWriter, Write};
use std::path::Path;

use ndarray::{Array1, Array2, Array3, s};
use ndarray_npy::{NpzWriter, WriteNpyExt};

use super::error::IoError;
use super::output::{replace, write_whole};
use crate::field::{Grid, UnitSystem};

/// Values of a variable, shape `(ny, nx)`.
#[derive(Debug, Clone, PartialEq)]
pub enum VariableData {
    /// Numbers, NaN where there is none.
    F64(Array2<f64>),
    /// Bit field of [`crate::field::Flags`].
    Flags(Array2<u8>),
}

/// A variable at the nodes.
#[derive(Debug, Clone, PartialEq)]
pub struct Variable {
    /// Short name.
    pub name: String,
    /// Values.
    pub data: VariableData,
    /// Unit in UDUNITS form, `1`, or "arbitrary".
    pub units: String,
    /// Name in words.
    pub long_name: String,
    /// CF standard name, if there is one.
    pub standard_name: Option<String>,
    /// Further attributes.
    pub attributes: Vec<(String, String)>,
}

/// A file of fields, one frame.
#[derive(Debug, Clone, PartialEq)]
pub struct FieldFile {
    /// Nodes.
    pub grid: Grid,
    /// Units.
    pub units: UnitSystem,
    /// Time of the frame.
    pub time: Option<f64>,
    /// Variables, in order.
    pub variables: Vec<Variable>,
    /// Attributes of the file.
    pub attributes: Vec<(String, String)>,
}

/// Extensions [`write_field`] knows.
pub const WRITABLE: [&str; 6] = ["h5", "hdf5", "nc", "npz", "npy", "csv"];

/// Writes a field file in the format of its extension.
///
/// # Errors
/// [`IoError::Setting`] for an unknown extension, [`IoError::System`] when the disk or the folder refuses.
pub fn write_field(path: &Path, file: &FieldFile) -> Result<(), IoError> {
    let extension = path.extension().map(|e| e.to_string_lossy().to_lowercase()).unwrap_or_default();
    match extension.as_str() {
        "h5" | "hdf5" | "nc" => write_hdf5(path, file),
        "npz" => write_npz(path, file),
        "npy" => write_npy(path, file),
        "csv" => write_csv(path, file),
        _ => Err(IoError::setting(
            "--out",
            format!("{}: the extension decides the format; known are .{}", path.display(), WRITABLE.join(" .")),
        )),
    }
}

#[cfg(feature = "hdf5")]
fn write_hdf5(path: &Path, file: &FieldFile) -> Result<(), IoError> {
    replace(path, |temporary| super::netcdf::write(temporary, file).map_err(|e| IoError::system("write", path, e)))
}

#[cfg(not(feature = "hdf5"))]
fn write_hdf5(path: &Path, _: &FieldFile) -> Result<(), IoError> {
    Err(IoError::setting("--out", format!("{}: this build of isopsi has no HDF5 (feature `hdf5`)", path.display())))
}

fn other(e: impl std::error::Error + Send + Sync + 'static) -> io::Error {
    // Keep what the system said (a full disk, say) when there is something.
    let mut source: Option<&(dyn std::error::Error + 'static)> = e.source();
    while let Some(s) = source {
        if let Some(io) = s.downcast_ref::<io::Error>() {
            return io::Error::new(io.kind(), io.to_string());
        }
        source = s.source();
    }
    io::Error::other(e)
}

/// x, y and every variable under its name.
fn write_npz(path: &Path, file: &FieldFile) -> Result<(), IoError> {
    let failed = |e: io::Error| IoError::system("write", path, e);
    replace(path, |temporary| {
        let out = std::fs::OpenOptions::new().write(true).open(temporary).map_err(failed)?;
        let mut npz = NpzWriter::new(BufWriter::new(out));
        let axis = |a: &crate::field::Axis| Array1::from(a.nodes().to_vec());
        npz.add_array("x", &axis(&file.grid.x)).map_err(|e| failed(other(e)))?;
        npz.add_array("y", &axis(&file.grid.y)).map_err(|e| failed(other(e)))?;
        for variable in &file.variables {
            match &variable.data {
                VariableData::F64(data) => npz.add_array(&variable.name, data),
                VariableData::Flags(data) => npz.add_array(&variable.name, data),
            }
            .map_err(|e| failed(other(e)))?;
        }
        let mut writer = npz.finish().map_err(|e| failed(other(e)))?;
        writer.flush().map_err(failed)?;
        writer.get_ref().sync_all().map_err(failed)
    })
}

/// The first two variables as `(2, ny, nx)`.
fn write_npy(path: &Path, file: &FieldFile) -> Result<(), IoError> {
    let planes: Vec<&Array2<f64>> = file
        .variables
        .iter()
        .filter_map(|v| match &v.data {
            VariableData::F64(data) => Some(data),
            VariableData::Flags(_) => None,
        })
        .take(2)
        .collect();
    let [u, v] = planes[..] else {
        return Err(IoError::setting(
            "--out",
            "a .npy file holds u and v; this result has fewer than two arrays, use .npz",
        ));
    };
    let mut both = Array3::zeros((2, u.nrows(), u.ncols()));
    both.slice_mut(s![0, .., ..]).assign(u);
    both.slice_mut(s![1, .., ..]).assign(v);
    write_whole(path, |w| both.write_npy(w).map_err(other))
}

/// `# units:` line, header, a row a node; gaps are empty fields.
fn write_csv(path: &Path, file: &FieldFile) -> Result<(), IoError> {
    write_whole(path, |w| {
        let mut units = vec![format!("x={}", file.units.position()), format!("y={}", file.units.position())];
        units.extend(file.variables.iter().map(|v| format!("{}={}", v.name, v.units)));
        writeln!(w, "# units: {}", units.join(", "))?;
        let mut writer = csv::Writer::from_writer(w);
        let header = ["x", "y"].into_iter().chain(file.variables.iter().map(|v| v.name.as_str()));
        writer.write_record(header)?;
        let mut row: Vec<String> = Vec::new();
        for j in 0..file.grid.ny() {
            for i in 0..file.grid.nx() {
                row.clear();
                row.push(format!("{:?}", file.grid.x.at(i)));
                row.push(format!("{:?}", file.grid.y.at(j)));
                row.extend(file.variables.iter().map(|v| match &v.data {
                    VariableData::F64(a) if a[[j, i]].is_finite() => format!("{:?}", a[[j, i]]),
                    VariableData::F64(_) => String::new(),
                    VariableData::Flags(a) => a[[j, i]].to_string(),
                }));
                writer.write_record(&row)?;
            }
        }
        writer.flush()
    })
}
