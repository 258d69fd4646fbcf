//! The systems themselves. Everything follows from the seed and the scale.

use ellbow::base::random::Stream;
use ellbow::base::{Axis, Grid};
use ellbow::operator::CompressedRows;
use ellbow::system::rays::{self, Segment};
use rayon::prelude::*;

#[path = "../../tests/support/ellipses.rs"]
mod ellipses;

pub const SEED: u64 = 1;

/// What a scenario makes.
// Benches that only measure read the matrix alone.
#[allow(dead_code)]
pub struct Made {
    pub matrix: CompressedRows,
    pub truth: Vec<f64>,
    /// Sum that each row must have, where it is known from elsewhere.
    pub row_sums: Option<Vec<f64>>,
}

/// Parallel views over half a turn of a square of unit cells; truth: the head phantom.
/// Entries grow with cells a side × views × rays, so each is scaled by ∛F.
pub fn parallel(scale: f64) -> Made {
    let [side, _] = parallel_sides(scale);
    let views = shrink(360, scale.cbrt());
    let rays = shrink(728, scale.cbrt());
    let grid = grid(&[side, side]);
    let centre = 0.5 * side as f64;
    // Beyond the corners, so that every chord is the grid's own.
    let reach = side as f64;
    let segments: Vec<Segment> = (0..views * rays)
        .map(|row| {
            let theta = std::f64::consts::PI * (row / rays) as f64 / views as f64;
            let t = (row % rays) as f64 + 0.5 - 0.5 * rays as f64;
            let (sin, cos) = theta.sin_cos();
            let point =
                |along: f64| [centre + t * cos - along * sin, centre + t * sin + along * cos];
            Segment::new(&point(-reach), &point(reach))
        })
        .collect();
    let head = ellipses::head();
    let truth = at_centres(&grid, |c| {
        let (x, y) = (c[0] / centre - 1.0, c[1] / centre - 1.0);
        head.iter().map(|ellipse| ellipse.at(x, y)).sum()
    });
    straight(&grid, &segments, truth)
}

/// Rays between random points of two facing planes, in random order; truth: a layered block with
/// a slow ball. Entries grow with the number of rays × cells a side; rays go with the cells, F^{3/4}.
pub fn crosswell(scale: f64) -> Made {
    let by = scale.sqrt().sqrt();
    let sides = crosswell_sides(scale);
    let grid = grid(&sides);
    let [x, y, z] = sides.map(|cells| cells as f64);
    let random = Stream::new(SEED, 0);
    let segments: Vec<Segment> = (0..shrink(400_000, by * by * by) as u64)
        .map(|ray| {
            let share = |k: u64| random.uniform(4 * ray + k);
            Segment::new(&[0.0, y * share(0), z * share(1)], &[x, y * share(2), z * share(3)])
        })
        .collect();
    let truth = at_centres(&grid, |c| {
        let from_ball = (c[0] / x - 0.4).hypot(c[1] / y - 0.6).hypot(c[2] / z - 0.5);
        let layer = (4.0 * c[2] / z).floor();
        1.0 / (500.0 + 120.0 * layer) * if from_ball < 0.15 { 1.4 } else { 1.0 }
    });
    straight(&grid, &segments, truth)
}

/// What rays never are: columns drawn by a power law and scattered over the unknowns, so that a
/// few are in a large share of the rows and most in hardly any; row lengths by a power law too,
/// from 0 to tens of thousands; values of both signs over six decades.
pub fn hostile(scale: f64) -> Made {
    let (m, n) = (shrink(2_000_000, scale), shrink(1_000_000, scale));
    let rows: Vec<Vec<(u32, f64)>> =
        (0..m as u64).into_par_iter().map(|i| hostile_row(i, n)).collect();
    let mut pointers = Vec::with_capacity(m + 1);
    pointers.push(0);
    let entries = rows.iter().map(Vec::len).sum();
    let (mut indices, mut values) = (Vec::with_capacity(entries), Vec::with_capacity(entries));
    for row in rows {
        indices.extend(row.iter().map(|entry| entry.0));
        values.extend(row.iter().map(|entry| entry.1));
        pointers.push(indices.len());
    }
    let truth = Stream::new(SEED, u64::MAX - 1);
    Made {
        matrix: CompressedRows::from_compressed(m, n, pointers, indices, values),
        truth: (0..n as u64).map(|j| truth.normal(j)).collect(),
        row_sums: None,
    }
}

/// Row lengths: Pareto of exponent 1.5 from 8, less 8, at most a quarter of the columns; a mean
/// of 16 draws. Columns: rank ⌊n^u⌋, u uniform, which is density 1/rank; ranks are scattered by
/// multiplying by a prime above n, which is one to one modulo n.
fn hostile_row(i: u64, n: usize) -> Vec<(u32, f64)> {
    const SCATTER: u64 = 2_654_435_761;
    let random = Stream::new(SEED, i);
    let draws = (8.0 * random.uniform(0).powf(-1.0 / 1.5) - 8.0).min(n as f64 / 4.0) as u64;
    let mut row: Vec<(u32, f64)> = (0..draws)
        .map(|k| {
            let rank = (n as f64).powf(random.uniform(4 * k + 1)) as u64 - 1;
            let column = rank.min(n as u64 - 1) * SCATTER % n as u64;
            let size = 10f64.powf(6.0 * random.uniform(4 * k + 2) - 3.0);
            (column as u32, random.sign(4 * k + 3) * size)
        })
        .collect();
    row.sort_by_key(|entry| entry.0);
    row.dedup_by_key(|entry| entry.0);
    row
}

fn straight(grid: &Grid, segments: &[Segment], truth: Vec<f64>) -> Made {
    let built = rays::matrix(grid, segments).expect("rays made here are sound");
    Made { matrix: built.matrix, truth, row_sums: Some(built.chords) }
}

/// Cells along the axes of [`parallel`].
pub fn parallel_sides(scale: f64) -> [usize; 2] {
    [shrink(512, scale.cbrt()); 2]
}

/// Cells along the axes of [`crosswell`].
pub fn crosswell_sides(scale: f64) -> [usize; 3] {
    let by = scale.sqrt().sqrt();
    [shrink(100, by), shrink(100, by), shrink(60, by)]
}

fn shrink(full: usize, by: f64) -> usize {
    ((full as f64 * by).round() as usize).max(2)
}

/// A grid of unit cells, first axis fastest.
pub fn grid(cells: &[usize]) -> Grid {
    let axes = cells
        .iter()
        .zip(["x", "y", "z"])
        .map(|(&cells, name)| Axis { name: name.into(), cells, spacing: 1.0, origin: 0.0 })
        .collect();
    Grid::new(axes, "m".into(), "x", None).expect("a sound grid")
}

fn at_centres(grid: &Grid, value: impl Fn(&[f64]) -> f64) -> Vec<f64> {
    (0..grid.cell_count()).map(|cell| value(&grid.centre(cell))).collect()
}
