//! Fitted fields against the physics of plane incompressible flow: closed-form stagnation points, and facts that every such
//! field obeys.

#![allow(clippy::unwrap_used, clippy::panic)] // a test may fail by panicking

#[path = "../flows/mod.rs"]
mod flows;

mod consistency;
mod facts;
mod outliers;
mod points;

use std::sync::Arc;

use flows::Flow;
use isopsi::extract::stagnation::{
    StagnationKind, StagnationOptions, StagnationPoint, StagnationSearch, find_stagnation_points,
};
use isopsi::extract::turning::{Turning, turning_number};
use isopsi::extract::wall_points::{WallPointOptions, find_wall_points};
use isopsi::field::{Axis, Domain, Grid, VelocityField};
use isopsi::numerics::stream_function::{FitOptions, StreamFit, solve_stream_function};
use isopsi::numerics::surface::PsiSurface;
use ndarray::Array2;

/// A sampled flow, its fit, and the surface through the fit.
struct Fitted {
    domain: Domain,
    fit: StreamFit,
    surface: PsiSurface,
}

impl Fitted {
    fn search(&self) -> StagnationSearch {
        find_stagnation_points(&self.surface, &self.domain, &StagnationOptions::default())
    }

    fn wall_points(&self) -> Vec<StagnationPoint> {
        self.wall_points_with(0.0)
    }

    fn wall_points_with(&self, psi_noise: f64) -> Vec<StagnationPoint> {
        let options = WallPointOptions { psi_noise, ..WallPointOptions::default() };
        find_wall_points(&self.surface, &self.domain, &self.fit.body_psi, &self.fit.wall_psi, &options)
    }

    fn turning(&self) -> Turning {
        turning_number(&self.surface, &self.domain, &StagnationOptions::default())
    }

    /// Node spacing.
    fn h(&self) -> f64 {
        self.domain.grid.spacing()
    }

    /// Range of psi.
    fn ptp(&self) -> f64 {
        let (low, high) = self.surface.range().unwrap();
        high - low
    }
}

fn axis(low: f64, high: f64, n: usize) -> Axis {
    Axis::uniform(low, (high - low) / (n - 1) as f64, n).unwrap()
}

fn unit_square(n: usize) -> Domain {
    Domain::open(Grid::new(axis(0.0, 1.0, n), axis(0.0, 1.0, n)))
}

/// Fits vectors that `flow(x, y)` gives as `(u, v)`; nodes for which `drop` is true are gaps.
fn fit_vectors(domain: Domain, flow: impl Fn(f64, f64) -> (f64, f64), drop: impl Fn(f64, f64) -> bool) -> Fitted {
    let grid = domain.grid.clone();
    let vectors = Array2::from_shape_fn(grid.shape(), |(j, i)| flow(grid.x.at(i), grid.y.at(j)));
    let field = VelocityField::new(Arc::new(domain.clone()), vectors.mapv(|w| w.0), vectors.mapv(|w| w.1))
        .unwrap()
        .without(|j, i| drop(grid.x.at(i), grid.y.at(j)));
    let fit = solve_stream_function(&field, &FitOptions::default()).unwrap();
    let surface = PsiSurface::new(&grid, &fit.psi);
    Fitted { domain, fit, surface }
}

fn fit_flow(domain: Domain, flow: &Flow) -> Fitted {
    fit_vectors(
        domain,
        |x, y| {
            let (_, u, v) = flow(x, y);
            (u, v)
        },
        |_, _| false,
    )
}

/// Standard normal numbers: splitmix64 and Box-Muller.
fn normal(seed: u64) -> impl FnMut() -> f64 {
    let mut state = seed;
    let mut uniform = move || {
        state = state.wrapping_add(0x9E37_79B9_7F4A_7C15);
        let mut z = state;
        z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
        z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
        (((z ^ (z >> 31)) >> 11) as f64 + 0.5) / (1u64 << 53) as f64
    };
    move || (-2.0 * uniform().ln()).sqrt() * (std::f64::consts::TAU * uniform()).cos()
}

fn of_kind(points: &[StagnationPoint], kind: StagnationKind) -> Vec<StagnationPoint> {
    points.iter().filter(|point| point.kind == kind).cloned().collect()
}

/// Distance of the nearest of `points` from a place, and that point.
fn nearest(points: &[StagnationPoint], x: f64, y: f64) -> (f64, StagnationPoint) {
    let distance = |point: &StagnationPoint| (point.x - x).hypot(point.y - y);
    let point = points.iter().min_by(|a, b| distance(a).total_cmp(&distance(b))).unwrap();
    (distance(point), point.clone())
}
