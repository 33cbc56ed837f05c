//! Walks along a level line of psi, within a promised distance of it.

use crate::numerics::surface::{Jet, PsiSurface, jet_of};

/// A level line is left when it cannot be followed with steps longer than this many node spacings (a stagnation point).
const SHORTEST: f64 = 1e-5;

/// Newton steps back to the level.
const NEWTON_STEPS: usize = 8;

/// |psi - level| reached by Newton, relative to the range of psi.
const LEVEL_TOLERANCE: f64 = 1e-13;

/// A line with more vertices than this is cut: it would not fit any picture.
const MOST_VERTICES: usize = 400_000;

/// How a walk ended.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum End {
    /// Back at its start.
    Closed,
    /// At the rim of the valid cells.
    Rim,
    /// The gradient vanished.
    Stuck,
    /// At a target given by the caller.
    Target(usize),
}

/// Evaluates the surface, keeping the last cell at hand.
pub struct Walker<'a> {
    surface: &'a PsiSurface,
    /// Node spacing.
    pub h: f64,
    /// Largest distance of a chord from the line.
    pub tolerance: f64,
    /// Longest step.
    pub longest: f64,
    scale: f64,
    cell: Option<(usize, usize)>,
    bezier: [[f64; 4]; 4],
}

impl<'a> Walker<'a> {
    /// Walker with a tolerance in node spacings.
    pub fn new(surface: &'a PsiSurface, tolerance: f64) -> Self {
        let h = surface.grid().spacing();
        let scale = surface.range().map_or(1.0, |(low, high)| high - low);
        Self { surface, h, tolerance: tolerance * h, longest: h, scale, cell: None, bezier: [[0.0; 4]; 4] }
    }

    /// Value and derivatives at a point.
    pub fn eval(&mut self, p: [f64; 2]) -> Option<Jet> {
        let (j, i, s, t) = self.surface.locate(p[0], p[1])?;
        if self.cell != Some((j, i)) {
            self.cell = Some((j, i));
            self.bezier = self.surface.bezier(j, i);
        }
        let grid = self.surface.grid();
        Some(jet_of(&self.bezier, s, t, grid.x.spacing(i), grid.y.spacing(j)))
    }

    /// Moves a point along the gradient onto the level; `None` where that leaves the cells, wanders off or does not converge.
    pub fn onto_level(&mut self, mut p: [f64; 2], level: f64) -> Option<([f64; 2], Jet)> {
        let start = p;
        let mut jet = self.eval(p)?;
        for _ in 0..NEWTON_STEPS {
            let miss = level - jet.psi;
            if miss.abs() <= LEVEL_TOLERANCE * self.scale {
                return Some((p, jet));
            }
            let g2 = jet.psi_x * jet.psi_x + jet.psi_y * jet.psi_y;
            if !(g2 > 0.0) {
                return None;
            }
            p = [p[0] + miss * jet.psi_x / g2, p[1] + miss * jet.psi_y / g2];
            if distance(p, start) > self.longest {
                return None;
            }
            jet = self.eval(p)?;
        }
        ((level - jet.psi).abs() <= 1e3 * LEVEL_TOLERANCE * self.scale).then_some((p, jet))
    }

    /// Walks from `start` (on the level) with the flow (`sense` +1) or against it (-1).
    ///
    /// `targets`: points at which the walk ends when it comes nearer than `reach` node spacings after having been farther than three
    /// times that.  Steps obey `sqrt(8 tolerance / curvature)`, at most one spacing, and every chord is checked in its middle.
    pub fn walk(
        &mut self,
        start: [f64; 2],
        level: f64,
        sense: f64,
        targets: &[[f64; 2]],
        reach: f64,
        stop: &dyn Fn([f64; 2]) -> bool,
    ) -> (Vec<[f64; 2]>, End) {
        let mut line = vec![start];
        let Some(mut jet) = self.eval(start) else { return (line, End::Rim) };
        let mut p = start;
        let mut armed: Vec<bool> = targets.iter().map(|&t| distance(p, t) > 3.0 * reach * self.h).collect();
        let mut left_start = false;
        let mut travelled = 0.0;
        while line.len() < MOST_VERTICES {
            let speed = jet.speed();
            if !(speed > 0.0) {
                return (line, End::Stuck);
            }
            let tangent = [sense * jet.psi_y / speed, -sense * jet.psi_x / speed];
            let bend = (jet.psi_xx * jet.psi_y * jet.psi_y - 2.0 * jet.psi_xy * jet.psi_x * jet.psi_y
                + jet.psi_yy * jet.psi_x * jet.psi_x)
                .abs()
                / speed.powi(3);
            let mut length = (8.0 * self.tolerance / bend).sqrt().min(self.longest);
            let mut nearest = f64::INFINITY;
            for (k, &target) in targets.iter().enumerate() {
                let d = distance(p, target);
                nearest = nearest.min(d);
                if armed[k] && d < reach * self.h {
                    return (line, End::Target(k));
                }
                armed[k] |= d > 3.0 * reach * self.h;
            }
            length = length.min(0.5 * nearest + 0.25 * reach * self.h);
            // Close when the start lies ahead within a step.
            let back = [start[0] - p[0], start[1] - p[1]];
            let gap = back[0].hypot(back[1]);
            left_start |= travelled > 3.0 * gap.max(1e-3 * self.h) || travelled > 4.0 * self.longest;
            if left_start && line.len() > 3 && gap <= 1.2 * length && back[0] * tangent[0] + back[1] * tangent[1] > 0.0
            {
                let middle = [p[0] + 0.5 * back[0], p[1] + 0.5 * back[1]];
                if self.eval(middle).is_some_and(|m| (m.psi - level).abs() <= 1.5 * self.tolerance * m.speed()) {
                    return (line, End::Closed);
                }
            }
            match self.step(p, tangent, &mut length, level, sense) {
                Step::To(next, next_jet) => {
                    if stop(next) {
                        self.last_inside(p, tangent, length, level, stop, &mut line);
                        return (line, End::Rim);
                    }
                    travelled += distance(p, next);
                    (p, jet) = (next, next_jet);
                    line.push(p);
                }
                Step::Rim => {
                    self.last_inside(p, tangent, length, level, stop, &mut line);
                    return (line, End::Rim);
                }
                Step::Stuck => return (line, End::Stuck),
            }
        }
        (line, End::Stuck)
    }

    fn step(&mut self, p: [f64; 2], tangent: [f64; 2], length: &mut f64, level: f64, sense: f64) -> Step {
        let mut left_cells = false;
        let full = *length;
        while *length > SHORTEST * self.h {
            match self.try_step(p, tangent, *length, level, sense) {
                Ok(Some((next, jet))) => return Step::To(next, jet),
                Ok(None) => {}
                Err(()) => left_cells = true,
            }
            *length *= 0.7;
        }
        *length = full;
        if left_cells { Step::Rim } else { Step::Stuck }
    }

    /// `Ok(None)`: not accurate enough; `Err`: outside the cells.
    fn try_step(
        &mut self,
        p: [f64; 2],
        tangent: [f64; 2],
        length: f64,
        level: f64,
        sense: f64,
    ) -> Result<Option<([f64; 2], Jet)>, ()> {
        let half = [p[0] + 0.5 * length * tangent[0], p[1] + 0.5 * length * tangent[1]];
        let jet = self.eval(half).ok_or(())?;
        let speed = jet.speed();
        if !(speed > 0.0) {
            return Ok(None);
        }
        let guess = [p[0] + sense * length * jet.psi_y / speed, p[1] - sense * length * jet.psi_x / speed];
        if self.eval(guess).is_none() {
            return Err(());
        }
        let Some((next, next_jet)) = self.onto_level(guess, level) else { return Ok(None) };
        let chord = [next[0] - p[0], next[1] - p[1]];
        let forward = chord[0] * tangent[0] + chord[1] * tangent[1];
        let flow = sense * (next_jet.psi_y * chord[0] - next_jet.psi_x * chord[1]);
        if !(forward > 0.3 * length && flow > 0.0) {
            return Ok(None);
        }
        let Some(middle) = self.eval([p[0] + 0.5 * chord[0], p[1] + 0.5 * chord[1]]) else { return Err(()) };
        let ok = (middle.psi - level).abs() <= self.tolerance * middle.speed();
        Ok(ok.then_some((next, next_jet)))
    }

    /// Adds the last point before the rim (or before `stop`), by bisection of the step.
    fn last_inside(
        &mut self,
        p: [f64; 2],
        tangent: [f64; 2],
        length: f64,
        level: f64,
        stop: &dyn Fn([f64; 2]) -> bool,
        line: &mut Vec<[f64; 2]>,
    ) {
        let (mut low, mut high) = (0.0, length);
        let mut best = None;
        for _ in 0..40 {
            let middle = 0.5 * (low + high);
            let guess = [p[0] + middle * tangent[0], p[1] + middle * tangent[1]];
            match self.onto_level(guess, level) {
                Some((q, _)) if !stop(q) => {
                    best = Some(q);
                    low = middle;
                }
                _ => high = middle,
            }
            if high - low < 1e-7 * self.h {
                break;
            }
        }
        if let Some(q) = best
            && distance(p, q) > 1e-9 * self.h
        {
            line.push(q);
        }
    }
}

enum Step {
    To([f64; 2], Jet),
    Rim,
    Stuck,
}

/// Distance of two points.
pub fn distance(a: [f64; 2], b: [f64; 2]) -> f64 {
    (a[0] - b[0]).hypot(a[1] - b[1])
}

/// Distance of a point from a segment.
pub fn distance_to_segment(p: [f64; 2], a: [f64; 2], b: [f64; 2]) -> f64 {
    let (dx, dy) = (b[0] - a[0], b[1] - a[1]);
    let l2 = dx * dx + dy * dy;
    let t = if l2 > 0.0 { (((p[0] - a[0]) * dx + (p[1] - a[1]) * dy) / l2).clamp(0.0, 1.0) } else { 0.0 };
    distance(p, [a[0] + t * dx, a[1] + t * dy])
}

/// Signed area of a closed polygon, counter-clockwise positive.
pub fn signed_area(line: &[[f64; 2]]) -> f64 {
    let Some(&[x0, y0]) = line.first() else { return 0.0 };
    0.5 * (0..line.len())
        .map(|k| {
            let ([ax, ay], [bx, by]) = (line[k], line[(k + 1) % line.len()]);
            (ax - x0) * (by - y0) - (bx - x0) * (ay - y0)
        })
        .sum::<f64>()
}

/// Whether a closed polygon holds a point.
pub fn encloses(line: &[[f64; 2]], p: [f64; 2]) -> bool {
    let mut inside = false;
    for (k, &[x1, y1]) in line.iter().enumerate() {
        let [x0, y0] = line[(k + line.len() - 1) % line.len()];
        if (y0 > p[1]) != (y1 > p[1]) && p[0] < x0 + (p[1] - y0) / (y1 - y0) * (x1 - x0) {
            inside = !inside;
        }
    }
    inside
}
