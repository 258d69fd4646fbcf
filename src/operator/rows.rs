//! The stored matrix: tiles of 16-bit columns, with values held as f64, as f32, or not at all.
//!
//! | values | bytes an entry | when |
//! |---|---|---|
//! | f64 | 10 and a little | default |
//! | f32 | 6 and a little | the user asks, or every value is exactly an f32 |
//! | none | 2 and a little | a pattern matrix: every entry is 1 |
//!
//! The little: 4 bytes per row and tile, 4 per row, 8 per column (see [`crate::kernel::tiles`]).
//! Arithmetic is f64 whatever the storage. The matrix is never changed once built: weights, scales
//! and masks are vectors applied in the pass.
//!
//! Rows and columns are numbered as in the file; the inner order of unknowns shows only in the
//! blocks of a pass ([`StoredRows::place_of`]).

use crate::base::Grid;
use crate::kernel::{RowOrder, Tiles, Value, Way};
use crate::operator::compressed::CompressedRows;
use crate::operator::order::{ColumnOrder, OrderedBy};
use crate::operator::tile;
use crate::operator::traffic::Ways;

/// An m×n sparse matrix, immutable.
#[derive(Debug, Clone, PartialEq)]
pub struct StoredRows {
    pub(crate) tiles: AnyTiles,
    pub(crate) order: Orders,
    pub(crate) ways: Ways,
}

/// Tiles for each way of keeping values.
#[derive(Debug, Clone, PartialEq)]
pub(crate) enum AnyTiles {
    Double(Tiles<f64>),
    Single(Tiles<f32>),
    Pattern(Tiles<()>),
}

/// Both permutations; `None` where inner and file order are the same.
#[derive(Debug, Clone, PartialEq, Default)]
pub(crate) struct Orders {
    pub columns: Option<ColumnOrder>,
    pub rows: Option<RowOrder>,
}

/// The same expression for each way of keeping values.
macro_rules! each_storage {
    ($stored:expr, $tiles:ident => $body:expr) => {
        match &$stored.tiles {
            $crate::operator::rows::AnyTiles::Double($tiles) => $body,
            $crate::operator::rows::AnyTiles::Single($tiles) => $body,
            $crate::operator::rows::AnyTiles::Pattern($tiles) => $body,
        }
    };
}
pub(crate) use each_storage;

/// One row's entries.
#[derive(Clone, Copy)]
pub struct Row<'a> {
    matrix: &'a StoredRows,
    inner: usize,
}

impl<'a> Row<'a> {
    /// (column, value) of each stored entry, explicit zeros included; in stored order, which is
    /// the same for rows with entries in the same columns.
    ///
    /// Cost: a search among the rows of a slice in every tile, and the entries.
    pub fn entries(self) -> impl Iterator<Item = (usize, f64)> + 'a {
        let cut = self.matrix.cut();
        let (slice, first) = (self.inner / cut.slice, self.inner / cut.slice / cut.band);
        let row = (self.inner - first * cut.band * cut.slice) as u16;
        (0..cut.tiles()).flat_map(move |tile| {
            let (range, base) = self.matrix.find(slice, tile, row);
            range.map(move |entry| self.matrix.entry(entry, base))
        })
    }
}

impl StoredRows {
    /// Takes compressed rows over, in the order that suits a pass best: along a space-filling
    /// curve if the grid of the unknowns is given, else as counting the tiles advises.
    ///
    /// Memory at the peak: both, 22 bytes an entry in f64 (14 in f32, 6 for a pattern), 4 a row and
    /// tile, and 16 a row and 8 a column; or, before there are tiles, the compressed rows and up to 36
    /// a column or 20 a row.
    pub fn build(matrix: CompressedRows, grid: Option<&Grid>) -> Self {
        tile::build(matrix, grid)
    }

    /// m.
    pub fn rows(&self) -> usize {
        self.cut().rows
    }

    /// n.
    pub fn columns(&self) -> usize {
        self.cut().columns
    }

    /// Stored entries, explicit zeros included.
    pub fn entries(&self) -> usize {
        each_storage!(self, tiles => tiles.entries())
    }

    /// How rows and columns are cut.
    pub fn cut(&self) -> &crate::kernel::tiles::Cut {
        each_storage!(self, tiles => tiles.cut())
    }

    /// Bytes of the arrays that a traversal reads.
    pub fn bytes(&self) -> u64 {
        fn of<V: Value>(tiles: &Tiles<V>) -> u64 {
            let parts = tiles.parts();
            (2 + V::BYTES) * tiles.entries() as u64
                + 4 * parts.rows.len() as u64
                + 16 * parts.table.len() as u64
        }
        let orders = self.order.rows.as_ref().map_or(0, |_| 4 * self.rows() as u64);
        each_storage!(self, tiles => of(tiles)) + orders
    }

    /// Entries of all slices before each slice.
    pub(super) fn entries_before_slices(&self) -> Vec<usize> {
        let cut = self.cut();
        let of = |slice: usize| -> usize {
            each_storage!(self, tiles => {
                let count = |tile| {
                    let (from, to) = tiles.bounds(slice..slice + 1, tile);
                    to.entry - from.entry
                };
                (0..cut.tiles()).map(count).sum()
            })
        };
        let mut before = 0;
        (0..cut.slices())
            .map(|slice| {
                let after = before + of(slice);
                std::mem::replace(&mut before, after)
            })
            .collect()
    }

    /// Word for the way values are kept: `f64`, `f32` or `pattern`.
    pub fn storage_name(&self) -> &'static str {
        match self.tiles {
            AnyTiles::Double(_) => "f64",
            AnyTiles::Single(_) => "f32",
            AnyTiles::Pattern(_) => "pattern",
        }
    }

    /// By what the unknowns are ordered inside.
    pub fn unknowns_by(&self) -> OrderedBy {
        self.order.columns.as_ref().map_or(OrderedBy::File, |order| order.by)
    }

    /// Whether the rows are stored in another order than in the file.
    pub fn rows_are_reordered(&self) -> bool {
        self.order.rows.is_some()
    }

    /// How a pass with so many lanes goes through the matrix: the way of fewer counted bytes,
    /// unless [`StoredRows::go`] says which.
    pub fn way(&self, lanes: usize) -> Way {
        self.ways.of(lanes)
    }

    /// Makes every pass go this way. No result changes.
    pub fn go(&mut self, way: Way) {
        self.ways = Ways::both(way);
    }

    /// Row `i`, borrowed. Panics if `i` ≥ m.
    pub fn row(&self, i: usize) -> Row<'_> {
        assert!(i < self.rows(), "row {i} of {}", self.rows());
        Row { matrix: self, inner: self.inner_of(i) }
    }

    /// Inner row of a file row.
    pub(super) fn inner_of(&self, row: usize) -> usize {
        self.order.rows.as_ref().map_or(row, |rows| rows.inner_of()[row] as usize)
    }

    /// File row of an inner row.
    pub(super) fn row_at(&self, inner: usize) -> usize {
        self.order.rows.as_ref().map_or(inner, |rows| rows.row_at()[inner] as usize)
    }

    /// Where unknown `j` stands in the blocks v and s of a pass. Panics if `j` ≥ n.
    pub fn place_of(&self, j: usize) -> usize {
        self.order.columns.as_ref().map_or(j, |order| order.place_of[j] as usize)
    }

    /// Unknown at a place of v and s: the inverse of [`StoredRows::place_of`].
    pub fn unknown_at(&self, place: usize) -> usize {
        self.order.columns.as_ref().map_or(place, |order| order.unknown_at[place] as usize)
    }

    /// Entries of a row of a band in a tile, and the tile's first column.
    fn find(&self, slice: usize, tile: usize, row: u16) -> (std::ops::Range<usize>, usize) {
        each_storage!(self, tiles => {
            let start = tiles.bounds(slice..slice + 1, tile).0;
            let segments = tiles.segments(slice..slice + 1, tile);
            let range = match segments.rows.binary_search(&row) {
                Err(_) => 0..0,
                Ok(place) => {
                    let before: usize =
                        segments.lengths[..place].iter().map(|&l| usize::from(l) + 1).sum();
                    let first = start.entry + before;
                    first..first + usize::from(segments.lengths[place]) + 1
                }
            };
            (range, tile * tiles.cut().tile)
        })
    }

    fn entry(&self, entry: usize, base: usize) -> (usize, f64) {
        fn of<V: Value>(tiles: &Tiles<V>, entry: usize) -> (usize, f64) {
            let parts = tiles.parts();
            (usize::from(parts.columns[entry]), parts.values[entry].number())
        }
        let (column, value) = each_storage!(self, tiles => of(tiles, entry));
        (self.unknown_at(base + column), value)
    }

    /// Builds from compressed rows; for tests, small systems and sizes known to be right.
    ///
    /// Panics if the arrays are not a valid compressed-row matrix with ascending columns.
    pub fn from_compressed(
        rows: usize,
        columns: usize,
        pointers: Vec<usize>,
        indices: Vec<u32>,
        values: Vec<f64>,
    ) -> Self {
        Self::build(CompressedRows::from_compressed(rows, columns, pointers, indices, values), None)
    }

    /// Builds from a dense row-major array, keeping only non-zeros; for tests and small systems.
    pub fn from_dense(rows: usize, columns: usize, dense: &[f64]) -> Self {
        Self::build(CompressedRows::from_dense(rows, columns, dense), None)
    }
}
