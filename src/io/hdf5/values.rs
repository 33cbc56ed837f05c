//! Numbers out of a dataset: checks before reading, one hyperslab, fill values, scale and offset.

use std::sync::Once;

use half::f16;
use hdf5::filters::Filter;
use hdf5::plist::dataset_create::{FillValue, Layout};
use hdf5::{Dataset, Hyperslab, SliceOrIndex};
use ndarray::{ArrayD, IxDyn};

use super::NODE_LIMIT;
use super::attributes::numbers;
use super::catalog::{Class, Entry};
use super::order::Pick;

/// Silences the C library and keeps it from loading filters from folders named by the environment.
pub fn prepare_library() {
    static ONCE: Once = Once::new();
    hdf5::silence_errors(true);
    ONCE.call_once(|| {
        // SAFETY: the C function takes a bit mask of plugin kinds, 0 for none; the binding calls it a pointer, of which the null
        // pointer is the same bits.
        hdf5::sync::sync(|| unsafe { hdf5_sys::h5pl::H5PLset_loading_state(std::ptr::null_mut()) });
    });
}

/// What to say when the library cannot open a file.
pub fn opening_problem(text: &str) -> String {
    if text.contains("truncated file") {
        format!("the file is cut off ({text}); copy it again or close the program that writes it")
    } else if text.contains("lock file") || text.contains("open for write") {
        format!("another program has the file open for writing ({text}); close it there")
    } else {
        format!("the HDF5 library cannot open it ({text}); the file is damaged, cut off, or of a newer format")
    }
}

/// Values of a dataset, or of a part of it, without the dimensions of which one index is taken.
///
/// # Errors
/// What is wrong and what to do, without the place.
pub fn read(entry: &Entry, part: Option<Vec<Pick>>, file_length: u64) -> Result<ArrayD<f64>, String> {
    let Some(dataset) = &entry.dataset else { return Err(entry.unusable()) };
    let part = part.unwrap_or_else(|| vec![Pick::All; entry.shape.len()]);
    let count = part
        .iter()
        .zip(&entry.shape)
        .filter(|(pick, _)| **pick == Pick::All)
        .try_fold(1usize, |n, (_, &length)| n.checked_mul(length))
        .filter(|&n| n <= NODE_LIMIT)
        .ok_or_else(|| {
            format!(
                "claims shape {}, more than the {NODE_LIMIT} values read at once; the file is damaged, or cut it into smaller pieces",
                super::shape_text(&entry.shape)
            )
        })?;
    if count == 0 {
        return Err(format!("shape {} holds nothing", super::shape_text(&entry.shape)));
    }
    let missing_filter = check_storage(dataset, entry, file_length)?;
    let failed = |e: hdf5::Error| {
        missing_filter.clone().unwrap_or_else(|| format!("cannot be read ({e}); the file is damaged or cut off"))
    };
    let mut array = if entry.shape.is_empty() {
        dataset.read_dyn::<f64>().map_err(failed)?
    } else {
        let slices: Vec<SliceOrIndex> = part
            .iter()
            .zip(&entry.shape)
            .map(|(pick, &length)| match pick {
                Pick::At(index) => SliceOrIndex::Index(*index),
                Pick::All => SliceOrIndex::SliceCount { start: 0, step: 1, count: length, block: 1 },
            })
            .collect();
        dataset.read_slice::<f64, _, IxDyn>(Hyperslab::from(slices)).map_err(failed)?
    };
    decode(dataset, entry, &mut array);
    Ok(array)
}

/// Refuses chunks of absurd size and data that the file cannot hold; returns what to say when reading fails for want of a
/// filter (an optional one may have been left out when the file was written).
fn check_storage(dataset: &Dataset, entry: &Entry, file_length: u64) -> Result<Option<String>, String> {
    let Ok(plan) = dataset.create_plist() else { return Err("its description is damaged".to_owned()) };
    let filters = plan.get_filters().map_err(|e| format!("its list of filters is damaged ({e})"))?;
    let missing = filters.iter().find(|f| !f.is_available()).map(|filter| {
        format!(
            "packed with the filter {} ({}), which this program cannot unpack; rewrite the file with gzip, for example `h5repack -f GZIP=4 in.h5 out.h5`",
            filter.id(),
            filter_name(filter)
        )
    });
    if let Some(chunk) = plan.chunk()
        && chunk.iter().try_fold(1usize, |n, &c| n.checked_mul(c)).is_none_or(|n| n > NODE_LIMIT)
    {
        return Err(format!("its chunks {} are too large to be true", super::shape_text(&chunk)));
    }
    let layout = plan.layout();
    if layout == Layout::Virtual || !plan.external().is_empty() {
        return Ok(missing);
    }
    let stored = dataset.storage_size();
    if stored == 0 {
        return Err(format!("shape {} was announced but no value was ever written", super::shape_text(&entry.shape)));
    }
    if stored > file_length {
        return Err(format!(
            "shape {} needs {stored} bytes, the file has {file_length}: it is cut off or damaged",
            super::shape_text(&entry.shape)
        ));
    }
    Ok(missing)
}

fn filter_name(filter: &Filter) -> &'static str {
    // Numbers registered with The HDF Group, from memory.
    match filter.id() {
        4 => "szip",
        307 => "bzip2",
        32001 => "Blosc",
        32004 => "LZ4",
        32008 => "bitshuffle",
        32013 => "ZFP",
        32015 => "Zstandard",
        32017 | 32024 => "SZ",
        32026 => "Blosc2",
        _ => "not registered here",
    }
}

/// How a dataset is stored, in words.
pub fn packing(entry: &Entry) -> Option<String> {
    let plan = entry.dataset.as_ref()?.create_plist().ok()?;
    match plan.layout() {
        Layout::Chunked => {
            let filters: Vec<&str> = plan
                .filters()
                .iter()
                .map(|f| match f {
                    Filter::Deflate(_) => "gzip",
                    Filter::Shuffle => "shuffle",
                    Filter::Fletcher32 => "checksum",
                    Filter::NBit => "n-bit",
                    Filter::ScaleOffset(_) => "scale-offset",
                    Filter::LZF => "lzf",
                    other => filter_name(other),
                })
                .collect();
            Some(if filters.is_empty() { "chunks".to_owned() } else { format!("{} chunks", filters.join(" + ")) })
        }
        Layout::Virtual => Some("virtual".to_owned()),
        _ => None,
    }
}

/// Fill values become NaN, then `value * scale_factor + add_offset`.
fn decode(dataset: &Dataset, entry: &Entry, array: &mut ArrayD<f64>) {
    let mut fills = numbers(dataset, "_FillValue");
    fills.extend(numbers(dataset, "missing_value"));
    // A declared fill value of 0 in the storage is how arrays start, not a mark: a vector of (0, 0) is a value.
    if let Ok(plan) = dataset.create_plist()
        && plan.fill_value_defined() == FillValue::UserDefined
        && let Ok(Some(fill)) = plan.get_fill_value_as::<f64>()
        && fill != 0.0
    {
        fills.push(fill);
    }
    // A mark written in double precision beside single precision data is rounded as the data were.
    let Class::Number(kind) = &entry.class else { return };
    if kind.starts_with("f32") {
        let rounded: Vec<f64> = fills.iter().map(|&f| f64::from(f as f32)).collect();
        fills.extend(rounded);
    } else if kind.starts_with("f16") {
        let rounded: Vec<f64> = fills.iter().map(|&f| f16::from_f64(f).to_f64()).collect();
        fills.extend(rounded);
    }
    fills.retain(|f| !f.is_nan());
    let scale = numbers(dataset, "scale_factor").first().copied().unwrap_or(1.0);
    let offset = numbers(dataset, "add_offset").first().copied().unwrap_or(0.0);
    if fills.is_empty() && scale == 1.0 && offset == 0.0 {
        return;
    }
    array.mapv_inplace(|value| if fills.contains(&value) { f64::NAN } else { value * scale + offset });
}
