//! The same pass in safe code, one row and one lane after another: what the fast one is compared
//! with. It keeps the order of every sum, so the portable twin has the same bits; twins that fuse
//! multiplications differ by rounding.

use std::ops::Range;

use super::pass::Factors;
use super::row_order::RowOrder;
use super::segments::PARTS;
use super::tiles::Tiles;
use super::value::Value;
use crate::base::sums;

/// Blocks as in [`super::Lanes`].
pub struct Blocks<'a> {
    /// k.
    pub count: usize,
    /// n×k.
    pub v: &'a [f64],
    /// k.
    pub alpha: &'a [f64],
    /// m×k.
    pub u: &'a mut [f64],
    /// n×k; overwritten.
    pub s: &'a mut [f64],
    /// k; overwritten.
    pub squares: &'a mut [f64],
}

/// One traversal, as [`super::pass()`].
///
/// Panics if a block is not of its documented shape.
pub fn pass<V: Value>(
    tiles: &Tiles<V>,
    groups: &[Range<usize>],
    rows: Option<&RowOrder>,
    factors: &impl Fn(usize, usize) -> Factors,
    blocks: Blocks<'_>,
) {
    let Blocks { count: k, v, alpha, u, s, squares } = blocks;
    let cut = tiles.cut();
    s.fill(0.0);
    for l in 0..k {
        let mut slice_squares = vec![0.0; cut.slices()];
        for (number, group) in groups.iter().enumerate() {
            let mut partial = vec![0.0; cut.columns];
            for slice in group.clone() {
                for inner in cut.rows_of(slice) {
                    let row = rows.map_or(inner, |rows| rows.row_at()[inner] as usize);
                    let f = factors(row, l);
                    let dot = dot(tiles, slice, inner, |j| v[j * k + l]);
                    let new = f.dot * dot - alpha[l] * u[row * k + l];
                    u[row * k + l] = new;
                    slice_squares[slice] += (f.square * new) * (f.square * new);
                    let push = f.scatter * new;
                    for_each(tiles, slice, inner, |_, j, a| partial[j] += a * push);
                }
            }
            for (j, sum) in partial.into_iter().enumerate() {
                s[j * k + l] = if number == 0 { sum } else { s[j * k + l] + sum };
            }
        }
        squares[l] = sums::total(&slice_squares, 1, 0);
    }
}

/// aᵢᵀv of an inner row: per tile, entries in turn to [`PARTS`] sums.
fn dot<V: Value>(tiles: &Tiles<V>, slice: usize, inner: usize, v: impl Fn(usize) -> f64) -> f64 {
    let mut sums = vec![[0.0; PARTS]; tiles.cut().tiles()];
    for_each(tiles, slice, inner, |place, j, a| {
        sums[j / tiles.cut().tile][place % PARTS] += a * v(j);
    });
    sums.iter().fold(0.0, |sum, parts| sum + ((parts[0] + parts[2]) + (parts[1] + parts[3])))
}

/// Calls `visit(place in the segment, inner column, value)` for the entries of an inner row.
fn for_each<V: Value>(
    tiles: &Tiles<V>,
    slice: usize,
    inner: usize,
    mut visit: impl FnMut(usize, usize, f64),
) {
    let cut = tiles.cut();
    let first_row = slice / cut.band * cut.band * cut.slice;
    for tile in 0..cut.tiles() {
        let segments = tiles.segments(slice..slice + 1, tile);
        let mut entry = 0;
        for (&row, &less) in segments.rows.iter().zip(segments.lengths) {
            for place in 0..=usize::from(less) {
                if first_row + usize::from(row) == inner {
                    let column = tile * cut.tile + usize::from(segments.columns[entry]);
                    visit(place, column, segments.values[entry].number());
                }
                entry += 1;
            }
        }
    }
}
