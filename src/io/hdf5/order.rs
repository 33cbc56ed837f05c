//! Order of the dimensions of a dataset: asked for, labeled, or told from the lengths of the coordinates.

use super::catalog::tidy_shape;
use crate::field::{Remark, RemarkKind};

/// Direction of a dimension.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Role {
    /// Frames.
    T,
    /// Rows.
    Y,
    /// Columns.
    X,
}

impl Role {
    fn letter(self) -> &'static str {
        match self {
            Role::T => "t",
            Role::Y => "y",
            Role::X => "x",
        }
    }
}

/// Direction of the coordinate role `x`, `y` or `t`.
pub fn role_of(role: &str) -> Role {
    match role {
        "x" => Role::X,
        "y" => Role::Y,
        _ => Role::T,
    }
}

/// Why no order was found.
#[derive(Debug, PartialEq)]
pub enum Problem {
    /// The order asked for is wrong.
    Setting(String),
    /// The file contradicts itself.
    Content(String),
}

/// What is known about the dimensions.
#[derive(Debug, Default)]
pub struct Known {
    /// Direction of every dimension as labeled; empty when the file has no labels.
    pub labels: Vec<Option<Role>>,
    /// Tidy shape of the x coordinates.
    pub x: Option<Vec<usize>>,
    /// Tidy shape of the y coordinates.
    pub y: Option<Vec<usize>>,
    /// Tidy shape of the times.
    pub t: Option<Vec<usize>>,
    /// Dimension of a plane x mesh along which x changes, 0 or 1.
    pub x_changes_along: Option<usize>,
}

/// How much of a dimension is read.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Pick {
    /// One index.
    At(usize),
    /// All of it.
    All,
}

/// Order found: what every dimension of the arrays is.
#[derive(Debug, Clone, PartialEq)]
pub struct Layout {
    /// Number of frames.
    pub frames: usize,
    /// Number of rows.
    pub ny: usize,
    /// Number of columns.
    pub nx: usize,
    /// x comes before y in the file.
    pub transposed: bool,
    /// Directions of the dimensions longer than 1.
    roles: Vec<Role>,
    tidy: Vec<usize>,
}

const PLANE: [&[Role]; 2] = [&[Role::Y, Role::X], &[Role::X, Role::Y]];
const SERIES: [&[Role]; 6] = [
    &[Role::T, Role::Y, Role::X],
    &[Role::T, Role::X, Role::Y],
    &[Role::Y, Role::X, Role::T],
    &[Role::X, Role::Y, Role::T],
    &[Role::Y, Role::T, Role::X],
    &[Role::X, Role::T, Role::Y],
];
// MATLAB's (row, column, page) arrives as (page, column, row).
const MATLAB_PLANE: [&[Role]; 2] = [&[Role::X, Role::Y], &[Role::Y, Role::X]];
const MATLAB_SERIES: [&[Role]; 6] = [
    &[Role::T, Role::X, Role::Y],
    &[Role::X, Role::Y, Role::T],
    &[Role::T, Role::Y, Role::X],
    &[Role::Y, Role::X, Role::T],
    &[Role::X, Role::T, Role::Y],
    &[Role::Y, Role::T, Role::X],
];

impl Layout {
    /// Finds the order of a dataset of `shape`, of which two or three dimensions are longer than 1.
    ///
    /// An order asked for comes first; labels and the lengths of coordinates must be met; what they leave open is read as
    /// (y, x), time first (from MATLAB files the reverse of the rows and columns seen there), with a remark.
    ///
    /// # Errors
    /// [`Problem`] in words.
    pub fn decide(
        shape: &[usize],
        known: &Known,
        wanted: Option<&str>,
        matlab: bool,
        remarks: &mut Vec<Remark>,
    ) -> Result<Self, Problem> {
        let tidy = tidy_shape(shape);
        if let Some(text) = wanted {
            return Ok(Self::from_roles(parse(text, shape)?, tidy));
        }
        let orders: &[&[Role]] = match (tidy.len(), matlab) {
            (2, false) => &PLANE,
            (2, true) => &MATLAB_PLANE,
            (_, false) => &SERIES,
            (_, true) => &MATLAB_SERIES,
        };
        let labels: Vec<Option<Role>> = shape
            .iter()
            .enumerate()
            .filter(|(_, n)| **n != 1)
            .map(|(d, _)| known.labels.get(d).copied().flatten())
            .collect();
        let meets = |roles: &&&[Role], with_time: bool| -> bool {
            labels.iter().zip(**roles).all(|(label, role)| label.is_none_or(|l| l == *role))
                && fits(known.x.as_deref(), Role::X, roles, &tidy)
                && fits(known.y.as_deref(), Role::Y, roles, &tidy)
                && (!with_time || fits(known.t.as_deref(), Role::T, roles, &tidy))
                && known
                    .x_changes_along
                    .is_none_or(|d| roles.iter().filter(|r| **r != Role::T).position(|r| *r == Role::X) == Some(d))
        };
        let mut possible: Vec<&[Role]> = orders.iter().filter(|o| meets(o, true)).copied().collect();
        if possible.is_empty() {
            possible = orders.iter().filter(|o| meets(o, false)).copied().collect();
        }
        let Some(&roles) = possible.first() else {
            let coordinates: Vec<String> = [("x", &known.x), ("y", &known.y), ("time", &known.t)]
                .iter()
                .filter_map(|(name, shape)| shape.as_ref().map(|s| format!("{name} {}", super::shape_text(s))))
                .collect();
            return Err(Problem::Content(format!(
                "shape {} does not fit its coordinates, which have the shapes {}; name the right ones with `--array x=/path`, or the order with `--order`",
                super::shape_text(shape),
                coordinates.join(", ")
            )));
        };
        let told = letters(roles);
        if possible.len() > 1 {
            remarks.push(Remark::new(
                RemarkKind::DimensionsReordered,
                format!(
                    "nothing in the file tells the order of the dimensions {}; read as ({told}){}, `--order` settles it",
                    super::shape_text(shape),
                    if matlab { " as MATLAB stores (row, column)" } else { "" }
                ),
            ));
        } else if roles != PLANE[0] && roles != SERIES[0] {
            remarks.push(Remark::new(
                RemarkKind::DimensionsReordered,
                format!("u is stored as ({told}); reordered to (y, x)"),
            ));
        }
        Ok(Self::from_roles(roles.to_vec(), tidy))
    }

    fn from_roles(roles: Vec<Role>, tidy: Vec<usize>) -> Self {
        let length = |role: Role| roles.iter().position(|r| *r == role).map_or(1, |d| tidy[d]);
        let at = |role: Role| roles.iter().position(|r| *r == role);
        Self {
            frames: length(Role::T),
            ny: length(Role::Y),
            nx: length(Role::X),
            transposed: at(Role::X) < at(Role::Y),
            roles,
            tidy,
        }
    }

    /// What to read of an array of `shape` for one frame; `None` when it has neither the shape of the velocities nor of one
    /// frame of them.
    pub fn selection(&self, shape: &[usize], frame: usize) -> Option<Vec<Pick>> {
        let tidy = tidy_shape(shape);
        let plane: Vec<usize> =
            self.tidy.iter().zip(&self.roles).filter(|(_, r)| **r != Role::T).map(|(n, _)| *n).collect();
        let mut roles = if tidy == self.tidy {
            self.roles.clone().into_iter()
        } else if tidy == plane {
            self.roles.iter().copied().filter(|r| *r != Role::T).collect::<Vec<_>>().into_iter()
        } else {
            return None;
        };
        Some(
            shape
                .iter()
                .map(|&n| match n {
                    1 => Pick::At(0),
                    _ if roles.next() == Some(Role::T) => Pick::At(frame),
                    _ => Pick::All,
                })
                .collect(),
        )
    }
}

/// Whether a coordinate of a tidy shape can belong to dimensions in this order.
fn fits(coordinate: Option<&[usize]>, role: Role, roles: &[Role], tidy: &[usize]) -> bool {
    let length = roles.iter().position(|r| *r == role).map_or(1, |d| tidy[d]);
    match coordinate {
        None => true,
        Some([]) => length == 1,
        Some([n]) => *n == length,
        Some(mesh) => {
            let plane: Vec<usize> = tidy.iter().zip(roles).filter(|(_, r)| **r != Role::T).map(|(n, _)| *n).collect();
            mesh == plane || mesh == tidy
        }
    }
}

fn letters(roles: &[Role]) -> String {
    roles.iter().map(|r| r.letter()).collect::<Vec<_>>().join(", ")
}

/// Reads `t,y,x`, `yx` ... for a dataset of `shape`; t may be left out when it comes first.
fn parse(text: &str, shape: &[usize]) -> Result<Vec<Role>, Problem> {
    let tidy = tidy_shape(shape);
    let wrong = |why: &str| {
        Problem::Setting(format!(
            "`{text}` does not fit the shape {}: {why}; write one of t, y, x for every dimension, for example `{}`",
            super::shape_text(shape),
            if tidy.len() == 2 { "x,y" } else { "t,x,y" }
        ))
    };
    let words: Vec<String> = if text.contains([',', ' ']) {
        text.split([',', ' ']).filter(|w| !w.is_empty()).map(str::to_lowercase).collect()
    } else {
        text.chars().map(|c| c.to_lowercase().collect()).collect()
    };
    let mut roles: Vec<Option<Role>> = Vec::new();
    for word in &words {
        roles.push(match word.as_str() {
            "t" | "time" => Some(Role::T),
            "y" => Some(Role::Y),
            "x" => Some(Role::X),
            "z" | "1" | "-" => None,
            _ => return Err(wrong("unknown letter")),
        });
    }
    if roles.len() == 2 && tidy.len() == 3 {
        roles.insert(0, Some(Role::T));
    }
    let kept: Vec<Option<Role>> = if roles.len() == tidy.len() {
        roles
    } else if roles.len() == shape.len() {
        roles.into_iter().zip(shape).filter(|(_, n)| **n != 1).map(|(r, _)| r).collect()
    } else {
        return Err(wrong(&format!("{} names for {} dimensions", words.len(), shape.len())));
    };
    let kept: Vec<Role> =
        kept.into_iter().collect::<Option<_>>().ok_or_else(|| wrong("a third direction is longer than 1"))?;
    let count = |role: Role| kept.iter().filter(|r| **r == role).count();
    if count(Role::X) != 1 || count(Role::Y) != 1 {
        return Err(wrong("x and y must each appear once"));
    }
    Ok(kept)
}

#[cfg(test)]
mod tests {
    use super::*;

    fn decide(shape: &[usize], known: &Known, wanted: Option<&str>) -> (Layout, usize) {
        let mut remarks = Vec::new();
        let layout = Layout::decide(shape, known, wanted, false, &mut remarks).unwrap();
        (layout, remarks.len())
    }

    #[test]
    fn lengths_of_the_coordinates_settle_the_order() {
        let known = Known { x: Some(vec![6]), y: Some(vec![4]), ..Known::default() };
        for (shape, transposed, frames) in [
            (vec![4, 6], false, 1),
            (vec![6, 4], true, 1),
            (vec![3, 4, 6], false, 3),
            (vec![6, 4, 3], true, 3),
            (vec![1, 4, 1, 6], false, 1),
        ] {
            let (layout, _) = decide(&shape, &known, None);
            assert_eq!(
                (layout.ny, layout.nx, layout.transposed, layout.frames),
                (4, 6, transposed, frames),
                "{shape:?}"
            );
        }
        assert!(Layout::decide(&[5, 6], &known, None, false, &mut Vec::new()).is_err());
    }

    #[test]
    fn an_open_square_is_read_as_y_x_with_a_remark_and_the_order_asked_for_wins() {
        let known = Known { x: Some(vec![5]), y: Some(vec![5]), ..Known::default() };
        let (layout, remarks) = decide(&[5, 5], &known, None);
        assert!(!layout.transposed && remarks == 1);
        let (layout, remarks) = decide(&[5, 5], &known, Some("x,y"));
        assert!(layout.transposed && remarks == 0);
        let labels = Known { labels: vec![Some(Role::X), Some(Role::Y)], ..Known::default() };
        assert!(decide(&[5, 5], &labels, None).0.transposed);
    }

    #[test]
    fn selections_take_one_frame_and_drop_single_dimensions() {
        let known = Known { x: Some(vec![6]), y: Some(vec![4]), ..Known::default() };
        let (layout, _) = decide(&[3, 1, 4, 6], &known, None);
        assert_eq!(layout.selection(&[3, 1, 4, 6], 2), Some(vec![Pick::At(2), Pick::At(0), Pick::All, Pick::All]));
        assert_eq!(layout.selection(&[4, 6], 2), Some(vec![Pick::All, Pick::All]));
        assert_eq!(layout.selection(&[6, 4], 2), None);
    }

    #[test]
    fn an_order_that_does_not_fit_is_refused() {
        for text in ["y", "x,x", "t,y,q", "t,z,x,y,y"] {
            assert!(matches!(parse(text, &[4, 6]), Err(Problem::Setting(_))), "{text}");
        }
    }
}
