//! Going through all rows, fast: a slice at a time, its tiles read in the order they lie in.

use std::ops::Range;

use rayon::prelude::*;

use super::rows::StoredRows;
use crate::kernel::{Tiles, Value};
use crate::operator::rows::each_storage;

/// One entry: column as the caller numbers it, value.
pub type Entry = (u32, f64);

/// The rows of one slice, gathered.
#[derive(Default)]
struct Gathered {
    /// Where each row of the slice begins, and one past the last.
    starts: Vec<usize>,
    entries: Vec<Entry>,
}

impl StoredRows {
    /// Calls `visit(row, entries)` for every row of these slices, in inner order; entries of a row
    /// in the order of [`super::Row::entries`]. Memory: 16 bytes for each entry of a slice.
    pub fn each_row(&self, slices: Range<usize>, mut visit: impl FnMut(usize, &[Entry])) {
        let mut gathered = Gathered::default();
        for slice in slices {
            each_storage!(self, tiles => gathered.gather(tiles, slice, &self.order.columns));
            for (inner, bounds) in self.cut().rows_of(slice).zip(gathered.starts.windows(2)) {
                visit(self.row_at(inner), &gathered.entries[bounds[0]..bounds[1]]);
            }
        }
    }

    /// `of(row, entries)` of every row, in file order; in parallel.
    pub fn map_rows<T: Copy + Send>(&self, of: impl Fn(usize, &[Entry]) -> T + Sync) -> Vec<T> {
        let inner: Vec<Vec<T>> = (0..self.cut().slices())
            .into_par_iter()
            .map(|slice| {
                let mut values = Vec::with_capacity(self.cut().slice);
                self.each_row(slice..slice + 1, |row, entries| values.push(of(row, entries)));
                values
            })
            .collect();
        self.in_file_order(&inner.concat())
    }

    /// Values of the rows in inner order, in file order.
    pub fn in_file_order<T: Copy>(&self, inner: &[T]) -> Vec<T> {
        assert_eq!(inner.len(), self.rows(), "one value a row");
        (0..inner.len()).map(|row| inner[self.inner_of(row)]).collect()
    }

    /// Σᵢ wᵢ² aᵢⱼ² for every column j, in file order; one visit, in parallel over the tiles.
    pub fn column_squares(&self, weight: impl Fn(usize) -> f64 + Sync) -> Vec<f64> {
        let tiles: Vec<Vec<f64>> = each_storage!(self, tiles => {
            (0..self.cut().tiles())
                .into_par_iter()
                .map(|tile| squares(tiles, tile, |inner| weight(self.row_at(inner))))
                .collect()
        });
        let inner = tiles.concat();
        (0..inner.len()).map(|j| inner[self.place_of(j)]).collect()
    }
}

/// Σ (w a)² of the columns of a tile, inner rows in order.
fn squares<V: Value>(tiles: &Tiles<V>, tile: usize, weight: impl Fn(usize) -> f64) -> Vec<f64> {
    let cut = tiles.cut();
    let mut sums = vec![0.0; cut.tile.min(cut.columns - tile * cut.tile)];
    for slice in 0..cut.slices() {
        let first = slice / cut.band * cut.band * cut.slice;
        let segments = tiles.segments(slice..slice + 1, tile);
        let mut entry = 0;
        for (&row, &less) in segments.rows.iter().zip(segments.lengths) {
            let w = weight(first + usize::from(row));
            let end = entry + usize::from(less) + 1;
            let entries = segments.columns[entry..end].iter().zip(&segments.values[entry..end]);
            for (&column, value) in entries {
                let weighted = w * value.number();
                sums[usize::from(column)] += weighted * weighted;
            }
            entry = end;
        }
    }
    sums
}

impl Gathered {
    fn gather<V: Value>(
        &mut self,
        tiles: &Tiles<V>,
        slice: usize,
        order: &Option<super::order::ColumnOrder>,
    ) {
        let cut = tiles.cut();
        let rows = cut.rows_of(slice);
        let ahead = rows.start - slice / cut.band * cut.band * cut.slice;
        self.starts.clear();
        self.starts.resize(rows.len() + 1, 0);
        for tile in 0..cut.tiles() {
            let segments = tiles.segments(slice..slice + 1, tile);
            for (&row, &less) in segments.rows.iter().zip(segments.lengths) {
                self.starts[usize::from(row) - ahead + 1] += usize::from(less) + 1;
            }
        }
        let mut total = 0;
        for start in &mut self.starts {
            total += *start;
            *start = total;
        }
        self.entries.clear();
        self.entries.resize(total, (0, 0.0));
        // Each row's start moves on as it is filled; it ends where the next began.
        for tile in 0..cut.tiles() {
            let base = (tile * cut.tile) as u32;
            let segments = tiles.segments(slice..slice + 1, tile);
            let mut entry = 0;
            for (&row, &less) in segments.rows.iter().zip(segments.lengths) {
                let next = &mut self.starts[usize::from(row) - ahead];
                let end = entry + usize::from(less) + 1;
                let entries = segments.columns[entry..end].iter().zip(&segments.values[entry..end]);
                for ((&column, value), out) in entries.zip(&mut self.entries[*next..]) {
                    let place = base + u32::from(column);
                    let unknown = order.as_ref().map_or(place, |o| o.unknown_at[place as usize]);
                    *out = (unknown, value.number());
                }
                *next += end - entry;
                entry = end;
            }
        }
        self.starts.rotate_right(1);
        self.starts[0] = 0;
    }
}
