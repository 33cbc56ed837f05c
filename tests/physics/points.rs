//! Stagnation, attachment and separation points of classical flows.
//!
//! Truth: closed forms, and for the driven cavity a spectral solution and published tables (`tests/data/README.md`).
//! Tolerances in node spacings h lie 1.3 to 2 times above the error of the surface and fall with its order.

use std::f64::consts::{PI, TAU};

use isopsi::extract::stagnation::{Boundary, StagnationKind, half_index_sum, index_sum, number_points};
use isopsi::field::{Body, Domain, Grid, Shape, Side, Surface, Thickness, Wall, Walls};

use super::*;
use StagnationKind::{Attachment, Center, Saddle, Separation};

/// The count agrees with the turning number of the rim, and nothing is left undecided.
fn search_and_count(fitted: &Fitted) -> Vec<StagnationPoint> {
    let search = fitted.search();
    assert!(search.undecided.is_empty(), "{:?}", search.undecided);
    assert_eq!(fitted.turning().number, Some(index_sum(&search.points)));
    search.points
}

/// Asserts that a point of the kind lies within `allowed` spacings of the place.
fn expect(
    fitted: &Fitted,
    points: &[StagnationPoint],
    kind: StagnationKind,
    at: [f64; 2],
    allowed: f64,
) -> StagnationPoint {
    let (distance, point) = nearest(&of_kind(points, kind), at[0], at[1]);
    let distance = distance / fitted.h();
    assert!(distance < allowed, "{kind:?} at {at:?}: {distance:e} spacings off, allowed {allowed:e}");
    point
}

/// Largest distance of the six zeros of the Taylor-Green test flow from their places, in spacings.
fn taylor_green_error(h: f64, points: &[StagnationPoint]) -> f64 {
    assert_eq!((points.len(), index_sum(points)), (6, -2));
    let half = PI / (TAU * 0.85);
    let places = [
        (Saddle, 0.0, 0.0),
        (Saddle, 1.0, 0.0),
        (Saddle, 0.0, 1.0),
        (Saddle, 1.0, 1.0),
        (Center, 0.5, 0.5),
        (Center, 0.5, 1.5),
    ];
    let error = |&(kind, x, y): &(StagnationKind, f64, f64)| {
        nearest(&of_kind(points, kind), 0.13 + x * half, 0.07 + y * half).0 / h
    };
    places.iter().map(error).fold(0.0, f64::max)
}

#[test] // expected errors: an independent implementation (NumPy) of the same surface on exact nodal psi, 2 %
fn all_six_points_of_taylor_green_lie_where_the_surface_puts_them() {
    let flow = flows::taylor_green_default();
    for (n, expected) in [(17, 6.425e-3), (33, 3.245e-4), (65, 7.015e-5), (129, 1.631e-5)] {
        let domain = unit_square(n);
        let grid = &domain.grid;
        let psi = Array2::from_shape_fn((n, n), |(j, i)| flow(grid.x.at(i), grid.y.at(j)).0);
        let search = find_stagnation_points(&PsiSurface::new(grid, &psi), &domain, &StagnationOptions::default());
        let error = taylor_green_error(grid.spacing(), &search.points);
        assert!((error / expected - 1.0).abs() < 0.02, "{n}: {error:e}, expected {expected:e}");
    }
}

#[test] // truth: zeros of sin k(x - x0) sin k(y - y0)
fn all_six_points_of_taylor_green_come_back_from_velocities() {
    for (n, allowed) in [(17, 1.2e-2), (33, 5.5e-4), (65, 9e-5), (129, 2.1e-5)] {
        let fitted = fit_flow(unit_square(n), &flows::taylor_green_default());
        let error = taylor_green_error(fitted.h(), &search_and_count(&fitted));
        assert!(error < allowed, "{n}: {error:e}");
    }
}

#[test] // Stuart 1967, eps = 1/4: frequency 2/3, strain 2/5, psi difference ln((1 + eps) / (1 - eps)), slopes +-1/2
fn stuarts_cats_eye_has_its_center_saddle_and_rates() {
    for (n, position, rate, psi) in [(33, 1.2e-3, 2.2e-3, 1.2e-4), (65, 3e-4, 7e-4, 8e-6), (129, 8e-5, 1.8e-4, 5e-7)] {
        let grid = Grid::new(axis(-2.0, 5.5, n), axis(-2.5, 3.5, n));
        let fitted = fit_flow(Domain::open(grid), &flows::stuart(0.25, 1.0));
        let points = search_and_count(&fitted);
        assert_eq!(points.len(), 2);
        let center = expect(&fitted, &points, Center, [0.5, 0.5], position);
        let saddle = expect(&fitted, &points, Saddle, [0.5 + PI, 0.5], position);
        // u > 0 above: clockwise
        approx::assert_abs_diff_eq!(center.rate, -2.0 / 3.0, epsilon = rate);
        approx::assert_abs_diff_eq!(center.period().unwrap(), 3.0 * PI, epsilon = 3.0 * PI * 1.5 * rate);
        approx::assert_abs_diff_eq!(saddle.rate, 0.4, epsilon = rate);
        approx::assert_abs_diff_eq!(saddle.psi - center.psi, (5.0_f64 / 3.0).ln(), epsilon = psi);
        let [out, inward] = saddle.directions.unwrap();
        approx::assert_abs_diff_eq!(out[1] / out[0], 0.5, epsilon = 2.0 * rate);
        approx::assert_abs_diff_eq!(inward[1] / inward[0], -0.5, epsilon = 2.0 * rate);
    }
}

#[test] // Lamb 1932 sec. 165; Meleshko & van Heijst 1994: centers j'11/j11 a off the axis, psi difference 2 x 0.754075 U a
fn lamb_chaplygin_dipole_has_its_centers_off_the_axis_and_poles_on_it() {
    let (a, x, y) = (0.3, 0.47, 0.52);
    let offset = 0.480_512_804_389_567 * a;
    for (n, position, psi) in [(33, 2e-3, 3e-4), (65, 9e-4, 2e-5), (129, 3e-4, 2e-6)] {
        let fitted = fit_flow(unit_square(n), &flows::chaplygin(a, x, y));
        let points = search_and_count(&fitted);
        assert_eq!(points.len(), 4);
        let upper = expect(&fitted, &points, Center, [x, y + offset], position);
        let lower = expect(&fitted, &points, Center, [x, y - offset], position);
        assert!(upper.rate * lower.rate < 0.0);
        approx::assert_abs_diff_eq!((upper.psi - lower.psi).abs() / (2.0 * a), 0.754_074_997_581_313, epsilon = psi);
        expect(&fitted, &points, Saddle, [x - a, y], position);
        expect(&fitted, &points, Saddle, [x + a, y], position);
    }
}

fn with_circle(n: usize, surface: Surface) -> Domain {
    unit_square(n).with_body(Body { shape: Shape::Circle { x: 0.5, y: 0.5, radius: 0.17 }, surface })
}

#[test] // sin theta = -Gamma / (4 pi U a), Batchelor 1967 sec. 6.6, Milne-Thomson
fn circulation_turns_the_points_of_a_cylinder_by_the_known_angle() {
    for (gamma, degrees) in [(0.0, 0.0), (1.0, -14.477_512_185_93), (2.0, -30.0), (3.0, -48.590_377_890_73)] {
        for (n, allowed) in [(33, 0.06), (65, 0.025), (129, 0.011)] {
            let fitted = fit_flow(with_circle(n, Surface::Slip), &flows::cylinder(0.17, -gamma * PI * 0.17));
            assert!(search_and_count(&fitted).is_empty());
            let points = fitted.wall_points();
            assert_eq!(points.len(), 2);
            let (sin, cos) = f64::to_radians(degrees).sin_cos();
            let (x, y) = (0.17 * cos, 0.5 + 0.17 * sin);
            let front = expect(&fitted, &points, Attachment, [0.5 - x, y], allowed);
            expect(&fitted, &points, Separation, [0.5 + x, y], allowed);
            assert_eq!((front.boundary, front.psi), (Some(Boundary::Body(0)), fitted.fit.body_psi[0]));
        }
    }
}

#[test] // r / a = G + sqrt(G^2 - 1), G = Gamma / (4 pi U a): 2 and 2.618034 (Batchelor 1967 sec. 6.6)
fn strong_circulation_frees_the_stagnation_point_of_a_cylinder() {
    for (gamma, radii) in [(5.0, 2.0), (6.0, 2.618_033_988_749_89)] {
        for (n, allowed) in [(33, 1.3e-3), (65, 5e-4), (129, 5e-5)] {
            let fitted = fit_flow(with_circle(n, Surface::Slip), &flows::cylinder(0.17, -gamma * PI * 0.17));
            let points = search_and_count(&fitted);
            assert_eq!(points.len(), 1);
            expect(&fitted, &points, Saddle, [0.5, 0.5 - 0.17 * radii], allowed);
            assert!(fitted.wall_points().is_empty());
        }
    }
}

#[test] // 100 noisy fields: two points each, front and back, whatever the noise
fn noise_adds_no_wall_points_to_a_cylinder() {
    for sigma in [0.02, 0.1] {
        for seed in 0..50 {
            let mut noise = normal(7919 * seed + 1);
            let noise = Array2::from_shape_fn((65, 65), |_| [sigma * noise(), sigma * noise()]);
            let flow = flows::cylinder(0.17, 0.0);
            let vector = |x: f64, y: f64| {
                let ((_, u, v), n) = (flow(x, y), noise[[(y * 64.0).round() as usize, (x * 64.0).round() as usize]]);
                (u + n[0], v + n[1])
            };
            let fitted = fit_vectors(with_circle(65, Surface::Slip), vector, |_, _| false);
            let points = fitted.wall_points_with(0.63 * sigma * fitted.h());
            assert_eq!(points.len(), 2, "sigma {sigma}, seed {seed}");
            for point in points {
                assert_eq!(point.kind == Attachment, point.x < 0.5);
                // the strength rises by 2 h / a per spacing and is known to about 1.2 sigma: 4.5 standard uncertainties
                assert!((point.y - 0.5).abs() / fitted.h() < 4.5 * 1.2 * sigma * 0.17 * 64.0 / 2.0);
            }
        }
    }
}

#[test] // source and sink m = 2 pi U a K at -a and a, K = 1: poles at sqrt(3) a (Rankine 1871, Milne-Thomson)
fn rankine_oval_ends_in_its_rear_stagnation_point() {
    let oval = |x: f64, y: f64| {
        let (source, sink) = ((x + 1.0).powi(2) + y * y, (x - 1.0).powi(2) + y * y);
        (1.0 + (x + 1.0) / source - (x - 1.0) / sink, y / source - y / sink)
    };
    for (n, allowed) in [(17, 3e-3), (33, 4e-4), (65, 5e-5)] {
        let fitted = fit_vectors(Domain::open(Grid::new(axis(1.3, 2.9, n), axis(-0.8, 0.8, n))), oval, |_, _| false);
        let points = search_and_count(&fitted);
        assert_eq!(points.len(), 1);
        let rear = expect(&fitted, &points, Saddle, [3.0_f64.sqrt(), 0.0], allowed);
        // fluid arrives along the surface from above and below and leaves downstream
        let [out, inward] = rear.directions.unwrap();
        assert!((out[0] - 1.0).abs() < 1e-9 && (inward[1].abs() - 1.0).abs() < 1e-9);
    }
}

#[test] // source m = 1 in a unit stream: x_s = -m / (2 pi U) (Rankine 1871, Milne-Thomson)
fn rankine_half_body_begins_in_its_stagnation_point() {
    let half = |x: f64, y: f64| {
        let r2 = x * x + y * y;
        (1.0 + x / r2 / TAU, y / r2 / TAU)
    };
    for (n, allowed) in [(17, 8e-3), (33, 5e-4), (65, 6e-5)] {
        let fitted = fit_vectors(Domain::open(Grid::new(axis(-0.5, -0.06, n), axis(-0.2, 0.2, n))), half, |_, _| false);
        let points = search_and_count(&fitted);
        assert_eq!(points.len(), 1);
        let front = expect(&fitted, &points, Saddle, [-1.0 / TAU, 0.0], allowed);
        let [out, inward] = front.directions.unwrap();
        assert!((out[1].abs() - 1.0).abs() < 1e-9 && (inward[0] - 1.0).abs() < 1e-9);
    }
}

#[test] // Lamb 1932 sec. 155: opposite pair, frame moving along: saddles at sqrt(3) d / 2 ahead and behind
fn opposite_vortices_with_gaps_in_their_cores_keep_their_saddles() {
    let pair = |x: f64, y: f64| {
        let (upper, lower) = (x * x + (y - 1.0).powi(2), x * x + (y + 1.0).powi(2));
        (-(y - 1.0) / upper + (y + 1.0) / lower - 0.5, x / upper - x / lower)
    };
    for (n, allowed) in [(33, 1e-3), (65, 1e-4), (129, 4e-6)] {
        let grid = Grid::new(axis(-2.6, 2.6, n), axis(-2.6, 2.6, n));
        let fitted = fit_vectors(Domain::open(grid), pair, |x, y| x.hypot(y.abs() - 1.0) < 0.35);
        let points = search_and_count(&fitted);
        assert_eq!(points.len(), 2);
        expect(&fitted, &points, Saddle, [3.0_f64.sqrt(), 0.0], allowed);
        expect(&fitted, &points, Saddle, [-(3.0_f64.sqrt()), 0.0], allowed);
    }
}

#[test] // Lamb 1932 sec. 155: equal pair, co-rotating frame: saddles at 0 and sqrt(5) d / 2, centers at sqrt(3) d / 2 across
fn equal_vortices_in_their_rotating_frame_have_three_saddles_and_two_centers() {
    let pair = |x: f64, y: f64| {
        let (right, left) = ((x - 1.0).powi(2) + y * y, (x + 1.0).powi(2) + y * y);
        (-y / right - y / left + 0.5 * y, (x - 1.0) / right + (x + 1.0) / left - 0.5 * x)
    };
    for (n, allowed) in [(33, 6e-3), (65, 5e-4), (129, 9e-5)] {
        let grid = Grid::new(axis(-3.0, 3.0, n), axis(-3.0, 3.0, n));
        let fitted = fit_vectors(Domain::open(grid), pair, |x, y| (x.abs() - 1.0).hypot(y) < 0.35);
        let points = search_and_count(&fitted);
        assert_eq!(points.len(), 5);
        for x in [-(5.0_f64.sqrt()), 0.0, 5.0_f64.sqrt()] {
            expect(&fitted, &points, Saddle, [x, 0.0], allowed);
        }
        for y in [-(3.0_f64.sqrt()), 3.0_f64.sqrt()] {
            let center = expect(&fitted, &points, Center, [0.0, y], allowed);
            // the frame turns with the vortices, so fluid outside their orbit goes round the other way
            assert!(center.rate < 0.0);
        }
    }
}

#[test] // Hill 1894, radius 1, unit stream: ring at r = 1/sqrt(2), frequency 3/2 / r = 2.12132; poles at +-1 on the axis
fn hills_vortex_has_its_ring_off_the_axis_and_its_poles_on_it() {
    let vector = |x: f64, r: f64| {
        let rho2 = x * x + r * r;
        if rho2 < 1.0 {
            (-1.5 * (1.0 - x * x - 2.0 * r * r), -1.5 * x * r)
        } else {
            let rho5 = rho2.powf(2.5);
            (1.0 - (2.0 * x * x - r * r) / (2.0 * rho5), -1.5 * x * r / rho5)
        }
    };
    // psi_rr jumps at the sphere, where the poles lie: first order there
    for (n, ring, pole) in [(33, 4e-3, 0.1), (65, 1.5e-3, 0.05), (129, 5e-4, 0.025)] {
        let grid = Grid::new(axis(-2.0, 2.0, 2 * n - 1), axis(0.0, 2.0, n));
        let fitted = fit_vectors(Domain::open(grid).with_thickness(Thickness::Radius), vector, |_, _| false);
        let search = fitted.search();
        assert_eq!((search.points.len(), search.undecided.len()), (1, 0), "{:?}", search.points);
        let center = expect(&fitted, &search.points, Center, [0.0, 0.5_f64.sqrt()], ring);
        approx::assert_abs_diff_eq!(center.rate, -1.5 * 2.0_f64.sqrt(), epsilon = ring);
        let poles = fitted.wall_points();
        assert_eq!(poles.len(), 2);
        let front = expect(&fitted, &poles, Separation, [-1.0, 0.0], pole);
        let rear = expect(&fitted, &poles, Attachment, [1.0, 0.0], pole);
        assert!(front.notes.contains(&"on_axis") && rear.notes.contains(&"on_axis"));
    }
}

/// The lid-driven cavity on 65 x 65 nodes, walls at rest below and at the sides, moving lid on top.
fn cavity(reynolds: u32, noise: f64) -> Fitted {
    let path = format!("{}/tests/data/cavity_field_Re{reynolds}_65x65.csv", env!("CARGO_MANIFEST_DIR"));
    let mut vectors = Array2::from_elem((65, 65), [0.0; 2]);
    let mut normal = normal(1);
    for line in std::fs::read_to_string(path).unwrap().lines().skip(1) {
        let row: Vec<f64> = line.split(',').map(|cell| cell.parse().unwrap()).collect();
        let node = [(row[1] * 64.0).round() as usize, (row[0] * 64.0).round() as usize];
        vectors[node] = [row[2] + noise * normal(), row[3] + noise * normal()];
    }
    let wall = |surface| Some(Wall { surface, at: None });
    let walls = Walls {
        bottom: wall(Surface::NoSlip),
        left: wall(Surface::NoSlip),
        right: wall(Surface::NoSlip),
        top: wall(Surface::Slip),
    };
    let vector = |x: f64, y: f64| {
        let [u, v] = vectors[[(y * 64.0).round() as usize, (x * 64.0).round() as usize]];
        (u, v)
    };
    fit_vectors(unit_square(65).with_walls(walls), vector, |_, _| false)
}

#[test] // spectral solution (own, N = 64); Botella & Peyret 1998 at Re 1000: (0.5308, 0.5652), psi -0.1189366
fn cavity_has_its_primary_and_two_corner_vortices_and_nothing_else() {
    // center, psi, allowed error of psi
    type Vortex = ([f64; 2], f64, f64);
    let cases: [(u32, [Vortex; 3]); 2] = [
        (
            100,
            [
                ([0.615_748, 0.737_308], -0.103_520_955, 2e-5),
                ([0.034_444, 0.034_300], 1.799_145e-6, 5e-8),
                ([0.942_521, 0.061_831], 1.272_825e-5, 1e-7),
            ],
        ),
        (
            1000,
            [
                ([0.530_790, 0.565_240], -0.118_936_606, 2e-5),
                ([0.083_273, 0.078_090], 2.334_498e-4, 1e-6),
                ([0.864_038, 0.111_805], 1.729_725e-3, 1e-6),
            ],
        ),
    ];
    for (reynolds, vortices) in cases {
        let fitted = cavity(reynolds, 0.0);
        let search = fitted.search();
        assert_eq!((search.points.len(), search.undecided.len()), (3, 0), "Re {reynolds}: {:?}", search.points);
        for (at, psi, allowed) in vortices {
            let center = expect(&fitted, &search.points, Center, at, 0.1);
            let error = center.psi - fitted.fit.wall_psi[0] - psi;
            assert!(error.abs() < allowed, "Re {reynolds}: psi of the vortex at {at:?} off by {error:e}");
            assert_eq!(center.rate < 0.0, psi < 0.0);
        }
        assert_eq!(fitted.turning().number, None, "the walls at rest leave no direction to count");
    }
}

#[test] // Hunt et al. 1978 (from memory): centers - saddles - half-saddles / 2 = 1 inside one wall
fn cavity_obeys_the_topology_rule_of_a_walled_region() {
    for reynolds in [100, 1000] {
        let fitted = cavity(reynolds, 0.0);
        let mut points = fitted.search().points;
        points.extend(fitted.wall_points());
        let points = number_points(points);
        assert_eq!((points.len(), half_index_sum(&points)), (7, 1.0), "Re {reynolds}");
        assert!(points.iter().enumerate().all(|(k, point)| point.id == k + 1));
    }
}

#[test] // wall zero of the tangential velocity, cubic extrapolation of its zeros in the first four rows of the exact field
fn cavity_corner_vortices_end_where_the_wall_shear_changes_sign() {
    let places = [
        (100, Side::Bottom, Attachment, 0.8627),
        (100, Side::Right, Separation, 0.1553),
        (1000, Side::Bottom, Separation, 0.2277),
        (1000, Side::Bottom, Attachment, 0.6982),
        (1000, Side::Left, Attachment, 0.1711),
        (1000, Side::Right, Separation, 0.3669),
    ];
    for (reynolds, side, kind, at) in places {
        let points = cavity(reynolds, 0.0).wall_points();
        let on_side: Vec<f64> = points
            .iter()
            .filter(|point| point.boundary == Some(Boundary::Side(side)) && point.kind == kind)
            .map(|point| if side == Side::Bottom { point.x } else { point.y })
            .collect();
        let [found] = on_side[..] else { panic!("Re {reynolds} {side:?} {kind:?}: {on_side:?}") };
        assert!((found - at).abs() * 64.0 < 0.2, "Re {reynolds} {side:?} {kind:?}: {found}, expected {at}");
    }
}

#[test] // lengths of the corner vortices in Ghia, Ghia & Shin 1982, from memory; their grid has 1/128
fn cavity_corner_vortices_have_the_published_lengths() {
    let lengths = [(100, [0.0781, 0.0781, 0.1328, 0.1484]), (1000, [0.2188, 0.1680, 0.3034, 0.3536])];
    for (reynolds, [left_x, left_y, right_x, right_y]) in lengths {
        let fitted = cavity(reynolds, 0.0);
        let points = fitted.wall_points();
        let allowed = 2.0 / 128.0 / fitted.h();
        expect(&fitted, &points, Separation, [left_x, 0.0], allowed);
        expect(&fitted, &points, Attachment, [0.0, left_y], allowed);
        expect(&fitted, &points, Attachment, [1.0 - right_x, 0.0], allowed);
        expect(&fitted, &points, Separation, [1.0, right_y], allowed);
    }
}

#[test] // half a percent of noise: the large corner vortex stays, nothing is made up along walls of weak shear
fn noise_makes_no_wall_points_in_the_cavity() {
    let fitted = cavity(1000, 0.005);
    let points = fitted.wall_points_with(0.5 * 0.005 * fitted.h());
    expect(&fitted, &points, Attachment, [0.6982, 0.0], 2.0);
    expect(&fitted, &points, Separation, [1.0, 0.3669], 3.0);
    assert!(points.len() <= 4, "{points:?}");
    assert!(fitted.wall_points().len() > 10, "the same field without a noise level");
}
