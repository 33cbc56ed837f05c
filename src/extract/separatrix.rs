//! Separatrices: the level lines through saddles, and the dividing streamlines of walls and bodies.

use super::contour::{Contour, Role, Scene, TraceOptions};
use super::stagnation::{StagnationKind, StagnationPoint};
use super::trace::{End, Walker, distance};

/// A branch starts this far from its saddle, in node spacings.
const START: f64 = 0.02;

/// A branch ends at a stagnation point of the same level when it comes this near, in node spacings.
const REACH: f64 = 0.1;

/// A dividing streamline is looked for up to this far from its wall, in node spacings.
const WALL_SEARCH: f64 = 2.5;

/// Sideways extent of that search, in node spacings.
const SIDEWAYS: f64 = 2.0;

/// Two levels count as equal within this share of the range of psi.
const SAME_LEVEL: f64 = 1e-6;

/// Traces the four branches of every saddle and the dividing streamline of every attachment and separation point.
///
/// Lines are directed with the flow and carry the id of the point they were traced from; a line that joins two points is given once.
pub fn trace_separatrices(scene: &Scene<'_>, points: &[StagnationPoint], options: &TraceOptions) -> Vec<Contour> {
    let range = scene.surface.range().map_or(0.0, |(low, high)| high - low);
    let mut joined: Vec<(usize, usize, f64)> = Vec::new();
    let mut out = Vec::new();
    for point in points {
        let targets: Vec<&StagnationPoint> = points
            .iter()
            .filter(|p| p.kind != StagnationKind::Center && (p.psi - point.psi).abs() <= SAME_LEVEL * range)
            .collect();
        let starts = match point.kind {
            StagnationKind::Center => continue,
            StagnationKind::Saddle => saddle_starts(point, scene),
            _ => wall_start(point, scene, options).into_iter().collect(),
        };
        for (start, sense) in starts {
            let mut walker = Walker::new(scene.surface, options.tolerance);
            let places: Vec<[f64; 2]> = targets.iter().map(|t| [t.x, t.y]).collect();
            let Some((start, _)) = walker.onto_level(start, point.psi) else { continue };
            let (mut line, end) = walker.walk(start, point.psi, sense, &places, REACH, &|q| scene.inside_body(q));
            line.insert(0, [point.x, point.y]);
            let arrived = match end {
                End::Target(k) => Some(targets[k]),
                // Where a wall point lies, the line fades out on the wall before it is reached.
                _ => line.last().copied().and_then(|last| {
                    targets
                        .iter()
                        .copied()
                        .filter(|t| t.id != point.id && t.boundary.is_some())
                        .map(|t| (distance([t.x, t.y], last), t))
                        .filter(|(d, _)| *d <= WALL_SEARCH * walker.h)
                        .min_by(|a, b| a.0.total_cmp(&b.0))
                        .map(|(_, t)| t)
                }),
            };
            let closed = false;
            if let Some(target) = arrived {
                line.push([target.x, target.y]);
                let middle = line[line.len() / 2];
                let key = (point.id.min(target.id), point.id.max(target.id));
                let length: f64 = line.windows(2).map(|w| distance(w[0], w[1])).sum();
                let same =
                    |&(a, b, l): &(usize, usize, f64)| (a, b) == key && (l - length).abs() < 0.02 * length + walker.h;
                // The same line found from its other end; two different lines between two saddles differ in their middle.
                let twin = joined.iter().any(same)
                    && out.iter().any(|c: &Contour| {
                        c.vertices
                            .windows(2)
                            .any(|w| super::trace::distance_to_segment(middle, w[0], w[1]) < 0.05 * walker.h)
                    });
                if twin {
                    continue;
                }
                joined.push((key.0, key.1, length));
            }
            if line.len() < 3 {
                continue;
            }
            if sense < 0.0 {
                line.reverse();
            }
            let mut contour = scene.contour(Role::Separatrix, point.psi, closed, line);
            contour.from_point = Some(point.id);
            out.push(contour);
        }
    }
    out
}

/// Start and sense of the four branches of a saddle.
fn saddle_starts(point: &StagnationPoint, scene: &Scene<'_>) -> Vec<([f64; 2], f64)> {
    let Some([outgoing, incoming]) = point.directions else { return Vec::new() };
    let step = START * scene.surface.grid().spacing();
    let mut starts = Vec::new();
    for (direction, sense) in [(outgoing, 1.0), (incoming, -1.0)] {
        for side in [1.0, -1.0] {
            starts.push(([point.x + side * step * direction[0], point.y + side * step * direction[1]], sense));
        }
    }
    starts
}

/// Where the dividing streamline of a wall point can be picked up, and in which sense it leaves the wall.
fn wall_start(point: &StagnationPoint, scene: &Scene<'_>, options: &TraceOptions) -> Option<([f64; 2], f64)> {
    let n = point.normal?;
    let along = [n[1], -n[0]];
    let mut walker = Walker::new(scene.surface, options.tolerance);
    let h = walker.h;
    let sense = if point.kind == StagnationKind::Separation { 1.0 } else { -1.0 };
    for k in 2..=(WALL_SEARCH * 4.0) as usize {
        let d = 0.25 * h * k as f64;
        let mut best: Option<(f64, [f64; 2])> = None;
        let mut last: Option<(f64, f64)> = None;
        let samples = 16;
        for m in 0..=samples {
            let s = SIDEWAYS * h * (2.0 * f64::from(m) / f64::from(samples) - 1.0);
            let p = [point.x + d * n[0] + s * along[0], point.y + d * n[1] + s * along[1]];
            let here = walker.eval(p).filter(|_| !scene.inside_body(p)).map(|jet| jet.psi - point.psi);
            if let (Some((s0, f0)), Some(f)) = (last, here)
                && (f0 >= 0.0) != (f >= 0.0)
            {
                let root = s0 + (s - s0) * f0 / (f0 - f);
                if best.is_none_or(|(b, _)| root.abs() < b.abs()) {
                    best = Some((root, [point.x + d * n[0] + root * along[0], point.y + d * n[1] + root * along[1]]));
                }
            }
            last = here.map(|f| (s, f));
        }
        if let Some((_, p)) = best
            && let Some((q, jet)) = walker.onto_level(p, point.psi)
        {
            // The line must leave the wall in the right sense.
            let outward = sense * (jet.psi_y * n[0] - jet.psi_x * n[1]);
            if outward > 0.0 {
                return Some((q, sense));
            }
        }
    }
    None
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::extract::stagnation::{StagnationOptions, find_stagnation_points, number_points};
    use crate::field::{Axis, Domain, Flags, Grid};
    use crate::numerics::surface::PsiSurface;
    use ndarray::Array2;

    #[test] // Stuart 1967: cosh Y - eps cos X = 1 + eps on the separatrix; half height arccosh(1 + 2 eps)
    fn cat_eye_separatrices_have_the_half_height_of_stuart() {
        let (eps, n) = (0.25, 81);
        let x = Axis::uniform(-0.5, std::f64::consts::TAU * 2.0 / 160.0, 161 + 14).unwrap();
        let y = Axis::uniform(-2.5, 5.0 / (n - 1) as f64, n).unwrap();
        let grid = Grid::new(x, y);
        let psi = Array2::from_shape_fn(grid.shape(), |(j, i)| (grid.y.at(j).cosh() - eps * grid.x.at(i).cos()).ln());
        let surface = PsiSurface::new(&grid, &psi);
        let domain = Domain::open(grid.clone());
        let flags = Array2::from_elem(grid.shape(), Flags::MEASURED);
        let scene = Scene { surface: &surface, domain: &domain, flags: &flags };
        let points = number_points(find_stagnation_points(&surface, &domain, &StagnationOptions::default()).points);
        let lines = trace_separatrices(&scene, &points, &TraceOptions::default());
        // Saddles at pi and 3 pi: between them an upper and a lower line, each once.
        let joining: Vec<&Contour> = lines
            .iter()
            .filter(|l| {
                let (a, b) = (l.vertices[0], l.vertices[l.vertices.len() - 1]);
                let near = |p: [f64; 2], x: f64| (p[0] - x).hypot(p[1]) < 1e-3;
                let pi = std::f64::consts::PI;
                (near(a, pi) && near(b, 3.0 * pi)) || (near(b, pi) && near(a, 3.0 * pi))
            })
            .collect();
        assert_eq!(joining.len(), 2);
        for line in joining {
            let top = line.vertices.iter().map(|v| v[1].abs()).fold(0.0, f64::max);
            approx::assert_abs_diff_eq!(top, (1.0f64 + 2.0 * eps).acosh(), epsilon = 1e-3);
            // Directed with the flow: u = tanh-like, to the right above, to the left below.
            let forward = line.vertices[line.vertices.len() - 1][0] > line.vertices[0][0];
            let above = line.vertices[line.vertices.len() / 2][1] > 0.0;
            assert_eq!(forward, above);
        }
    }
}
