//! In which order rows and columns are stored, from the matrix and the grid alone.
//!
//! The cost of an order is counted, never timed: how many *segments* (what a row has in a tile)
//! the rows of a sample fall into. Short segments cost time and memory.

use rayon::prelude::*;

use crate::base::Grid;
use crate::kernel::RowOrder;
use crate::kernel::tiles::{BAND_MAX, TILE_MAX};
use crate::operator::compressed::CompressedRows;

/// Narrowest tile: 4096 unknowns are 32 KiB a lane, and 256 KiB for eight lanes, which second
/// level caches hold.
const TILE_MIN: usize = 4096;

/// What a segment costs beside its entries, in entries: its row and length, and the end of a loop.
/// Estimated: some thirty cycles beside two or three an entry.
const SEGMENT_COST: f64 = 12.0;

/// What an entry costs more in a tile of 2, 4, 8, 16 times [`TILE_MIN`], in entries: such tiles
/// leave the first, then the second level of caches.
const WIDER_COST: [f64; 5] = [0.0, 0.1, 0.25, 0.5, 0.8];

/// Rows whose segments are counted.
const SAMPLE_ROWS: usize = 4096;

/// By what the unknowns are ordered in the stored matrix.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize)]
#[serde(rename_all = "lowercase")]
pub enum OrderedBy {
    /// As in the file.
    File,
    /// Along a space-filling curve through the grid.
    Curve,
    /// Those in most rows first.
    Count,
    /// As the rows first touch them.
    Touch,
}

/// Inner order of unknowns.
#[derive(Debug, Clone, PartialEq)]
pub struct ColumnOrder {
    /// What made it.
    pub by: OrderedBy,
    /// Inner place of each unknown.
    pub place_of: Vec<u32>,
    /// Unknown at each inner place.
    pub unknown_at: Vec<u32>,
}

impl ColumnOrder {
    /// From the unknowns in inner order.
    fn new(by: OrderedBy, unknown_at: Vec<u32>) -> Self {
        let mut place_of = vec![0; unknown_at.len()];
        for (place, &unknown) in (0u32..).zip(&unknown_at) {
            place_of[unknown as usize] = place;
        }
        Self { by, place_of, unknown_at }
    }
}

/// Order of unknowns and width of tiles.
pub struct Columns {
    /// `None`: as they come.
    pub order: Option<ColumnOrder>,
    /// A power of two.
    pub tile: usize,
}

/// The order and width of least counted cost. Candidates: as they come; along a space-filling
/// curve where the grid is known; else by how many entries the columns have, and by where the
/// rows first touch them.
pub fn columns(matrix: &CompressedRows, grid: Option<&Grid>) -> Columns {
    let n = matrix.columns();
    if n <= TILE_MIN {
        return Columns { order: None, tile: TILE_MIN };
    }
    let sample = sample(matrix);
    let natural = widths(matrix, &sample, None);
    let least = natural.iter().copied().fold(f64::INFINITY, f64::min);
    let mut candidates = vec![(None, natural)];
    let mut add = |by: OrderedBy, unknown_at: Vec<u32>| {
        let order = ColumnOrder::new(by, unknown_at);
        let costs = widths(matrix, &sample, Some(&order.place_of));
        candidates.push((Some(order), costs));
    };
    match grid {
        Some(grid) if grid.unknowns() == n => add(OrderedBy::Curve, along_curve(grid)),
        // One segment a row is the least there is: nothing to gain from another order.
        _ if least <= 1.05 * (1.0 + SEGMENT_COST * filled(matrix, &sample)) => {}
        _ => {
            add(OrderedBy::Count, by_count(matrix));
            add(OrderedBy::Touch, by_touch(matrix));
        }
    }
    let mut best = (f64::INFINITY, 0, 0);
    for (place, (_, costs)) in candidates.iter().enumerate() {
        for (doublings, &cost) in costs.iter().enumerate() {
            // An order of its own costs two look-ups per unknown at the border: it has to gain.
            let cost = if place == 0 { cost } else { cost * 1.02 };
            if cost < best.0 {
                best = (cost, place, doublings);
            }
        }
    }
    Columns { order: candidates.swap_remove(best.1).0, tile: TILE_MIN << best.2 }
}

/// Evenly spread rows.
fn sample(matrix: &CompressedRows) -> Vec<usize> {
    let stride = matrix.rows().div_ceil(SAMPLE_ROWS).max(1);
    (0..matrix.rows()).step_by(stride).collect()
}

/// Rows of the sample that have entries, for each of their entries.
fn filled(matrix: &CompressedRows, sample: &[usize]) -> f64 {
    let lengths = || sample.iter().map(|&i| matrix.row(i).columns.len());
    lengths().filter(|&length| length > 0).count() as f64 / lengths().sum::<usize>().max(1) as f64
}

/// Cost per entry at each width, from the segments of a sample of rows.
fn widths(matrix: &CompressedRows, sample: &[usize], place_of: Option<&[u32]>) -> [f64; 5] {
    let counted: Vec<[usize; 6]> = sample
        .par_chunks(64)
        .map(|rows| {
            let mut counts = [0; 6];
            let mut places: Vec<u32> = Vec::new();
            for &i in rows {
                places.clear();
                let columns = matrix.row(i).columns;
                places.extend(columns.iter().map(|&j| place_of.map_or(j, |p| p[j as usize])));
                places.sort_unstable();
                counts[5] += places.len();
                for (doublings, count) in counts[..5].iter_mut().enumerate() {
                    let shift = TILE_MIN.trailing_zeros() as usize + doublings;
                    let changes = places.windows(2).filter(|p| p[0] >> shift != p[1] >> shift);
                    *count += changes.count() + usize::from(!places.is_empty());
                }
            }
            counts
        })
        .collect();
    let sum = |place: usize| counted.iter().map(|counts| counts[place]).sum::<usize>() as f64;
    let entries = sum(5).max(1.0);
    let slices = matrix.rows().div_ceil(BAND_MAX) as f64;
    std::array::from_fn(|doublings| {
        // Where the largest slices still have hardly an entry in a tile, the table weighs too.
        let starts = slices * matrix.columns().div_ceil(TILE_MIN << doublings) as f64;
        let table = starts / matrix.entries().max(1) as f64;
        1.0 + WIDER_COST[doublings] + SEGMENT_COST * (sum(doublings) / entries + table)
    })
}

const _: () = assert!(TILE_MIN << 4 == TILE_MAX);

/// Cells in the order of their interleaved indices: any run of 4096 is a square or a cube, or a few.
/// Source: G. M. Morton, IBM report, 1966.
fn along_curve(grid: &Grid) -> Vec<u32> {
    let axes = grid.order();
    let mut keys: Vec<(u128, u32)> = (0..grid.unknowns())
        .into_par_iter()
        .map(|j| {
            let indices = grid.indices(grid.cell(j));
            let mut key = 0u128;
            for bit in 0..32 {
                for (level, &axis) in axes.iter().enumerate() {
                    let set = (indices[axis] >> bit & 1) as u128;
                    key |= set << (bit * axes.len() + level);
                }
            }
            (key, j as u32)
        })
        .collect();
    keys.par_sort_unstable();
    keys.into_iter().map(|(_, unknown)| unknown).collect()
}

/// Columns with many entries first: where a few columns are in most rows, these share a tile.
fn by_count(matrix: &CompressedRows) -> Vec<u32> {
    let mut counts = vec![0u32; matrix.columns()];
    for &j in matrix.indices() {
        counts[j as usize] = counts[j as usize].saturating_add(1);
    }
    let mut order: Vec<u32> = (0..matrix.columns() as u32).collect();
    order.par_sort_by_key(|&j| std::cmp::Reverse(counts[j as usize]));
    order
}

/// Columns in the order in which the rows first touch them: undoes a shuffle of unknowns where
/// neighbouring rows are still neighbours.
fn by_touch(matrix: &CompressedRows) -> Vec<u32> {
    let mut seen = vec![false; matrix.columns()];
    let mut order = Vec::with_capacity(matrix.columns());
    let mut touch = |j: u32| {
        if !std::mem::replace(&mut seen[j as usize], true) {
            order.push(j);
        }
    };
    matrix.indices().iter().for_each(|&j| touch(j));
    (0..matrix.columns() as u32).for_each(touch);
    order
}

/// The order of rows, or `None` if it is the file's: rows that begin and end in the same
/// tiles lie together, so that a tile in the cache serves many rows.
pub fn rows(matrix: &CompressedRows, place_of: Option<&[u32]>, tile: usize) -> Option<RowOrder> {
    if matrix.columns() <= tile {
        return None;
    }
    let shift = tile.trailing_zeros();
    let tile_of = |j: u32| place_of.map_or(j, |p| p[j as usize]) >> shift;
    let mut keys: Vec<(u64, u32)> = (0..matrix.rows())
        .into_par_iter()
        .map(|i| {
            let columns = matrix.row(i).columns;
            let ends =
                |first: u32, last: u32| u64::from(tile_of(first)) << 32 | u64::from(tile_of(last));
            let key = match columns {
                [] => u64::MAX,
                [first, .., last] => ends(*first, *last),
                [only] => ends(*only, *only),
            };
            (key, i as u32)
        })
        .collect();
    if keys.is_sorted() {
        return None;
    }
    // Rows of the same tiles stay in file order: the number of the row is part of the key.
    keys.par_sort_unstable();
    let row_at = keys.into_iter().map(|(_, row)| row).collect();
    Some(RowOrder::new(row_at).expect("every row has one key"))
}
