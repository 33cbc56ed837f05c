//! One coordinate axis: strictly increasing node positions, uniform or stretched.

/// Why a list of positions is not an axis.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum AxisError {
    /// Fewer than two nodes.
    #[error("an axis needs at least 2 nodes, found {got}")]
    TooShort {
        /// Number of nodes found.
        got: usize,
    },
    /// A position is NaN or infinite.
    #[error("axis position {index} is {value}, not a finite number")]
    NotFinite {
        /// Index of the offending node.
        index: usize,
        /// Its value.
        value: f64,
    },
    /// Two neighbors do not increase.
    #[error("axis positions must increase: node {index} at {value} follows {previous}")]
    NotIncreasing {
        /// Index of the second of the two nodes.
        index: usize,
        /// Position before it.
        previous: f64,
        /// Its position.
        value: f64,
    },
}

/// Node positions along x or y, strictly increasing, in the length unit of the field.
///
/// A uniform axis knows its exact step, so that `at(i)` carries no accumulated rounding; a stretched axis stores every
/// position.
#[derive(Debug, Clone, PartialEq)]
pub struct Axis {
    nodes: Vec<f64>,
    step: Option<f64>,
}

impl Axis {
    /// Relative departure from the mean step below which positions count as uniform (rounding of f64 coordinates only;
    /// coordinates printed with few digits are judged by the readers, which know the printed digits).
    pub const UNIFORM_TOLERANCE: f64 = 1e-9;

    /// Uniform axis of `n` nodes, the first at `origin`.
    ///
    /// # Errors
    /// [`AxisError::TooShort`] for `n < 2`, [`AxisError::NotIncreasing`] for a step that is not positive and finite.
    pub fn uniform(origin: f64, step: f64, n: usize) -> Result<Self, AxisError> {
        if n < 2 {
            return Err(AxisError::TooShort { got: n });
        }
        if !origin.is_finite() {
            return Err(AxisError::NotFinite { index: 0, value: origin });
        }
        if !(step > 0.0 && step.is_finite()) {
            return Err(AxisError::NotIncreasing { index: 1, previous: origin, value: origin + step });
        }
        let nodes = (0..n).map(|i| origin + step * i as f64).collect();
        Ok(Self { nodes, step: Some(step) })
    }

    /// Axis through the given positions; uniform when they are so within [`Self::UNIFORM_TOLERANCE`] of a step.
    ///
    /// # Errors
    /// [`AxisError`] when there are fewer than two positions, one is not finite, or they do not strictly increase.
    pub fn from_nodes(nodes: Vec<f64>) -> Result<Self, AxisError> {
        let n = nodes.len();
        if n < 2 {
            return Err(AxisError::TooShort { got: n });
        }
        for (index, &value) in nodes.iter().enumerate() {
            if !value.is_finite() {
                return Err(AxisError::NotFinite { index, value });
            }
            if index > 0 && value <= nodes[index - 1] {
                return Err(AxisError::NotIncreasing { index, previous: nodes[index - 1], value });
            }
        }
        let step = (nodes[n - 1] - nodes[0]) / (n - 1) as f64;
        let scale = nodes[0].abs().max(nodes[n - 1].abs());
        let allowed = Self::UNIFORM_TOLERANCE * step + 4.0 * f64::EPSILON * scale;
        let uniform = nodes.iter().enumerate().all(|(i, &x)| (x - (nodes[0] + step * i as f64)).abs() <= allowed);
        if uniform { Self::uniform(nodes[0], step, n) } else { Ok(Self { nodes, step: None }) }
    }

    /// Number of nodes, at least 2.
    #[expect(clippy::len_without_is_empty, reason = "an axis is never empty")]
    pub fn len(&self) -> usize {
        self.nodes.len()
    }

    /// All node positions.
    pub fn nodes(&self) -> &[f64] {
        &self.nodes
    }

    /// Position of node `i`.
    pub fn at(&self, i: usize) -> f64 {
        self.nodes[i]
    }

    /// The step of a uniform axis, else `None`.
    pub fn step(&self) -> Option<f64> {
        self.step
    }

    /// Whether all steps are equal.
    pub fn is_uniform(&self) -> bool {
        self.step.is_some()
    }

    /// Mean step.
    pub fn mean_step(&self) -> f64 {
        self.step.unwrap_or_else(|| self.extent() / (self.len() - 1) as f64)
    }

    /// Length of interval `i`, from node `i` to node `i + 1`.
    pub fn spacing(&self, i: usize) -> f64 {
        self.step.unwrap_or_else(|| self.nodes[i + 1] - self.nodes[i])
    }

    /// First position.
    pub fn first(&self) -> f64 {
        self.nodes[0]
    }

    /// Last position.
    pub fn last(&self) -> f64 {
        self.nodes[self.len() - 1]
    }

    /// Distance from the first to the last node.
    pub fn extent(&self) -> f64 {
        self.last() - self.first()
    }

    /// Interval that holds `x` and the local coordinate in it, 0 to 1; `None` outside the axis.
    pub fn locate(&self, x: f64) -> Option<(usize, f64)> {
        if !(x >= self.first() && x <= self.last()) {
            return None;
        }
        let last = self.len() - 2;
        let i = match self.step {
            Some(step) => (((x - self.first()) / step) as usize).min(last),
            None => self.nodes.partition_point(|&node| node <= x).saturating_sub(1).min(last),
        };
        let t = (x - self.nodes[i]) / self.spacing(i);
        Some((i, t.clamp(0.0, 1.0)))
    }

    /// Width of the strip that belongs to node `i` (half of each adjoining interval).
    pub fn node_width(&self, i: usize) -> f64 {
        let left = if i > 0 { self.spacing(i - 1) } else { 0.0 };
        let right = if i + 1 < self.len() { self.spacing(i) } else { 0.0 };
        0.5 * (left + right)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn rounded_uniform_positions_stay_uniform_and_stretched_ones_do_not() {
        let third: Vec<f64> = (0..40).map(|i| 0.1 * f64::from(i)).collect();
        assert!(Axis::from_nodes(third).unwrap().is_uniform());
        assert!(!Axis::from_nodes(vec![0.0, 1.0, 2.1]).unwrap().is_uniform());
    }

    #[test]
    fn positions_that_do_not_increase_are_refused() {
        assert!(matches!(Axis::from_nodes(vec![0.0, 1.0, 1.0]), Err(AxisError::NotIncreasing { index: 2, .. })));
        assert!(matches!(Axis::from_nodes(vec![0.0]), Err(AxisError::TooShort { got: 1 })));
        assert!(matches!(Axis::from_nodes(vec![0.0, f64::NAN]), Err(AxisError::NotFinite { index: 1, .. })));
    }

    #[test]
    fn locate_finds_interval_and_fraction_on_both_kinds_of_axis() {
        for axis in [Axis::uniform(-1.0, 0.5, 5).unwrap(), Axis::from_nodes(vec![-1.0, -0.7, 0.1, 1.0]).unwrap()] {
            for x in [-1.0, -0.71, 0.0, 0.3, 1.0] {
                let (i, t) = axis.locate(x).unwrap();
                approx::assert_abs_diff_eq!(axis.at(i) + t * axis.spacing(i), x, epsilon = 1e-14);
            }
            assert!(axis.locate(1.01).is_none() && axis.locate(f64::NAN).is_none());
        }
    }
}
