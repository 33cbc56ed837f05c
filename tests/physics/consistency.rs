//! The incompressibility check on known flows: false alarms, power, exact fields.

#![allow(clippy::print_stdout)] // the slow tests print the tables they measure

use std::path::PathBuf;
use std::sync::Arc;

use isopsi::field::{Axis, Domain, Grid, Sigma, VelocityField};
use isopsi::numerics::box_test::{DivergenceOptions, DivergenceReport, Verdict, check_divergence};
use isopsi::numerics::noise::NoiseGenerator;
use ndarray::Array2;

use crate::flows::{self, Flow};

/// Field on the unit square, `n` nodes a side, without uncertainty.
pub fn sample(n: usize, f: impl Fn(f64, f64) -> (f64, f64)) -> VelocityField {
    let axis = Axis::uniform(0.0, 1.0 / (n - 1) as f64, n).unwrap();
    let grid = Grid::new(axis.clone(), axis);
    let both = Array2::from_shape_fn(grid.shape(), |(j, i)| f(grid.x.at(i), grid.y.at(j)));
    VelocityField::new(Arc::new(Domain::open(grid)), both.mapv(|p| p.0), both.mapv(|p| p.1)).unwrap()
}

/// The flows of the accuracy table.
pub fn named_flows() -> Vec<(&'static str, Flow)> {
    vec![
        ("Taylor-Green", flows::taylor_green_default()),
        ("Lamb pair", flows::lamb_pair(0.4, 0.12)),
        ("cat's eye", flows::stuart(0.4, std::f64::consts::TAU)),
        ("Chaplygin", flows::chaplygin(0.3, 0.47, 0.52)),
    ]
}

/// Exact driven cavity on 65 x 65 nodes (own spectral solution, see the data folder).
pub fn cavity(reynolds: u32) -> VelocityField {
    let path =
        PathBuf::from(env!("CARGO_MANIFEST_DIR")).join(format!("tests/data/cavity_field_Re{reynolds}_65x65.csv"));
    let text = std::fs::read_to_string(path).unwrap();
    let rows: Vec<Vec<f64>> =
        text.lines().skip(1).map(|line| line.split(',').map(|cell| cell.parse().unwrap()).collect()).collect();
    let (mut u, mut v) = (Array2::zeros((65, 65)), Array2::zeros((65, 65)));
    for row in &rows {
        let place = [(row[1] * 64.0).round() as usize, (row[0] * 64.0).round() as usize];
        u[place] = row[2];
        v[place] = row[3];
    }
    assert_eq!(rows.len(), 65 * 65);
    let axis = Axis::uniform(0.0, 1.0 / 64.0, 65).unwrap();
    VelocityField::new(Arc::new(Domain::open(Grid::new(axis.clone(), axis))), u, v).unwrap()
}

fn check(field: &VelocityField) -> DivergenceReport {
    check_divergence(field, &DivergenceOptions::default())
}

/// What a field says about its noise.
#[derive(Clone, Copy, Debug)]
enum Said {
    Both,
    Overlap,
    Nothing,
}

/// Shares of verdicts "inconsistent" and "undecided" and of p < 0.05 over `fields` noise members.
fn shares(clean: &VelocityField, level: f64, overlap: f64, fields: u64, said: Said) -> [f64; 3] {
    let sigma = level * clean.rms_speed();
    let source = NoiseGenerator::new(clean.grid().shape(), overlap, 2026);
    let mut counts = [0.0; 3];
    for member in 0..fields {
        let (nu, nv) = source.unit(member);
        let mut f = clean.clone();
        f.u.scaled_add(sigma, &nu);
        f.v.scaled_add(sigma, &nv);
        let f = match said {
            Said::Both => f.with_sigma(Sigma::Uniform { u: sigma, v: sigma }).with_overlap(overlap),
            Said::Overlap => f.with_overlap(overlap),
            Said::Nothing => f,
        };
        let report = check(&f);
        for (count, hit) in counts.iter_mut().zip([
            report.verdict == Verdict::Inconsistent,
            report.verdict == Verdict::Undecided,
            report.p < 0.05,
        ]) {
            *count += f64::from(u8::from(hit)) / fields as f64;
        }
    }
    counts
}

#[test] // nominal 5 %; 40 fields: more than 6 alarms have probability 0.3 %
fn noise_on_incompressible_flow_is_rarely_called_divergent() {
    for (name, flow) in named_flows().into_iter().take(2) {
        let clean = sample(33, |x, y| (flow(x, y).1, flow(x, y).2));
        for overlap in [0.0, 0.5] {
            let [inconsistent, ..] = shares(&clean, 0.02, overlap, 40, Said::Both);
            assert!(inconsistent <= 0.15, "{name} {overlap}: {inconsistent}");
        }
    }
}

#[test]
#[ignore = "slow"] // 36 cases each: of 200 fields, standard error 1.5 % in a case; of 60 fields where less is declared, 3 %
fn false_alarms_stay_near_the_nominal_5_percent() {
    for (n, said, fields, most) in [
        (65, Said::Both, 200, 0.09),
        (65, Said::Overlap, 60, 0.15),
        (65, Said::Nothing, 60, 0.15),
        (17, Said::Both, 200, 0.09),
    ] {
        let (mut sum, mut cases) = (0.0, 0.0);
        for overlap in [0.0, 0.5, 0.75] {
            for (name, flow) in named_flows() {
                let clean = sample(n, |x, y| (flow(x, y).1, flow(x, y).2));
                for level in [0.005, 0.02, 0.05] {
                    let [inconsistent, undecided, rejected] = shares(&clean, level, overlap, fields, said);
                    println!(
                        "{n} {said:?} {overlap} {name} {level}: inconsistent {inconsistent:.3} undecided {undecided:.3} p<.05 {rejected:.3}"
                    );
                    sum += rejected;
                    cases += 1.0;
                    assert!(rejected <= most, "{n} {said:?} {name} {overlap} {level}: {rejected}");
                }
            }
        }
        println!("{n} {said:?} mean {:.4}", sum / cases);
        assert!(n < 65 || (0.015..0.08).contains(&(sum / cases)));
    }
}

#[test]
#[ignore = "slow"] // measured power of the reference implementation in the comments, % at overlap 0 / 0.5 / 0.75, noise 2 %
fn divergence_of_known_size_is_seen_as_often_as_the_reference_sees_it() {
    let blob = |x: f64, y: f64, a: f64| {
        let (dx, dy) = (x - 0.45, y - 0.55);
        let g = (-(dx * dx + dy * dy) / (2.0 * 0.1 * 0.1)).exp();
        // Irrotational: gradient of a Gaussian, largest speed a.
        (a * dx / 0.1 * g * 0.5f64.exp(), a * dy / 0.1 * g * 0.5f64.exp())
    };
    for (name, flow) in named_flows().into_iter().take(3) {
        let speed = sample(65, |x, y| (flow(x, y).1, flow(x, y).2)).rms_speed();
        let at = |x: f64, y: f64| (flow(x, y).1, flow(x, y).2);
        let cases: [(&str, VelocityField); 5] = [
            ("u +1 %", sample(65, |x, y| (1.01 * at(x, y).0, at(x, y).1))), // 32/17/9 Taylor-Green, 14/8/7 pair, 5 cat's eye
            ("u +3 %", sample(65, |x, y| (1.03 * at(x, y).0, at(x, y).1))), // 100/100/88 Taylor-Green
            (
                "blob 1 %",
                sample(65, |x, y| {
                    let b = blob(x, y, 0.01 * speed);
                    (at(x, y).0 + b.0, at(x, y).1 + b.1)
                }),
            ),
            (
                "blob 3 %",
                sample(65, |x, y| {
                    let b = blob(x, y, 0.03 * speed);
                    (at(x, y).0 + b.0, at(x, y).1 + b.1)
                }),
            ),
            ("v flipped", sample(65, |x, y| (at(x, y).0, -at(x, y).1))), // 100
        ];
        for (case, clean) in cases {
            for said in [Said::Both, Said::Overlap, Said::Nothing] {
                let found = [0.0, 0.5, 0.75].map(|overlap| shares(&clean, 0.02, overlap, 40, said));
                println!(
                    "{name} {case} {said:?}: inconsistent {:?} undecided {:?} p<.05 {:?}",
                    found.map(|f| f[0]),
                    found.map(|f| f[1]),
                    found.map(|f| f[2])
                );
                if name == "Taylor-Green" && case == "u +3 %" && matches!(said, Said::Both) {
                    assert!(found.iter().all(|f| f[0] > 0.8));
                }
                if case == "v flipped" {
                    assert!(found.iter().all(|f| f[0] > 0.99));
                }
            }
        }
    }
}

#[test]
fn exact_fields_with_any_declaration_of_sigma_are_not_called_divergent() {
    let mut fields: Vec<(String, VelocityField)> =
        [100, 1000].map(|re| (format!("cavity Re {re}"), cavity(re))).into_iter().collect();
    for (name, flow) in named_flows() {
        for n in [17, 33, 65, 129] {
            fields.push((format!("{name} {n}"), sample(n, |x, y| (flow(x, y).1, flow(x, y).2))));
        }
    }
    for (name, clean) in &fields {
        let speed = clean.rms_speed();
        let declared = |level: f64, overlap: f64| {
            let sigma = level * speed;
            clean.clone().with_sigma(Sigma::Uniform { u: sigma, v: sigma }).with_overlap(overlap)
        };
        for field in [
            clean.clone(),
            clean.clone().with_overlap(0.0),
            clean.clone().with_overlap(0.75),
            declared(1e-12, 0.0),
            declared(1e-6, 0.0),
            declared(1e-4, 0.5),
            declared(1e-3, 0.0),
            declared(0.02, 0.5),
            declared(0.1, 0.75),
        ] {
            let report = check(&field);
            assert_ne!(report.verdict, Verdict::Inconsistent, "{name} {:?} {report:#?}", field.sigma);
        }
    }
}
