//! From compressed rows to tiles, in parallel over bands.
//!
//! 1. Order and width from counted costs ([`super::order`]).
//! 2. Count entries and segments per slice and tile.
//! 3. Fill: every band goes through its rows in order, so the result is the same for any number
//!    of threads.

use rayon::prelude::*;

use super::compressed::CompressedRows;
use super::order::{self, Columns};
use super::rows::{AnyTiles, Orders, StoredRows};
use crate::base::Grid;
use crate::kernel::block::zeros;
use crate::kernel::tiles::{BAND_MAX, Cut, Parts, Start};
use crate::kernel::{RowOrder, Tiles, Value, Way};
use crate::operator::keep::Keep;
use crate::operator::traffic::Ways;

/// Entries of a slice: 640 kB in f64, what a core's own caches hold between dots and scatter.
const SLICE_ENTRIES: usize = 1 << 16;

/// Rows of a band where the matrix has enough: with many lanes a tile in the cache serves them all.
const BAND_ROWS: usize = 4096;

/// Rows of a band at least: below, handing out work costs more than it saves.
const ROWS_MIN: usize = 64;

/// Bands that a matrix is cut into where it has rows enough: work for that many threads.
const BANDS: usize = 64;

/// Entries that a slice in a tile must hold on average, so that the table stays small.
const ENTRIES_PER_START: usize = 64;

/// See [`StoredRows::build`].
pub fn build(matrix: CompressedRows, grid: Option<&Grid>) -> StoredRows {
    let Columns { order: columns, tile } = order::columns(&matrix, grid);
    let place_of = columns.as_ref().map(|order| order.place_of.as_slice());
    let rows = order::rows(&matrix, place_of, tile);
    let row_at = rows.as_ref().map(RowOrder::row_at);
    let cut = cut(matrix.rows(), matrix.columns(), matrix.entries(), tile);
    let tiles = match &matrix {
        CompressedRows::Double(a) => {
            AnyTiles::Double(fill(&matrix, a.data(), &cut, place_of, row_at))
        }
        CompressedRows::Single(a) => {
            AnyTiles::Single(fill(&matrix, a.data(), &cut, place_of, row_at))
        }
        CompressedRows::Pattern(a) => {
            AnyTiles::Pattern(fill(&matrix, a.data(), &cut, place_of, row_at))
        }
    };
    drop(matrix);
    let order = Orders { columns, rows };
    let mut stored = StoredRows { tiles, order, ways: Ways::both(Way::TwoPhase) };
    stored.ways = Ways::counted(&stored);
    stored
}

/// Rows of slices and bands, from sizes alone.
fn cut(rows: usize, columns: usize, entries: usize, tile: usize) -> Cut {
    let below = |limit: usize| 1usize << limit.max(1).ilog2();
    let per_row = entries.div_ceil(rows.max(1)).max(1);
    // Few long rows are cut finer than few short ones: what counts is the work of a band.
    let least = (SLICE_ENTRIES / per_row).clamp(1, ROWS_MIN);
    let band_rows = rows.div_ceil(BANDS).clamp(least, BAND_ROWS);
    let mut slice = below(SLICE_ENTRIES / per_row).min(below(band_rows));
    let tiles = columns.div_ceil(tile);
    while slice < BAND_MAX && rows.div_ceil(slice) * tiles * ENTRIES_PER_START > entries {
        slice *= 2;
    }
    Cut { rows, columns, tile, slice, band: (band_rows / slice).max(1) }
}

/// One band's part of every array.
struct Band<'a, V> {
    band: usize,
    table: &'a [Start],
    rows: &'a mut [u16],
    lengths: &'a mut [u16],
    columns: &'a mut [u16],
    values: &'a mut [V],
}

fn fill<V: Keep>(
    matrix: &CompressedRows,
    values: &[V],
    cut: &Cut,
    place_of: Option<&[u32]>,
    row_at: Option<&[u32]>,
) -> Tiles<V> {
    let source = Source { matrix, values, cut, place_of, row_at };
    let mut table = source.count();
    table.push(Start::default());
    let mut end = Start::default();
    for start in &mut table {
        let counted = std::mem::replace(start, end);
        end.entry += counted.entry;
        end.segment += counted.segment;
    }
    let mut parts = Parts {
        table: Vec::new(),
        rows: zeros(end.segment),
        lengths: zeros(end.segment),
        columns: zeros(end.entry),
        values: zeros(end.entry),
    };
    bands(cut, &table, &mut parts).into_par_iter().for_each(|band| source.fill_band(band));
    parts.table = table;
    Tiles::new(*cut, parts).expect("tiles built here are sound")
}

/// Cuts the arrays where bands begin.
fn bands<'a, V>(cut: &Cut, table: &'a [Start], parts: &'a mut Parts<V>) -> Vec<Band<'a, V>> {
    let (mut rows, mut lengths) = (parts.rows.as_mut_slice(), parts.lengths.as_mut_slice());
    let (mut columns, mut values) = (parts.columns.as_mut_slice(), parts.values.as_mut_slice());
    let mut bands = Vec::with_capacity(cut.bands());
    for band in 0..cut.bands() {
        let slices = cut.slices_of(band);
        let table = &table[slices.start * cut.tiles()..=slices.end * cut.tiles()];
        let entries = table[table.len() - 1].entry - table[0].entry;
        let segments = table[table.len() - 1].segment - table[0].segment;
        bands.push(Band {
            band,
            table,
            rows: rows.split_off_mut(..segments).expect("counted"),
            lengths: lengths.split_off_mut(..segments).expect("counted"),
            columns: columns.split_off_mut(..entries).expect("counted"),
            values: values.split_off_mut(..entries).expect("counted"),
        });
    }
    bands
}

struct Source<'a, V> {
    matrix: &'a CompressedRows,
    values: &'a [V],
    cut: &'a Cut,
    place_of: Option<&'a [u32]>,
    row_at: Option<&'a [u32]>,
}

/// Entries of a row per tile, and which tiles it touches.
struct Touched {
    counts: Vec<u32>,
    tiles: Vec<usize>,
}

impl<V: Value + Default> Source<'_, V> {
    fn place(&self, column: u32) -> (usize, u16) {
        let place = self.place_of.map_or(column, |p| p[column as usize]) as usize;
        (place / self.cut.tile, (place % self.cut.tile) as u16)
    }

    fn entries(&self, inner: usize) -> std::ops::Range<usize> {
        let row = self.row_at.map_or(inner, |rows| rows[inner] as usize);
        self.matrix.pointers()[row]..self.matrix.pointers()[row + 1]
    }

    fn touch(&self, inner: usize, touched: &mut Touched) {
        for &column in &self.matrix.indices()[self.entries(inner)] {
            let tile = self.place(column).0;
            if touched.counts[tile] == 0 {
                touched.tiles.push(tile);
            }
            touched.counts[tile] += 1;
        }
    }

    fn new_touched(&self) -> Touched {
        Touched { counts: vec![0; self.cut.tiles()], tiles: Vec::new() }
    }

    /// Entries and segments of every slice and tile, at [`Cut::place`].
    fn count(&self) -> Vec<Start> {
        let cut = self.cut;
        let bands: Vec<Vec<Start>> = (0..cut.bands())
            .into_par_iter()
            .map(|band| {
                let slices = cut.slices_of(band);
                let first = slices.start * cut.tiles();
                let mut counts = vec![Start::default(); slices.len() * cut.tiles()];
                let mut touched = self.new_touched();
                for slice in slices {
                    for inner in cut.rows_of(slice) {
                        self.touch(inner, &mut touched);
                        for tile in touched.tiles.drain(..) {
                            let count = &mut counts[cut.place(slice, tile) - first];
                            count.segment += 1;
                            count.entry += std::mem::take(&mut touched.counts[tile]) as usize;
                        }
                    }
                }
                counts
            })
            .collect();
        bands.concat()
    }

    fn fill_band(&self, band: Band<'_, V>) {
        let cut = self.cut;
        let slices = cut.slices_of(band.band);
        let first_place = slices.start * cut.tiles();
        let first_row = slices.start * cut.slice;
        let origin = band.table[0];
        let mut next: Vec<Start> = band
            .table
            .iter()
            .map(|start| Start {
                entry: start.entry - origin.entry,
                segment: start.segment - origin.segment,
            })
            .collect();
        let mut touched = self.new_touched();
        // Where the next entry of the row goes, per tile.
        let mut cursors = vec![0; cut.tiles()];
        for slice in slices {
            for inner in cut.rows_of(slice) {
                self.touch(inner, &mut touched);
                for tile in touched.tiles.drain(..) {
                    let next = &mut next[cut.place(slice, tile) - first_place];
                    let count = std::mem::take(&mut touched.counts[tile]) as usize;
                    band.rows[next.segment] = (inner - first_row) as u16;
                    band.lengths[next.segment] = (count - 1) as u16;
                    cursors[tile] = next.entry;
                    next.segment += 1;
                    next.entry += count;
                }
                for entry in self.entries(inner) {
                    let (tile, column) = self.place(self.matrix.indices()[entry]);
                    let cursor = &mut cursors[tile];
                    band.columns[*cursor] = column;
                    band.values[*cursor] = self.values[entry];
                    *cursor += 1;
                }
            }
        }
    }
}
