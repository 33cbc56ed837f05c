//! Turning number of the velocity along the rim of the data: the independent count of stagnation points.

use rayon::prelude::*;

use super::stagnation::StagnationOptions;
use crate::field::{Domain, Side, Surface};
use crate::numerics::surface::PsiSurface;

/// Halvings of a rim edge before the direction of the velocity counts as undefined on it.
const MAX_HALVINGS: u32 = 60;
/// Distance, in node spacings, within which a wall lies on the outermost nodes.
const ON_NODES: f64 = 1e-6;
/// Points of the circle of [`turning_around`].
const CIRCLE_POINTS: usize = 256;

/// How often the velocity turns along the rim of the valid cells.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Turning {
    /// Turns in counter-clockwise direction, outer rim counter-clockwise plus holes clockwise; `None` where the velocity
    /// vanishes on the rim (a stagnation point on it, or a no-slip wall), so that its direction is not defined there.
    ///
    /// Equals the sum of the indices of the interior stagnation points (Poincare-Hopf).
    pub number: Option<i32>,
    /// Where the velocity vanishes on the rim, `[x, y]`, one position for an edge between two nodes.
    pub undefined: Vec<[f64; 2]>,
}

/// Turning number of the fitted velocity along the rim of the valid cells.
///
/// * Every rim edge carries the velocity as a polynomial vector of degree 3; it is halved until its Bezier points lie in one
///   half-plane, so that the angle between its ends is exact and no turn can be lost between samples.
/// * Units: turns.  Gaps: their rims count as holes.
/// * Walls: rim edges on a no-slip wall are undefined, the velocity there is zero up to the error of the fit.
pub fn turning_number(surface: &PsiSurface, domain: &Domain, options: &StagnationOptions) -> Turning {
    let Some((low, high)) = surface.range() else {
        return Turning { number: Some(0), undefined: Vec::new() };
    };
    let floor = options.resolution * (high - low) + 16.0 * f64::EPSILON * low.abs().max(high.abs());
    let rows = surface.cells().nrows();
    let walls = resting_sides(domain);
    let parts: Vec<(f64, Vec<[f64; 2]>)> =
        (0..rows).into_par_iter().map(|j| turning_of_row(surface, &walls, floor, j)).collect();
    let mut sum = 0.0;
    let mut undefined = Vec::new();
    for (angle, places) in parts {
        sum += angle;
        undefined.extend(places);
    }
    let number = undefined.is_empty().then(|| (sum / std::f64::consts::TAU).round() as i32);
    Turning { number, undefined }
}

/// Sides (order of [`Side::ALL`]) on which the outermost nodes lie on a no-slip wall.
fn resting_sides(domain: &Domain) -> [bool; 4] {
    let (x, y) = (&domain.grid.x, &domain.grid.y);
    Side::ALL.map(|side| {
        let (node, spacing) = match side {
            Side::Bottom => (y.first(), y.spacing(0)),
            Side::Top => (y.last(), y.spacing(y.len() - 2)),
            Side::Left => (x.first(), x.spacing(0)),
            Side::Right => (x.last(), x.spacing(x.len() - 2)),
        };
        domain.walls.get(side).is_some_and(|wall| {
            wall.surface == Surface::NoSlip && wall.at.is_none_or(|at| (at - node).abs() <= ON_NODES * spacing)
        })
    })
}

fn turning_of_row(surface: &PsiSurface, resting: &[bool; 4], floor: f64, j: usize) -> (f64, Vec<[f64; 2]>) {
    let grid = surface.grid();
    let (rows, columns) = surface.cells().dim();
    let (mut sum, mut undefined) = (0.0, Vec::new());
    let (row, dy) = (j as isize, grid.y.spacing(j));
    for i in (0..columns).filter(|&i| surface.cells()[[j, i]]) {
        let column = i as isize;
        let neighbors = [(row - 1, column), (row + 1, column), (row, column - 1), (row, column + 1)];
        let rim = neighbors.map(|(jj, ii)| !surface.cell_is_valid(jj, ii));
        if !rim.contains(&true) {
            continue;
        }
        let outer = [j == 0, j + 1 == rows, i == 0, i + 1 == columns];
        let dx = grid.x.spacing(i);
        let b = surface.bezier(j, i);
        for (k, side) in Side::ALL.into_iter().enumerate().filter(|&(k, _)| rim[k]) {
            let angle = if outer[k] && resting[k] { None } else { turn(&edge_velocity(&b, side, dx, dy), floor, 0) };
            let (s, t) = match side {
                Side::Bottom => (0.0, 0.5),
                Side::Top => (1.0, 0.5),
                Side::Left => (0.5, 0.0),
                Side::Right => (0.5, 1.0),
            };
            match angle {
                Some(angle) => sum += angle,
                None => undefined.push([grid.x.at(i) + t * dx, grid.y.at(j) + s * dy]),
            }
        }
    }
    (sum, undefined)
}

/// Bezier points of the velocity, scaled to a change of psi per cell, along one edge of a cell, counter-clockwise.
fn edge_velocity(b: &[[f64; 4]; 4], side: Side, dx: f64, dy: f64) -> [[f64; 2]; 4] {
    let size = (dx * dy).sqrt();
    // Value of psi on the edge and its neighbors one Bezier row inward: along the edge and across it.
    let line = |k: usize| match side {
        Side::Bottom => (b[0][k], b[1][k]),
        Side::Top => (b[3][k], b[2][k]),
        Side::Left => (b[k][0], b[k][1]),
        Side::Right => (b[k][3], b[k][2]),
    };
    let slope: [f64; 3] = std::array::from_fn(|k| 3.0 * (line(k + 1).0 - line(k).0));
    // Degree 2 raised to degree 3.
    let along = [slope[0], (slope[0] + 2.0 * slope[1]) / 3.0, (2.0 * slope[1] + slope[2]) / 3.0, slope[2]];
    let inward: [f64; 4] = std::array::from_fn(|k| 3.0 * (line(k).1 - line(k).0));
    let mut points: [[f64; 2]; 4] = std::array::from_fn(|k| {
        let (psi_x, psi_y) = match side {
            Side::Bottom => (along[k] / dx, inward[k] / dy),
            Side::Top => (along[k] / dx, -inward[k] / dy),
            Side::Left => (inward[k] / dx, along[k] / dy),
            Side::Right => (-inward[k] / dx, along[k] / dy),
        };
        [psi_y * size, -psi_x * size]
    });
    if matches!(side, Side::Top | Side::Left) {
        points.reverse();
    }
    points
}

/// Angle by which a vector turns along its Bezier curve, `None` where it vanishes.
fn turn(v: &[[f64; 2]; 4], floor: f64, halvings: u32) -> Option<f64> {
    let dot = |a: [f64; 2], b: [f64; 2]| a[0] * b[0] + a[1] * b[1];
    let largest = v.iter().map(|&p| dot(p, p)).fold(0.0, f64::max).sqrt();
    if largest <= floor || largest.is_nan() || halvings > MAX_HALVINGS {
        return None;
    }
    let unit = |p: [f64; 2]| {
        let length = p[0].hypot(p[1]);
        [p[0] / length, p[1] / length]
    };
    let (first, last) = (v[0], v[3]);
    let (a, z) = (unit(first), unit(last));
    let middle = unit([a[0] + z[0], a[1] + z[1]]);
    // The hull of the points keeps clear of the origin when all lie beyond a line that passes it on one side.
    if v.iter().all(|&p| dot(p, middle) > floor) {
        return Some((first[0] * last[1] - first[1] * last[0]).atan2(dot(first, last)));
    }
    let mid = |p: [f64; 2], q: [f64; 2]| [0.5 * (p[0] + q[0]), 0.5 * (p[1] + q[1])];
    let (p01, p12, p23) = (mid(v[0], v[1]), mid(v[1], v[2]), mid(v[2], v[3]));
    let (p012, p123) = (mid(p01, p12), mid(p12, p23));
    let center = mid(p012, p123);
    let early = turn(&[v[0], p01, p012, center], floor, halvings + 1)?;
    let late = turn(&[center, p123, p23, v[3]], floor, halvings + 1)?;
    Some(early + late)
}

/// Turning number on a small circle around a point in index coordinates; `None` where it leaves the valid cells.
pub(super) fn turning_around(surface: &PsiSurface, row: f64, column: f64, radius: f64) -> Option<i32> {
    let (rows, columns) = surface.cells().dim();
    let grid = surface.grid();
    let velocity = |k: usize| {
        let angle = std::f64::consts::TAU * (k as f64 + 0.5) / CIRCLE_POINTS as f64;
        let (p, q) = (row + radius * angle.sin(), column + radius * angle.cos());
        if p < 0.0 || q < 0.0 {
            return None;
        }
        let (j, i) = (p as usize, q as usize);
        let valid = j < rows && i < columns && surface.cells()[[j, i]];
        valid.then(|| {
            // Scaled per spacing so that stretched cells do not distort the angles' sampling.
            let jet = surface.eval_in_cell(j, i, p - j as f64, q - i as f64);
            [jet.psi_y * grid.y.spacing(j), -jet.psi_x * grid.x.spacing(i)]
        })
    };
    let mut sum = 0.0;
    let mut previous = velocity(0)?;
    for k in 1..=CIRCLE_POINTS {
        let next = velocity(k % CIRCLE_POINTS)?;
        sum += (previous[0] * next[1] - previous[1] * next[0]).atan2(previous[0] * next[0] + previous[1] * next[1]);
        previous = next;
    }
    Some((sum / std::f64::consts::TAU).round() as i32)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::extract::stagnation::{find_stagnation_points, index_sum};
    use crate::field::{Axis, Grid, Wall, Walls};
    use ndarray::Array2;
    use std::f64::consts::PI;

    fn grid(n: usize) -> Grid {
        let axis = Axis::uniform(0.0, 1.0 / (n - 1) as f64, n).unwrap();
        Grid::new(axis.clone(), axis)
    }

    /// Uniform numbers in (-0.5, 0.5), splitmix64.
    fn noise(seed: u64) -> impl FnMut() -> f64 {
        let mut state = seed.wrapping_mul(0x9E37_79B9_7F4A_7C15);
        move || {
            state = state.wrapping_add(0x9E37_79B9_7F4A_7C15);
            let mut z = state;
            z = (z ^ (z >> 30)).wrapping_mul(0xBF58_476D_1CE4_E5B9);
            z = (z ^ (z >> 27)).wrapping_mul(0x94D0_49BB_1331_11EB);
            ((z ^ (z >> 31)) >> 11) as f64 / (1u64 << 53) as f64 - 0.5
        }
    }

    fn both_counts(psi: &Array2<f64>, grid: &Grid) -> (i32, usize, Turning) {
        let domain = Domain::open(grid.clone());
        let surface = PsiSurface::new(grid, psi);
        let options = StagnationOptions::default();
        let search = find_stagnation_points(&surface, &domain, &options);
        assert!(search.undecided.is_empty(), "{:?}", search.undecided);
        (index_sum(&search.points), search.points.len(), turning_number(&surface, &domain, &options))
    }

    #[test] // Poincare-Hopf; nothing may be missed, doubled or mistaken in kind
    fn indices_of_pure_noise_sum_to_the_turning_number() {
        let grid = grid(33);
        let mut total = 0;
        for seed in 0..60 {
            let mut next = noise(seed);
            let psi = Array2::from_shape_fn((33, 33), |_| next());
            let (sum, points, turning) = both_counts(&psi, &grid);
            assert_eq!(turning.number, Some(sum), "seed {seed}, {points} points");
            total += points;
        }
        assert!(total > 60 * 200, "{total} points in all");
    }

    #[test] // the same with holes, bays and diagonal contacts: 15 % of the nodes are missing
    fn indices_of_gappy_noise_sum_to_the_turning_number() {
        let grid = grid(33);
        let mut total = 0;
        for seed in 1000..1060 {
            let mut next = noise(seed);
            let psi = Array2::from_shape_fn((33, 33), |_| {
                let value = next();
                if next() < -0.35 { f64::NAN } else { value }
            });
            let (sum, points, turning) = both_counts(&psi, &grid);
            assert_eq!(turning.number, Some(sum), "seed {seed}, {points} points");
            total += points;
        }
        assert!(total > 60 * 50, "{total} points in all");
    }

    #[test]
    fn a_vortex_turns_once_a_saddle_minus_once_a_stream_not_at_all() {
        let grid = grid(17);
        let turns = |psi: &dyn Fn(f64, f64) -> f64| {
            let values = Array2::from_shape_fn((17, 17), |(j, i)| psi(grid.x.at(i) - 0.53, grid.y.at(j) - 0.47));
            both_counts(&values, &grid).2.number
        };
        assert_eq!(turns(&|x, y| -(x * x + y * y)), Some(1));
        assert_eq!(turns(&|x, y| x * x + y * y), Some(1));
        assert_eq!(turns(&|x, y| x * y), Some(-1));
        assert_eq!(turns(&|x, y| y + 0.1 * x), Some(0));
    }

    #[test]
    fn a_stagnation_point_on_the_rim_leaves_the_number_undefined() {
        let grid = grid(17);
        let values = Array2::from_shape_fn((17, 17), |(j, i)| {
            let (x, y) = (grid.x.at(i) - 0.4, grid.y.at(j));
            x * x + y * y
        });
        let turning = turning_number(
            &PsiSurface::new(&grid, &values),
            &Domain::open(grid.clone()),
            &StagnationOptions::default(),
        );
        assert_eq!(turning.number, None);
        assert!(turning.undefined.iter().any(|p| (p[0] - 0.4).abs() < 0.07 && p[1] == 0.0), "{:?}", turning.undefined);
    }

    #[test]
    fn a_no_slip_wall_leaves_the_number_undefined_along_all_of_it() {
        let grid = grid(17);
        let wall = Some(Wall { surface: Surface::NoSlip, at: None });
        let domain = Domain::open(grid.clone()).with_walls(Walls { left: wall, ..Walls::default() });
        let values = Array2::from_shape_fn((17, 17), |(j, i)| {
            let x = grid.x.at(i);
            x * x * (PI * grid.y.at(j)).cos()
        });
        let turning = turning_number(&PsiSurface::new(&grid, &values), &domain, &StagnationOptions::default());
        assert_eq!((turning.number, turning.undefined.iter().filter(|p| p[0] == 0.0).count()), (None, 16));
    }
}
