//! One small field in every spelling that text and NumPy files allow: all must give the same numbers, written here by hand.

#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail by panicking

use std::fs;
use std::io::{Cursor, Write};
use std::path::{Path, PathBuf};

use half::f16;
use isopsi::field::{RemarkKind, Sigma, Surface};
use isopsi::io::survey::{NumberOrText, OneOrMany, OneOrTwo};
use isopsi::io::{Dataset, IoError, Survey, commented_survey, read};

const NX: usize = 5;
const NY: usize = 4;

// All values are exact in f16, f32 and in few decimals, so that every comparison is exact.
fn x(i: usize) -> f64 {
    2.0 + 0.5 * i as f64
}
fn y(j: usize) -> f64 {
    -1.0 + 0.25 * j as f64
}
fn u(j: usize, i: usize) -> f64 {
    0.5 * i as f64 - 0.25 * j as f64 + 0.125 * (i * j) as f64
}
fn v(j: usize, i: usize) -> f64 {
    1.0 - 0.25 * (i * i) as f64 + j as f64
}

/// Nodes row by row.
fn nodes() -> impl Iterator<Item = (usize, usize)> {
    (0..NY).flat_map(|j| (0..NX).map(move |i| (j, i)))
}

/// A table with the given separator, header line and row format.
fn table(header: &str, row: impl Fn(f64, f64, f64, f64) -> String) -> String {
    nodes().fold(header.to_owned(), |text, (j, i)| text + &row(x(i), y(j), u(j, i), v(j, i)) + "\n")
}

fn plain(x: f64, y: f64, u: f64, v: f64) -> String {
    format!("{x},{y},{u},{v}")
}

struct Folder(tempfile::TempDir);

impl Folder {
    fn new() -> Self {
        Self(tempfile::tempdir().unwrap())
    }
    fn write(&self, name: &str, content: impl AsRef<[u8]>) -> PathBuf {
        let path = self.0.path().join(name);
        fs::write(&path, content).unwrap();
        path
    }
    fn read(&self, name: &str, content: impl AsRef<[u8]>, flags: &Survey) -> Result<Dataset, IoError> {
        read(&[self.write(name, content)], flags)
    }
}

fn remark(data: &Dataset, kind: RemarkKind) -> Option<&str> {
    data.remarks.iter().find(|r| r.kind == kind).map(|r| r.text.as_str())
}

/// Why a dataset is not the field, if it is not; nodes of `gaps` must be gaps.
fn difference(data: &Dataset, gaps: &[(usize, usize)]) -> Option<String> {
    let grid = data.field.grid();
    if grid.shape() != (NY, NX) {
        return Some(format!("shape {:?}", grid.shape()));
    }
    if (0..NX).any(|i| grid.x.at(i) != x(i)) || (0..NY).any(|j| grid.y.at(j) != y(j)) {
        return Some(format!("coordinates {:?} {:?}", grid.x.nodes(), grid.y.nodes()));
    }
    nodes().find_map(|at @ (j, i)| {
        let (got, valid) = ((data.field.u[[j, i]], data.field.v[[j, i]]), data.field.valid[[j, i]]);
        let right = if gaps.contains(&at) {
            !valid && got.0.is_nan() && got.1.is_nan()
        } else {
            valid && got == (u(j, i), v(j, i))
        };
        (!right).then(|| format!("node {at:?} is {got:?}, valid {valid}"))
    })
}

#[test]
fn every_spelling_of_a_table_gives_the_same_field() {
    let comma = |n: f64| n.to_string().replace('.', ",");
    let shuffled = {
        let mut rows: Vec<String> = nodes().map(|(j, i)| plain(x(i), y(j), u(j, i), v(j, i))).collect();
        rows.sort_by_key(|r| r.bytes().fold(7u64, |h, b| h.wrapping_mul(31).wrapping_add(u64::from(b)) % 1009));
        format!("x,y,u,v\n{}\n", rows.join("\n"))
    };
    let good = table("x,y,u,v\n", plain);
    let wide = |big: bool| -> Vec<u8> {
        let units = std::iter::once(0xfeff).chain(good.encode_utf16());
        units.flat_map(|c| if big { c.to_be_bytes() } else { c.to_le_bytes() }).collect()
    };
    let cases: Vec<(&str, Vec<u8>)> = vec![
        ("commas", good.clone().into()),
        ("no line end at the end", good.trim_end().into()),
        ("byte order mark", format!("\u{feff}{good}").into()),
        ("CRLF", good.replace('\n', "\r\n").into()),
        ("CR alone", good.replace('\n', "\r").into()),
        ("UTF-16 little endian", wide(false)),
        ("UTF-16 big endian", wide(true)),
        ("Latin-1 comment", [b"# \xb5m is no unit here\n".as_slice(), good.as_bytes()].concat()),
        ("blank lines and comments", good.replace("\n2,", "\n\n# a row\n% of the grid\n2,").into()),
        ("semicolons", table("x;y;u;v\n", |x, y, u, v| format!("{x};{y};{u};{v}")).into()),
        (
            "semicolons and decimal comma",
            table("x;y;u;v\n", |x, y, u, v| format!("{};{};{};{}", comma(x), comma(y), comma(u), comma(v))).into(),
        ),
        (
            "tabs and decimal comma",
            table("x\ty\tu\tv\n", |x, y, u, v| format!("{}\t{}\t{}\t{}", comma(x), comma(y), comma(u), comma(v)))
                .into(),
        ),
        (
            "blanks and decimal comma",
            table("x y u v\n", |x, y, u, v| {
                let n = |n: f64| format!("{n:10.3}").replace('.', ",");
                format!("{}{}{}{}", n(x), n(y), n(u), n(v))
            })
            .into(),
        ),
        ("tabs", table("x\ty\tu\tv\n", |x, y, u, v| format!("{x}\t{y}\t{u}\t{v}")).into()),
        ("blanks", table("  x   y   u   v\n", |x, y, u, v| format!("{x:8.3} {y:8.3} {u:8.3}   {v:8.3}")).into()),
        ("comma and blank", table("x, y, u, v\n", |x, y, u, v| format!("{x}, {y}, {u}, {v}")).into()),
        ("exponents", table("x,y,u,v\n", |x, y, u, v| format!("{x:e},{y:.6e},{u:E},{v:e}")).into()),
        (
            "Fortran exponents",
            table("x y u v\n", |x, y, u, v| {
                format!("{x:.5e} {y:.5e} {u:.5e} {v:.5e}").replace('e', "D+0").replace("D+0-", "D-0")
            })
            .into(),
        ),
        ("rows in any order", shuffled.into()),
        ("names in capitals", table("X,Y,U,V\n", plain).into()),
        ("names in quotes", table("\"x\",\"y\",\"u\",\"v\"\n", plain).into()),
        (
            "everything in quotes, decimal comma between commas of rows",
            table("x;y;u;v\n", |x, y, u, v| {
                format!("\"{}\";\"{}\";\"{}\";\"{}\"", comma(x), comma(y), comma(u), comma(v))
            })
            .into(),
        ),
        ("names of components", table("x_pos,y_pos,Vx,Vy\n", plain).into()),
        (
            "header in a comment, as savetxt writes it",
            table("# x y u v\n", |x, y, u, v| format!("{x} {y} {u} {v}")).into(),
        ),
        ("header in a comment, other separator", table("% x y u v\n", plain).into()),
        ("columns in another order", table("v,u,y,x\n", |x, y, u, v| format!("{v},{u},{y},{x}")).into()),
        (
            "further columns, one of text",
            table("run,x,y,u,camera,v\n", |x, y, u, v| format!("3,{x},{y},{u},7,{v}")).into(),
        ),
        ("trailing separator", table("x,y,u,v,\n", |x, y, u, v| format!("{x},{y},{u},{v},")).into()),
        ("prose before the header", format!("Tow tank, run 7\nmeasured by hand, twice\n\n{good}").into()),
        (
            "TITLE, VARIABLES and ZONE lines",
            table("TITLE = \"a run\"\nVARIABLES = \"X\", \"Y\"\n\"U\", \"V\"\nZONE I=5, J=4\n", |x, y, u, v| {
                format!("{x} {y} {u} {v}")
            })
            .into(),
        ),
        (
            "VARIABLES without quotes",
            table("variables = x, y, u, v\nzone t=\"one\"\n", |x, y, u, v| format!("{x} {y} {u} {v}")).into(),
        ),
    ];
    let folder = Folder::new();
    let mut wrong = Vec::new();
    for (name, content) in &cases {
        match folder.read("f.csv", content, &Survey::default()) {
            Ok(data) => wrong.extend(difference(&data, &[]).map(|d| format!("{name}: {d}"))),
            Err(e) => wrong.push(format!("{name}: {e}")),
        }
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}

#[test]
fn columns_are_told_by_place_name_or_number() {
    let columns = |text: &str| {
        let mut flags = Survey::default();
        flags.data.columns = Some(OneOrMany::One(text.to_owned()));
        flags
    };
    let folder = Folder::new();
    let mixed = |header: &str| table(header, |x, y, u, v| format!("{u},9,{v},{x},{y}"));
    for (name, content, told) in [
        ("by place", mixed(""), "u,-,v,x,y"),
        ("by number", mixed(""), "4,5,1,3"),
        ("by name", mixed("mean_v,n,mean_w,y_R,z_H\n"), "y_R,z_H,mean_v,mean_w"),
        ("by name without unit", mixed("a (m/s),n,b (m/s),c (m),d (m)\n"), "c,d,a,b"),
        ("roles that the header has elsewhere", mixed("u,n,v,x,y\n"), "x,y,u,v"),
    ] {
        let data = folder.read("f.csv", &content, &columns(told)).unwrap_or_else(|e| panic!("{name}: {e}"));
        assert_eq!(difference(&data, &[]), None, "{name}");
    }
}

#[test]
fn units_are_found_wherever_a_table_says_them() {
    let folder = Folder::new();
    for (name, header) in [
        ("brackets", "x [mm],y [mm],u [mm/s],v [mm/s]\n"),
        ("parentheses and capitals", "X (mm),Y (mm),U (mm s-1),V (mm s-1)\n"),
        ("behind an underscore", "x_mm,y_mm,u_mm/s,v_mm/s\n"),
        ("a line of units", "x,y,u,v\n[mm],[mm],[mm/s],[mm/s]\n"),
        ("a comment as the result tables have it", "# units: x=mm, y=mm, u=mm s-1, v=mm s-1\nx,y,u,v\n"),
    ] {
        let data = folder.read("f.csv", table(header, plain), &Survey::default()).unwrap();
        assert_eq!(difference(&data, &[]), None, "{name}");
        assert_eq!((data.units.position(), data.units.velocity()), ("mm".into(), "mm s-1".into()), "{name}");
    }
    let bare = folder.read("f.csv", table("x,y,u,v\n", plain), &Survey::default()).unwrap();
    assert_eq!(bare.units.position(), "arbitrary");
    assert!(remark(&bare, RemarkKind::UnitsMissing).is_some());
}

#[test]
fn empty_fields_nan_absent_rows_and_false_valid_are_gaps() {
    let folder = Folder::new();
    let gap = [(1, 2), (3, 4)];
    let with = |mark: &dyn Fn(f64, f64, f64, f64) -> Option<String>, header: &str, add: &str| {
        nodes().fold(header.to_owned(), |text, (j, i)| {
            let row = if gap.contains(&(j, i)) {
                mark(x(i), y(j), u(j, i), v(j, i))
            } else {
                Some(plain(x(i), y(j), u(j, i), v(j, i)) + add)
            };
            text + &row.map_or(String::new(), |r| r + "\n")
        })
    };
    let head = "x,y,u,v\n";
    for (name, content) in [
        ("empty", with(&|x, y, _, _| Some(format!("{x},{y},,")), head, "")),
        ("one component empty", with(&|x, y, u, _| Some(format!("{x},{y},{u},")), head, "")),
        ("nan", with(&|x, y, _, _| Some(format!("{x},{y},nan,NaN")), head, "")),
        ("N/A", with(&|x, y, _, _| Some(format!("{x},{y},N/A,--")), head, "")),
        ("absent", with(&|_, _, _, _| None, head, "")),
        ("valid is 0", with(&|x, y, u, v| Some(format!("{x},{y},{u},{v},0")), "x,y,u,v,valid\n", ",1")),
        ("valid is empty", with(&|x, y, u, v| Some(format!("{x},{y},{u},{v},")), "x,y,u,v,valid\n", ",1")),
        ("in a body", with(&|x, y, u, v| Some(format!("{x},{y},{u},{v},1")), "x,y,u,v,solid\n", ",0")),
    ] {
        let data = folder.read("f.csv", content, &Survey::default()).unwrap();
        assert_eq!(difference(&data, &gap), None, "{name}");
        assert_eq!(data.field.domain.bodies.len(), usize::from(name == "in a body"), "{name}");
    }
    // (0, 0) is a value, unless the settings say otherwise.
    let zeros = with(&|x, y, _, _| Some(format!("{x},{y},0,0.000")), head, "");
    let mut flags = Survey::default();
    assert!(folder.read("f.csv", &zeros, &flags).unwrap().field.valid[[1, 2]]);
    flags.data.zero = Some("gap".into());
    let data = folder.read("f.csv", &zeros, &flags).unwrap();
    assert!(!data.field.valid[[1, 2]] && !data.field.valid[[3, 4]]);
}

#[test] // 40/9 mm steps printed without decimals, as an export of the trade does: 4, 9, 13, 18, 22, 27
fn rounded_coordinates_become_the_uniform_axis_they_were_rounded_from() {
    let folder = Folder::new();
    let (nx, step) = (40, 40.0 / 9.0);
    let mut text = String::from("x,y,u,v\n");
    for j in 0..3 {
        for i in 0..nx {
            text += &format!("{:.0},{:.3e},1,2\n", f64::from(i) * step, f64::from(j) * 1.0 / 3.0);
        }
    }
    let data = folder.read("f.csv", &text, &Survey::default()).unwrap();
    let grid = data.field.grid();
    // Least squares through n positions, each off by up to half a unit: the slope is good to about 0.5 * 6 / n / (n - 1).
    assert!(grid.x.is_uniform() && (grid.x.mean_step() - step).abs() < 3.0 / 40.0 / 39.0, "{}", grid.x.mean_step());
    assert!(grid.y.is_uniform() && (grid.y.mean_step() - 1.0 / 3.0).abs() < 1e-3);
    assert!(remark(&data, RemarkKind::RoundedCoordinates).unwrap().contains("printed to 1"));
    // A stretched axis stays as it is.
    let stretched: String = [0.0, 0.1, 0.3, 0.7]
        .iter()
        .fold("x,y,u,v\n".into(), |t, y| (0..3).fold(t, |t, i| t + &format!("{i},{y},1,2\n")));
    let data = folder.read("f.csv", stretched, &Survey::default()).unwrap();
    assert_eq!(data.field.grid().y.nodes(), [0.0, 0.1, 0.3, 0.7]);
    assert!(remark(&data, RemarkKind::RoundedCoordinates).is_none());
}

#[test]
fn blocks_and_times_are_frames() {
    let folder = Folder::new();
    let block = |f: f64| table("ZONE T=\"one\"\n", |x, y, u, v| format!("{x} {y} {} {}", u + f, v));
    let blocks = format!("VARIABLES = x y u v\n{}{}{}", block(10.0), block(0.0), block(20.0));
    let times = [3.0, 0.5, 7.0].iter().zip([0.0, 10.0, 20.0]).fold(String::from("t [s],x,y,u,v\n"), |text, (t, f)| {
        text + &table("", |x, y, u, v| format!("{t},{x},{y},{},{v}", u + f))
    });
    for (content, time) in [(blocks, None), (times, Some(3.0))] {
        let mut flags = Survey::default();
        flags.data.frames = Some(NumberOrText::Text("1".into()));
        let data = folder.read("f.csv", &content, &flags).unwrap();
        assert_eq!((data.frames, data.field.frame.index, data.field.frame.time), (3, 1, time));
        assert_eq!(difference(&data, &[]), None);
        assert!(remark(&data, RemarkKind::FrameChosen).is_none());
        flags.data.frames = Some(NumberOrText::Text("1..2".into()));
        let data = folder.read("f.csv", &content, &flags).unwrap();
        assert!(remark(&data, RemarkKind::FrameChosen).unwrap().contains("holds 3 frames; frame 1"));
        flags.data.frames = Some(NumberOrText::Number(3.0));
        assert!(folder.read("f.csv", &content, &flags).unwrap_err().to_string().contains("holds 3 frames"));
    }
}

#[test] // pieces of half a megabyte are parsed by themselves: rows, lines and errors must not notice
fn large_tables_are_read_as_small_ones_and_errors_name_the_line() {
    let folder = Folder::new();
    let n = 300;
    let mut lines = vec![String::from("x,y,u,v")];
    for j in 0..n {
        for i in 0..n {
            lines.push(format!("{i}.5,{j}.25,{}.125,{}", i * 1000 + j, j * 1000 + i));
        }
    }
    let data = folder.read("f.csv", lines.join("\n"), &Survey::default()).unwrap();
    assert_eq!(data.field.valid_count(), n * n);
    let right = |((j, i), u): ((usize, usize), &f64)| *u == (i * 1000 + j) as f64 + 0.125;
    assert!(data.field.u.indexed_iter().all(right));
    lines[80_000] = "1.5,1.25,oops,3".into();
    let error = folder.read("f.csv", lines.join("\n"), &Survey::default()).unwrap_err().to_string();
    assert!(error.contains("line 80001") && error.contains("`oops`"), "{error}");
    lines[80_000] = lines[70_000].clone();
    let error = folder.read("f.csv", lines.join("\n"), &Survey::default()).unwrap_err().to_string();
    assert!(error.contains("line 80001") && error.contains("in line 70001"), "{error}");
}

/// A .npy image with the given numbers in the order of the file.
fn npy(descr: &str, fortran: bool, shape: &[usize], values: &[f64]) -> Vec<u8> {
    let list: String = shape.iter().map(|n| format!("{n}, ")).collect();
    let order = if fortran { "True" } else { "False" };
    let mut header = format!("{{'descr': '{descr}', 'fortran_order': {order}, 'shape': ({list}), }}");
    while (10 + header.len() + 1) % 64 != 0 {
        header.push(' ');
    }
    header.push('\n');
    let mut out = b"\x93NUMPY\x01\x00".to_vec();
    out.extend((header.len() as u16).to_le_bytes());
    out.extend(header.as_bytes());
    for &value in values {
        let mut bytes = match &descr[1..] {
            "f8" => value.to_le_bytes().to_vec(),
            "f4" => (value as f32).to_le_bytes().to_vec(),
            "f2" => f16::from_f64(value).to_le_bytes().to_vec(),
            "i8" => (value as i64).to_le_bytes().to_vec(),
            "i4" => (value as i32).to_le_bytes().to_vec(),
            "i2" => (value as i16).to_le_bytes().to_vec(),
            "i1" => (value as i8).to_le_bytes().to_vec(),
            "u8" => (value as u64).to_le_bytes().to_vec(),
            "u4" => (value as u32).to_le_bytes().to_vec(),
            "u2" => (value as u16).to_le_bytes().to_vec(),
            _ => vec![value as u8],
        };
        if descr.starts_with('>') {
            bytes.reverse();
        }
        out.extend(bytes);
    }
    out
}

/// Values `f(j, i)` in C or Fortran order.
fn plane(fortran: bool, f: impl Fn(usize, usize) -> f64) -> Vec<f64> {
    if fortran {
        (0..NX).flat_map(|i| (0..NY).map(move |j| (j, i))).map(|(j, i)| f(j, i)).collect()
    } else {
        nodes().map(|(j, i)| f(j, i)).collect()
    }
}

fn placed() -> Survey {
    let mut flags = Survey::default();
    flags.geometry.spacing = Some(OneOrTwo::Two([0.5, 0.25]));
    flags.geometry.origin = Some([2.0, -1.0]);
    flags
}

#[test]
fn npy_of_every_number_type_byte_order_and_layout_is_the_same_field() {
    let folder = Folder::new();
    for descr in ["<f8", ">f8", "<f4", ">f4", "<f2", ">f2"] {
        let c = [plane(false, u), plane(false, v)].concat();
        let data = folder.read("f.npy", npy(descr, false, &[2, NY, NX], &c), &placed()).unwrap();
        assert_eq!(difference(&data, &[]), None, "{descr}");
        // Fortran: the component runs fastest, then y, then x.
        let f: Vec<f64> = plane(true, u).into_iter().zip(plane(true, v)).flat_map(|(u, v)| [u, v]).collect();
        let data = folder.read("f.npy", npy(descr, true, &[2, NY, NX], &f), &placed()).unwrap();
        assert_eq!(difference(&data, &[]), None, "{descr} in Fortran order");
    }
    for descr in ["|i1", "<i2", ">i2", "<i4", ">i4", "<i8", ">i8", "|u1", "<u2", ">u2", "<u4", ">u4", "<u8", ">u8"] {
        let whole = |j: usize, i: usize| (7 * j + i) as f64;
        let both = [plane(false, whole), plane(false, |j, i| whole(i % NY, j))].concat();
        let data = folder.read("f.npy", npy(descr, false, &[2, NY, NX], &both), &placed()).unwrap();
        assert!(nodes().all(|(j, i)| data.field.u[[j, i]] == whole(j, i)), "{descr}");
        assert!(nodes().all(|(j, i)| data.field.v[[j, i]] == whole(i % NY, j)), "{descr}");
    }
}

#[test]
fn of_a_series_the_wanted_frame_is_read_in_either_order() {
    let folder = Folder::new();
    let at = |n: usize, c: usize, j: usize, i: usize| if c == 0 { u(j, i) + 10.0 * (n as f64 - 1.0) } else { v(j, i) };
    let c: Vec<f64> =
        (0..3).flat_map(|n| (0..2).flat_map(move |c| nodes().map(move |(j, i)| at(n, c, j, i)))).collect();
    let f: Vec<f64> = (0..NX)
        .flat_map(|i| (0..NY).flat_map(move |j| (0..2).flat_map(move |c| (0..3).map(move |n| at(n, c, j, i)))))
        .collect();
    let mut flags = placed();
    flags.data.frames = Some(NumberOrText::Number(1.0));
    for (fortran, values) in [(false, c), (true, f)] {
        let data = folder.read("f.npy", npy("<f8", fortran, &[3, 2, NY, NX], &values), &flags).unwrap();
        assert_eq!((difference(&data, &[]), data.frames), (None, 3), "Fortran {fortran}");
    }
}

fn zip_of(entries: &[(&str, Vec<u8>)], method: zip::CompressionMethod) -> Vec<u8> {
    let mut writer = zip::ZipWriter::new(Cursor::new(Vec::new()));
    for (name, content) in entries {
        let options = zip::write::SimpleFileOptions::default().compression_method(method);
        writer.start_file(format!("{name}.npy"), options).unwrap();
        writer.write_all(content).unwrap();
    }
    writer.finish().unwrap().into_inner()
}

#[test]
fn npz_with_all_its_arrays_is_read_stored_or_deflated() {
    let folder = Folder::new();
    let xs: Vec<f64> = (0..NX).map(x).collect();
    let ys: Vec<f64> = (0..NY).map(y).collect();
    let arrays = |y: Vec<u8>| {
        vec![
            ("u", npy(">f4", false, &[NY, NX], &plane(false, u))),
            ("v", npy("<f8", true, &[NY, NX], &plane(true, v))),
            ("x", npy("<f4", false, &[NX], &xs)),
            ("y", y),
            ("t", npy("<f8", false, &[1], &[2.5])),
            ("sigma_u", npy("<f2", false, &[NY, NX], &plane(false, |_, i| 0.5 + i as f64))),
            ("sigma_v", npy("<f2", false, &[NY, NX], &plane(false, |j, _| 0.25 + j as f64))),
            ("valid", npy("|b1", false, &[NY, NX], &plane(false, |j, i| f64::from((j, i) != (1, 2))))),
            ("solid", npy("<i8", false, &[NY, NX], &plane(false, |j, i| f64::from((j, i) == (3, 4))))),
        ]
    };
    let line = npy("<f8", false, &[NY], &ys);
    let mesh = npy("<f8", false, &[NY, NX], &plane(false, |j, _| y(j)));
    for (y, method) in [(line, zip::CompressionMethod::Stored), (mesh, zip::CompressionMethod::Deflated)] {
        let data = folder.read("f.npz", zip_of(&arrays(y), method), &Survey::default()).unwrap();
        assert_eq!(difference(&data, &[(1, 2), (3, 4)]), None);
        assert_eq!(data.field.frame.time, Some(2.5));
        assert!(data.field.domain.is_solid(3, 4) && !data.field.domain.is_solid(1, 2));
        assert_eq!(data.field.domain.bodies[0].surface, Surface::Free);
        let Sigma::PerNode { u, v } = &data.field.sigma else { panic!("{:?}", data.field.sigma) };
        assert_eq!((u[[2, 3]], v[[2, 3]]), (3.5, 2.25));
    }
}

#[test]
fn arrays_stored_x_first_are_turned_when_their_coordinates_say_so() {
    let folder = Folder::new();
    let line = |n: usize, f: fn(usize) -> f64| npy("<f8", false, &[n], &(0..n).map(f).collect::<Vec<_>>());
    let arrays = [
        ("u", npy("<f8", false, &[NX, NY], &plane(true, u))),
        ("v", npy("<f8", false, &[NX, NY], &plane(true, v))),
        ("x", line(NX, x)),
        ("y", line(NY, y)),
    ];
    let data = folder.read("f.npz", zip_of(&arrays, zip::CompressionMethod::Stored), &Survey::default()).unwrap();
    assert_eq!(difference(&data, &[]), None);
    assert!(remark(&data, RemarkKind::DimensionsReordered).is_some());
    let mut flags = placed();
    flags.data.order = Some("x,y".into());
    let data = folder.read("f.npz", zip_of(&arrays[..2], zip::CompressionMethod::Stored), &flags).unwrap();
    assert_eq!(difference(&data, &[]), None);
}

#[test]
fn rows_and_columns_that_run_down_are_flipped_with_a_remark() {
    let folder = Folder::new();
    let line = |values: Vec<f64>| npy("<f8", false, &[values.len()], &values);
    let turned =
        |f: fn(usize, usize) -> f64| npy("<f8", false, &[NY, NX], &plane(false, |j, i| f(NY - 1 - j, NX - 1 - i)));
    let (xs, ys): (Vec<f64>, Vec<f64>) = ((0..NX).rev().map(x).collect(), (0..NY).rev().map(y).collect());
    let arrays = [("u", turned(u)), ("v", turned(v)), ("x", line(xs)), ("y", line(ys))];
    let archive = zip_of(&arrays, zip::CompressionMethod::Stored);
    // The last two: another spacing and origin do not change which way the rows run.
    for flags in [Survey::default(), placed()] {
        let data = folder.read("f.npz", &archive, &flags).unwrap();
        assert_eq!(difference(&data, &[]), None);
        assert!(
            remark(&data, RemarkKind::RowsFlipped).is_some() && remark(&data, RemarkKind::ColumnsFlipped).is_some()
        );
    }
}

#[test] // image coordinates: the position and the component of velocity both count downwards
fn y_down_turns_position_and_component() {
    let folder = Folder::new();
    let mut flags = Survey::default();
    flags.geometry.y = Some("down".into());
    let image = table("x,y,u,v\n", |x, y, u, v| format!("{x},{},{u},{}", -y, -v));
    let data = folder.read("f.csv", image, &flags).unwrap();
    assert_eq!(difference(&data, &[]), None);
    let archive = zip_of(
        &[
            ("u", npy("<f8", false, &[NY, NX], &plane(false, |j, i| u(NY - 1 - j, i)))),
            ("v", npy("<f8", false, &[NY, NX], &plane(false, |j, i| -v(NY - 1 - j, i)))),
            ("x", npy("<f8", false, &[NX], &(0..NX).map(x).collect::<Vec<_>>())),
            ("y", npy("<f8", false, &[NY], &(0..NY).map(|j| -y(NY - 1 - j)).collect::<Vec<_>>())),
        ],
        zip::CompressionMethod::Stored,
    );
    let data = folder.read("f.npz", archive, &flags).unwrap();
    assert_eq!(difference(&data, &[]), None);
}

#[test]
fn zeros_in_the_fluid_are_pointed_out_and_zeros_in_a_body_are_not() {
    let folder = Folder::new();
    let mut text = String::from("x,y,u,v\n");
    for (j, i) in (0..9).flat_map(|j| (0..9).map(move |i| (j, i))) {
        let inside = (3..6).contains(&j) && (3..6).contains(&i);
        text += &format!("{i},{j},{0},{0}\n", if inside { 0 } else { 1 });
    }
    let data = folder.read("f.csv", &text, &Survey::default()).unwrap();
    assert!(remark(&data, RemarkKind::ZeroPatch).unwrap().contains("9 vectors are exactly (0, 0)"));
    let survey = "[data]\nfiles = \"f.csv\"\n[[solid]]\npolygon = [[2.5, 2.5], [5.5, 2.5], [5.5, 5.5], [2.5, 5.5]]\n";
    let data = read(&[folder.write("s.toml", survey)], &Survey::default()).unwrap();
    assert!(remark(&data, RemarkKind::ZeroPatch).is_none());
    assert_eq!((data.field.valid_count(), data.field.domain.bodies[0].surface), (72, Surface::Slip));
}

#[test]
fn bodies_that_share_nodes_are_refused_but_a_shadow_may_cover_part_of_a_body() {
    let folder = Folder::new();
    folder.write("f.csv", table("x,y,u,v\n", plain));
    let body = |x: f64, surface: &str| {
        format!("[[solid]]\ncircle = {{ x = {x}, y = -0.75, radius = 0.6 }}\nsurface = \"{surface}\"\n")
    };
    let start = "[data]\nfiles = \"f.csv\"\n";
    let two = folder.write("s.toml", format!("{start}{}{}", body(2.5, "slip"), body(3.0, "no-slip")));
    let error = read(&[two], &Survey::default()).unwrap_err().to_string();
    assert!(error.contains("[[solid]] 2") && error.contains("overlaps body 1 at (2.5"), "{error}");
    let shadow = folder.write("s.toml", format!("{start}{}{}", body(2.5, "slip"), body(3.0, "free")));
    let data = read(&[shadow], &Survey::default()).unwrap();
    assert_eq!(data.field.domain.bodies.len(), 2);
    assert_eq!(data.field.domain.covered[[1, 1]], 1);
}

#[test]
fn folders_patterns_and_lists_come_in_natural_order() {
    let folder = Folder::new();
    for (name, shift) in [("frame10.csv", 10.0), ("frame2.csv", 0.0), ("frame1.csv", 5.0)] {
        folder.write(name, table("x,y,u,v\n", |x, y, u, v| format!("{x},{y},{},{v}", u + shift)));
    }
    folder.write("notes.md", "not a frame");
    let here = folder.0.path();
    let mut flags = Survey::default();
    flags.data.frames = Some(NumberOrText::Number(1.0));
    let list: Vec<PathBuf> = ["frame10.csv", "frame2.csv", "frame1.csv"].iter().map(|n| here.join(n)).collect();
    for inputs in [vec![here.to_owned()], vec![here.join("frame*.csv")], list] {
        let data = read(&inputs, &flags).unwrap();
        assert_eq!((difference(&data, &[]), data.frames), (None, 3), "{inputs:?}");
        assert!(data.sources[0].path.ends_with("frame2.csv") && data.files[2].ends_with("frame10.csv"));
    }
}

#[test]
fn a_survey_file_of_what_was_found_reads_back_as_the_same_settings() {
    let folder = Folder::new();
    fs::create_dir(folder.0.path().join("raw")).unwrap();
    folder.write("raw/a.csv", table("x [mm],y [mm],u [mm/s],v [mm/s]\n", plain));
    folder.write("mask.txt", "0 0 0 0 0\n0 0 0 0 0\n0 0 0 0 0\n0 0 0 0 1\n");
    let survey = r#"
[data]
files = "raw/a.csv"
zero = "value"
[geometry]
origin = [2.0, -1.0]
spacing = [0.5, 0.25]
[units]
output = "cm,s"
[noise]
sigma = "0.1, 0.2 mm/s"
overlap = 0.5
[[solid]]
circle = { x = 2.1, y = -0.9, radius = 0.3 }
surface = "no-slip"
[[solid]]
mask = "mask.txt"
[walls]
bottom = "slip at -1.25"
[screen]
limit = 3.5
off = false
[fit]
smoothing = "none"
zero = "bottom"
[streamlines]
levels = [0.5, 1.0]
[figure]
formats = ["svg", "pdf"]
width = 88
"#;
    let first = read(&[folder.write("first.toml", survey)], &Survey::default()).unwrap();
    let path: &Path = &folder.0.path().join("second.toml");
    let text = commented_survey(&first, path);
    fs::write(path, &text).unwrap();
    let second = read(&[path.to_owned()], &Survey::default()).unwrap_or_else(|e| panic!("{e}\n{text}"));
    let mut expected = first.survey.clone();
    expected.units.length = Some("mm".into());
    expected.units.velocity = Some("mm/s".into());
    assert_eq!(second.survey, expected, "{text}");
    // As text, in which NaN equals NaN and every number is written in full.
    assert_eq!(format!("{:?}", second.field), format!("{:?}", first.field));
    assert!(text.contains("files = \"raw/a.csv\"") && text.contains("mask = \"mask.txt\""), "{text}");
    assert!(text.contains("# top = ") && text.contains("# thickness = "), "{text}");
    // Without any setting: still a survey that reads as the data alone does.
    let bare = read(&[folder.0.path().join("raw/a.csv")], &Survey::default()).unwrap();
    fs::write(path, commented_survey(&bare, path)).unwrap();
    let again = read(&[path.to_owned()], &Survey::default()).unwrap();
    assert_eq!((difference(&again, &[]), again.units.velocity()), (None, "mm s-1".to_owned()));
}

#[test] // real coordinates come from several programs: single precision must not make a uniform grid look stretched
fn coordinates_in_single_precision_are_uniform() {
    let folder = Folder::new();
    let n = 60;
    let line = npy("<f4", false, &[n], &(0..n).map(|k| 1000.0 + 0.1 * k as f64).collect::<Vec<_>>());
    let ones = npy("<f4", false, &[n, n], &vec![1.0; n * n]);
    let arrays = [("u", ones.clone()), ("v", ones), ("x", line.clone()), ("y", line)];
    let data = folder.read("f.npz", zip_of(&arrays, zip::CompressionMethod::Stored), &Survey::default()).unwrap();
    assert!(data.field.grid().x.is_uniform() && data.field.grid().y.is_uniform());
    let text = (0..n * n).fold(String::from("x,y,u,v\n"), |t, k| {
        let p = |k: usize| f64::from((1000.0 + 0.1 * k as f64 + if k.is_multiple_of(7) { 6e-5 } else { 0.0 }) as f32);
        t + &format!("{},{},1,1\n", p(k % n), p(k / n))
    });
    let data = folder.read("f.csv", text, &Survey::default()).unwrap();
    assert_eq!(data.field.grid().shape(), (n, n));
}
