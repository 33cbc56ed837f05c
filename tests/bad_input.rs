//! Everything that can be wrong with an input: the exit code, and a message that says what is wrong, where, and what to do.

#![allow(clippy::unwrap_used)] // a test may fail by panicking

use std::fs;
use std::path::{Path, PathBuf};
use std::process::Command;

/// Runs isopsi in a folder, returns exit code and standard error.
fn isopsi(folder: &Path, arguments: &[&str]) -> (i32, String) {
    let out = Command::new(env!("CARGO_BIN_EXE_isopsi")).args(arguments).current_dir(folder).output().unwrap();
    let text = String::from_utf8_lossy(&out.stderr).into_owned();
    assert!(!text.contains("panicked"), "{arguments:?}: {text}");
    (out.status.code().unwrap_or(-1), text)
}

/// A regular field of uniform flow as CSV.
fn good() -> String {
    let mut text = String::from("x [mm],y [mm],u [mm/s],v [mm/s]\n");
    for j in 0..6 {
        for i in 0..7 {
            text += &format!("{i}.0,{j}.0,1.5,0.25\n");
        }
    }
    text
}

/// A .npy image: header and raw data.
fn npy(descr: &str, fortran: bool, shape: &str, data: &[u8]) -> Vec<u8> {
    let order = if fortran { "True" } else { "False" };
    let mut header = format!("{{'descr': '{descr}', 'fortran_order': {order}, 'shape': {shape}, }}");
    while (header.len() + 11) % 64 != 0 {
        header.push(' ');
    }
    header.push('\n');
    let mut out = b"\x93NUMPY\x01\x00".to_vec();
    out.extend((header.len() as u16).to_le_bytes());
    out.extend(header.as_bytes());
    out.extend(data);
    out
}

fn zip_of(entries: &[(&str, Vec<u8>)]) -> Vec<u8> {
    use std::io::Write;
    let mut writer = zip::ZipWriter::new(std::io::Cursor::new(Vec::new()));
    for (name, data) in entries {
        writer.start_file(format!("{name}.npy"), zip::write::SimpleFileOptions::default()).unwrap();
        writer.write_all(data).unwrap();
    }
    writer.finish().unwrap().into_inner()
}

fn plane(ny: usize, nx: usize) -> Vec<u8> {
    let data: Vec<u8> = (0..ny * nx).flat_map(|k| (k as f64).to_le_bytes()).collect();
    npy("<f8", false, &format!("({ny}, {nx})"), &data)
}

/// One wrong input: file name, content, further arguments, exit code, what the message must hold.
struct Case {
    name: &'static str,
    file: &'static str,
    content: Vec<u8>,
    arguments: &'static [&'static str],
    code: i32,
    says: &'static [&'static str],
}

fn text(
    name: &'static str,
    content: impl Into<String>,
    arguments: &'static [&'static str],
    code: i32,
    says: &'static [&'static str],
) -> Case {
    Case { name, file: "field.csv", content: content.into().into_bytes(), arguments, code, says }
}

fn binary(name: &'static str, file: &'static str, content: Vec<u8>, code: i32, says: &'static [&'static str]) -> Case {
    Case { name, file, content, arguments: &[], code, says }
}

fn cases() -> Vec<Case> {
    let rows = good();
    let changed = |from: &str, to: &str| rows.replacen(from, to, 1);
    let zeros = |n: usize| vec![0u8; n];
    vec![
        text("empty file", "", &[], 4, &["field.csv", "empty"]),
        text("only a header", "x,y,u,v\n", &[], 4, &["line 1", "no row of numbers"]),
        text("only prose", "dear colleague,\nhere are the data\n", &[], 4, &["no row of numbers"]),
        text("ragged row", changed("3.0,2.0,1.5,0.25", "3.0,2.0,1.5"), &[], 4, &["line 19", "3 fields"]),
        text(
            "text in a number",
            changed("3.0,2.0,1.5,0.25", "3.0,2.0,fast,0.25"),
            &[],
            4,
            &["line 19", "`fast`", "column of u"],
        ),
        text("infinite value", changed("3.0,2.0,1.5,0.25", "3.0,2.0,inf,0.25"), &[], 4, &["line 19", "infinite u"]),
        text(
            "position missing",
            changed("3.0,2.0,1.5,0.25", ",2.0,1.5,0.25"),
            &[],
            4,
            &["line 19", "position x is missing"],
        ),
        text(
            "point given twice",
            changed("3.0,2.0,1.5,0.25", "2.0,2.0,1.5,0.25"),
            &[],
            4,
            &["line 19", "already given in line 18"],
        ),
        text("no header", rows.split_once('\n').unwrap().1, &[], 4, &["no header", "--columns x,y,u,v"]),
        text(
            "missing column",
            rows.replace(",v [mm/s]", ",w [mm/s]"),
            &[],
            4,
            &["no column for v", "w [mm/s]", "--columns"],
        ),
        text(
            "two columns of one role",
            rows.replacen("u [mm/s],v", "u [mm/s],vx", 1),
            &[],
            4,
            &["two columns look like u"],
        ),
        text("one row of points", "x,y,u,v\n0,1,1,1\n1,1,1,1\n2,1,1,1\n", &[], 4, &["same y", "2 x 2"]),
        text("one column of points", "x,y,u,v\n0,1,1,1\n0,2,1,1\n0,3,1,1\n", &[], 4, &["same x"]),
        text(
            "points off any grid",
            (0..60).fold("x,y,u,v\n".to_owned(), |t, k| {
                t + &format!("{},{},1,1\n", (f64::from(k) * 0.618).fract(), (f64::from(k) * 0.414).fract())
            }),
            &[],
            4,
            &["rectilinear", "60 different x"],
        ),
        text("all gaps", rows.replace("1.5,0.25", ","), &[], 4, &["all 42 nodes are gaps"]),
        text(
            "all zero and zero is gap",
            rows.replace("1.5,0.25", "0,0"),
            &["--zero", "gap"],
            4,
            &["all 42 nodes are gaps"],
        ),
        text("columns unknown", rows.clone(), &["--columns", "x,y,u,w2"], 2, &["no column `w2`", "x [mm]"]),
        text("too few columns", rows.clone(), &["--columns", "a,b"], 2, &["columns", "four"]),
        text("frame beyond the file", rows.clone(), &["--frames", "3"], 4, &["frame 3", "1 frames"]),
        text("frames nonsense", rows.clone(), &["--frames", "few"], 2, &["frames", "`few`", "10..200"]),
        text(
            "unknown length unit",
            rows.clone(),
            &["--length-unit", "furlong"],
            2,
            &["unknown length unit `furlong`", "mm"],
        ),
        text(
            "unknown velocity unit",
            rows.clone(),
            &["--velocity-unit", "warp"],
            2,
            &["unknown velocity unit `warp`", "mm/s"],
        ),
        text("pixels beside millimeters", rows.replace("[mm]", "[px]"), &[], 2, &["pixel", "scale"]),
        text(
            "output unit from nothing",
            rows.replace(" [mm]", "").replace(" [mm/s]", ""),
            &["--units", "m,s"],
            2,
            &["cannot convert"],
        ),
        text("scale without unit", rows.clone(), &["--scale", "0.05"], 2, &["[geometry] scale"]),
        text("sigma nonsense", rows.clone(), &["--sigma", "small"], 2, &["[noise] sigma", "\"0.4 mm/s\""]),
        text("sigma negative", rows.clone(), &["--sigma=-0.4"], 2, &["[noise] sigma", "positive"]),
        text("sigma in pixels without scale", rows.clone(), &["--sigma", "0.1 px"], 2, &["in pixels", "interval"]),
        text("sigma from a file that has none", rows.clone(), &["--sigma", "file"], 2, &["sigma_u"]),
        text("overlap too large", rows.clone(), &["--overlap", "1.5"], 2, &["[noise] overlap", "0 to below 1"]),
        text("spacing negative", rows.clone(), &["--spacing=-2"], 2, &["spacing", "positive"]),
        text("body outside", rows.clone(), &["--solid", "circle 99,99,1"], 2, &["covers no node", "x 0 to 6"]),
        text("body without area", rows.clone(), &["--solid", "polygon 1,1 2,2 3,3"], 2, &["encloses no area"]),
        text("body unknown", rows.clone(), &["--solid", "square 1,1,1"], 2, &["--solid", "circle X,Y,R"]),
        text("mask file absent", rows.clone(), &["--solid", "mask nowhere.txt"], 1, &["nowhere.txt"]),
        text("wall unknown", rows.clone(), &["--wall", "floor=slip"], 2, &["side `floor`", "bottom"]),
        text("wall surface unknown", rows.clone(), &["--wall", "bottom=sticky"], 2, &["surface `sticky`", "no-slip"]),
        text("direction of y unknown", rows.clone(), &["--y", "left"], 2, &["[geometry] y", "up or down"]),
        text("zero nonsense", rows.clone(), &["--zero", "maybe"], 2, &["[data] zero", "value or gap"]),
        binary("zero bytes in a text file", "field.csv", b"x,y\0\0\0\0\n".to_vec(), 4, &["zero bytes"]),
        binary(
            "npy cut off",
            "f.npy",
            npy("<f8", false, "(2, 6, 7)", &zeros(100)),
            4,
            &["f.npy", "[2, 6, 7]", "100 bytes"],
        ),
        binary(
            "npy that lies",
            "f.npy",
            npy("<f8", false, "(2, 900000000, 900000000)", &zeros(64)),
            4,
            &["promises shape", "64 bytes"],
        ),
        binary("npy with one component", "f.npy", npy("<f8", false, "(3, 4, 4)", &zeros(384)), 4, &["(2, ny, nx)"]),
        binary("npy of text", "f.npy", npy("<U4", false, "(2, 2, 2)", &zeros(128)), 4, &["element type"]),
        binary("npy of objects", "f.npy", npy("|O", false, "(2, 2, 2)", &zeros(64)), 4, &["array"]),
        binary("npy that is none", "f.npy", b"hello world".to_vec(), 4, &["not in the .npy format"]),
        binary("npz that is none", "f.npz", b"hello world".to_vec(), 4, &["not a .npz archive"]),
        binary(
            "npz cut off",
            "f.npz",
            zip_of(&[("u", plane(5, 6)), ("v", plane(5, 6))])[..200].to_vec(),
            4,
            &["not a .npz archive"],
        ),
        binary("npz without v", "f.npz", zip_of(&[("u", plane(5, 6))]), 4, &["no array `v`", "--array v=NAME"]),
        binary("npz of two shapes", "f.npz", zip_of(&[("u", plane(5, 6)), ("v", plane(6, 5))]), 4, &["shapes differ"]),
        binary(
            "npz with wrong coordinates",
            "f.npz",
            zip_of(&[("u", plane(5, 6)), ("v", plane(5, 6)), ("x", npy("<f8", false, "(5,)", &zeros(40)))]),
            4,
            &["array x", "5 positions for 6 columns"],
        ),
        text(
            "row with more fields",
            changed("3.0,2.0,1.5,0.25", "3.0,2.0,1.5,0.25,7,8"),
            &[],
            4,
            &["line 19", "6 fields", "first row has 4"],
        ),
        text(
            "decimal comma beside decimal point",
            "x;y;u;v\n0.5;0;1;1\n1.5;0;1;1\n0.5;0,5;1;1\n1.5;0,5;1;1\n",
            &[],
            4,
            &["line 4", "`0,5`", "column of y"],
        ),
        text(
            "one profile whose positions waver",
            (0..20).fold("x,y,u,v\n".to_owned(), |t, k| t + &format!("{},{k},1,1\n", 0.65 + 0.0001 * f64::from(k % 3))),
            &[],
            4,
            &["20 points have 3 different x and 20 different y", "rectilinear"],
        ),
        text("columns beyond the row", rows.clone(), &["--columns", "1,2,3,9"], 2, &["column 9 for v", "4 fields"]),
        text("one column for two roles", rows.clone(), &["--columns", "1,1,3,4"], 2, &["twice", "column 1"]),
        text("columns without v", rows.clone(), &["--columns", "x,y,u,sigma_u"], 2, &["columns", "no column for v"]),
        binary("broken UTF-16", "field.csv", b"\xff\xfe\x00\xd8x\x00".to_vec(), 4, &["UTF-16", "UTF-8"]),
        binary("npy of complex numbers", "f.npy", npy("<c8", false, "(2, 2, 2)", &zeros(64)), 4, &["`<c8`", "real"]),
        binary("npy with a damaged header", "f.npy", b"\x93NUMPY\x01\x00\xff\xff{'de".to_vec(), 4, &["header", "cut off"]),
        binary(
            "npz that lies",
            "f.npz",
            zip_of(&[("u", npy("<f8", false, "(90000, 90000)", &zeros(64))), ("v", plane(5, 6))]),
            4,
            &["array `u`", "promises shape", "64 bytes"],
        ),
        binary(
            "npz with sigma of another shape",
            "f.npz",
            zip_of(&[("u", plane(5, 6)), ("v", plane(5, 6)), ("sigma_u", plane(6, 5)), ("sigma_v", plane(6, 5))]),
            4,
            &["array sigma_u", "(6, 5)", "(5, 6)"],
        ),
        binary(
            "survey with overlapping bodies",
            "s.toml",
            b"[data]\nfiles = \"good.csv\"\n[[solid]]\ncircle = { x = 2, y = 2, radius = 1.5 }\n[[solid]]\ncircle = { x = 4, y = 2, radius = 1.5 }\n"
                .to_vec(),
            2,
            &["[[solid]] 2", "overlaps body 1", "one polygon"],
        ),
        binary(
            "survey with a pair that is none",
            "s.toml",
            b"[data]\nfiles = \"good.csv\"\n[geometry]\nspacing = \"wide\"\n".to_vec(),
            2,
            &["line 4, [geometry] spacing", "a pair of numbers"],
        ),
        binary("NetCDF classic", "f.nc", b"CDF\x01aaaaaaaaaaaaaaaa".to_vec(), 4, &["NetCDF classic", "nccopy"]),
        binary(
            "MATLAB 5",
            "f.mat",
            b"MATLAB 5.0 MAT-file, Platform: GLNXA64".to_vec(),
            4,
            &["MATLAB format 5", "-v7.3"],
        ),
        binary("HDF5 cut off", "f.h5", b"\x89HDF\r\n\x1a\n\x00\x00\x00".to_vec(), 4, &["f.h5"]),
        binary("HDF5 that is none", "f.h5", b"no such thing".to_vec(), 4, &["not an HDF5 file"]),
        binary(
            "survey with an unknown key",
            "s.toml",
            b"[data]\nfiles = \"a.csv\"\n[noise]\nsgima = 1\n".to_vec(),
            2,
            &["line 4", "`sgima`", "`sigma`"],
        ),
        binary(
            "survey with an unknown table",
            "s.toml",
            b"[datas]\nfiles = \"a.csv\"\n".to_vec(),
            2,
            &["`datas`", "`data`"],
        ),
        binary(
            "survey with a wrong type",
            "s.toml",
            b"[data]\nfiles = \"a.csv\"\n[streamlines]\ncount = \"many\"\n".to_vec(),
            2,
            &["line 4"],
        ),
        binary("survey that is no TOML", "s.toml", b"[data\n".to_vec(), 2, &["s.toml", "line 1"]),
        binary("survey without data", "s.toml", b"[units]\nlength = \"mm\"\n".to_vec(), 2, &["[data] files"]),
        binary(
            "survey naming a missing file",
            "s.toml",
            b"[data]\nfiles = \"absent.csv\"\n".to_vec(),
            1,
            &["absent.csv"],
        ),
        binary(
            "survey with two shapes in a body",
            "s.toml",
            b"[data]\nfiles = \"good.csv\"\n[[solid]]\ncircle = { x = 1, y = 1, radius = 1 }\nmask = \"m\"\n".to_vec(),
            1,
            &["m"],
        ),
    ]
}

#[test]
fn every_bad_input_ends_with_its_exit_code_and_a_message_that_helps() {
    let all = cases();
    assert!(all.len() >= 55, "{} kinds", all.len());
    let mut wrong = Vec::new();
    for case in all {
        let folder = tempfile::tempdir().unwrap();
        fs::write(folder.path().join("good.csv"), good()).unwrap();
        fs::write(folder.path().join(case.file), &case.content).unwrap();
        let mut arguments = vec!["inspect", case.file];
        arguments.extend(case.arguments);
        let (code, message) = isopsi(folder.path(), &arguments);
        if code != case.code {
            wrong.push(format!("{}: exit {code}, expected {}: {message}", case.name, case.code));
        }
        for part in case.says {
            if !message.contains(part) {
                wrong.push(format!("{}: the message lacks `{part}`: {message}", case.name));
            }
        }
        if !message.starts_with("error: ") || message.trim().lines().count() > 4 {
            wrong.push(format!("{}: not one short error: {message}", case.name));
        }
    }
    assert!(wrong.is_empty(), "{}", wrong.join("\n"));
}

#[test]
fn missing_files_empty_folders_and_patterns_without_match_are_named() {
    let folder = tempfile::tempdir().unwrap();
    let here = folder.path();
    fs::create_dir(here.join("empty")).unwrap();
    fs::write(here.join("a.csv"), good()).unwrap();
    fs::write(here.join("b.npy"), "x").unwrap();
    for (arguments, code, part) in [
        (vec!["inspect", "absent.csv"], 1, "absent.csv"),
        (vec!["inspect", "empty"], 2, "holds no data files"),
        (vec!["inspect", "*.xyz"], 2, "matches no file"),
        (vec!["inspect", "a.csv", "b.npy"], 2, "different kinds"),
        (vec!["inspect"], 2, "INPUT"),
        (vec!["inspekt", "a.csv"], 2, "inspect"),
        (vec!["inspect", "a.csv", "--overlapp", "0.5"], 2, "--overlap"),
        (vec!["psi", "a.csv", "--out", "p.xyz"], 2, "known here are"),
        (vec!["psi", "a.csv", "--out", "no/such/folder/p.npz"], 2, "does not exist"),
        (vec!["psi", "a.csv", "--out", "a.csv"], 2, "is the input itself"),
        (vec!["figure", "a.csv", "--out", "f.gif"], 2, ".svg .pdf .png"),
        (vec!["figure", "a.csv", "--out", "f.svg", "--background", "heat"], 2, "`heat`"),
        (vec!["figure", "a.csv", "--out", "f.svg", "--width", "huge"], 2, "`huge`"),
        (vec!["figure", "a.csv", "--out", "f.svg", "--color-map", "rainbow"], 2, "`rainbow`"),
        (vec!["flux", "a.csv", "--from", "1", "--to", "2,2"], 2, "X,Y"),
        (vec!["flux", "a.csv", "--from", "1,1", "--to", "99,99"], 4, "no psi at (99, 99)"),
        (vec!["run", "a.csv", "--out", "a.csv"], 2, "is a file"),
        (vec!["stagnation", "a.csv", "--psi-zero", "bottom"], 2, "not declared a wall"),
        (vec!["stagnation", "a.csv", "--psi-zero", "50,50"], 2, "no valid cell"),
        (vec!["stagnation", "a.csv", "--wall", "bottom=slip at -9"], 2, "9.00 node steps"),
        (vec!["stagnation", "a.csv", "--levels", "1,x"], 2, "`x` is not a number"),
        (vec!["stagnation", "a.csv", "--count", "5", "--step", "2"], 2, "only one of"),
        (vec!["stagnation", "a.csv", "--threads", "0"], 2, "--threads"),
        (vec!["inspect", "a.csv", "--array", "w=/x"], 2, "nearest known one"),
    ] {
        let (got, message) = isopsi(here, &arguments);
        assert_eq!(got, code, "{arguments:?}: {message}");
        assert!(message.contains(part), "{arguments:?}: {message}");
    }
}

#[test]
fn data_that_cannot_be_analyzed_exit_with_4() {
    let folder = tempfile::tempdir().unwrap();
    let mut lonely = String::from("x,y,u,v\n");
    for j in 0..4 {
        for i in 0..4 {
            lonely += &if (i + j) % 2 == 0 { format!("{i},{j},1,1\n") } else { format!("{i},{j},,\n") };
        }
    }
    fs::write(folder.path().join("lonely.csv"), lonely).unwrap();
    let (code, message) = isopsi(folder.path(), &["stagnation", "lonely.csv", "--no-screen"]);
    assert_eq!(code, 4, "{message}");
    assert!(message.contains("no two neighboring nodes"), "{message}");
    fs::write(folder.path().join("below.csv"), good().replace(",0.0,1.5", ",-1.0,1.5")).unwrap();
    let (code, message) = isopsi(folder.path(), &["stagnation", "below.csv", "--thickness", "radius"]);
    assert_eq!(code, 4, "{message}");
    assert!(message.contains("y >= 0"), "{message}");
}

#[cfg(unix)]
#[test]
fn unwritable_places_and_full_disks_are_reported_and_leave_nothing() {
    use std::os::unix::fs::PermissionsExt;
    let folder = tempfile::tempdir().unwrap();
    let here = folder.path();
    fs::write(here.join("a.csv"), good()).unwrap();
    let (code, message) = isopsi(here, &["stagnation", "a.csv", "--out", "/dev/full"]);
    assert_eq!(code, 1, "{message}");
    assert!(message.contains("No space left"), "{message}");
    let out = Command::new(env!("CARGO_BIN_EXE_isopsi"))
        .args(["streamlines", "a.csv"])
        .current_dir(here)
        .stdout(fs::OpenOptions::new().write(true).open("/dev/full").unwrap())
        .output()
        .unwrap();
    assert_eq!(out.status.code(), Some(1), "{}", String::from_utf8_lossy(&out.stderr));
    // A limit on the size of files stands for a disk that fills up: HDF5, archive, picture.
    for file in ["o.h5", "o.npz", "o.csv"] {
        let script = format!("trap '' XFSZ; ulimit -f 1; exec {} psi a.csv --out {file}", env!("CARGO_BIN_EXE_isopsi"));
        let out = Command::new("bash").args(["-c", &script]).current_dir(here).output().unwrap();
        let message = String::from_utf8_lossy(&out.stderr);
        assert_eq!(out.status.code(), Some(1), "{file}: {message}");
        assert!(message.contains("error: cannot write"), "{file}: {message}");
    }
    // A file nobody may read; root reads everything, so only elsewhere.
    let secret = here.join("secret.csv");
    fs::write(&secret, good()).unwrap();
    fs::set_permissions(&secret, fs::Permissions::from_mode(0o000)).unwrap();
    if fs::read(&secret).is_err() {
        let (code, message) = isopsi(here, &["inspect", "secret.csv"]);
        assert_eq!(code, 1);
        assert!(message.contains("secret.csv"), "{message}");
    }
    let left: Vec<PathBuf> = fs::read_dir(here)
        .unwrap()
        .map(|e| e.unwrap().path())
        .filter(|p| p.to_string_lossy().contains(".isopsi-") || p.extension().is_some_and(|e| e == "h5"))
        .collect();
    assert!(left.is_empty(), "{left:?}");
}

#[test]
fn a_closed_pipe_is_no_failure() {
    let folder = tempfile::tempdir().unwrap();
    fs::write(folder.path().join("a.csv"), good()).unwrap();
    let script = format!("set -o pipefail; {} streamlines a.csv --quiet | head -n 1", env!("CARGO_BIN_EXE_isopsi"));
    let out = Command::new("bash").args(["-c", &script]).current_dir(folder.path()).output().unwrap();
    assert!(out.status.success(), "{}", String::from_utf8_lossy(&out.stderr));
    assert!(String::from_utf8_lossy(&out.stdout).starts_with("# units:"));
}
