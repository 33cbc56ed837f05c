//! Measured and simulated fields of other people.  They are not in this repository; the folder that holds them (as `data/`) is
//! named by the variable ISOPSI_OUTSIDE_DATA, and without it these tests fail.
#![allow(clippy::unwrap_used, clippy::panic)]

use std::path::PathBuf;
use std::sync::Arc;

use isopsi::analysis::{Analysis, AnalysisOptions};
use isopsi::field::{Axis, Domain, Grid, VelocityField};
use isopsi::io::survey::{NumberOrText, OneOrMany};
use isopsi::io::{Survey, read};
use isopsi::numerics::box_test::Verdict;
use isopsi::numerics::stream_function::{FitOptions, PsiZero, solve_stream_function};
use ndarray::Array2;

fn data(name: &str) -> PathBuf {
    let folder = std::env::var_os("ISOPSI_OUTSIDE_DATA")
        .expect("set ISOPSI_OUTSIDE_DATA to the folder of the outside data (see tests/data/README.md)");
    let path = PathBuf::from(folder).join("data").join(name);
    assert!(path.is_file(), "{} is missing", path.display());
    path
}

fn run(name: &str, survey: &Survey) -> Analysis {
    let data = read(&[data(name)], survey).unwrap();
    Analysis::run(&data.field, &AnalysisOptions::default(), &|_| {}).unwrap()
}

#[test]
// Gray et al. AIAA 2023-3981, measured behind a bump (CC0): central differences of masked blocks, computed independently
#[ignore = "outside data"]
fn speed_bump_planes_are_not_plane_flow() {
    for (frame, valid, divergence) in [(2, 1736, 16.0), (3, 1669, 8.0)] {
        let mut survey = Survey::default();
        survey.data.zero = Some("gap".into());
        survey.data.frames = Some(NumberOrText::Text(frame.to_string()));
        survey.noise.overlap = Some(NumberOrText::Number(0.5));
        let analysis = run("speedbump_M0p05.dat", &survey);
        assert_eq!(analysis.flow.measured.valid_count(), valid, "block {frame}");
        approx::assert_relative_eq!(analysis.check.report.divergence_rms, divergence, max_relative = 0.03);
        assert_eq!(analysis.verdict(), Verdict::Inconsistent, "block {frame}");
    }
}

#[test] // tow-tank wake (MIT): v, w in a cross plane of a three-dimensional wake, expanded uncertainties taken as given
#[ignore = "outside data"]
fn the_cross_plane_of_a_wake_is_not_plane_flow() {
    let mut survey = Survey::default();
    survey.data.columns = Some(OneOrMany::One("y_R,z_H,mean_v,mean_w,exp_unc_mean_v,exp_unc_mean_w".into()));
    survey.noise.overlap = Some(NumberOrText::Number(0.0));
    let analysis = run("towtank_RVAT_Wake-1.0.csv", &survey);
    assert_eq!(analysis.flow.measured.grid().shape(), (6, 45));
    assert_eq!(analysis.verdict(), Verdict::Inconsistent);
    assert!(analysis.check.residual.share > 2.0 * analysis.check.residual.expected.unwrap());
}

#[test]
// mean wind with reference psi by spherical harmonics (MIT): on the Mercator plane the rotational wind is plane and solenoidal
#[ignore = "outside data"]
fn rotational_wind_gives_the_reference_psi() {
    let path = data("wind_sphere_ref_2.5deg.npz");
    let arrays = |u: &str, v: &str| {
        let mut survey = Survey::default();
        let pairs = [("u", u), ("v", v), ("x", "lon"), ("y", "lat")];
        survey.data.arrays = Some(pairs.into_iter().map(|(a, b)| (a.to_owned(), b.to_owned())).collect());
        read(std::slice::from_ref(&path), &survey).unwrap().field
    };
    let (wind, reference) = (arrays("upsi", "vpsi"), arrays("psi", "psi"));
    let radius = 6.371_2e6;
    let g = wind.grid();
    let rows: Vec<usize> = (0..g.ny()).filter(|&j| g.y.at(j).abs() <= 80.0).collect();
    let y: Vec<f64> = rows.iter().map(|&j| radius * g.y.at(j).to_radians().tan().asinh()).collect();
    let x: Vec<f64> = g.x.nodes().iter().map(|l| radius * l.to_radians()).collect();
    let shape = (rows.len(), g.nx());
    let take = |a: &Array2<f64>, cos: bool| {
        Array2::from_shape_fn(shape, |(j, i)| {
            a[[rows[j], i]] * if cos { g.y.at(rows[j]).to_radians().cos() } else { 1.0 }
        })
    };
    let domain = Domain::open(Grid::new(Axis::from_nodes(x).unwrap(), Axis::from_nodes(y).unwrap()));
    let plane = VelocityField::new(Arc::new(domain), take(&wind.u, true), take(&wind.v, true)).unwrap();
    let fit = solve_stream_function(&plane, &FitOptions { zero: PsiZero::Mean, ..FitOptions::default() }).unwrap();
    // Their sign is u = -dpsi/dy.
    let theirs = take(&reference.u, false).mapv(|p| -p);
    let shift = (&fit.psi - &theirs).mean().unwrap();
    let (low, high) = theirs.iter().fold((f64::MAX, f64::MIN), |(a, b), &p| (a.min(p), b.max(p)));
    let rms = ((&fit.psi - &theirs - shift).mapv(|d| d * d).mean().unwrap()).sqrt();
    assert!(rms < 2e-3 * (high - low), "rms difference {:.2e} of the range", rms / (high - low));
}

#[test]
// direct simulation of a channel, Hoyas & Jimenez 2006 Phys. Fluids 18, 011702: bulk and rules of discharge measurement
#[ignore = "outside data"]
fn channel_profile_carries_its_bulk_velocity() {
    let text = std::fs::read_to_string(data("channel_DNS_Retau2003.txt")).unwrap();
    let rows: Vec<(f64, f64)> = text
        .lines()
        .filter(|l| !l.trim_start().starts_with('%') && !l.trim().is_empty())
        .map(|l| {
            let f: Vec<f64> = l.split_whitespace().map(|t| t.parse().unwrap()).collect();
            (f[0], f[2])
        })
        .collect();
    let y = Axis::from_nodes(rows.iter().map(|r| r.0).collect()).unwrap();
    let shape = (rows.len(), 4);
    let domain = Domain::open(Grid::new(Axis::uniform(0.0, 0.01, 4).unwrap(), y));
    let u = Array2::from_shape_fn(shape, |(j, _)| rows[j].1);
    let field = VelocityField::new(Arc::new(domain), u, Array2::zeros(shape)).unwrap();
    let fit = solve_stream_function(&field, &FitOptions::default()).unwrap();
    let bulk = (fit.psi[[rows.len() - 1, 1]] - fit.psi[[0, 1]]) / field.grid().y.extent();
    approx::assert_relative_eq!(bulk, 21.748_212, max_relative = 2e-4);
    let at = |depth: f64| {
        let (j, t) = field.grid().y.locate(1.0 - depth).unwrap();
        rows[j].1 + t * (rows[j + 1].1 - rows[j].1)
    };
    approx::assert_relative_eq!(at(0.6) / bulk, 1.008_437, max_relative = 5e-4);
    approx::assert_relative_eq!(0.5 * (at(0.2) + at(0.8)) / bulk, 1.010_800, max_relative = 5e-4);
}
