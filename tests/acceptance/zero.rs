//! Where psi is zero.

use isopsi::field::{Domain, Side, Surface, Thickness, Wall, Walls};
use isopsi::numerics::stream_function::{FitError, FitOptions, PsiZero, StreamFit, solve_stream_function};
use isopsi::numerics::surface::PsiSurface;

use crate::{circle, flows, sample, unit_grid};

fn fitted(domain: Domain, zero: PsiZero) -> Result<StreamFit, FitError> {
    let flow = flows::cylinder(0.17, 0.0);
    solve_stream_function(&sample(domain, &flow, |_, _| false), &FitOptions { zero, ..FitOptions::default() })
}

fn around(surface: Surface) -> Domain {
    Domain::open(unit_grid(33, 33)).with_body(circle(0.5, 0.5, 0.17, surface))
}

#[test]
fn unasked_it_is_on_a_wall_else_on_a_body_else_on_the_axis_else_the_mean() {
    let wall = Some(Wall { surface: Surface::Slip, at: None });
    let resolved = |domain| fitted(domain, PsiZero::Auto).unwrap().zero;
    let with_wall = around(Surface::Slip).with_walls(Walls { right: wall, ..Walls::default() });
    assert_eq!(resolved(with_wall), PsiZero::Wall(Side::Right));
    assert_eq!(resolved(around(Surface::Slip)), PsiZero::Body(0));
    assert_eq!(resolved(around(Surface::Free)), PsiZero::Mean);
    assert_eq!(resolved(around(Surface::Free).with_thickness(Thickness::Radius)), PsiZero::Axis);
    // A body outside the data is passed over.
    let outside = Domain::open(unit_grid(33, 33)).with_body(circle(3.0, 3.0, 0.1, Surface::Slip));
    assert_eq!(resolved(outside.with_body(circle(0.5, 0.5, 0.17, Surface::Slip))), PsiZero::Body(1));
}

#[test]
fn it_is_where_it_was_asked_for() {
    let at_point = fitted(around(Surface::Slip), PsiZero::Point { x: 0.21, y: 0.77 }).unwrap();
    let surface = PsiSurface::new(&unit_grid(33, 33), &at_point.psi);
    approx::assert_abs_diff_eq!(surface.eval(0.21, 0.77).unwrap().psi, 0.0, epsilon = 1e-15);
    assert_eq!(fitted(around(Surface::Slip), PsiZero::Body(0)).unwrap().body_psi, [0.0]);
    let mean = fitted(around(Surface::Slip), PsiZero::Mean).unwrap();
    let finite: Vec<f64> = mean.psi.iter().copied().filter(|p| p.is_finite()).collect();
    approx::assert_abs_diff_eq!(finite.iter().sum::<f64>() / finite.len() as f64, 0.0, epsilon = 1e-15);
}

#[test]
fn a_place_without_psi_is_refused_by_name() {
    let refused = |domain, zero| fitted(domain, zero).unwrap_err();
    assert_eq!(refused(around(Surface::Slip), PsiZero::Wall(Side::Top)), FitError::ZeroNotWall { side: "top" });
    assert_eq!(refused(around(Surface::Free), PsiZero::Body(0)), FitError::ZeroNotBody { number: 1, bodies: 1 });
    assert_eq!(refused(around(Surface::Slip), PsiZero::Body(4)), FitError::ZeroNotBody { number: 5, bodies: 1 });
    assert_eq!(refused(around(Surface::Slip), PsiZero::Axis), FitError::ZeroNotAxis);
    let outside = Domain::open(unit_grid(33, 33)).with_body(circle(3.0, 3.0, 0.1, Surface::Slip));
    assert!(matches!(refused(outside, PsiZero::Body(0)), FitError::ZeroUnreached { .. }));
    for (x, y) in [(0.5, 0.5), (1.2, 0.5), (f64::NAN, 0.0)] {
        let error = refused(around(Surface::Slip), PsiZero::Point { x, y });
        assert!(matches!(error, FitError::ZeroOutside { .. }), "{error}");
    }
}
