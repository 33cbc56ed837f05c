//! HDF5 file in the form of NetCDF-4: dimensions time, y, x as dimension scales, CF attributes.
//!
//! Guards: everything is flushed while errors can still be reported; when that fails the handles are forgotten, because the C library
//! may crash when it closes a file on a full disk.

use std::ffi::CString;
use std::io;
use std::mem;
use std::path::Path;

use hdf5::types::VarLenUnicode;
use hdf5::{Dataset, File, Location};
use hdf5_sys::h5a::{H5Aclose, H5Acreate2, H5Awrite};
use hdf5_sys::h5f::{H5F_ACC_TRUNC, H5Fclose, H5Fcreate};
use hdf5_sys::h5i::hid_t;
use hdf5_sys::h5p::{
    H5P_CLS_FILE_CREATE, H5P_CRT_ORDER_INDEXED, H5P_CRT_ORDER_TRACKED, H5P_DEFAULT, H5Pclose, H5Pcreate,
    H5Pset_link_creation_order,
};
use hdf5_sys::h5r::{H5R_type_t, H5Rcreate, hobj_ref_t};
use hdf5_sys::h5s::{H5S_SCALAR, H5Sclose, H5Screate, H5Screate_simple};
use hdf5_sys::h5t::{
    H5T_C_S1, H5T_COMPOUND, H5T_NATIVE_INT, H5T_STD_REF_OBJ, H5T_STR_NULLTERM, H5Tclose, H5Tcopy, H5Tcreate, H5Tinsert,
    H5Tset_size, H5Tset_strpad, H5Tvlen_create, hvl_t,
};
use ndarray::{Array3, Axis as Dim};

use super::field_file::{FieldFile, VariableData};
use crate::field::{Flags, UnitSystem};

/// Writes the file.
///
/// # Errors
/// What the C library or the system said, as [`io::Error`].
pub fn write(path: &Path, file: &FieldFile) -> io::Result<()> {
    hdf5::silence_errors(true);
    create_ordered(path)?;
    let out = File::open_rw(path).map_err(failure)?;
    let mut kept: Vec<Dataset> = Vec::new();
    let result = fill(&out, file, &mut kept).and_then(|()| out.flush().map_err(failure));
    if result.is_err() {
        // Closing after a failed write may bring the process down; the temporary file is removed by the caller.
        kept.into_iter().for_each(mem::forget);
        mem::forget(out);
        return result;
    }
    for dataset in kept {
        dataset.flush().map_err(failure)?;
    }
    out.close().map_err(failure)?;
    std::fs::File::open(path)?.sync_all()
}

/// Creates an empty file whose links keep the order in which they are made, as NetCDF-4 asks.
fn create_ordered(path: &Path) -> io::Result<()> {
    let name = c_string(path.to_str().ok_or_else(|| io::Error::other("a path that is not UTF-8"))?)?;
    hdf5::sync::sync(|| {
        // SAFETY: plain calls of the C library under its lock; both identifiers are closed.
        unsafe {
            let plist = H5Pcreate(*H5P_CLS_FILE_CREATE);
            H5Pset_link_creation_order(plist, H5P_CRT_ORDER_TRACKED | H5P_CRT_ORDER_INDEXED);
            let file = H5Fcreate(name.as_ptr(), H5F_ACC_TRUNC, plist, H5P_DEFAULT);
            H5Pclose(plist);
            if file < 0 {
                return Err(io::Error::other("the HDF5 library cannot create the file"));
            }
            H5Fclose(file);
        }
        Ok(())
    })
}

fn failure(e: hdf5::Error) -> io::Error {
    let text = e.to_string();
    if text.contains("No space left") || text.contains("errno = 28") {
        return io::Error::new(io::ErrorKind::StorageFull, "no space left on device");
    }
    io::Error::other(text)
}

fn text(at: &Location, name: &str, value: &str) -> io::Result<()> {
    let value: VarLenUnicode =
        value.replace('\0', " ").parse().map_err(|_| io::Error::other("text with a zero byte"))?;
    at.new_attr::<VarLenUnicode>().create(name).and_then(|a| a.write_scalar(&value)).map_err(failure)
}

/// UDUNITS knows no "arbitrary": such a unit is left out.
fn unit(at: &Location, value: &str) -> io::Result<()> {
    if value == UnitSystem::ARBITRARY { text(at, "comment", "arbitrary units") } else { text(at, "units", value) }
}

fn fill(out: &File, file: &FieldFile, kept: &mut Vec<Dataset>) -> io::Result<()> {
    text(out, "Conventions", "CF-1.11")?;
    for (name, value) in &file.attributes {
        text(out, name, value)?;
    }
    let (ny, nx) = file.grid.shape();
    let axes: [(&str, Vec<f64>, String, &str, &str); 3] = [
        ("time", vec![file.time.unwrap_or(0.0)], file.units.period(), "T", "time of the frame"),
        ("y", file.grid.y.nodes().to_vec(), file.units.position(), "Y", "position along y, upwards"),
        ("x", file.grid.x.nodes().to_vec(), file.units.position(), "X", "position along x"),
    ];
    let mut scales = Vec::new();
    for (name, values, units, axis, long_name) in &axes {
        let shape = if *name == "time" {
            hdf5::Extents::new([hdf5::Extent::resizable(1)])
        } else {
            hdf5::Extents::new(values.len())
        };
        let builder =
            out.new_dataset::<f64>().attr_creation_order(hdf5::plist::dataset_create::AttrCreationOrder::TRACKED);
        let builder = if *name == "time" { builder.chunk((512,)) } else { builder };
        let scale = builder.shape(shape).create(*name).map_err(failure)?;
        scale.write(values).map_err(failure)?;
        text(&scale, "axis", axis)?;
        text(&scale, "long_name", long_name)?;
        unit(&scale, units)?;
        if *name == "time" && file.time.is_none() {
            text(&scale, "note", "the data carry no time")?;
        }
        class_and_name(&scale, name)?;
        kept.push(scale.clone());
        scales.push(scale);
    }
    for variable in &file.variables {
        let extents =
            hdf5::Extents::new([hdf5::Extent::resizable(1), hdf5::Extent::fixed(ny), hdf5::Extent::fixed(nx)]);
        macro_rules! create {
            ($type:ty) => {
                out.new_dataset::<$type>()
                    .attr_creation_order(hdf5::plist::dataset_create::AttrCreationOrder::TRACKED)
                    .chunk((1, ny, nx))
                    .shuffle()
                    .deflate(4)
            };
        }
        let dataset = match &variable.data {
            VariableData::F64(data) => {
                let dataset =
                    create!(f64).fill_value(f64::NAN).shape(extents).create(variable.name.as_str()).map_err(failure)?;
                let frame: Array3<f64> = data.clone().insert_axis(Dim(0));
                dataset.write(&frame).map_err(failure)?;
                dataset
                    .new_attr::<f64>()
                    .create("_FillValue")
                    .and_then(|a| a.write_scalar(&f64::NAN))
                    .map_err(failure)?;
                unit(&dataset, &variable.units)?;
                dataset
            }
            VariableData::Flags(data) => {
                let dataset = create!(u8).shape(extents).create(variable.name.as_str()).map_err(failure)?;
                let frame: Array3<u8> = data.clone().insert_axis(Dim(0));
                dataset.write(&frame).map_err(failure)?;
                let masks: Vec<u8> = Flags::MEANINGS.iter().map(|(flag, _)| flag.0).collect();
                dataset
                    .new_attr::<u8>()
                    .shape(masks.len())
                    .create("flag_masks")
                    .and_then(|a| a.write(&masks))
                    .map_err(failure)?;
                let meanings: Vec<&str> = Flags::MEANINGS.iter().map(|(_, name)| *name).collect();
                text(&dataset, "flag_meanings", &meanings.join(" "))?;
                dataset
            }
        };
        text(&dataset, "long_name", &variable.long_name)?;
        if let Some(name) = &variable.standard_name {
            text(&dataset, "standard_name", name)?;
        }
        for (name, value) in &variable.attributes {
            text(&dataset, name, value)?;
        }
        kept.push(dataset);
    }
    let variables: Vec<&Dataset> = kept[scales.len()..].iter().collect();
    link(out, &scales, &variables, &axes.each_ref().map(|a| a.0), file)?;
    Ok(())
}

/// CLASS and NAME as null-terminated strings of fixed length, as dimension scales need them.
fn class_and_name(scale: &Dataset, name: &str) -> io::Result<()> {
    for (attribute, value) in [("CLASS", "DIMENSION_SCALE"), ("NAME", name)] {
        let (attribute, value) = (c_string(attribute)?, c_string(value)?);
        hdf5::sync::sync(|| {
            // SAFETY: plain calls of the C library under its lock; every identifier is closed, the buffer outlives the call.
            unsafe {
                let kind = H5Tcopy(*H5T_C_S1);
                H5Tset_size(kind, value.as_bytes_with_nul().len());
                H5Tset_strpad(kind, H5T_STR_NULLTERM);
                let space = H5Screate(H5S_SCALAR);
                let status = put(scale.id(), &attribute, kind, space, value.as_ptr().cast());
                H5Sclose(space);
                H5Tclose(kind);
                status
            }
        })?;
    }
    Ok(())
}

fn c_string(text: &str) -> io::Result<CString> {
    CString::new(text).map_err(io::Error::other)
}

/// Creates and writes an attribute.
///
/// # Safety
/// `data` must point to values of `kind` that fill `space`; the identifiers must be open.
unsafe fn put(at: hid_t, name: &CString, kind: hid_t, space: hid_t, data: *const std::ffi::c_void) -> io::Result<()> {
    // SAFETY: as promised by the caller.
    unsafe {
        let attribute = H5Acreate2(at, name.as_ptr(), kind, space, H5P_DEFAULT, H5P_DEFAULT);
        if attribute < 0 {
            return Err(io::Error::other("cannot create an attribute"));
        }
        let status = H5Awrite(attribute, kind, data);
        H5Aclose(attribute);
        if status < 0 { Err(io::Error::other("cannot write an attribute")) } else { Ok(()) }
    }
}

/// One entry of REFERENCE_LIST: which variable, which of its dimensions.
#[repr(C)]
struct Link {
    variable: hobj_ref_t,
    dimension: i32,
}

/// DIMENSION_LIST of the variables and REFERENCE_LIST of the scales.
fn link(out: &File, scales: &[Dataset], variables: &[&Dataset], names: &[&str; 3], file: &FieldFile) -> io::Result<()> {
    let reference = |name: &str| -> io::Result<hobj_ref_t> {
        let name = c_string(name)?;
        let mut r: hobj_ref_t = 0;
        // SAFETY: `r` is large enough for an object reference; called under the lock by the caller.
        let status = unsafe { H5Rcreate((&raw mut r).cast(), out.id(), name.as_ptr(), H5R_type_t::H5R_OBJECT1, -1) };
        if status < 0 { Err(io::Error::other("cannot refer to a dataset")) } else { Ok(r) }
    };
    hdf5::sync::sync(|| -> io::Result<()> {
        let mut to_scales = names.iter().map(|n| reference(n)).collect::<io::Result<Vec<_>>>()?;
        let to_variables = file.variables.iter().map(|v| reference(&v.name)).collect::<io::Result<Vec<_>>>()?;
        let (dimension_list, reference_list) = (c_string("DIMENSION_LIST")?, c_string("REFERENCE_LIST")?);
        let (dataset, dimension) = (c_string("dataset")?, c_string("dimension")?);
        // SAFETY: plain calls of the C library under its lock; buffers outlive the calls, identifiers are closed.
        unsafe {
            let list = H5Tvlen_create(*H5T_STD_REF_OBJ);
            let three: u64 = 3;
            let space = H5Screate_simple(1, &raw const three, std::ptr::null());
            let entries: Vec<hvl_t> =
                to_scales.iter_mut().map(|r| hvl_t { len: 1, p: std::ptr::from_mut(r).cast() }).collect();
            for variable in variables {
                put(variable.id(), &dimension_list, list, space, entries.as_ptr().cast())?;
            }
            H5Sclose(space);
            H5Tclose(list);
            let pair = H5Tcreate(H5T_COMPOUND, size_of::<Link>());
            H5Tinsert(pair, dataset.as_ptr(), mem::offset_of!(Link, variable), *H5T_STD_REF_OBJ);
            H5Tinsert(pair, dimension.as_ptr(), mem::offset_of!(Link, dimension), *H5T_NATIVE_INT);
            for (d, scale) in scales.iter().enumerate() {
                let links: Vec<Link> =
                    to_variables.iter().map(|&variable| Link { variable, dimension: d as i32 }).collect();
                let n = links.len() as u64;
                let space = H5Screate_simple(1, &raw const n, std::ptr::null());
                put(scale.id(), &reference_list, pair, space, links.as_ptr().cast())?;
                H5Sclose(space);
            }
            H5Tclose(pair);
        }
        Ok(())
    })
}
