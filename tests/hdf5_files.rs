//! HDF5 files as other programs write them, files that cannot be used, and files this program writes.
//!
//! The inputs in tests/data/hdf5 come from h5py and netCDF4 (tests/data/make_hdf5.py); their content is stated there.
#![cfg(feature = "hdf5")]
#![allow(clippy::panic, clippy::unwrap_used, clippy::print_stdout, reason = "a test stops where it fails")]

use std::collections::BTreeMap;
use std::path::{Path, PathBuf};
#[cfg(unix)]
use std::sync::Mutex;

use isopsi::field::{Axis, Flags, Grid, RemarkKind, UnitSystem};
use isopsi::io::IoError;
use isopsi::io::field_file::{FieldFile, Variable, VariableData, write_field};
use isopsi::io::hdf5::read_hdf5;
use isopsi::io::raw::{RawAxis, RawFrame};
use isopsi::io::request::ArrayRequest;
use ndarray::Array2;

/// A child process inherits files the C library has open, and their locks: no test starts one while another writes.
#[cfg(unix)]
static WRITING: Mutex<()> = Mutex::new(());

fn file(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/hdf5").join(name)
}

fn read(name: &str, request: &ArrayRequest) -> RawFrame {
    read_hdf5(&file(name), request).unwrap_or_else(|e| panic!("{name}: {e}"))
}

fn refusal(name: &str, request: &ArrayRequest) -> String {
    match read_hdf5(&file(name), request) {
        Ok(_) => panic!("{name} was read"),
        Err(e) => e.to_string(),
    }
}

fn arrays(pairs: &[(&str, &str)]) -> ArrayRequest {
    let arrays: BTreeMap<String, String> = pairs.iter().map(|(r, p)| ((*r).to_owned(), (*p).to_owned())).collect();
    ArrayRequest { arrays, ..ArrayRequest::default() }
}

fn frame(frame: usize) -> ArrayRequest {
    ArrayRequest { frame, ..ArrayRequest::default() }
}

fn order(text: &str) -> ArrayRequest {
    ArrayRequest { order: Some(text.to_owned()), ..ArrayRequest::default() }
}

/// u = 10 j + i + 100 k of the files.
fn expected(ny: usize, nx: usize, k: usize) -> Array2<f64> {
    Array2::from_shape_fn((ny, nx), |(j, i)| (10 * j + i + 100 * k) as f64)
}

fn reordered(raw: &RawFrame) -> bool {
    raw.remarks.iter().any(|r| r.kind == RemarkKind::DimensionsReordered)
}

#[test]
fn every_number_type_byte_order_and_packing_gives_the_same_field() {
    for name in [
        "plain.h5",
        "f32_big_endian_gzip.h5",
        "f16_lzf.h5",
        "u16_scale_offset.h5",
        "x_y_order.h5",
        "singletons.h5",
        "mesh_transposed.h5",
        "matlab73.mat",
        "links.h5",
        "nested_synonyms.h5",
    ] {
        let raw = read(name, &ArrayRequest::default());
        assert_eq!(raw.u, expected(4, 6, 0), "{name}");
        assert_eq!(raw.v, expected(4, 6, 0) * -0.5, "{name}");
        assert_eq!(raw.frames, 1, "{name}");
        match &raw.x {
            Some(RawAxis::Line(x)) => assert_eq!(x, &[0.0, 2.0, 4.0, 6.0, 8.0, 10.0], "{name}"),
            Some(RawAxis::Mesh(x)) => assert_eq!((x.dim(), x[[0, 5]], x[[3, 0]]), ((4, 6), 10.0, 0.0), "{name}"),
            None => assert_eq!(name, "links.h5"),
        }
    }
    let described = read("f32_big_endian_gzip.h5", &ArrayRequest::default());
    assert_eq!(described.found[0], ("u".to_owned(), "/u, f32 big-endian (4, 6)".to_owned()));
    assert_eq!(described.format, "HDF5, shuffle + gzip chunks");
    assert!(reordered(&read("x_y_order.h5", &ArrayRequest::default())));
    assert!(!reordered(&read("plain.h5", &ArrayRequest::default())));
}

#[test]
fn fill_values_of_every_kind_are_gaps_and_nothing_else_is() {
    for name in ["i16_scaled_fill.h5", "missing_value_double.h5", "fill_of_storage.h5"] {
        let raw = read(name, &ArrayRequest::default());
        for ((j, i), u) in raw.u.indexed_iter() {
            if (j, i) == (1, 2) {
                assert!(u.is_nan(), "{name}");
            } else {
                assert_eq!(*u, (10 * j + i) as f64, "{name}");
            }
        }
    }
}

#[test]
fn one_frame_of_a_series_is_taken_wherever_time_stands() {
    for name in ["series.h5", "series_time_last.h5"] {
        for k in 0..3 {
            let raw = read(name, &frame(k));
            assert_eq!((raw.frames, raw.frame, &raw.u), (3, k, &expected(4, 6, k)), "{name}");
        }
    }
    assert_eq!(read("series.h5", &frame(2)).time, Some(1.5));
    assert!(refusal("series.h5", &frame(3)).contains("the file holds 3 frames, counted from 0"));
}

#[test]
fn netcdf_is_found_by_standard_names_with_units_times_and_masked_nodes() {
    let raw = read("cf.nc", &frame(1));
    assert_eq!(raw.u[[3, 5]], 135.0);
    assert!(raw.u[[1, 2]].is_nan() && raw.v[[1, 2]].is_nan());
    assert_eq!(raw.time, Some(5.0));
    let units = (raw.units.length.as_deref(), raw.units.velocity.as_deref(), raw.units.time.as_deref());
    assert_eq!(units, (Some("mm"), Some("mm s-1"), Some("seconds")));
    assert_eq!(raw.format, "NetCDF-4 (HDF5), shuffle + gzip chunks");
}

#[test]
fn sigma_valid_and_solid_come_along_and_an_axis_called_depth_does_not() {
    let raw = read("sigma_valid_solid.h5", &ArrayRequest::default());
    assert_eq!(raw.sigma_u, Some(Array2::from_elem((4, 6), 0.25)));
    assert_eq!(raw.sigma_v, Some(Array2::from_elem((4, 6), 0.5)));
    let valid = raw.valid.unwrap();
    assert!(!valid[[1, 3]] && valid.iter().filter(|ok| **ok).count() == 23);
    assert_eq!(raw.solid.map(|s| (s[[2, 2]], s[[2, 3]])), Some((1, 0)));
    assert!(raw.depth.is_none());
    assert!(raw.remarks.iter().any(|r| r.text.contains("/depth (3)")));
}

#[test]
fn square_grids_follow_scales_labels_meshes_and_the_order_asked_for() {
    let square = expected(5, 5, 0);
    for name in [
        "square_scales.h5",
        "square_labels.h5",
        "dimensions_without_values.nc",
        "mesh_square_transposed.h5",
        "matlab73_square.mat",
    ] {
        assert_eq!(read(name, &ArrayRequest::default()).u, square, "{name}");
    }
    let open = read("square.h5", &ArrayRequest::default());
    assert_eq!(open.u, square);
    assert!(open.remarks[0].text.contains("--order"), "{:?}", open.remarks);
    let asked = read("square.h5", &order("x,y"));
    assert_eq!(asked.u, square.t());
    assert!(asked.remarks.is_empty());
}

#[test]
fn two_candidates_are_both_listed_and_array_settles_it() {
    let text = refusal("two_runs.h5", &ArrayRequest::default());
    assert!(text.contains("/run1/u, /run2/u") && text.contains("--array u=/run1/u"), "{text}");
    let raw = read("two_runs.h5", &arrays(&[("u", "run2/u")]));
    assert_eq!((raw.u[[0, 0]], raw.found[1].1.as_str()), (1000.0, "/run2/v, f64 (4, 6)"));
    assert!(raw.x.is_some());
    let text = refusal("two_runs.h5", &arrays(&[("u", "/run3/u")]));
    assert!(text.contains("/run3/u") && text.contains("/run1/u (f64 (4, 6))"), "{text}");
    assert!(refusal("two_runs.h5", &arrays(&[("u", "/run1/u"), ("v", "/run1/u")])).contains("both u and v"));
}

#[test]
fn what_cannot_be_used_is_refused_with_place_reason_and_advice() {
    let plain = ArrayRequest::default();
    for (name, parts) in [
        ("bad_no_velocity.h5", ["array u: not found", "/pressure (f64 (4, 6))", "--array u="]),
        ("bad_text.h5", ["dataset /u", "holds text", "expected real numbers"]),
        ("bad_complex.h5", ["dataset /u", "compound", "expected real numbers"]),
        ("bad_list.h5", ["dataset /u", "(24)", "scattered points"]),
        ("bad_volume.h5", ["dataset /u", "(2, 3, 4, 5)", "take one plane"]),
        ("bad_shapes_differ.h5", ["dataset /v", "shapes differ: (4, 5) here, (4, 6)", "same nodes"]),
        ("bad_coordinate.h5", ["dataset /u", "x (5)", "--array x="]),
        ("bad_sigma_shape.h5", ["dataset /sigma_u", "(3, 3)", "4 rows and 6 columns"]),
        ("bad_units.h5", ["dataset /v", "`m/s` differs from `mm/s`", "one unit"]),
        ("bad_huge.h5", ["dataset /u", "claims shape (4194304, 2097152)", "more than the 134217728 values"]),
        ("bad_huge_contiguous.h5", ["dataset /u", "(2048, 2048)", "no value was ever written"]),
        ("bad_never_written.h5", ["dataset /u", "(4, 6)", "no value was ever written"]),
        ("bad_none.h5", ["dataset /u", "(0, 6)", "holds nothing"]),
        ("bad_empty_space.h5", ["dataset /u", "holds empty", "expected real numbers"]),
        ("bad_filter.h5", ["dataset /u", "32015 (Zstandard)", "h5repack"]),
        ("bad_cut_off.h5", ["content", "cut off", "copy it again"]),
        ("bad_noise.h5", ["content", "cannot open", "damaged"]),
        ("bad_damaged_chunk.h5", ["dataset /u", "cannot be read", "damaged"]),
    ] {
        let text = refusal(name, &plain);
        assert!(text.contains(name) && parts.iter().all(|p| text.contains(p)), "{name}: {text}");
    }
    for (wanted, part) in
        [("x,x", "must each appear once"), ("t,y,x", "3 names for 2 dimensions"), ("q,y", "unknown letter")]
    {
        let text = refusal("plain.h5", &order(wanted));
        assert!(text.contains(part) && text.contains("(4, 6)"), "{text}");
    }
    let text = refusal("x_y_order.h5", &order("y,x"));
    assert!(text.contains("dataset /x: 6 positions along x for 4 nodes"), "{text}");
    assert!(matches!(read_hdf5(Path::new("/no/such.h5"), &plain), Err(IoError::System { .. })));
}

/// A file broken at any byte is refused or read, and the process lives.
#[test]
fn no_damaged_byte_brings_the_process_down() {
    let folder = tempfile::tempdir().unwrap();
    let path = folder.path().join("damaged.h5");
    for name in ["f32_big_endian_gzip.h5", "square_scales.h5", "matlab73.mat"] {
        let whole = std::fs::read(file(name)).unwrap();
        for k in 0..150 {
            let mut bytes = whole.clone();
            // Spread over the file, twice as dense in the header.
            let at = if k % 3 == 0 { k * whole.len() / 150 } else { k * 16 % 2400.min(whole.len()) };
            bytes[at] ^= 1 << (k % 8);
            std::fs::write(&path, bytes).unwrap();
            let _ = read_hdf5(&path, &ArrayRequest::default());
            std::fs::write(&path, &whole[..k * whole.len() / 150]).unwrap();
            let _ = read_hdf5(&path, &ArrayRequest::default());
        }
    }
}

fn sample() -> FieldFile {
    let (ny, nx) = (5, 7);
    let grid = Grid::new(Axis::uniform(-1.5, 0.25, nx).unwrap(), Axis::uniform(2.0, 0.5, ny).unwrap());
    let mut u = expected(ny, nx, 0) * 0.1;
    u[[2, 3]] = f64::NAN;
    let variable = |name: &str, data: VariableData, units: &str| Variable {
        name: name.to_owned(),
        data,
        units: units.to_owned(),
        long_name: format!("{name} in words"),
        standard_name: None,
        attributes: vec![("sign_convention".to_owned(), "u = dpsi/dy".to_owned())],
    };
    let flags = Array2::from_elem((ny, nx), Flags::MEASURED.with(Flags::FILLED).0);
    FieldFile {
        units: UnitSystem::new("mm", "s"),
        time: Some(0.75),
        variables: vec![
            variable("u", VariableData::F64(u.clone()), "mm s-1"),
            variable("v", VariableData::F64(u * -2.0), "mm s-1"),
            variable("psi", VariableData::F64(expected(ny, nx, 3)), "mm2 s-1"),
            variable("flag", VariableData::Flags(flags), "1"),
        ],
        attributes: vec![("source".to_owned(), "a test".to_owned())],
        grid,
    }
}

#[test]
fn a_file_we_write_is_read_back_exactly() {
    #[cfg(unix)]
    let _alone = WRITING.lock().unwrap_or_else(|e| e.into_inner());
    let folder = tempfile::tempdir().unwrap();
    for name in ["field.h5", "field.nc"] {
        let (path, written) = (folder.path().join(name), sample());
        write_field(&path, &written).unwrap();
        let raw = read_hdf5(&path, &ArrayRequest::default()).unwrap();
        let VariableData::F64(u) = &written.variables[0].data else { panic!("u") };
        for (a, b) in raw.u.iter().zip(u) {
            assert!(a == b || a.is_nan() && b.is_nan());
        }
        assert_eq!(raw.x, Some(RawAxis::Line(written.grid.x.nodes().to_vec())));
        assert_eq!(raw.y, Some(RawAxis::Line(written.grid.y.nodes().to_vec())));
        assert_eq!(raw.time, Some(0.75));
        let units = (raw.units.length.as_deref(), raw.units.velocity.as_deref(), raw.units.time.as_deref());
        assert_eq!(units, (Some("mm"), Some("mm s-1"), Some("s")));
        assert!(raw.remarks.is_empty(), "{:?}", raw.remarks);
        let psi = read_hdf5(&path, &arrays(&[("depth", "psi")])).unwrap();
        assert_eq!(psi.depth, Some(expected(5, 7, 3)));
    }
    assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 2, "no temporary file is left");
}

#[test]
fn an_unknown_extension_lists_the_known_ones() {
    let text = write_field(Path::new("/tmp/field.xls"), &sample()).unwrap_err().to_string();
    assert!(text.contains("field.xls") && text.contains(".npz") && text.contains(".h5"), "{text}");
}

/// Child of the next test: writes a large field where the environment says, under whatever limit is in force.
#[test]
fn child_writes_where_told() {
    let Ok(path) = std::env::var("ISOPSI_TEST_FULL_DISK") else { return };
    let n = 400;
    let grid = Grid::new(Axis::uniform(0.0, 1.0, n).unwrap(), Axis::uniform(0.0, 1.0, n).unwrap());
    // Digits that do not pack.
    let data = Array2::from_shape_fn((n, n), |(j, i)| ((j * n + i) as f64 * 0.618_033_988_749).fract().sin());
    let variable = |name: &str| Variable {
        name: name.to_owned(),
        data: VariableData::F64(data.clone()),
        ..sample().variables[0].clone()
    };
    let file = FieldFile { grid, variables: ["u", "v", "psi"].map(variable).to_vec(), ..sample() };
    let error = write_field(Path::new(&path), &file).expect_err("the disk is full");
    println!("refused: {error}; blame {:?}", error.blame());
}

/// The C library must neither crash at once nor when the process ends (file size limit as a stand-in for a full disk: both make the
/// write fail).
#[cfg(unix)]
#[test]
fn a_full_disk_is_an_error_that_leaves_nothing_behind() {
    let _alone = WRITING.lock().unwrap_or_else(|e| e.into_inner());
    let folder = tempfile::tempdir().unwrap();
    let me = std::env::current_exe().unwrap();
    for (blocks, name) in [(1, "a.h5"), (8, "b.h5"), (100, "c.nc"), (1000, "d.h5"), (1000, "e.npz"), (100, "f.csv")] {
        let path = folder.path().join(name);
        // A signal would kill the process before the library sees the error: it is ignored, as a full disk sends none.
        let script = format!(
            "trap '' XFSZ; ulimit -f {blocks}; exec \"$0\" --exact child_writes_where_told --nocapture --test-threads 1"
        );
        let out = std::process::Command::new("bash")
            .args(["-c", &script])
            .arg(&me)
            .env("ISOPSI_TEST_FULL_DISK", &path)
            .output()
            .unwrap();
        let text = String::from_utf8_lossy(&out.stdout);
        assert!(
            out.status.success(),
            "{name} {blocks}: {:?}\n{text}\n{}",
            out.status,
            String::from_utf8_lossy(&out.stderr)
        );
        assert!(text.contains("refused: cannot write") && text.contains("Machine"), "{name}: {text}");
        assert_eq!(std::fs::read_dir(folder.path()).unwrap().count(), 0, "{name}");
    }
}
