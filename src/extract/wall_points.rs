//! wall_points
