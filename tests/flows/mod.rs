//! Classical flows in closed form: psi, u, v with u = dpsi/dy, v = -dpsi/dx.
#![allow(dead_code, clippy::unwrap_used)]

use std::f64::consts::{PI, TAU};

/// psi, u, v at a point.
pub type Flow = Box<dyn Fn(f64, f64) -> (f64, f64, f64) + Sync>;

/// Taylor-Green cells (Taylor & Green 1937), psi = sin k(x - x0) sin k(y - y0) / k.
pub fn taylor_green(k: f64, x0: f64, y0: f64) -> Flow {
    Box::new(move |x, y| {
        let (a, b) = (k * (x - x0), k * (y - y0));
        (a.sin() * b.sin() / k, a.sin() * b.cos(), -a.cos() * b.sin())
    })
}

/// Taylor-Green as the accuracy table uses it.
pub fn taylor_green_default() -> Flow {
    taylor_green(TAU * 0.85, 0.13, 0.07)
}

/// One Lamb-Oseen vortex of circulation `g` and core `a` (Lamb 1932): psi, u, v.
pub fn lamb_oseen(x: f64, y: f64, cx: f64, cy: f64, g: f64, a: f64) -> (f64, f64, f64) {
    let (dx, dy) = (x - cx, y - cy);
    let s = ((dx * dx + dy * dy) / (a * a)).max(1e-28);
    // ln r^2 + E1(s), up to a constant: Ein(s) = sum -(-s)^k / (k k!) for small s.
    let ein = if s < 2.0 {
        let (mut term, mut sum) = (1.0, 0.0);
        for k in 1..60 {
            term *= -s / f64::from(k);
            sum -= term / f64::from(k);
        }
        sum
    } else {
        s.ln() + 0.577_215_664_901_532_9 + statrs::function::exponential::integral(s.min(700.0), 1).unwrap()
    };
    let q = g / TAU * -(-s).exp_m1() / (s * a * a);
    (-g / (2.0 * TAU) * ein, -q * dy, q * dx)
}

/// Opposite pair of Lamb-Oseen vortices at distance `b`.
pub fn lamb_pair(b: f64, a: f64) -> Flow {
    Box::new(move |x, y| {
        let p = lamb_oseen(x, y, 0.5 - b / 2.0, 0.5, 1.0, a);
        let q = lamb_oseen(x, y, 0.5 + b / 2.0, 0.5, -1.0, a);
        (p.0 + q.0, p.1 + q.1, p.2 + q.2)
    })
}

/// Stuart's cat's eyes (Stuart 1967), psi = ln(cosh Y - eps cos X) / l.
pub fn stuart(eps: f64, l: f64) -> Flow {
    Box::new(move |x, y| {
        let (a, b) = (l * (x - 0.5), l * (y - 0.5));
        let d = b.cosh() - eps * a.cos();
        (d.ln() / l, b.sinh() / d, -eps * a.sin() / d)
    })
}

/// Circular cylinder of radius `a` at (0.5, 0.5) in a unit stream with counter-clockwise circulation `g` (Milne-Thomson).
pub fn cylinder(a: f64, g: f64) -> Flow {
    Box::new(move |x, y| {
        let (x, y) = (x - 0.5, y - 0.5);
        let r2 = (x * x + y * y).max(1e-6);
        (
            y * (1.0 - a * a / r2) - g / (2.0 * TAU) * (r2 / (a * a)).ln(),
            1.0 - a * a * (x * x - y * y) / (r2 * r2) - g / TAU * y / r2,
            -2.0 * a * a * x * y / (r2 * r2) + g / TAU * x / r2,
        )
    })
}

/// First zero of J1.
pub const J11: f64 = 3.831_705_970_207_512;

/// Bessel function J0 or J1 by its power series, to rounding for |x| < 6.
pub fn bessel_j(order: u32, x: f64) -> f64 {
    let h = -x * x / 4.0;
    let mut term = if order == 0 { 1.0 } else { x / 2.0 };
    let mut sum = term;
    for k in 1..40 {
        term *= h / (f64::from(k) * f64::from(k + order));
        sum += term;
    }
    sum
}

/// Lamb-Chaplygin dipole of radius `a` in its own frame, unit stream outside (Lamb 1932; Meleshko & van Heijst 1994).
pub fn chaplygin(a: f64, xc: f64, yc: f64) -> Flow {
    Box::new(move |x, y| {
        let k = J11 / a;
        let (x, y) = (x - xc, y - yc);
        let r = (x * x + y * y).max(1e-24).sqrt();
        let (s, c) = (y / r, x / r);
        let (p, p_r, p_over_r) = if r < a {
            let amplitude = 2.0 / (k * bessel_j(0, J11));
            let j1_over = if k * r < 1e-8 { 0.5 } else { bessel_j(1, k * r) / (k * r) };
            (amplitude * bessel_j(1, k * r), amplitude * k * (bessel_j(0, k * r) - j1_over), amplitude * k * j1_over)
        } else {
            (r - a * a / r, 1.0 + a * a / (r * r), 1.0 - a * a / (r * r))
        };
        (p * s, p_r * s * s + p_over_r * c * c, -(p_r - p_over_r) * s * c)
    })
}

/// Flow at rest on the circle r = a: psi = (r - a)^2 (sin(5x + 0.4) + cos(4y - 0.3) + 2.5), coordinates from (0.5, 0.5).
pub fn no_slip(a: f64) -> Flow {
    Box::new(move |x, y| {
        let (x, y) = (x - 0.5, y - 0.5);
        let r = x.hypot(y).max(1e-12);
        let d = r - a;
        let g = (5.0 * x + 0.4).sin() + (4.0 * y - 0.3).cos() + 2.5;
        let (gx, gy) = (5.0 * (5.0 * x + 0.4).cos(), -4.0 * (4.0 * y - 0.3).sin());
        (d * d * g, 2.0 * d * y / r * g + d * d * gy, -(2.0 * d * x / r * g + d * d * gx))
    })
}

/// A divergent part: grad chi, chi = 0.05 sin(pi x) sin(2 pi y).
pub fn divergent_part(x: f64, y: f64) -> (f64, f64) {
    (0.05 * PI * (PI * x).cos() * (TAU * y).sin(), 0.05 * TAU * (PI * x).sin() * (TAU * y).cos())
}
