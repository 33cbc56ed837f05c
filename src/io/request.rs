//! What a reader is asked for.

use std::collections::BTreeMap;

/// Roles an array or column can have.
pub const ROLES: [&str; 10] = ["u", "v", "x", "y", "t", "sigma_u", "sigma_v", "valid", "solid", "depth"];

/// What a reader is asked for beyond what it finds by itself.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct ArrayRequest {
    /// Explicit places by role ([`ROLES`]).
    pub arrays: BTreeMap<String, String>,
    /// Columns of a text table: role names in order, or the names or numbers of the columns that hold x, y, u, v, sigma_u, sigma_v.
    pub columns: Option<Vec<String>>,
    /// Order of the dimensions, for example `t,y,x`.
    pub order: Option<String>,
    /// Frame wanted, counted from 0 within the file.
    pub frame: usize,
}
