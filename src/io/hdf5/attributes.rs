//! Attributes of datasets as text or numbers; what is not of the kind asked for is as good as absent.

use std::ffi::c_void;

use hdf5::types::{VarLenAscii, VarLenUnicode};
use hdf5::{Attribute, Location};
use hdf5_sys::h5a::H5Aread;
use hdf5_sys::h5t::{H5T_class_t, H5Tget_class, H5Tis_variable_str};

/// Attributes with more elements than this are left alone.
const ELEMENT_LIMIT: usize = 64;

/// Text attributes longer than this many bytes are left alone.
const TEXT_LIMIT: usize = 1 << 16;

/// First attribute of the given names that holds text; surrounding blanks are removed.
pub fn text(at: &Location, names: &[&str]) -> Option<String> {
    names.iter().find_map(|name| texts(at, name)?.into_iter().next()).filter(|text| !text.is_empty())
}

/// All strings of a text attribute.
pub fn texts(at: &Location, name: &str) -> Option<Vec<String>> {
    let attribute = open(at, name)?;
    let kind = attribute.dtype().ok()?;
    // SAFETY: plain queries of an open identifier, under the lock of the library.
    let (class, variable) =
        hdf5::sync::sync(|| unsafe { (H5Tget_class(kind.id()), H5Tis_variable_str(kind.id()) > 0) });
    if class != H5T_class_t::H5T_STRING {
        return None;
    }
    if variable {
        if let Ok(list) = attribute.read_raw::<VarLenUnicode>() {
            return Some(list.iter().map(|s| clean(s.as_bytes())).collect());
        }
        let list = attribute.read_raw::<VarLenAscii>().ok()?;
        return Some(list.iter().map(|s| clean(s.as_bytes())).collect());
    }
    let (each, count) = (kind.size(), attribute.size());
    let total = each.checked_mul(count).filter(|&n| each > 0 && n <= TEXT_LIMIT)?;
    let mut buffer = vec![0u8; total];
    // SAFETY: the buffer has room for `count` strings of `each` bytes, the type of the file being the type in memory.
    let status =
        hdf5::sync::sync(|| unsafe { H5Aread(attribute.id(), kind.id(), buffer.as_mut_ptr().cast::<c_void>()) });
    (status >= 0).then(|| buffer.chunks(each).map(clean).collect())
}

/// All values of a numeric attribute, empty when there is none.
pub fn numbers(at: &Location, name: &str) -> Vec<f64> {
    open(at, name).and_then(|a| a.read_raw::<f64>().ok()).unwrap_or_default()
}

fn open(at: &Location, name: &str) -> Option<Attribute> {
    let attribute = at.attr(name).ok()?;
    let space = attribute.space().ok()?;
    // An empty dataspace holds nothing to read.
    (space.is_valid() && !space.is_null() && (1..=ELEMENT_LIMIT).contains(&attribute.size())).then_some(attribute)
}

/// Up to the first zero byte; text that is not UTF-8 is taken as Latin-1.
fn clean(bytes: &[u8]) -> String {
    let end = bytes.iter().position(|&b| b == 0).unwrap_or(bytes.len());
    let text = match std::str::from_utf8(&bytes[..end]) {
        Ok(text) => text.to_owned(),
        Err(_) => bytes[..end].iter().map(|&b| char::from(b)).collect(),
    };
    text.trim().to_owned()
}
