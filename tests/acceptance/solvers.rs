//! The three solvers against each other and against closed forms of the discrete problem.

use isopsi::field::{Domain, Grid, Surface, VelocityField};
use isopsi::numerics::solver::{SolverKind, StopReason};
use isopsi::numerics::stream_function::{FitOptions, StreamFunctionOperator, solve_stream_function};
use ndarray::Array2;

use crate::{circle, flows, gaps, mean_zero, packed, sample, unit_grid};

/// Largest difference where both have a value.
fn difference(a: &Array2<f64>, b: &Array2<f64>) -> f64 {
    a.iter().zip(b).filter(|(a, _)| a.is_finite()).map(|(a, b)| (a - b).abs()).fold(0.0, f64::max)
}

/// Rough vectors, so that every wave number takes part.
fn rough(mut field: VelocityField) -> VelocityField {
    for (k, (u, v)) in field.u.iter_mut().zip(field.v.iter_mut()).enumerate() {
        *u += 0.1 * (k as f64 * 0.618_034).fract();
        *v -= 0.1 * (k as f64 * 0.754_877).fract();
    }
    field
}

#[test]
fn all_solvers_give_the_same_psi() {
    let flow = flows::lamb_pair(0.4, 0.12);
    for (ny, nx) in [(48, 53), (131, 97)] {
        let open = || Domain::open(unit_grid(ny, nx));
        let bodies = open().with_body(circle(0.52, 0.45, 0.13, Surface::Slip)).with_body(circle(
            0.8,
            0.9,
            0.15,
            Surface::NoSlip,
        ));
        for (domain, drop) in [(open(), false), (open(), true), (bodies, true)] {
            let cosine = domain.bodies.is_empty() && !drop;
            let field = rough(sample(domain, &flow, |x, y| drop && gaps(x, y)));
            let solve =
                |solver| solve_stream_function(&field, &FitOptions { tolerance: 1e-13, ..mean_zero(solver) }).unwrap();
            let reference = solve(SolverKind::Cholesky);
            assert!(reference.solve.relative_residual < 1e-13, "{:?}", reference.solve);
            for kind in [SolverKind::Multigrid, SolverKind::Cosine] {
                if kind == SolverKind::Cosine && !cosine {
                    continue;
                }
                let other = solve(kind);
                assert_eq!(other.solve.solver, kind);
                assert!(other.solve.iterations <= 30, "{:?}", other.solve);
                let (range, worst) = (0.5, difference(&reference.psi, &other.psi));
                assert!(worst / range < 1e-11, "{:?}: {worst:.2e}", other.solve);
                for (a, b) in reference.body_psi.iter().zip(&other.body_psi) {
                    assert!((a - b).abs() / range < 1e-11);
                }
            }
        }
    }
}

#[test]
fn multigrid_iterations_do_not_grow_with_the_grid() {
    let flow = flows::lamb_pair(0.4, 0.12);
    let iterations = |n: usize| {
        let domain = Domain::open(unit_grid(n, n)).with_body(circle(0.52, 0.45, 0.13, Surface::Slip));
        let field = rough(sample(domain, &flow, |x, y| x > 0.9 && y > 0.8));
        let fit = solve_stream_function(&field, &mean_zero(SolverKind::Multigrid)).unwrap();
        assert_eq!(fit.solve.reason, StopReason::Converged);
        fit.solve.iterations
    };
    let (small, large) = (iterations(65), iterations(513));
    assert!(large <= 20 && large <= small + 4, "{small} {large}");
}

#[test]
fn the_factorization_takes_over_where_multigrid_does_not_converge() {
    let flow = flows::taylor_green_default();
    let field = sample(Domain::open(unit_grid(65, 65)), &flow, gaps);
    let hasty = FitOptions { max_iterations: 2, ..mean_zero(SolverKind::Multigrid) };
    let fit = solve_stream_function(&field, &hasty).unwrap();
    assert_eq!((fit.solve.solver, fit.solve.reason), (SolverKind::Cholesky, StopReason::Direct));
    assert!(fit.solve.relative_residual < 1e-11);
}

#[test]
fn strongly_packed_axes_go_to_the_factorization() {
    let axis = |n: usize| {
        let nodes = (0..n).map(|k| (3.0 * (2.0 * k as f64 / (n - 1) as f64 - 1.0)).tanh()).collect();
        isopsi::field::Axis::from_nodes(nodes).unwrap()
    };
    let flow = flows::taylor_green_default();
    let kind = |grid| {
        let field = sample(Domain::open(grid), &flow, |_, _| false);
        solve_stream_function(&field, &mean_zero(SolverKind::Auto)).unwrap().solve.solver
    };
    assert_eq!(kind(Grid::new(axis(129), axis(129))), SolverKind::Cholesky);
    assert_eq!(kind(Grid::new(packed(129), packed(129))), SolverKind::Multigrid);
}

#[test]
fn the_fit_does_not_depend_on_the_number_of_threads() {
    let flow = flows::lamb_pair(0.4, 0.12);
    let domain = Domain::open(unit_grid(170, 230)).with_body(circle(0.52, 0.45, 0.13, Surface::Slip));
    let field = rough(sample(domain, &flow, gaps));
    let full = rough(sample(Domain::open(unit_grid(170, 230)), &flow, |_, _| false));
    let with = |threads| {
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
        pool.install(|| {
            let fits = [(&field, SolverKind::Multigrid), (&full, SolverKind::Cosine)];
            fits.map(|(f, kind)| solve_stream_function(f, &mean_zero(kind)).unwrap())
        })
    };
    for (one, three) in with(1).iter().zip(&with(3)) {
        assert!(one.psi.iter().zip(&three.psi).all(|(a, b)| a.to_bits() == b.to_bits()));
    }
}

#[test] // resistance of the unit square lattice (Venezian 1994; Cserti 2000; from memory, verified numerically)
fn psi_noise_of_independent_increments_is_the_lattice_resistance() {
    use std::f64::consts::PI;
    let n = 641;
    let axis = || isopsi::field::Axis::uniform(0.0, 1.0, n).unwrap();
    let zeros = Array2::zeros((n, n));
    let field =
        VelocityField::new(std::sync::Arc::new(Domain::open(Grid::new(axis(), axis()))), zeros.clone(), zeros).unwrap();
    let operator = StreamFunctionOperator::new(&field, &mean_zero(SolverKind::Auto)).unwrap();
    let c = n / 2;
    for ((dj, di), resistance) in [
        ((0, 1), 0.5),
        ((1, 1), 2.0 / PI),
        ((0, 2), 2.0 - 4.0 / PI),
        ((1, 2), 4.0 / PI - 0.5),
        ((0, 3), 0.860_562_731_589),
        ((3, 3), 0.976_150_317_630),
    ] {
        // Unit increments along a path from a to b: D' W q is a unit source at b and a unit sink at a.
        let mut q_y = Array2::zeros((n - 1, n));
        let mut q_x = Array2::zeros((n, n - 1));
        (0..dj).for_each(|k| q_y[[c + k, c]] = 1.0);
        (0..di).for_each(|k| q_x[[c + dj, c + k]] = 1.0);
        let (psi, _, _) = operator.solve(&q_y, &q_x, &[]).unwrap();
        let between = psi[[c + dj, c + di]] - psi[[c, c]];
        // What independent edge increments of unit variance do to psi(b) - psi(a): the sum of squared increments of psi.
        let inside = |k: usize| if k == 0 || k + 1 == n { 0.5 } else { 1.0 };
        let mut variance = 0.0;
        for j in 0..n {
            for i in 0..n {
                if j + 1 < n {
                    variance += (inside(i) * (psi[[j + 1, i]] - psi[[j, i]])).powi(2);
                }
                if i + 1 < n {
                    variance += (inside(j) * (psi[[j, i + 1]] - psi[[j, i]])).powi(2);
                }
            }
        }
        // The finite grid adds of the order of r^2 / n^2.
        let allowed = 3.0 * ((dj * dj + di * di) as f64) / (n * n) as f64;
        approx::assert_abs_diff_eq!(between, resistance, epsilon = allowed);
        approx::assert_abs_diff_eq!(variance, resistance, epsilon = allowed);
    }
}
