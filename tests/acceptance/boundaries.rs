//! Walls, bodies and the axis against closed forms.

use std::sync::Arc;

use isopsi::field::{Axis, Domain, Grid, Side, Surface, Thickness, VelocityField, Wall, Walls};
use isopsi::numerics::solver::SolverKind;
use isopsi::numerics::stream_function::{FitError, FitOptions, PsiZero, StreamFit, solve_stream_function};
use ndarray::Array2;

use crate::flows::{self, Flow};
use crate::{circle, relative_error, sample, truth, unit_grid};

fn fit(field: &VelocityField) -> StreamFit {
    solve_stream_function(field, &FitOptions::default()).unwrap()
}

fn parabola() -> Flow {
    Box::new(|_, y| (y * y / 2.0 - y * y * y / 3.0, y * (1.0 - y), 0.0))
}

/// Bottom and top walls, at given coordinates or on the nodes.
fn channel(surface: Surface, at: Option<(f64, f64)>) -> Walls {
    let wall = |at| Some(Wall { surface, at });
    Walls { bottom: wall(at.map(|a| a.0)), top: wall(at.map(|a| a.1)), ..Walls::default() }
}

#[test] // plane Poiseuille flow, flux 1/6: every rule in use integrates a parabola exactly
fn the_walls_of_a_channel_enclose_the_exact_flux() {
    let flow = parabola();
    for surface in [Surface::NoSlip, Surface::Slip] {
        // Outermost nodes 0.3 steps off the bottom and 0.8 steps off the top wall; then on the walls.
        let step = 1.0 / 12.1;
        let off = Grid::new(Axis::uniform(0.0, 0.1, 17).unwrap(), Axis::uniform(0.3 * step, step, 12).unwrap());
        for (grid, at) in [(off, Some((0.0, 1.0))), (unit_grid(13, 17), None), (unit_grid(13, 17), Some((0.0, 1.0)))] {
            let field = sample(Domain::open(grid.clone()).with_walls(channel(surface, at)), &flow, |_, _| false);
            let fit = fit(&field);
            assert_eq!(fit.zero, PsiZero::Wall(Side::Bottom));
            assert_eq!(fit.wall_psi[0], 0.0);
            approx::assert_abs_diff_eq!(fit.wall_psi[1], 1.0 / 6.0, epsilon = 1e-13);
            assert!(fit.wall_psi[2].is_nan() && fit.wall_psi[3].is_nan());
            for (p, e) in fit.psi.iter().zip(&truth(&grid, &flow)) {
                approx::assert_abs_diff_eq!(*p, *e, epsilon = 1e-13);
            }
        }
    }
}

#[test]
fn walls_on_nodes_without_vectors_are_tied_to_the_next_nodes() {
    let flow = parabola();
    for surface in [Surface::NoSlip, Surface::Slip] {
        let domain = Domain::open(unit_grid(13, 17)).with_walls(channel(surface, None));
        let field = sample(domain, &flow, |x, y| y == 0.0 || (y == 1.0 && x > 0.5));
        let fit = fit(&field);
        assert_eq!(fit.wall_psi[0], 0.0);
        approx::assert_abs_diff_eq!(fit.wall_psi[1], 1.0 / 6.0, epsilon = 1e-13);
        assert!(fit.psi[[0, 3]].is_nan());
        approx::assert_abs_diff_eq!(fit.psi[[1, 3]], flow(0.0, 1.0 / 12.0).0, epsilon = 1e-13);
    }
}

#[test]
fn walls_that_meet_at_a_corner_are_one_streamline() {
    let cells = flows::taylor_green(std::f64::consts::TAU, 0.0, 0.0);
    let wall = Some(Wall { surface: Surface::Slip, at: None });
    let box_of_four = Walls { bottom: wall, top: wall, left: wall, right: wall };
    let field = sample(Domain::open(unit_grid(65, 65)).with_walls(box_of_four), &cells, |_, _| false);
    let fit = fit(&field);
    assert_eq!(fit.wall_psi, [0.0; 4]);
    // Fourth order: k^4 h^4 / 60 of the amplitude is about 1.5e-6.
    assert!(relative_error(&fit, &truth(field.grid(), &cells)) < 3e-6);
}

#[test]
fn a_wall_inside_the_grid_or_far_outside_is_refused() {
    for at in [0.2, -0.2] {
        let walls = Walls { bottom: Some(Wall { surface: Surface::NoSlip, at: Some(at) }), ..Walls::default() };
        let field = sample(Domain::open(unit_grid(13, 17)).with_walls(walls), &parabola(), |_, _| false);
        let refused = solve_stream_function(&field, &FitOptions::default()).unwrap_err();
        assert!(matches!(refused, FitError::WallPlace { side: "bottom", .. }), "{refused}");
    }
}

/// Uniform stream past a sphere of radius `a` at (0.5, 0), y the radius: Stokes stream function (Lamb 1932).
fn sphere(a: f64) -> Flow {
    Box::new(move |x, y| {
        let x = x - 0.5;
        let s = (x * x + y * y).max(1e-6).sqrt();
        let c = a * a * a / (s * s * s);
        (0.5 * y * y * (1.0 - c), 1.0 - c + 1.5 * c * y * y / (s * s), -1.5 * c * x * y / (s * s))
    })
}

#[test]
fn a_sphere_on_the_axis_belongs_to_the_axis() {
    let a = 0.2;
    let flow = sphere(a);
    let error = |n: usize| {
        let domain = Domain::open(unit_grid(n, n)).with_thickness(Thickness::Radius).with_body(circle(
            0.5,
            0.0,
            a,
            Surface::Slip,
        ));
        let field = sample(domain, &flow, |_, _| false);
        let fit = fit(&field);
        assert_eq!(fit.body_psi, [0.0]);
        assert!(fit.psi.row(0).iter().all(|p| *p == 0.0 || p.is_nan()));
        assert_eq!(fit.components, 1);
        relative_error(&fit, &truth(field.grid(), &flow))
    };
    let (coarse, fine) = (error(33), error(65));
    assert!(fine < 1e-4 && (coarse / fine).log2() > 2.0, "{coarse:.2e} {fine:.2e}");
}

#[test] // Hagen-Poiseuille: flux 2 pi psi(wall) = pi/2 for u = 1 - r^2 on the unit radius
fn a_pipe_carries_two_pi_times_psi_of_its_wall() {
    let walls = Walls { top: Some(Wall { surface: Surface::NoSlip, at: None }), ..Walls::default() };
    let pipe: Flow = Box::new(|_, r| (r * r / 2.0 - r.powi(4) / 4.0, 1.0 - r * r, 0.0));
    let domain = Domain::open(unit_grid(33, 9)).with_thickness(Thickness::Radius).with_walls(walls);
    let options = FitOptions { zero: PsiZero::Axis, ..FitOptions::default() };
    let fit = solve_stream_function(&sample(domain, &pipe, |_, _| false), &options).unwrap();
    // r u is a cubic, which all rules but those of the two end edges integrate exactly: error h^4 / 24 * 6 for each.
    approx::assert_abs_diff_eq!(fit.wall_psi[1], 0.25, epsilon = 2.0 * 0.25 / 32f64.powi(4));
    assert!(fit.psi.row(0).iter().all(|p| *p == 0.0));
}

#[test]
fn parts_of_the_fluid_that_do_not_touch_have_their_own_zero() {
    let flow = flows::taylor_green_default();
    let field = sample(Domain::open(unit_grid(33, 33)), &flow, |x, y| {
        let (i, j) = ((x * 32.0).round() as i32, (y * 32.0).round() as i32);
        // A gap column, and a lone node in a gap.
        i == 20 || ((4..7).contains(&i) && (4..7).contains(&j) && (i, j) != (5, 5))
    });
    let fit = fit(&field);
    assert_eq!(fit.components, 2);
    assert!(fit.psi[[5, 5]].is_nan() && fit.component[[5, 5]] == 0);
    assert_eq!((fit.component[[0, 0]], fit.component[[0, 32]]), (1, 2));
    for part in [1, 2] {
        let of_part = || fit.psi.iter().zip(&fit.component).filter(|(_, c)| **c == part).map(|(p, _)| *p);
        approx::assert_abs_diff_eq!(of_part().sum::<f64>() / of_part().count() as f64, 0.0, epsilon = 1e-14);
    }
}

#[test]
fn vectors_declared_uncertain_hardly_move_psi() {
    let flow = flows::taylor_green_default();
    let grid = unit_grid(65, 65);
    let patch = |j: usize, i: usize| (20..30).contains(&j) && (25..40).contains(&i);
    let mut field = sample(Domain::open(grid.clone()), &flow, |_, _| false);
    for ((j, i), u) in field.u.indexed_iter_mut() {
        if patch(j, i) {
            *u += 1.0;
        }
    }
    let sigma = Array2::from_shape_fn((65, 65), |(j, i)| if patch(j, i) { 10.0 } else { 0.01 });
    let exact = truth(&grid, &flow);
    let spoiled = relative_error(&fit(&field), &exact);
    let told = field.with_sigma(isopsi::field::Sigma::PerNode { u: sigma.clone(), v: sigma });
    let error = &fit(&told).psi - &exact;
    let mean = error.mean().unwrap();
    let worst = |inside| {
        error
            .indexed_iter()
            .filter(|&((j, i), _)| patch(j, i) == inside)
            .map(|(_, e)| (e - mean).abs())
            .fold(0.0, f64::max)
    };
    // Inside the patch only bad vectors say how psi varies between its rims: a share of the false flux of one step, 1/64.  Outside,
    // edges that end beside it use a bad vector with 1/24 of a step, at 1/3000 of the weight.
    let (inside, outside) = (worst(true), worst(false));
    assert!(spoiled > 0.1 && inside < 0.1 / 64.0 && outside < 2e-5, "{spoiled:.2e} {inside:.2e} {outside:.2e}");
}

#[test]
fn equal_sigma_at_every_node_is_the_same_as_one_sigma() {
    let flow = flows::lamb_pair(0.4, 0.12);
    let field = sample(Domain::open(unit_grid(33, 41)), &flow, |x, y| x + y > 1.7);
    let uniform = Array2::from_elem((33, 41), 0.037);
    let per_node = field.clone().with_sigma(isopsi::field::Sigma::PerNode { u: uniform.clone(), v: uniform });
    for (a, b) in fit(&field).psi.iter().zip(&fit(&per_node).psi) {
        assert!((a - b).abs() < 1e-12 || (a.is_nan() && b.is_nan()), "{a} {b}");
    }
}

#[test]
fn a_frame_with_other_usable_vectors_needs_its_own_operator() {
    use isopsi::numerics::stream_function::StreamFunctionOperator;
    let flow = flows::taylor_green_default();
    let field = sample(Domain::open(unit_grid(17, 17)), &flow, |_, _| false);
    let operator = StreamFunctionOperator::new(&field, &FitOptions::default()).unwrap();
    let other = field.clone().without(|j, i| (j, i) == (3, 4));
    assert_eq!(operator.fit(&other).unwrap_err(), FitError::OtherVectors { count: 1 });
    let kind = operator.fit(&field).unwrap().solve.solver;
    assert_eq!(kind, SolverKind::Cosine);
}

#[test]
fn nothing_to_integrate_along_is_an_error() {
    let domain = Arc::new(Domain::open(unit_grid(9, 9)));
    let zeros = Array2::zeros((9, 9));
    let lone = VelocityField::new(domain, zeros.clone(), zeros).unwrap().without(|j, i| (i + j) % 2 == 1);
    assert_eq!(
        solve_stream_function(&lone, &FitOptions::default()).unwrap_err(),
        FitError::NoEdges { valid: lone.valid_count() }
    );
}
