//! Facts every plane incompressible flow obeys (common practice, textbook kinematics), held by the fitted field whatever the
//! vectors: here noisy Taylor-Green cells, Stuart's cat's eye and a stream past a cylinder.

use isopsi::extract::stagnation::StagnationKind;
use isopsi::field::{Body, Domain, Grid, Shape, Surface};

use super::*;

fn noisy_cells() -> Fitted {
    let flow = flows::taylor_green_default();
    let mut normal = normal(3);
    let noise = Array2::from_shape_fn((49, 49), |_| [0.02 * normal(), 0.02 * normal()]);
    let vector = |x: f64, y: f64| {
        let ((_, u, v), n) = (flow(x, y), noise[[(y * 48.0).round() as usize, (x * 48.0).round() as usize]]);
        (u + n[0], v + n[1])
    };
    fit_vectors(unit_square(49), vector, |x, y| (x - 0.8).hypot(y - 0.2) < 0.05)
}

fn cats_eye(n: usize) -> Fitted {
    fit_flow(Domain::open(Grid::new(axis(-2.0, 5.5, n), axis(-2.5, 3.5, n))), &flows::stuart(0.25, 1.0))
}

fn cylinder() -> Fitted {
    let body = Body { shape: Shape::Circle { x: 0.5, y: 0.5, radius: 0.17 }, surface: Surface::Slip };
    fit_flow(unit_square(49).with_body(body), &flows::cylinder(0.17, 0.1))
}

/// Places spread evenly (additive recurrence) over the valid cells, as fractions of the grid.
fn places(fitted: &Fitted, n: usize) -> Vec<[f64; 2]> {
    let (x, y) = (&fitted.domain.grid.x, &fitted.domain.grid.y);
    (1..=n)
        .map(|k| {
            let k = k as f64;
            [x.first() + x.extent() * (k * 0.754_877_666).fract(), y.first() + y.extent() * (k * 0.569_840_291).fract()]
        })
        .filter(|&[x, y]| fitted.surface.eval(x, y).is_some())
        .collect()
}

/// One step of the classical Runge-Kutta method along the fitted velocity.
fn step(fitted: &Fitted, [x, y]: [f64; 2], dt: f64) -> [f64; 2] {
    let velocity = |x: f64, y: f64| fitted.surface.eval(x, y).unwrap().velocity();
    let (u1, v1) = velocity(x, y);
    let (u2, v2) = velocity(x + 0.5 * dt * u1, y + 0.5 * dt * v1);
    let (u3, v3) = velocity(x + 0.5 * dt * u2, y + 0.5 * dt * v2);
    let (u4, v4) = velocity(x + dt * u3, y + dt * v3);
    [x + dt * (u1 + 2.0 * (u2 + u3) + u4) / 6.0, y + dt * (v1 + 2.0 * (v2 + v3) + v4) / 6.0]
}

#[test] // the sign convention itself: u = d psi/dy, v = -d psi/dx, checked by differences of psi
fn velocity_is_the_gradient_of_psi_turned_clockwise_and_runs_along_its_level_lines() {
    for fitted in [noisy_cells(), cats_eye(49), cylinder()] {
        let e = 1e-4 * fitted.h();
        let psi = |x: f64, y: f64| fitted.surface.eval(x, y).map(|jet| jet.psi);
        for [x, y] in places(&fitted, 500) {
            let (u, v) = fitted.surface.eval(x, y).unwrap().velocity();
            let scale = fitted.ptp() / fitted.h();
            let around = [psi(x + e, y), psi(x - e, y), psi(x, y + e), psi(x, y - e)];
            if let [Some(right), Some(left), Some(up), Some(down)] = around {
                // rounding of psi over e, and the kink of third derivatives at cell borders
                assert!((u - (up - down) / (2.0 * e)).abs() < 1e-8 * scale);
                assert!((v + (right - left) / (2.0 * e)).abs() < 1e-8 * scale);
                // gradient (-v, u) turned by -90 degrees is (u, v); along (u, v) psi does not change
                let speed = u.hypot(v);
                if let (Some(ahead), Some(behind)) =
                    (psi(x + e * u / speed, y + e * v / speed), psi(x - e * u / speed, y - e * v / speed))
                {
                    assert!((ahead - behind).abs() / (2.0 * e) < 1e-8 * scale);
                }
            }
        }
    }
}

#[test] // no fluid appears: the outflow of any box inside a cell vanishes to rounding (two-point Gauss is exact here)
fn fitted_velocity_has_no_divergence_to_rounding() {
    for fitted in [noisy_cells(), cats_eye(49), cylinder()] {
        let grid = &fitted.domain.grid;
        let scale = fitted.ptp();
        let gauss = [0.5 - 0.5 / 3.0_f64.sqrt(), 0.5 + 0.5 / 3.0_f64.sqrt()];
        let mut boxes = 0;
        for ((j, i), _) in fitted.surface.cells().indexed_iter().filter(|(_, valid)| **valid) {
            let (s, t) = ([0.13, 0.71], [0.22, 0.94]);
            let (width, height) = ((t[1] - t[0]) * grid.x.spacing(i), (s[1] - s[0]) * grid.y.spacing(j));
            let mut outflow = 0.0;
            for g in gauss {
                let (row, column) = (s[0] + g * (s[1] - s[0]), t[0] + g * (t[1] - t[0]));
                let at = |s: f64, t: f64| fitted.surface.eval_in_cell(j, i, s, t).velocity();
                outflow += 0.5 * height * (at(row, t[1]).0 - at(row, t[0]).0);
                outflow += 0.5 * width * (at(s[1], column).1 - at(s[0], column).1);
            }
            assert!(outflow.abs() < 1e-14 * scale, "{outflow:e} of {scale:e}");
            boxes += 1;
        }
        assert!(boxes > 1500);
    }
}

#[test] // steady flow: a particle stays on its streamline
fn a_particle_stays_on_its_level_line() {
    let mut particles = 0;
    for fitted in [noisy_cells(), cats_eye(49)] {
        for center in of_kind(&fitted.search().points, StagnationKind::Center) {
            if center.notes.contains(&"near_edge") {
                continue;
            }
            let mut at = [center.x + 1.3 * fitted.h(), center.y + 0.4 * fitted.h()];
            let Some(start) = fitted.surface.eval(at[0], at[1]) else { continue };
            particles += 1;
            let steps = 2000;
            for _ in 0..steps {
                at = step(&fitted, at, center.period().unwrap() / f64::from(steps));
            }
            let drift = (fitted.surface.eval(at[0], at[1]).unwrap().psi - start.psi).abs();
            // fourth order inside cells, third where the path crosses a kink of the third derivatives
            assert!(drift < 1e-10 * fitted.ptp(), "drift {drift:e} of {:e}", fitted.ptp());
        }
    }
    assert!(particles >= 3);
}

#[test] // Liouville / incompressibility: a patch of fluid keeps its area
fn a_patch_of_fluid_keeps_its_area_over_one_turnover() {
    let fitted = cats_eye(65);
    let centers = of_kind(&fitted.search().points, StagnationKind::Center);
    let center = &centers[0];
    let change = |vertices: usize| {
        let mut patch: Vec<[f64; 2]> = (0..vertices)
            .map(|k| {
                let angle = std::f64::consts::TAU * k as f64 / vertices as f64;
                [center.x + 0.9 + 0.35 * angle.cos(), center.y + 0.35 * angle.sin()]
            })
            .collect();
        let area = |patch: &[[f64; 2]]| {
            let next = patch.iter().cycle().skip(1);
            0.5 * patch.iter().zip(next).map(|(a, b)| a[0] * b[1] - a[1] * b[0]).sum::<f64>()
        };
        let before = area(&patch);
        let steps = 1000;
        for _ in 0..steps {
            for at in &mut patch {
                *at = step(&fitted, *at, center.period().unwrap() / f64::from(steps));
            }
        }
        (area(&patch) / before - 1.0).abs()
    };
    // chords cut the curved outline: the error falls with the square of their number
    let (coarse, fine) = (change(100), change(400));
    assert!(fine < 2e-4, "{fine:e}");
    assert!(fine < coarse / 10.0, "{coarse:e} {fine:e}");
}

#[test] // plane incompressible flow has no foci and no nodes: the velocity gradient is free of trace
fn interior_points_are_centers_and_saddles_only() {
    let fitted = noisy_cells();
    let points = fitted.search().points;
    assert!(points.len() >= 6);
    for point in points {
        let jet = fitted.surface.eval(point.x, point.y).unwrap();
        let (a, b, c, d) = (jet.psi_xy, jet.psi_yy, -jet.psi_xx, -jet.psi_xy);
        let (trace, det) = (a + d, a * d - b * c);
        assert_eq!(trace, 0.0);
        assert!(jet.speed() < 1e-9 * fitted.ptp() / fitted.h());
        match point.kind {
            StagnationKind::Center => assert!(det > 0.0 && point.index == 1 && point.directions.is_none()),
            StagnationKind::Saddle => assert!(det < 0.0 && point.index == -1 && point.directions.is_some()),
            kind => panic!("{kind:?} in the fluid"),
        }
    }
}

#[test] // near a center streamlines close, turn in the stated sense, and take the stated period
fn lines_near_a_center_close_around_it() {
    let mut orbits = 0;
    for fitted in [noisy_cells(), cats_eye(65)] {
        for center in of_kind(&fitted.search().points, StagnationKind::Center) {
            if !center.notes.is_empty() {
                continue;
            }
            orbits += 1;
            let start = [center.x + 0.05 * fitted.h(), center.y];
            let (mut at, mut turned, steps) = (start, 0.0, 2000);
            for _ in 0..steps {
                let before = [at[0] - center.x, at[1] - center.y];
                at = step(&fitted, at, center.period().unwrap() / f64::from(steps));
                let after = [at[0] - center.x, at[1] - center.y];
                turned +=
                    (before[0] * after[1] - before[1] * after[0]).atan2(before[0] * after[0] + before[1] * after[1]);
            }
            assert_eq!(turned > 0.0, center.rate > 0.0);
            // the period of so small an orbit differs from that of the center by (0.05 h)^2 times curvatures
            approx::assert_abs_diff_eq!(turned.abs() / std::f64::consts::TAU, 1.0, epsilon = 5e-3);
            assert!((at[0] - start[0]).hypot(at[1] - start[1]) < 0.05 * 0.05 * fitted.h() * 10.0);
        }
    }
    assert!(orbits >= 3);
}
