//! Outlines of walls and bodies as curves with arc length and normal.

/// A point of a wall: position and unit normal into the fluid.
#[derive(Debug, Clone, Copy)]
pub(super) struct Foot {
    pub(super) position: [f64; 2],
    pub(super) normal: [f64; 2],
}

/// A wall as a curve, run through so that the fluid lies on its left: the direction of `f > 0`.
pub(super) enum Curve {
    Circle { center: [f64; 2], radius: f64 },
    Path { vertices: Vec<[f64; 2]>, starts: Vec<f64> },
}

impl Curve {
    /// Path through vertices given in any sense for a closed outline of a body.
    pub(super) fn around_body(vertices: &[[f64; 2]]) -> Self {
        let n = vertices.len();
        let area: f64 = (0..n)
            .map(|k| {
                let ([x0, y0], [x1, y1]) = (vertices[k], vertices[(k + 1) % n]);
                x0 * y1 - x1 * y0
            })
            .sum();
        // Clockwise, the body on the right.
        let mut path: Vec<[f64; 2]> = vertices.to_vec();
        if area > 0.0 {
            path.reverse();
        }
        path.extend(path.first().copied());
        path.dedup();
        Self::path(path)
    }

    pub(super) fn path(vertices: Vec<[f64; 2]>) -> Self {
        let mut starts = vec![0.0];
        let mut length = 0.0;
        for pair in vertices.windows(2) {
            length += (pair[1][0] - pair[0][0]).hypot(pair[1][1] - pair[0][1]);
            starts.push(length);
        }
        Self::Path { vertices, starts }
    }

    pub(super) fn length(&self) -> f64 {
        match self {
            Curve::Circle { radius, .. } => std::f64::consts::TAU * radius,
            Curve::Path { starts, .. } => starts.last().copied().unwrap_or(0.0),
        }
    }

    /// Foot at arc length `s`.
    pub(super) fn at(&self, s: f64) -> Option<Foot> {
        match self {
            Curve::Circle { center, radius } => {
                let angle = -s / radius;
                let normal = [angle.cos(), angle.sin()];
                Some(Foot { position: [center[0] + radius * normal[0], center[1] + radius * normal[1]], normal })
            }
            Curve::Path { vertices, starts } => {
                let edges = starts.len().checked_sub(2)?;
                let k = starts.partition_point(|&start| start <= s).saturating_sub(1).min(edges);
                let ([x0, y0], [x1, y1]) = (vertices[k], vertices[k + 1]);
                let length = starts[k + 1] - starts[k];
                let (ex, ey) = ((x1 - x0) / length, (y1 - y0) / length);
                let along = s - starts[k];
                Some(Foot { position: [x0 + along * ex, y0 + along * ey], normal: [-ey, ex] })
            }
        }
    }

    /// Mean of the normals of the two edges that meet in the vertex within `reach` of `s`, if there is one.
    pub(super) fn vertex_normal(&self, s: f64, reach: f64) -> Option<[f64; 2]> {
        let Curve::Path { starts, .. } = self else {
            return None;
        };
        let total = self.length();
        let at = starts.iter().copied().find(|start| (start - s).abs() <= reach)?;
        let before = self.at((at - 2.0 * reach).rem_euclid(total))?.normal;
        let after = self.at((at + 2.0 * reach).rem_euclid(total))?.normal;
        let sum = [before[0] + after[0], before[1] + after[1]];
        let length = sum[0].hypot(sum[1]);
        (length > 0.0).then(|| [sum[0] / length, sum[1] / length])
    }
}
