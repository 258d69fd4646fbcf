//! Builds compressed rows from entries in any order without ever holding them all a second time.
//!
//! 1. [`RowCounts`]: a first run over the entries counts them per row (any number of threads).
//! 2. [`Scatter`]: a second run puts each entry at its place in the final arrays. Entries come in
//!    batches of [`Piece`]s; each piece is sorted by range of rows, and the ranges are then filled
//!    in parallel, each going through the batch in order, so that file order within a row is kept
//!    for any number of threads.
//! 3. [`crate::operator::settle`]: rows are sorted by column and repeated entries merged.
//!
//! Entries that come row by row need no first run: [`Append`] puts them at the end of what is there.
//! [`Store`] is either, with the storage of values left open until they are seen.
//!
//! Peak memory: the final arrays (12, 8 or 4 bytes an entry and 8 a row) and one batch.

mod append;
mod counts;
mod feed;
mod piece;
mod scatter;
mod store;

use append::Append;
pub use counts::{RowCounts, RunCounter};
pub use feed::Feeder;
pub use piece::{Piece, Ranges};
use scatter::Scatter;
pub use store::{Order, Store};

/// The entries do not match the counts: what was read twice changed in between.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Changed;

#[cfg(test)]
mod tests {
    use super::super::compressed::CompressedRows;
    use super::super::settle::{Duplicates, Rules};
    use super::*;
    use std::sync::Arc;

    use crate::base::random::Stream;

    /// Entries of a random 50×40 matrix with repeats, dense accumulation beside it.
    fn entries(count: usize) -> (Vec<(usize, u32, f64)>, Vec<f64>) {
        let stream = Stream::new(11, count as u64);
        let mut dense = vec![0.0; 50 * 40];
        let list: Vec<_> = (0..count as u64)
            .map(|k| {
                // Squaring crowds the entries into the first rows.
                let row = (stream.uniform(3 * k).powi(2) * 50.0) as usize;
                let column = (stream.uniform(3 * k + 1) * 40.0) as u32;
                (row, column, stream.normal(3 * k + 2))
            })
            .collect();
        for &(row, column, value) in &list {
            dense[row * 40 + column as usize] += value;
        }
        (list, dense)
    }

    fn piece_of(entries: &[(usize, u32, f64)]) -> Piece<f64> {
        let mut piece = Piece::default();
        entries.iter().for_each(|&(row, column, value)| piece.push(row, column, value));
        piece
    }

    fn build(list: &[(usize, u32, f64)]) -> CompressedRows {
        let counts = RowCounts::new(50);
        {
            let mut counter = RunCounter::new(&counts);
            list.iter().for_each(|entry| counter.add(entry.0));
        }
        let mut scatter = Scatter::<f64>::new(counts.into_starts(), 40);
        for batch in list.chunks(97) {
            let pieces: Vec<_> = batch
                .chunks(13)
                .map(|entries| {
                    let mut piece = piece_of(entries);
                    piece.sort(scatter.ranges());
                    piece
                })
                .collect();
            scatter.put(&pieces).unwrap();
        }
        let rules = Rules { duplicates: Duplicates::Sum, ..Rules::default() };
        scatter.finish().unwrap().settle(&rules).unwrap().matrix
    }

    #[test]
    fn scattered_entries_equal_a_dense_accumulation() {
        for count in [0, 1, 7, 500, 5000] {
            let (list, dense) = entries(count);
            let built = build(&list);
            let mut found = vec![0.0; 50 * 40];
            for i in 0..50 {
                built.row(i).entries().for_each(|(j, value)| found[i * 40 + j] = value);
            }
            // Both add in file order, so the sums are the same bits.
            assert_eq!(found, dense);
        }
    }

    #[test]
    fn entries_that_do_not_match_the_counts_are_noticed() {
        let counts = RowCounts::new(2);
        counts.add(0, 1);
        let mut scatter = Scatter::<()>::new(counts.into_starts(), 2);
        let mut piece = Piece::<()>::default();
        piece.push(0, 0, 1.0);
        piece.push(0, 1, 1.0);
        piece.sort(scatter.ranges());
        assert_eq!(scatter.put(&[piece]), Err(Changed));

        let counts = RowCounts::new(2);
        counts.add(1, 1);
        assert_eq!(Scatter::<()>::new(counts.into_starts(), 2).finish().err(), Some(Changed));
    }

    /// Row by row, with the first value that f32 cannot hold in each of three batches.
    #[test]
    fn appended_entries_equal_scattered_ones_however_late_storage_widens() {
        let (mut list, _) = entries(600);
        list.sort_by_key(|entry| entry.0);
        for wide_from in [0, 250, 450, 600] {
            for entry in &mut list[..wide_from] {
                entry.2 = f64::from(entry.2 as f32);
            }
            for by_row in [false, true] {
                let counts = RowCounts::new(50);
                list.iter().for_each(|entry| counts.add(entry.0, 1));
                let (order, ranges) = match by_row {
                    true => (Order::ByRow(Arc::new(counts), 600), None),
                    false => {
                        let starts = counts.into_starts();
                        let ranges = Arc::clone(&starts.ranges);
                        (Order::Counted(starts), Some(ranges))
                    }
                };
                let mut store = Store::new(order, 40, false);
                for batch in list.chunks(200) {
                    let single = batch.iter().all(|entry| f64::from(entry.2 as f32) == entry.2);
                    let mut pieces: Vec<_> = batch.chunks(70).map(piece_of).collect();
                    if let Some(ranges) = &ranges {
                        pieces.iter_mut().for_each(|piece| piece.sort(ranges));
                    }
                    store.put(&pieces, single).unwrap();
                }
                let settled = store.finish::<f64>(&Rules::default()).unwrap().unwrap();
                assert_eq!(settled.matrix, build(&list), "{wide_from} {by_row}");
            }
        }
    }
}
