//! Carries psi on to the walls and into the rim of bodies, so that streamlines reach the surfaces they follow.

use ndarray::Array2;

use super::surface::PsiSurface;
use super::walls::{ON_NODES, wall_distance};
use crate::field::{Axis, Domain, Grid, Shape, Side, Surface};

/// A first node nearer to the surface than this share of a step is left out of the extrapolation into the body.
const TOO_NEAR: f64 = 0.3;

/// Surface of psi that reaches the walls and bodies psi is tied to.
///
/// * A wall off the nodes adds a row or column of nodes on the wall, where psi is the psi of the wall; so it is at nodes on a wall
///   that carry no vector.
/// * Covered nodes next to the fluid get the value that continues psi through the surface: slip, the polynomial through the
///   psi of the body on its outline and two fluid nodes; no-slip, `psi_b + a s^2 + b s^3` through two fluid nodes.  What lies inside
///   the outline has no meaning of its own and is never reported.
/// * Bodies known by their nodes only, and free ones, stay holes.
/// * Accuracy: psi on the outline is off by about one hundredth of speed times spacing, between second and third order.
pub fn extended_surface(domain: &Domain, psi: &Array2<f64>, body_psi: &[f64], wall_psi: &[f64; 4]) -> PsiSurface {
    let mut values = psi.clone();
    for (body, &level) in body_psi.iter().enumerate() {
        let b = &domain.bodies[body];
        if level.is_finite() && b.surface != Surface::Free && b.shape != Shape::Nodes {
            continue_into_body(domain, psi, body, level, &mut values);
        }
    }
    let mut x = domain.grid.x.nodes().to_vec();
    let mut y = domain.grid.y.nodes().to_vec();
    let (mut pad_low, mut pad_high) = ((0, 0), (0, 0));
    for (s, side) in Side::ALL.into_iter().enumerate() {
        let Some(wall) = domain.walls.get(side) else { continue };
        if !wall_psi[s].is_finite() {
            continue;
        }
        let Some(at) = wall.at.filter(|&at| wall_distance(domain, side, at).0 > ON_NODES) else {
            reach_wall_on_nodes(domain, psi, side, wall_psi[s], &mut values);
            continue;
        };
        match side {
            Side::Bottom => {
                pad_low.0 = 1;
                y.insert(0, at);
            }
            Side::Top => {
                pad_high.0 = 1;
                y.push(at);
            }
            Side::Left => {
                pad_low.1 = 1;
                x.insert(0, at);
            }
            Side::Right => {
                pad_high.1 = 1;
                x.push(at);
            }
        }
    }
    if (pad_low, pad_high) == ((0, 0), (0, 0)) {
        return PsiSurface::new(&domain.grid, &values);
    }
    let (Ok(x), Ok(y)) = (Axis::from_nodes(x), Axis::from_nodes(y)) else {
        return PsiSurface::new(&domain.grid, &values);
    };
    let grid = Grid::new(x, y);
    let (ny, nx) = psi.dim();
    let padded = Array2::from_shape_fn(grid.shape(), |(j, i)| {
        let on = [
            (pad_low.0 == 1 && j == 0).then_some(0),
            (pad_high.0 == 1 && j + 1 == grid.ny()).then_some(1),
            (pad_low.1 == 1 && i == 0).then_some(2),
            (pad_high.1 == 1 && i + 1 == grid.nx()).then_some(3),
        ];
        let inner = ((j - pad_low.0.min(j)).min(ny - 1), (i - pad_low.1.min(i)).min(nx - 1));
        match on.into_iter().flatten().next() {
            // A wall node beside a gap carries nothing.
            Some(s) => {
                if values[inner].is_finite() || domain.is_solid(inner.0, inner.1) {
                    wall_psi[s]
                } else {
                    f64::NAN
                }
            }
            None => values[inner],
        }
    });
    PsiSurface::new(&grid, &padded)
}

/// Gives nodes on a wall that carry no vector the psi of the wall, where the next node has a psi.
fn reach_wall_on_nodes(domain: &Domain, psi: &Array2<f64>, side: Side, level: f64, values: &mut Array2<f64>) {
    let (ny, nx) = psi.dim();
    let along = if matches!(side, Side::Bottom | Side::Top) { nx } else { ny };
    for k in 0..along {
        let (node, next) = match side {
            Side::Bottom => ((0, k), (1, k)),
            Side::Top => ((ny - 1, k), (ny - 2, k)),
            Side::Left => ((k, 0), (k, 1)),
            Side::Right => ((k, nx - 1), (k, nx - 2)),
        };
        if values[node].is_nan() && psi[next].is_finite() && !domain.is_solid(node.0, node.1) {
            values[node] = level;
        }
    }
}

fn continue_into_body(domain: &Domain, psi: &Array2<f64>, body: usize, level: f64, values: &mut Array2<f64>) {
    let (ny, nx) = psi.dim();
    let label = body as u16 + 1;
    let place = |(j, i): (usize, usize)| [domain.grid.x.at(i), domain.grid.y.at(j)];
    let fluid = |j: isize, i: isize| {
        (j >= 0 && i >= 0 && (j as usize) < ny && (i as usize) < nx && psi[[j as usize, i as usize]].is_finite())
            .then_some((j as usize, i as usize))
    };
    let no_slip = domain.bodies[body].surface == Surface::NoSlip;
    let shape = &domain.bodies[body].shape;
    let mut direct = Vec::new();
    for ((j, i), &covered) in domain.covered.indexed_iter() {
        if covered != label {
            continue;
        }
        let (mut sum, mut count) = (0.0, 0);
        for (dj, di) in [(-1isize, 0isize), (1, 0), (0, -1), (0, 1)] {
            let node = |k: isize| fluid(j as isize + k * dj, i as isize + k * di);
            let Some(first) = node(1) else { continue };
            let (a, b) = (place(first), place((j, i)));
            let step = (a[0] - b[0]).abs() + (a[1] - b[1]).abs();
            let theta = shape.crossing(a, b).unwrap_or(1.0);
            let mut line: Vec<(f64, f64)> = Vec::new();
            for k in 1..=3 {
                let Some(n) = node(k) else { break };
                let p = place(n);
                let s = (p[0] - a[0]).abs() + (p[1] - a[1]).abs() + theta * step;
                if k > 1 || theta >= TOO_NEAR {
                    line.push((s, psi[n] - level));
                }
            }
            line.truncate(2);
            let s = -(1.0 - theta) * step;
            sum += level + continued(&line, s, no_slip);
            count += 1;
        }
        if count > 0 {
            direct.push(((j, i), sum / f64::from(count)));
        }
    }
    for &(node, value) in &direct {
        values[node] = value;
    }
    // Corners that touch the fluid only diagonally: the plane through the other three corners of the cell.
    let mut corners = Vec::new();
    for j in 0..ny - 1 {
        for i in 0..nx - 1 {
            let cell = [(j, i), (j, i + 1), (j + 1, i + 1), (j + 1, i)];
            for k in 0..4 {
                let at = cell[k];
                let others = [cell[(k + 1) % 4], cell[(k + 3) % 4], cell[(k + 2) % 4]];
                if domain.covered[at] == label
                    && values[at].is_nan()
                    && others.iter().all(|&n| values[n].is_finite())
                    && psi[others[2]].is_finite()
                {
                    corners.push((at, values[others[0]] + values[others[1]] - values[others[2]]));
                }
            }
        }
    }
    for (at, value) in corners {
        values[at] = value;
    }
}

/// `f(s)` for `s <= 0` from values at `s > 0`, with `f(0) = 0` and, without slip, `f'(0) = 0`.
fn continued(line: &[(f64, f64)], s: f64, no_slip: bool) -> f64 {
    let power = if no_slip { 2 } else { 1 };
    match *line {
        [] => 0.0,
        [(a, fa)] => fa * (s / a).powi(power),
        [(a, fa), (b, fb), ..] => {
            // f = s^p (c0 + c1 s)
            let (qa, qb) = (fa / a.powi(power), fb / b.powi(power));
            let c1 = (qb - qa) / (b - a);
            s.powi(power) * (qa + c1 * (s - a))
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::field::{Body, Wall, Walls};

    #[test] // potential flow past a cylinder (Milne-Thomson): psi vanishes on r = a
    fn psi_vanishes_on_a_tied_cylinder_to_better_than_first_order() {
        let error = |n: usize| {
            let axis = Axis::uniform(-1.0, 2.0 / (n - 1) as f64, n).unwrap();
            let a = 0.37;
            let body = Body { shape: Shape::Circle { x: 0.0, y: 0.0, radius: a }, surface: Surface::Slip };
            let domain = Domain::open(Grid::new(axis.clone(), axis)).with_body(body);
            let psi = Array2::from_shape_fn((n, n), |(j, i)| {
                let (x, y) = (domain.grid.x.at(i), domain.grid.y.at(j));
                if domain.is_solid(j, i) { f64::NAN } else { y * (1.0 - a * a / (x * x + y * y)) }
            });
            let surface = extended_surface(&domain, &psi, &[0.0], &[f64::NAN; 4]);
            (0..720)
                .map(|k| {
                    let t = f64::from(k).to_radians() / 2.0;
                    surface.eval(a * t.cos(), a * t.sin()).map_or(f64::INFINITY, |jet| jet.psi.abs())
                })
                .fold(0.0, f64::max)
        };
        let (coarse, fine) = (error(41), error(81));
        assert!(fine < 4e-4 && coarse / fine > 2.8, "{coarse:.2e} {fine:.2e}");
    }

    #[test]
    fn a_wall_off_the_nodes_becomes_a_row_of_nodes() {
        let axis = Axis::uniform(0.5, 1.0, 6).unwrap();
        let walls = Walls { bottom: Some(Wall { surface: Surface::Slip, at: Some(0.0) }), ..Walls::default() };
        let domain = Domain::open(Grid::new(axis.clone(), axis)).with_walls(walls);
        let psi = Array2::from_shape_fn((6, 6), |(j, _)| 3.0 + 2.0 * (j as f64 + 0.5));
        let surface = extended_surface(&domain, &psi, &[], &[3.0, f64::NAN, f64::NAN, f64::NAN]);
        approx::assert_abs_diff_eq!(surface.eval(2.0, 0.1).unwrap().psi, 3.2, epsilon = 1e-12);
        approx::assert_abs_diff_eq!(surface.eval(2.0, 5.0).unwrap().psi, 13.0, epsilon = 1e-12);
    }
}
