//! The stored matrix of a pass: bands of rows, cut into tiles of columns.
//!
//! Rows and columns are in *inner order* here: whoever builds the tiles decides which row of the
//! matrix is inner row 0. Inner rows are cut into slices of a power of two of rows, slices are
//! joined into bands; columns are cut into tiles of a power of two of at most 65,536. Entries lie
//! band by band, tile by tile, slice by slice, row by row: what a row has in a tile is a
//! *segment*, and its columns are kept as 16-bit places in the tile.
//!
//! | what | bytes |
//! |---|---|
//! | an entry | 2, and its value: 8, 4 or 0 |
//! | a segment: row in its band, number of entries less one | 4 |
//! | a slice in a tile: where its entries and segments begin | 16 |

use rayon::prelude::*;

use super::Value;

/// Columns of the widest tile: what 16 bits can number.
pub const TILE_MAX: usize = 1 << 16;

/// Rows of the largest band: what 16 bits can number.
pub const BAND_MAX: usize = 1 << 16;

/// How rows and columns are cut.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Cut {
    /// m.
    pub rows: usize,
    /// n.
    pub columns: usize,
    /// Columns of every tile but the last; a power of two of at most [`TILE_MAX`].
    pub tile: usize,
    /// Rows of every slice but the last; a power of two.
    pub slice: usize,
    /// Slices of every band but the last; a band has at most [`BAND_MAX`] rows.
    pub band: usize,
}

impl Cut {
    /// ⌈n/tile⌉.
    pub fn tiles(&self) -> usize {
        self.columns.div_ceil(self.tile)
    }

    /// ⌈m/slice⌉.
    pub fn slices(&self) -> usize {
        self.rows.div_ceil(self.slice)
    }

    /// ⌈slices/band⌉.
    pub fn bands(&self) -> usize {
        self.slices().div_ceil(self.band)
    }

    /// Slices of one band.
    pub fn slices_of(&self, band: usize) -> std::ops::Range<usize> {
        band * self.band..((band + 1) * self.band).min(self.slices())
    }

    /// Rows of one slice.
    pub fn rows_of(&self, slice: usize) -> std::ops::Range<usize> {
        slice * self.slice..((slice + 1) * self.slice).min(self.rows)
    }

    /// Place in the table of a slice in a tile. The slices of a band in one tile are neighbours.
    pub fn place(&self, slice: usize, tile: usize) -> usize {
        let band = slice / self.band;
        let slices = self.slices_of(band);
        slices.start * self.tiles() + tile * slices.len() + (slice - slices.start)
    }
}

/// Where a slice in a tile begins.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub struct Start {
    /// Its first entry.
    pub entry: usize,
    /// Its first segment.
    pub segment: usize,
}

/// The arrays, before they are checked.
#[derive(Debug, Clone, PartialEq)]
pub struct Parts<V> {
    /// At [`Cut::place`], and one more: the number of entries and segments.
    pub table: Vec<Start>,
    /// Row of each segment, counted from its band's first.
    pub rows: Vec<u16>,
    /// Entries of each segment, less one.
    pub lengths: Vec<u16>,
    /// Column of each entry, counted from its tile's first.
    pub columns: Vec<u16>,
    /// Value of each entry.
    pub values: Vec<V>,
}

/// A matrix in tiles; what the arrays say has been checked once, and never changes.
#[derive(Debug, Clone, PartialEq)]
pub struct Tiles<V> {
    cut: Cut,
    parts: Parts<V>,
}

/// The segments of one or more neighbouring slices in a tile.
#[derive(Debug, Clone, Copy)]
pub struct Segments<'a, V> {
    /// Row of each segment in its band, ascending within a slice.
    pub rows: &'a [u16],
    /// Entries of each segment, less one.
    pub lengths: &'a [u16],
    /// Columns in the tile, of all segments.
    pub columns: &'a [u16],
    /// One per column.
    pub values: &'a [V],
}

impl<V: Value> Tiles<V> {
    /// Checks that every number is in range and every array as long as the others say.
    /// One parallel visit of rows, lengths and columns.
    ///
    /// # Errors
    /// What does not fit.
    pub fn new(cut: Cut, parts: Parts<V>) -> Result<Self, &'static str> {
        check_cut(&cut)?;
        let table = &parts.table;
        let starts = cut.slices().checked_mul(cut.tiles()).and_then(|s| s.checked_add(1));
        if starts != Some(table.len()) {
            return Err("the table has not one start per slice and tile, and an end");
        }
        if table[0] != Start::default() {
            return Err("the first slice does not begin at 0");
        }
        let end = table[table.len() - 1];
        if (parts.columns.len(), parts.values.len()) != (end.entry, end.entry)
            || (parts.rows.len(), parts.lengths.len()) != (end.segment, end.segment)
        {
            return Err("arrays are not as long as the table says");
        }
        let ascend = |a: &Start, b: &Start| a.entry <= b.entry && a.segment <= b.segment;
        if !table.is_sorted_by(ascend) {
            return Err("starts do not ascend");
        }
        let tiles = Self { cut, parts };
        (0..cut.slices())
            .into_par_iter()
            .map(|slice| tiles.check_slice(slice))
            .find_first(Result::is_err)
            .unwrap_or(Ok(()))?;
        Ok(tiles)
    }

    fn check_slice(&self, slice: usize) -> Result<(), &'static str> {
        let first = slice / self.cut.band * self.cut.band * self.cut.slice;
        let rows = self.cut.rows_of(slice);
        for tile in 0..self.cut.tiles() {
            let segments = self.segments(slice..slice + 1, tile);
            let total: usize = segments.lengths.iter().map(|&less| usize::from(less) + 1).sum();
            if total != segments.columns.len() {
                return Err("segments do not add up to the entries of their slice");
            }
            if !segments.rows.is_sorted_by(|a, b| a < b) {
                return Err("rows do not ascend in a slice");
            }
            let known = |&row: &u16| rows.contains(&(first + usize::from(row)));
            if !segments.rows.iter().all(known) {
                return Err("a segment of a row outside its slice");
            }
            let width = self.cut.tile.min(self.cut.columns - tile * self.cut.tile);
            // The largest column, so that the compiler may compare many at a time.
            let largest = segments.columns.iter().fold(0, |most, &column| most.max(column));
            if !segments.columns.is_empty() && usize::from(largest) >= width {
                return Err("a column outside its tile");
            }
        }
        Ok(())
    }
}

impl<V> Tiles<V> {
    /// How rows and columns are cut.
    pub fn cut(&self) -> &Cut {
        &self.cut
    }

    /// The arrays.
    pub fn parts(&self) -> &Parts<V> {
        &self.parts
    }

    /// Stored entries.
    pub fn entries(&self) -> usize {
        self.parts.columns.len()
    }

    /// Entries of slices of one band in a tile.
    ///
    /// Panics if the slices are not of one band, or do not exist.
    pub fn segments(&self, slices: std::ops::Range<usize>, tile: usize) -> Segments<'_, V> {
        let (from, to) = self.bounds(slices, tile);
        Segments {
            rows: &self.parts.rows[from.segment..to.segment],
            lengths: &self.parts.lengths[from.segment..to.segment],
            columns: &self.parts.columns[from.entry..to.entry],
            values: &self.parts.values[from.entry..to.entry],
        }
    }

    /// Where the slices of one band begin and end in a tile.
    pub fn bounds(&self, slices: std::ops::Range<usize>, tile: usize) -> (Start, Start) {
        debug_assert!(!slices.is_empty() && tile < self.cut.tiles());
        debug_assert_eq!(slices.start / self.cut.band, (slices.end - 1) / self.cut.band);
        let from = self.cut.place(slices.start, tile);
        (self.parts.table[from], self.parts.table[from + slices.len()])
    }
}

fn check_cut(cut: &Cut) -> Result<(), &'static str> {
    if !(cut.tile.is_power_of_two() && cut.tile <= TILE_MAX) {
        return Err("the width of tiles is no power of two of at most 65,536");
    }
    if !(cut.slice.is_power_of_two() && cut.slice <= BAND_MAX) {
        return Err("the rows of slices are no power of two of at most 65,536");
    }
    if cut.band == 0 || cut.band > BAND_MAX / cut.slice {
        return Err("bands have no rows, or more than 65,536");
    }
    Ok(())
}
