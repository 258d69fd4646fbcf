//! Which way a pass takes, from counted bytes.
//!
//! In one pass the matrix comes from memory once, but v and s are used by the rows of one slice
//! at a time; in two phases it comes twice, while v serves thousands of rows before it is needed
//! again and s stays with its tile. What a slice or a unit touches is counted on a sample.

use rayon::prelude::*;

use super::rows::StoredRows;
use crate::kernel::pass::UNIT_ROWS;
use crate::kernel::{Tiles, Way};
use crate::operator::rows::each_storage;

/// Slices, and groups of slices as large as a two-phase unit, that are looked at.
const SAMPLES: usize = 16;

/// v and s of this many bytes stay in a core's own caches beside the matrix.
const CACHED: usize = 256 << 10;

/// A matrix of this many bytes stays in the cache that cores share.
const SHARED: u64 = 32 << 20;

/// A line of memory: eight numbers, which are eight unknowns of one lane or one of eight lanes.
const LINE: usize = 64;

/// What a line fetched out of order costs more than one in a stream: nobody fetches it ahead. On a
/// machine whose shared cache others use too, one pass lost to two phases until this was 3.
const JUMP: f64 = 3.0;

/// Lanes for which "many" is counted.
const MANY: usize = 8;

/// The ways for one lane and for many.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Ways {
    /// One lane.
    pub one: Way,
    /// Two lanes or more.
    pub many: Way,
}

impl Ways {
    /// The same for any number of lanes.
    pub fn both(way: Way) -> Self {
        Self { one: way, many: way }
    }

    /// For so many lanes.
    pub fn of(self, lanes: usize) -> Way {
        if lanes == 1 { self.one } else { self.many }
    }

    /// The ways of fewer counted bytes.
    pub fn counted(matrix: &StoredRows) -> Self {
        let cut = matrix.cut();
        let unit = (UNIT_ROWS / cut.slice).max(1);
        let slice = touched(matrix, 1);
        let units = touched(matrix, unit);
        let choose = |lanes: usize, lines: fn(&Touched) -> f64| {
            let n = cut.columns;
            if 16 * n * lanes <= CACHED {
                // Only a matrix that comes from memory every time is worth the smaller units.
                return if matrix.bytes() > SHARED { Way::OnePass } else { Way::TwoPhase };
            }
            let stored = matrix.bytes() as f64;
            let line = JUMP * LINE as f64;
            // v read, s read and written by every slice.
            let one = stored + 3.0 * line * lines(&slice) * cut.slices() as f64;
            // v read by every unit; s read and written once.
            let two = 2.0 * stored
                + line * lines(&units) * cut.slices().div_ceil(unit) as f64
                + (16 * n * lanes) as f64;
            if one <= two { Way::OnePass } else { Way::TwoPhase }
        };
        Self {
            one: choose(1, |touched| touched.lines),
            many: choose(MANY, |touched| touched.columns),
        }
    }
}

/// Means over the sample.
struct Touched {
    /// Different columns.
    columns: f64,
    /// Different groups of eight neighbouring columns.
    lines: f64,
}

/// What `count` neighbouring slices touch, on average over evenly spread samples.
fn touched(matrix: &StoredRows, count: usize) -> Touched {
    let cut = matrix.cut();
    let starts = cut.slices().div_ceil(count);
    let stride = starts.div_ceil(SAMPLES).max(1);
    let counted: Vec<(usize, usize)> = (0..starts.div_ceil(stride))
        .into_par_iter()
        .map(|sample| {
            let start = sample * stride;
            let slices = start * count..((start + 1) * count).min(cut.slices());
            each_storage!(matrix, tiles => different(tiles, slices))
        })
        .collect();
    let mean = |of: fn(&(usize, usize)) -> usize| {
        counted.iter().map(of).sum::<usize>() as f64 / counted.len().max(1) as f64
    };
    Touched { columns: mean(|counts| counts.0), lines: mean(|counts| counts.1) }
}

fn different<V: crate::kernel::Value>(
    tiles: &Tiles<V>,
    slices: std::ops::Range<usize>,
) -> (usize, usize) {
    let cut = tiles.cut();
    let mut seen = vec![0u8; cut.tile.div_ceil(8)];
    let (mut columns, mut lines) = (0, 0);
    for tile in 0..cut.tiles() {
        seen.fill(0);
        for slice in slices.clone() {
            for &column in tiles.segments(slice..slice + 1, tile).columns {
                seen[usize::from(column) / 8] |= 1 << (column % 8);
            }
        }
        columns += seen.iter().map(|bits| bits.count_ones() as usize).sum::<usize>();
        lines += seen.iter().filter(|bits| **bits != 0).count();
    }
    (columns, lines)
}
