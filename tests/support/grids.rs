//! Grids in one line.

use ellbow::base::{Axis, Grid};

const NAMES: [&str; 3] = ["x", "y", "z"];

/// A grid of (cells, spacing, origin) for each axis, the first fastest.
pub fn grid(axes: &[(usize, f64, f64)]) -> Grid {
    let axes = axes
        .iter()
        .zip(NAMES)
        .map(|(&(cells, spacing, origin), name)| Axis { name: name.into(), cells, spacing, origin })
        .collect();
    Grid::new(axes, "m".into(), "x", None).unwrap()
}
