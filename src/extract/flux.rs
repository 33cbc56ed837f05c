//! Volume flux between two points, from psi and along the straight line.

use super::contour::{Scene, VertexFlag};
use super::trace::distance;
use crate::field::{Shape, Side, Thickness, VelocityField};
use crate::numerics::surface::PsiSurface;
use ndarray::Array2;

/// Flux per unit depth from the left to the right of the way from one point to the other: psi(to) - psi(from).
#[derive(Debug, Clone, PartialEq)]
pub struct Flux {
    /// First point.
    pub from: [f64; 2],
    /// Second point.
    pub to: [f64; 2],
    /// psi at the first point.
    pub psi_from: f64,
    /// psi at the second point.
    pub psi_to: f64,
    /// Difference of psi.
    pub by_psi: f64,
    /// Integral of the measured vectors along the straight line, `None` with the reason when it cannot be formed.
    pub by_line: Result<f64, LineGap>,
    /// Whether that line passes filled nodes, whose vectors come from the fit.
    pub through_filled: bool,
    /// Whole flux of an axisymmetric flow, `2 pi` times the difference.
    pub around_axis: Option<f64>,
}

/// Why the measured vectors cannot be integrated along the line.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
#[non_exhaustive]
pub enum LineGap {
    /// The line crosses a gap or leaves the grid.
    #[error("the line crosses a gap or leaves the measured vectors")]
    Gap,
    /// The line crosses a body.
    #[error("the line crosses a body")]
    Body,
}

/// Why psi is not known at a point.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum FluxError {
    /// Outside the cells with psi, off walls and bodies.
    #[error("no psi at ({x}, {y}): the point lies in a gap or outside x {x0} to {x1}, y {y0} to {y1}")]
    NoPsi {
        /// Position.
        x: f64,
        /// Position.
        y: f64,
        /// Range of the grid.
        x0: f64,
        /// Range of the grid.
        x1: f64,
        /// Range of the grid.
        y0: f64,
        /// Range of the grid.
        y1: f64,
    },
    /// The points lie in parts of the fluid whose psi are not related.
    #[error("the two points lie in separate parts of the fluid: the flux between them is not known")]
    SeparateParts,
}

/// Points nearer to a wall than this share of a node spacing lie on it.
const ON_WALL: f64 = 1e-6;

/// Chords per node spacing of the straight line.
const CHORDS: f64 = 4.0;

/// Flux between two points.
///
/// A point inside or on a tied body, or on a wall, has the psi of its surface.  The line integral uses cubic Hermite patches of the
/// measured u and v (Simpson's rule, four chords a spacing) and is an independent check of psi.
///
/// # Errors
/// [`FluxError`] when psi is unknown at a point or the points belong to separate parts.
pub fn flux_between(
    scene: &Scene<'_>,
    field: &VelocityField,
    component: &Array2<u16>,
    from: [f64; 2],
    to: [f64; 2],
    body_psi: &[f64],
    wall_psi: &[f64; 4],
) -> Result<Flux, FluxError> {
    let (psi_from, part_from) = psi_at(scene, component, from, body_psi, wall_psi)?;
    let (psi_to, part_to) = psi_at(scene, component, to, body_psi, wall_psi)?;
    if let (Some(a), Some(b)) = (part_from, part_to)
        && a != b
    {
        return Err(FluxError::SeparateParts);
    }
    let by_psi = psi_to - psi_from;
    let axisymmetric = scene.domain.thickness == Thickness::Radius;
    Ok(Flux {
        from,
        to,
        psi_from,
        psi_to,
        by_psi,
        by_line: line_integral(scene, field, from, to),
        through_filled: (0..=200).any(|k| {
            let t = f64::from(k) / 200.0;
            scene.flag([from[0] + t * (to[0] - from[0]), from[1] + t * (to[1] - from[1])]) == VertexFlag::Filled
        }),
        around_axis: axisymmetric.then_some(std::f64::consts::TAU * by_psi),
    })
}

fn psi_at(
    scene: &Scene<'_>,
    component: &Array2<u16>,
    p: [f64; 2],
    body_psi: &[f64],
    wall_psi: &[f64; 4],
) -> Result<(f64, Option<u16>), FluxError> {
    let grid = &scene.domain.grid;
    for (body, &psi) in scene.domain.bodies.iter().zip(body_psi) {
        if psi.is_finite() && body.shape != Shape::Nodes && body.shape.contains(p[0], p[1]) {
            return Ok((psi, None));
        }
    }
    let near = ON_WALL * grid.spacing();
    for (side, &psi) in Side::ALL.into_iter().zip(wall_psi) {
        let Some(wall) = scene.domain.walls.get(side) else { continue };
        let (coordinate, edge) = match side {
            Side::Bottom => (p[1], grid.y.first()),
            Side::Top => (p[1], grid.y.last()),
            Side::Left => (p[0], grid.x.first()),
            Side::Right => (p[0], grid.x.last()),
        };
        if psi.is_finite() && (coordinate - wall.at.unwrap_or(edge)).abs() <= near {
            return Ok((psi, None));
        }
    }
    let jet = scene.surface.eval(p[0], p[1]).ok_or(FluxError::NoPsi {
        x: p[0],
        y: p[1],
        x0: grid.x.first(),
        x1: grid.x.last(),
        y0: grid.y.first(),
        y1: grid.y.last(),
    })?;
    let clamp = |v: f64, axis: &crate::field::Axis| v.clamp(axis.first(), axis.last());
    let part = match (grid.x.locate(clamp(p[0], &grid.x)), grid.y.locate(clamp(p[1], &grid.y))) {
        (Some((i, _)), Some((j, _))) => {
            [[j, i], [j, i + 1], [j + 1, i], [j + 1, i + 1]].into_iter().map(|n| component[n]).find(|&c| c != 0)
        }
        _ => None,
    };
    Ok((jet.psi, part))
}

/// `int h (u dy - v dx)` of the measured vectors along a segment.
fn line_integral(scene: &Scene<'_>, field: &VelocityField, from: [f64; 2], to: [f64; 2]) -> Result<f64, LineGap> {
    let length = distance(from, to);
    if length == 0.0 {
        return Ok(0.0);
    }
    let grid = field.grid();
    let chords = ((CHORDS * length / grid.spacing()).ceil() as usize).max(4);
    let u = PsiSurface::new(grid, &field.u);
    let v = PsiSurface::new(grid, &field.v);
    let (dx, dy) = (to[0] - from[0], to[1] - from[1]);
    let value = |t: f64| -> Result<f64, LineGap> {
        let p = [from[0] + t * dx, from[1] + t * dy];
        if scene.inside_body(p) && t > 0.0 && t < 1.0 {
            return Err(LineGap::Body);
        }
        let (u, v) = (u.eval(p[0], p[1]).ok_or(LineGap::Gap)?, v.eval(p[0], p[1]).ok_or(LineGap::Gap)?);
        Ok(scene.thickness(p) * (u.psi * dy - v.psi * dx))
    };
    let mut sum = 0.0;
    for k in 0..chords {
        let (a, b) = (k as f64 / chords as f64, (k + 1) as f64 / chords as f64);
        sum += (value(a)? + 4.0 * value(0.5 * (a + b))? + value(b)?) / 6.0 * (b - a);
    }
    Ok(sum)
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::field::{Axis, Domain, Flags, Grid};
    use crate::numerics::stream_function::{FitOptions, solve_stream_function};
    use std::sync::Arc;

    fn channel(thickness: Thickness, profile: impl Fn(f64) -> f64) -> (VelocityField, f64) {
        let grid = Grid::new(Axis::uniform(0.0, 0.1, 11).unwrap(), Axis::uniform(0.0, 0.025, 41).unwrap());
        let domain = Arc::new(Domain::open(grid.clone()).with_thickness(thickness));
        let u = Array2::from_shape_fn(grid.shape(), |(j, _)| profile(grid.y.at(j)));
        let field = VelocityField::new(domain, u, Array2::zeros(grid.shape())).unwrap();
        let fit = solve_stream_function(&field, &FitOptions::default()).unwrap();
        let surface = PsiSurface::new(&grid, &fit.psi);
        let flags = Array2::from_elem(grid.shape(), Flags::MEASURED);
        let scene = Scene { surface: &surface, domain: &field.domain, flags: &flags };
        let flux = flux_between(&scene, &field, &fit.component, [0.2, 0.0], [0.7, 1.0], &[], &[f64::NAN; 4]).unwrap();
        approx::assert_abs_diff_eq!(flux.by_psi, flux.by_line.unwrap(), epsilon = 1e-5);
        let whole = flux.around_axis.unwrap_or(flux.by_psi);
        (field, whole)
    }

    #[test] // plane Poiseuille: mean / maximum = 2/3; pipe: mean / maximum = 1/2, flux pi R^2 / 2 (textbook closed forms)
    fn poiseuille_fluxes_between_walls_and_in_a_pipe() {
        let (_, flux) = channel(Thickness::Uniform, |y| 4.0 * y * (1.0 - y));
        approx::assert_abs_diff_eq!(flux, 2.0 / 3.0, epsilon = 1e-9);
        let (_, flux) = channel(Thickness::Radius, |r| 1.0 - r * r);
        approx::assert_abs_diff_eq!(flux, std::f64::consts::FRAC_PI_2, epsilon = 1e-6);
    }

    #[test]
    fn points_without_psi_and_lines_through_gaps_are_named() {
        let grid = Grid::new(Axis::uniform(0.0, 1.0, 9).unwrap(), Axis::uniform(0.0, 1.0, 9).unwrap());
        let field =
            VelocityField::new(Arc::new(Domain::open(grid.clone())), Array2::ones((9, 9)), Array2::zeros((9, 9)))
                .unwrap()
                .without(|j, i| j == 4 && i == 4);
        let fit = solve_stream_function(&field, &FitOptions::default()).unwrap();
        let surface = PsiSurface::new(&grid, &fit.psi);
        let flags = Array2::from_elem((9, 9), Flags::MEASURED);
        let scene = Scene { surface: &surface, domain: &field.domain, flags: &flags };
        let flux = |a, b| flux_between(&scene, &field, &fit.component, a, b, &[], &[f64::NAN; 4]);
        let across = flux([4.0, 0.0], [4.0, 8.0]).unwrap();
        approx::assert_abs_diff_eq!(across.by_psi, 8.0, epsilon = 1e-9);
        assert_eq!(across.by_line, Err(LineGap::Gap));
        assert!(flux([4.2, 4.2], [0.0, 0.0]).is_err() && flux([9.0, 0.0], [0.0, 0.0]).is_err());
    }
}
