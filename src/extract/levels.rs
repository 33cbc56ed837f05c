//! Which levels of psi are drawn.

use crate::numerics::surface::PsiSurface;

/// How levels are chosen.
#[derive(Debug, Clone, PartialEq)]
pub enum LevelChoice {
    /// These.
    Explicit(Vec<f64>),
    /// About this many, at round values.
    Count(usize),
    /// Multiples of a flux step.
    Step(f64),
}

impl LevelChoice {
    /// Default number of streamlines.
    pub const COUNT: usize = 20;
}

impl Default for LevelChoice {
    fn default() -> Self {
        LevelChoice::Count(Self::COUNT)
    }
}

/// More levels than this are never drawn: a step far too small is a mistake.
pub const MOST_LEVELS: usize = 2000;

/// Levels that are this share of the psi range from the psi of a wall or body are left to the separatrices and outlines.
pub const WALL_LEVEL: f64 = 1e-6;

/// Levels strictly inside the range of psi, in ascending order, without those that coincide with a wall or body.
pub fn choose_levels(surface: &PsiSurface, choice: &LevelChoice, solid_psi: &[f64]) -> Vec<f64> {
    let Some((low, high)) = surface.range() else { return Vec::new() };
    let range = high - low;
    if !(range > 0.0) {
        return Vec::new();
    }
    let multiples = |step: f64| -> Vec<f64> {
        if !(step > 0.0 && step.is_finite()) || range / step > MOST_LEVELS as f64 {
            return Vec::new();
        }
        ((low / step).ceil() as i64..=(high / step).floor() as i64).map(|k| k as f64 * step).collect()
    };
    let mut levels = match choice {
        LevelChoice::Explicit(levels) => levels.clone(),
        LevelChoice::Step(step) => multiples(*step),
        LevelChoice::Count(count) => multiples(round_step(range / (*count).max(1) as f64)),
    };
    levels.retain(|&c| {
        c > low + WALL_LEVEL * range
            && c < high - WALL_LEVEL * range
            && solid_psi.iter().all(|p| !p.is_finite() || (c - p).abs() > WALL_LEVEL * range)
    });
    levels.sort_by(f64::total_cmp);
    levels.dedup();
    levels
}

/// Nearest of 1, 2, 2.5, 5 times a power of ten.
pub fn round_step(step: f64) -> f64 {
    let power = 10f64.powf(step.log10().floor());
    let nearest = [1.0, 2.0, 2.5, 5.0, 10.0].into_iter().min_by(|a, b| {
        let off = |m: f64| (m * power / step).ln().abs();
        off(*a).total_cmp(&off(*b))
    });
    nearest.unwrap_or(1.0) * power
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::field::{Axis, Grid};
    use ndarray::Array2;

    fn plane() -> PsiSurface {
        let axis = Axis::uniform(0.0, 1.0, 11).unwrap();
        PsiSurface::new(&Grid::new(axis.clone(), axis), &Array2::from_shape_fn((11, 11), |(j, _)| j as f64 - 3.0))
    }

    #[test]
    fn levels_are_round_inside_the_range_and_leave_walls_out() {
        assert_eq!(choose_levels(&plane(), &LevelChoice::Count(5), &[0.0]), [-2.0, 2.0, 4.0, 6.0]);
        assert_eq!(choose_levels(&plane(), &LevelChoice::Step(2.5), &[]), [-2.5, 0.0, 2.5, 5.0]);
        assert_eq!(choose_levels(&plane(), &LevelChoice::Explicit(vec![1.5, 99.0, f64::NAN]), &[]), [1.5]);
        assert!(choose_levels(&plane(), &LevelChoice::Step(1e-9), &[]).is_empty());
    }

    #[test]
    fn steps_are_round() {
        for (raw, round) in [(0.13, 0.1), (3.3, 2.5), (0.018, 0.02), (7.9, 10.0), (4.4, 5.0)] {
            approx::assert_relative_eq!(round_step(raw), round, max_relative = 1e-12);
        }
    }
}
