//! One frame of a measured planar velocity field.

use std::sync::Arc;

use ndarray::Array2;

use super::{Domain, Grid};

/// Why arrays do not make a velocity field.
#[derive(Debug, Clone, PartialEq, thiserror::Error)]
#[non_exhaustive]
pub enum FieldError {
    /// An array has another shape than the grid.
    #[error("`{name}` has shape {got:?}; the grid needs {expected:?} (rows along y, columns along x)")]
    ShapeMismatch {
        /// Which array.
        name: &'static str,
        /// Its shape.
        got: (usize, usize),
        /// Shape of the grid.
        expected: (usize, usize),
    },
    /// A vector marked valid is NaN or infinite.
    #[error("{count} vectors marked valid are not finite, the first in row {j}, column {i}")]
    NotFinite {
        /// How many.
        count: usize,
        /// Row of the first.
        j: usize,
        /// Column of the first.
        i: usize,
    },
    /// A standard uncertainty is zero, negative or not finite at a valid node.
    #[error(
        "{count} values of `{name}` at valid nodes are not positive and finite, the first in row {j}, column {i}: {value}"
    )]
    BadSigma {
        /// `sigma_u` or `sigma_v`.
        name: &'static str,
        /// How many.
        count: usize,
        /// Row of the first.
        j: usize,
        /// Column of the first.
        i: usize,
        /// Value of the first.
        value: f64,
    },
    /// The overlap lies outside `[0, 1)`.
    #[error("overlap {got} lies outside 0 to 1 (1 excluded)")]
    BadOverlap {
        /// Value found.
        got: f64,
    },
    /// No node carries a usable vector.
    #[error("none of the {nodes} nodes carries a usable vector")]
    NoVectors {
        /// Nodes of the grid.
        nodes: usize,
    },
}

/// Which frame of its source a field is.
#[derive(Debug, Clone, PartialEq, Default)]
pub struct Frame {
    /// Number of the frame, counted from 0 over all inputs.
    pub index: usize,
    /// Its time in the time unit of the field, when known.
    pub time: Option<f64>,
    /// File name (without folder) the frame came from.
    pub source: String,
}

/// Standard uncertainty (k = 1) of the velocity components, in the velocity unit.
#[derive(Debug, Clone, PartialEq, Default)]
pub enum Sigma {
    /// Not declared.
    #[default]
    Unknown,
    /// One value for each component.
    Uniform {
        /// Of u.
        u: f64,
        /// Of v.
        v: f64,
    },
    /// One value for each node and component, shape `(ny, nx)`; NaN where there is no vector.
    PerNode {
        /// Of u.
        u: Array2<f64>,
        /// Of v.
        v: Array2<f64>,
    },
}

impl Sigma {
    /// `(sigma_u, sigma_v)` at a node, `None` when not declared.
    pub fn at(&self, j: usize, i: usize) -> Option<(f64, f64)> {
        match self {
            Sigma::Unknown => None,
            Sigma::Uniform { u, v } => Some((*u, *v)),
            Sigma::PerNode { u, v } => Some((u[[j, i]], v[[j, i]])),
        }
    }

    /// Root mean square over the valid nodes of both components, `None` when not declared.
    pub fn rms(&self, valid: &Array2<bool>) -> Option<f64> {
        match self {
            Sigma::Unknown => None,
            Sigma::Uniform { u, v } => Some((0.5 * (u * u + v * v)).sqrt()),
            Sigma::PerNode { u, v } => {
                let (mut sum, mut n) = (0.0, 0usize);
                for ((su, sv), ok) in u.iter().zip(v).zip(valid) {
                    if *ok {
                        sum += 0.5 * (su * su + sv * sv);
                        n += 1;
                    }
                }
                (n > 0).then(|| (sum / n as f64).sqrt())
            }
        }
    }
}

/// A measured planar velocity field, one frame.
///
/// * Shape: `u`, `v`, `valid` are `(ny, nx)`, index `[[j, i]]`, y grows with the row.
/// * Units: coherent; lengths and velocities share the length unit (`io` converts).
/// * Gaps: `valid` false; u and v are NaN there.  Nodes inside a body are never valid.
#[derive(Debug, Clone, PartialEq)]
pub struct VelocityField {
    /// Grid, bodies, walls, thickness.
    pub domain: Arc<Domain>,
    /// Component along +x, NaN in gaps.
    pub u: Array2<f64>,
    /// Component along +y, NaN in gaps.
    pub v: Array2<f64>,
    /// True where the vector is usable.
    pub valid: Array2<bool>,
    /// Standard uncertainty of the components.
    pub sigma: Sigma,
    /// Share by which neighboring measurement windows overlap, in `[0, 1)`; `None`: not declared.
    pub overlap: Option<f64>,
    /// Which frame this is.
    pub frame: Frame,
}

impl VelocityField {
    /// Field from arrays; a node is valid where both components are finite and no body covers it.
    ///
    /// # Errors
    /// [`FieldError::ShapeMismatch`] when an array does not fit the grid.
    pub fn new(domain: Arc<Domain>, mut u: Array2<f64>, mut v: Array2<f64>) -> Result<Self, FieldError> {
        let expected = domain.grid.shape();
        for (name, array) in [("u", &u), ("v", &v)] {
            if array.dim() != expected {
                return Err(FieldError::ShapeMismatch { name, got: array.dim(), expected });
            }
        }
        let mut valid = Array2::from_elem(expected, true);
        for ((j, i), ok) in valid.indexed_iter_mut() {
            *ok = u[[j, i]].is_finite() && v[[j, i]].is_finite() && !domain.is_solid(j, i);
            if !*ok {
                u[[j, i]] = f64::NAN;
                v[[j, i]] = f64::NAN;
            }
        }
        Ok(Self { domain, u, v, valid, sigma: Sigma::Unknown, overlap: None, frame: Frame::default() })
    }

    /// Sets the standard uncertainty.
    #[must_use]
    pub fn with_sigma(mut self, sigma: Sigma) -> Self {
        self.sigma = sigma;
        self
    }

    /// Sets the overlap.
    #[must_use]
    pub fn with_overlap(mut self, overlap: f64) -> Self {
        self.overlap = Some(overlap);
        self
    }

    /// Turns nodes into gaps.
    #[must_use]
    pub fn without(mut self, drop: impl Fn(usize, usize) -> bool) -> Self {
        for ((j, i), ok) in self.valid.indexed_iter_mut() {
            if drop(j, i) {
                *ok = false;
                self.u[[j, i]] = f64::NAN;
                self.v[[j, i]] = f64::NAN;
            }
        }
        self
    }

    /// The grid.
    pub fn grid(&self) -> &Grid {
        &self.domain.grid
    }

    /// Number of usable vectors.
    pub fn valid_count(&self) -> usize {
        self.valid.iter().filter(|ok| **ok).count()
    }

    /// Root mean square speed over the usable vectors, NaN when there is none.
    pub fn rms_speed(&self) -> f64 {
        let (mut sum, mut n) = (0.0, 0usize);
        for ((u, v), ok) in self.u.iter().zip(&self.v).zip(&self.valid) {
            if *ok {
                sum += u * u + v * v;
                n += 1;
            }
        }
        (sum / n as f64).sqrt()
    }

    /// Everything that makes the field unusable; empty when it can be analyzed.
    pub fn problems(&self) -> Vec<FieldError> {
        let mut problems = Vec::new();
        let bad: Vec<(usize, usize)> = self
            .valid
            .indexed_iter()
            .filter(|&(ji, ok)| *ok && !(self.u[ji].is_finite() && self.v[ji].is_finite()))
            .map(|(ji, _)| ji)
            .collect();
        if let Some(&(j, i)) = bad.first() {
            problems.push(FieldError::NotFinite { count: bad.len(), j, i });
        }
        let mut check = |name: &'static str, value: &dyn Fn(usize, usize) -> f64| {
            let bad: Vec<(usize, usize)> = self
                .valid
                .indexed_iter()
                .filter(|&((j, i), ok)| *ok && !(value(j, i) > 0.0 && value(j, i).is_finite()))
                .map(|(ji, _)| ji)
                .collect();
            if let Some(&(j, i)) = bad.first() {
                problems.push(FieldError::BadSigma { name, count: bad.len(), j, i, value: value(j, i) });
            }
        };
        match &self.sigma {
            Sigma::Unknown => {}
            Sigma::Uniform { u, v } => {
                check("sigma_u", &|_, _| *u);
                check("sigma_v", &|_, _| *v);
            }
            Sigma::PerNode { u, v } => {
                check("sigma_u", &|j, i| u[[j, i]]);
                check("sigma_v", &|j, i| v[[j, i]]);
            }
        }
        if let Some(got) = self.overlap
            && !(0.0..1.0).contains(&got)
        {
            problems.push(FieldError::BadOverlap { got });
        }
        if self.valid_count() == 0 {
            problems.push(FieldError::NoVectors { nodes: self.grid().node_count() });
        }
        problems
    }
}
