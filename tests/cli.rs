//! The command line as a user meets it: README's commands, exit codes, formats, repeatability.
#![allow(clippy::unwrap_used, clippy::panic)]

use std::fs;
use std::path::Path;
use std::process::{Command, Output};

fn root() -> &'static Path {
    Path::new(env!("CARGO_MANIFEST_DIR"))
}

fn isopsi(arguments: &[&str]) -> Output {
    Command::new(env!("CARGO_BIN_EXE_isopsi")).args(arguments).current_dir(root()).output().unwrap()
}

fn text(bytes: &[u8]) -> String {
    String::from_utf8_lossy(bytes).into_owned()
}

fn ok(arguments: &[&str]) -> String {
    let out = isopsi(arguments);
    assert!(out.status.success(), "{arguments:?}: {}", text(&out.stderr));
    text(&out.stdout)
}

fn json(arguments: &[&str]) -> serde_json::Value {
    serde_json::from_str(&ok(arguments)).unwrap()
}

#[test]
fn the_readme_runs_the_main_job_on_the_demo_data_and_the_tests() {
    let readme = fs::read_to_string(root().join("README.md")).unwrap();
    let blocks: Vec<&str> = readme.split("```sh\n").skip(1).map(|b| b.split("```").next().unwrap()).collect();
    assert!(blocks[0].contains("cargo run --release -- run data-demo/flume.toml --out results"), "{}", blocks[0]);
    assert!(blocks[1].contains("cargo test --release"), "{}", blocks[1]);
    // Every file the README promises of a run is written.
    let folder = tempfile::tempdir().unwrap();
    let out = folder.path().join("results");
    let said = ok(&["run", "data-demo/flume.toml", "--out", out.to_str().unwrap()]);
    assert!(said.lines().count() <= 12 && said.contains("verdict  consistent"), "{said}");
    for file in [
        "figure.svg",
        "figure.pdf",
        "figure.png",
        "summary.json",
        "field.h5",
        "stagnation.csv",
        "streamlines.csv",
        "lines.csv",
        "cells.csv",
    ] {
        assert!(fs::metadata(out.join(file)).unwrap().len() > 100, "{file}");
        assert!(readme.contains(file) || file.starts_with("figure."), "README does not name {file}");
    }
    let summary: serde_json::Value =
        serde_json::from_str(&fs::read_to_string(out.join("summary.json")).unwrap()).unwrap();
    for key in [
        "version",
        "command",
        "settings",
        "inputs",
        "grid",
        "units",
        "vectors",
        "sigma",
        "divergence",
        "verdict",
        "fit",
        "counts",
        "seconds",
        "remarks",
        "caution",
    ] {
        assert!(!summary[key].is_null(), "summary lacks {key}");
    }
}

#[test]
fn the_survey_file_in_the_readme_is_understood() {
    let readme = fs::read_to_string(root().join("README.md")).unwrap();
    let survey = readme.split("```toml\n").nth(1).unwrap().split("```").next().unwrap();
    let folder = tempfile::tempdir().unwrap();
    fs::write(folder.path().join("s.toml"), survey).unwrap();
    let mut rows = String::from("x,y,u,v\n");
    for j in 0..12 {
        for i in 0..12 {
            rows += &format!("{},{},{},0.01\n", i * 6 - 30, j * 6, 1 + j);
        }
    }
    fs::write(folder.path().join("vectors.csv"), rows).unwrap();
    let path = folder.path().join("s.toml");
    let out = isopsi(&["inspect", path.to_str().unwrap()]);
    assert!(out.status.success() || text(&out.stderr).contains("covers no node"), "{}", text(&out.stderr));
}

#[test]
fn known_truth_of_the_mixing_tank_is_found() {
    let rows = json(&["stagnation", "data-demo/mixing_tank.toml", "--json", "--quiet"]);
    let points = rows.as_array().unwrap();
    let near = |kind: &str, x: f64, y: f64, r: f64| {
        points
            .iter()
            .find(|p| p["kind"] == kind && (p["x"].as_f64().unwrap() - x).hypot(p["y"].as_f64().unwrap() - y) < r)
            .unwrap_or_else(|| panic!("no {kind} near ({x}, {y}) in {rows:#}"))
    };
    // data-demo/truth.csv
    assert!((near("center", 0.1096, 0.0822, 0.003)["psi"].as_f64().unwrap() - 0.003_174_0).abs() < 2e-5);
    assert!((near("center", 0.3096, 0.0678, 0.004)["psi"].as_f64().unwrap() + 0.001_734_0).abs() < 2e-5);
    assert!((near("saddle", 0.2, 0.15, 0.003)["psi"].as_f64().unwrap() - 0.001_44).abs() < 2e-5);
    near("attachment", 0.0, 0.1644, 0.003);
    near("separation", 0.2192, 0.0, 0.003);
    assert_eq!(points.len(), 9, "{rows:#}");
    assert!(
        points.iter().all(|p| p["sigma_psi"].is_null() && p["flag"].is_null()),
        "nothing is printed that was not computed"
    );
}

#[test]
fn a_required_verdict_that_is_not_met_exits_with_3() {
    let good = isopsi(&["divergence", "data-demo/flume.toml", "--require", "consistent"]);
    assert_eq!(good.status.code(), Some(0));
    let bad = isopsi(&["divergence", "data-demo/flume_v_flipped.toml", "--require", "consistent"]);
    assert_eq!(bad.status.code(), Some(3));
    assert!(text(&bad.stdout).starts_with("verdict  inconsistent"));
    assert!(text(&bad.stderr).contains("`consistent` was required"));
}

#[test]
fn flux_agrees_with_the_measured_vectors_and_with_the_known_psi() {
    // psi at (150, 100) is 5893.652 mm2/s with the floor as zero (data-demo/truth.csv); sigma of psi is about 5.
    let flux = json(&["flux", "data-demo/flume.toml", "--from", "150,0", "--to", "150,100", "--json", "--quiet"]);
    assert!((flux["flux"].as_f64().unwrap() - 5893.65).abs() < 25.0, "{flux}");
    let inside = json(&["flux", "data-demo/flume.toml", "--from", "150,10", "--to", "150,100", "--json", "--quiet"]);
    assert!((inside["flux"].as_f64().unwrap() - inside["flux_along_line"].as_f64().unwrap()).abs() < 30.0, "{inside}");
    let turned = json(&["flux", "data-demo/flume.toml", "--from", "150,100", "--to", "150,10", "--json", "--quiet"]);
    assert!((turned["flux"].as_f64().unwrap() + inside["flux"].as_f64().unwrap()).abs() < 1e-9);
}

#[test]
fn threads_change_no_byte_and_a_second_run_writes_the_same() {
    let folder = tempfile::tempdir().unwrap();
    let mut runs = Vec::new();
    for threads in ["1", "2", "7"] {
        let out = folder.path().join(threads);
        ok(&["run", "data-demo/flume.toml", "--out", out.to_str().unwrap(), "--threads", threads, "--quiet"]);
        runs.push(out);
    }
    for file in
        ["stagnation.csv", "streamlines.csv", "lines.csv", "cells.csv", "figure.svg", "figure.pdf", "figure.png"]
    {
        let first = fs::read(runs[0].join(file)).unwrap();
        for other in &runs[1..] {
            assert!(fs::read(other.join(file)).unwrap() == first, "{file} differs with the number of threads");
        }
    }
    // The same settings again are welcome, others are not.
    let out = runs[0].to_str().unwrap();
    ok(&["run", "data-demo/flume.toml", "--out", out, "--quiet"]);
    let other = isopsi(&["run", "data-demo/flume.toml", "--out", out, "--count", "7", "--quiet"]);
    assert_eq!(other.status.code(), Some(2));
    assert!(text(&other.stderr).contains("--overwrite"), "{}", text(&other.stderr));
    ok(&["run", "data-demo/flume.toml", "--out", out, "--count", "7", "--quiet", "--overwrite"]);
}

#[test]
fn inspect_writes_a_survey_that_reads_back_as_the_same_field() {
    let folder = tempfile::tempdir().unwrap();
    let survey = folder.path().join("s.toml");
    let flags = ["--sigma", "0.8 mm/s", "--overlap", "0.5", "--wall", "bottom=no-slip at 0"];
    let mut first = vec!["inspect", "data-demo/flume.csv", "--json", "--quiet", "--write", survey.to_str().unwrap()];
    first.extend(flags);
    let (a, b) = (json(&first), json(&["inspect", survey.to_str().unwrap(), "--json"]));
    for key in ["grid", "units", "vectors", "u", "v", "sigma", "overlap"] {
        assert_eq!(a[key], b[key], "{key}");
    }
    assert!(fs::read_to_string(&survey).unwrap().contains("# [[solid]]"));
    // An existing file is not overwritten.
    assert_eq!(isopsi(&first).status.code(), Some(2));
}

#[test]
fn the_sign_of_psi_and_the_units_of_results_follow_the_user() {
    let range = |extra: &[&str]| {
        let folder = tempfile::tempdir().unwrap();
        let out = folder.path().join("p.npz");
        let mut arguments = vec!["psi", "data-demo/mixing_tank.toml", "--out", out.to_str().unwrap(), "--quiet"];
        arguments.extend(extra);
        ok(&arguments);
        let archive = fs::File::open(&out).unwrap();
        let mut npz = ndarray_npy::NpzReader::new(archive).unwrap();
        let psi: ndarray::Array2<f64> = npz.by_name("psi").unwrap();
        psi.iter().filter(|p| p.is_finite()).fold((f64::MAX, f64::MIN), |(a, b), &p| (a.min(p), b.max(p)))
    };
    let (low, high) = range(&[]);
    let (minus_low, minus_high) = range(&["--psi-sign", "-"]);
    assert_eq!((low, high), (-minus_high, -minus_low));
    let (mm, _) = range(&["--units", "mm,s"]);
    assert!((mm / low - 1e6).abs() < 1.0, "{mm} {low}");
}

#[test]
fn help_and_version_are_answers_and_carry_the_caution() {
    let help = isopsi(&["--help"]);
    assert!(help.status.success() && text(&help.stdout).contains("no basis for the safety"));
    for command in ["run", "inspect", "divergence", "clean", "psi", "stagnation", "streamlines", "flux", "figure"] {
        let out = isopsi(&[command, "--help"]);
        assert!(out.status.success() && text(&out.stdout).contains("no basis for the safety"), "{command}");
    }
    assert!(text(&isopsi(&["--version"]).stdout).starts_with("isopsi 0."));
}
