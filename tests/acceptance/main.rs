//! The fit of psi: accuracy on classical flows, walls and bodies, the zero of psi, agreement of the solvers.

#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail by panicking

#[path = "../flows/mod.rs"]
mod flows;

mod accuracy;
mod boundaries;
mod solvers;
mod zero;

use std::sync::Arc;

use flows::Flow;
use isopsi::field::{Axis, Body, Domain, Grid, Shape, Surface, VelocityField};
use isopsi::numerics::solver::SolverKind;
use isopsi::numerics::stream_function::{FitOptions, PsiZero, StreamFit};
use ndarray::Array2;

fn unit_grid(ny: usize, nx: usize) -> Grid {
    let axis = |n: usize| Axis::uniform(0.0, 1.0 / (n - 1) as f64, n).unwrap();
    Grid::new(axis(nx), axis(ny))
}

fn sample(domain: Domain, flow: &Flow, drop: impl Fn(f64, f64) -> bool) -> VelocityField {
    let at = |grid: &Grid, j: usize, i: usize| (grid.x.at(i), grid.y.at(j));
    let grid = domain.grid.clone();
    let u = Array2::from_shape_fn(grid.shape(), |(j, i)| flow(at(&grid, j, i).0, at(&grid, j, i).1).1);
    let v = Array2::from_shape_fn(grid.shape(), |(j, i)| flow(at(&grid, j, i).0, at(&grid, j, i).1).2);
    VelocityField::new(Arc::new(domain), u, v).unwrap().without(|j, i| {
        let (x, y) = at(&grid, j, i);
        drop(x, y)
    })
}

fn truth(grid: &Grid, flow: &Flow) -> Array2<f64> {
    Array2::from_shape_fn(grid.shape(), |(j, i)| flow(grid.x.at(i), grid.y.at(j)).0)
}

/// Largest deviation after removing the mean difference, over the range of psi on the fitted nodes.
fn relative_error(fit: &StreamFit, exact: &Array2<f64>) -> f64 {
    let pairs: Vec<(f64, f64)> =
        fit.psi.iter().zip(exact).filter(|(p, _)| p.is_finite()).map(|(p, e)| (*p, *e)).collect();
    let mean = pairs.iter().map(|(p, e)| p - e).sum::<f64>() / pairs.len() as f64;
    let worst = pairs.iter().map(|(p, e)| (p - e - mean).abs()).fold(0.0, f64::max);
    let (low, high) = pairs.iter().fold((f64::MAX, f64::MIN), |(l, h), (_, e)| (l.min(*e), h.max(*e)));
    worst / (high - low)
}

fn gaps(x: f64, y: f64) -> bool {
    (x - 0.27).hypot(y - 0.33) <= 0.08
        || (x - 0.71).hypot(y - 0.62) <= 0.11
        || ((y - 0.85 - 0.2 * (x - 0.5)).abs() < 0.03 && x > 0.2 && x < 0.8)
}

fn mean_zero(solver: SolverKind) -> FitOptions {
    FitOptions { zero: PsiZero::Mean, solver, ..FitOptions::default() }
}

fn circle(x: f64, y: f64, radius: f64, surface: Surface) -> Body {
    Body { shape: Shape::Circle { x, y, radius }, surface }
}

/// Axis from 0 to 1 packed towards its middle, steps between 0.62 and 1.38 of the mean.
fn packed(n: usize) -> Axis {
    let nodes = (0..n).map(|k| {
        let t = k as f64 / (n - 1) as f64;
        t + 0.12 * (std::f64::consts::TAU * t).sin() / 2.0
    });
    Axis::from_nodes(nodes.collect()).unwrap()
}
