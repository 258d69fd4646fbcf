//! Builds stored rows from entries in any order without ever holding them all a second time.
//!
//! 1. [`RowCounts`]: a first run over the entries counts them per row (any number of threads).
//! 2. [`Scatter`]: a second run puts each entry at its place in the final arrays. Entries come in
//!    batches; each batch is sorted into [`Buckets`] by range of rows, and the ranges are then
//!    filled in parallel, each going through the batch in order, so that file order within a row is
//!    kept for any number of threads.
//! 3. [`crate::operator::settle`]: rows are sorted by column and repeated entries merged.
//!
//! Peak memory: the final arrays (12, 8 or 4 bytes an entry and 8 a row) and one batch.

use std::sync::Arc;
use std::sync::atomic::{AtomicUsize, Ordering};

use rayon::prelude::*;

use super::keep::Keep;
use super::settle::Unsettled;

/// Ranges of rows that are filled in parallel. More than any machine has use for; the result does
/// not depend on it.
const RANGES: usize = 64;

/// Entries per row, counted by any number of threads at once.
pub struct RowCounts {
    /// Row i's count lies at place i + 1; place 0 stays 0.
    counts: Vec<AtomicUsize>,
}

impl RowCounts {
    /// No entries yet in any of `rows` rows: 8 bytes a row.
    pub fn new(rows: usize) -> Self {
        let zeros = vec![0usize; rows + 1];
        Self { counts: zeros.into_iter().map(AtomicUsize::new).collect() }
    }

    /// Counts `times` entries of a row. Panics if the row is out of range.
    pub fn add(&self, row: usize, times: usize) {
        self.counts[row + 1].fetch_add(times, Ordering::Relaxed);
    }

    /// Turns the counts into the place of each row's first entry: row i's at i + 1, and the total.
    fn into_starts(self) -> (Vec<usize>, usize) {
        let mut starts: Vec<usize> = self.counts.into_iter().map(AtomicUsize::into_inner).collect();
        let mut total = 0;
        for start in &mut starts[1..] {
            total += std::mem::replace(start, total);
        }
        (starts, total)
    }
}

/// Counts entries of one thread, adding runs of the same row at once: files sorted by row then
/// cost one atomic addition a row.
pub struct RunCounter<'a> {
    counts: &'a RowCounts,
    row: usize,
    times: usize,
}

impl<'a> RunCounter<'a> {
    /// Counts into `counts`; what is pending is added when the counter is dropped.
    pub fn new(counts: &'a RowCounts) -> Self {
        Self { counts, row: 0, times: 0 }
    }

    /// Counts one entry. Panics, then or later, if the row is out of range.
    #[inline]
    pub fn add(&mut self, row: usize) {
        if row != self.row {
            self.flush();
            self.row = row;
        }
        self.times += 1;
    }

    fn flush(&mut self) {
        if self.times > 0 {
            self.counts.add(self.row, self.times);
            self.times = 0;
        }
    }
}

impl Drop for RunCounter<'_> {
    fn drop(&mut self) {
        self.flush();
    }
}

/// The entries do not match the counts: what was read twice changed in between.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Changed;

/// The final arrays while they are being filled.
pub struct Scatter<V> {
    columns_total: usize,
    /// Place 0 is 0; place i + 1 is where row i's next entry goes, so that it is the row's end
    /// once all are in.
    next: Vec<usize>,
    /// (first row, first entry) of each range, and one past the last.
    cuts: Vec<(usize, usize)>,
    columns: Vec<u32>,
    values: Vec<V>,
    filled: usize,
}

/// One piece of a batch, sorted by range of rows.
pub struct Buckets<V> {
    /// First row of each range, and one past the last.
    first_rows: Arc<[usize]>,
    /// Range of the entry before: entries near each other are mostly in one.
    range: usize,
    ranges: Vec<Bucket<V>>,
}

struct Bucket<V> {
    /// (row, column), in order of arrival.
    places: Vec<(u32, u32)>,
    values: Vec<V>,
}

impl<V: Keep> Buckets<V> {
    /// Empty buckets for the ranges of [`Scatter::first_rows`].
    pub fn new(first_rows: &Arc<[usize]>) -> Self {
        Self {
            first_rows: Arc::clone(first_rows),
            range: 0,
            ranges: (1..first_rows.len())
                .map(|_| Bucket { places: Vec::new(), values: Vec::new() })
                .collect(),
        }
    }

    /// Adds an entry. Panics if the row is out of range or beyond u32.
    #[inline]
    pub fn push(&mut self, row: usize, column: u32, value: f64) {
        let here = self.first_rows[self.range]..self.first_rows[self.range + 1];
        if !here.contains(&row) {
            self.range = self.first_rows.partition_point(|&first| first <= row) - 1;
        }
        let bucket = &mut self.ranges[self.range];
        let row = u32::try_from(row).expect("rows are numbered in 32 bits");
        bucket.places.push((row, column));
        bucket.values.push(V::keep(value));
    }
}

impl<V: Keep> Scatter<V> {
    /// The final arrays for what was counted, zeroed; 4 bytes and a value an entry, 8 bytes a row.
    pub fn new(counts: RowCounts, columns: usize) -> Self {
        let (next, total) = counts.into_starts();
        let cuts = cut_rows(&next, total);
        Self {
            columns_total: columns,
            next,
            cuts,
            columns: vec![0; total],
            values: vec![V::default(); total],
            filled: 0,
        }
    }

    /// First row of each range that is filled on its own, and one past the last row.
    pub fn first_rows(&self) -> Arc<[usize]> {
        self.cuts.iter().map(|cut| cut.0).collect()
    }

    /// Puts a batch in place; pieces are taken in order.
    ///
    /// # Errors
    /// More entries in a range of rows than were counted.
    pub fn put(&mut self, pieces: &[Buckets<V>]) -> Result<(), Changed> {
        let (mut next, mut columns, mut values) =
            (&mut self.next[1..], self.columns.as_mut_slice(), self.values.as_mut_slice());
        let mut jobs = Vec::with_capacity(self.cuts.len());
        for (range, pair) in self.cuts.windows(2).enumerate() {
            let (rows, entries) = (pair[1].0 - pair[0].0, pair[1].1 - pair[0].1);
            let (head, tail) = next.split_at_mut(rows);
            next = tail;
            let (column_head, tail) = columns.split_at_mut(entries);
            columns = tail;
            let (value_head, tail) = values.split_at_mut(entries);
            values = tail;
            jobs.push((range, pair[0], head, column_head, value_head));
        }
        self.filled += jobs
            .into_par_iter()
            .map(|(range, first, next, columns, values)| {
                let mut count = 0;
                for bucket in pieces.iter().map(|piece| &piece.ranges[range]) {
                    count += bucket.places.len();
                    for (&(row, column), &value) in bucket.places.iter().zip(&bucket.values) {
                        let place = &mut next[row as usize - first.0];
                        let at = *place - first.1;
                        *columns.get_mut(at).ok_or(Changed)? = column;
                        values[at] = value;
                        *place += 1;
                    }
                }
                Ok(count)
            })
            .collect::<Result<Vec<usize>, Changed>>()?
            .into_iter()
            .sum::<usize>();
        Ok(())
    }

    /// The filled arrays, rows not yet sorted.
    ///
    /// # Errors
    /// Fewer entries than were counted.
    pub fn finish(self) -> Result<Unsettled<V>, Changed> {
        let whole = self.filled == self.columns.len()
            && self.next.is_sorted()
            && self.next.last() == Some(&self.filled);
        if !whole {
            return Err(Changed);
        }
        Ok(Unsettled {
            columns_total: self.columns_total,
            pointers: self.next,
            columns: self.columns,
            values: self.values,
        })
    }
}

/// Entries handed to the ranges at once by a [`Feeder`].
const FEED: usize = 1 << 18;

/// Fills a [`Scatter`] with entries that come one after another.
pub struct Feeder<V> {
    scatter: Scatter<V>,
    first_rows: Arc<[usize]>,
    held: Buckets<V>,
    count: usize,
}

impl<V: Keep> Feeder<V> {
    /// As [`Scatter::new`], with an empty batch.
    pub fn new(counts: RowCounts, columns: usize) -> Self {
        let scatter = Scatter::new(counts, columns);
        let first_rows = scatter.first_rows();
        let held = Buckets::new(&first_rows);
        Self { scatter, first_rows, held, count: 0 }
    }

    /// Adds an entry; as [`Buckets::push`].
    ///
    /// # Errors
    /// As [`Scatter::put`].
    pub fn push(&mut self, row: usize, column: u32, value: f64) -> Result<(), Changed> {
        self.held.push(row, column, value);
        self.count += 1;
        if self.count == FEED { self.flush() } else { Ok(()) }
    }

    fn flush(&mut self) -> Result<(), Changed> {
        self.count = 0;
        let full = std::mem::replace(&mut self.held, Buckets::new(&self.first_rows));
        self.scatter.put(&[full])
    }

    /// As [`Scatter::finish`].
    ///
    /// # Errors
    /// As [`Scatter::put`] and [`Scatter::finish`].
    pub fn finish(mut self) -> Result<Unsettled<V>, Changed> {
        self.flush()?;
        self.scatter.finish()
    }
}

/// Cuts the rows into ranges of about as many entries each; `starts` as in [`Scatter`].
fn cut_rows(starts: &[usize], total: usize) -> Vec<(usize, usize)> {
    let rows = starts.len() - 1;
    let mut cuts = vec![(0, 0)];
    for range in 1..RANGES {
        // Rows that begin before the range's share of entries belong to the ranges before it.
        let share = total / RANGES * range;
        let row = starts[1..].partition_point(|&start| start < share);
        if row > cuts[cuts.len() - 1].0 && row < rows {
            cuts.push((row, starts[row + 1]));
        }
    }
    cuts.push((rows, total));
    cuts
}

#[cfg(test)]
mod tests {
    use super::super::compressed::CompressedRows;
    use super::super::settle::{Duplicates, Rules};
    use super::*;
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

    fn build(list: &[(usize, u32, f64)]) -> CompressedRows {
        let counts = RowCounts::new(50);
        {
            let mut counter = RunCounter::new(&counts);
            list.iter().for_each(|entry| counter.add(entry.0));
        }
        let mut scatter = Scatter::<f64>::new(counts, 40);
        let first_rows = scatter.first_rows();
        for batch in list.chunks(97) {
            let pieces: Vec<_> = batch
                .chunks(13)
                .map(|piece| {
                    let mut buckets = Buckets::new(&first_rows);
                    piece.iter().for_each(|&(row, column, value)| buckets.push(row, column, value));
                    buckets
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
        let mut scatter = Scatter::<()>::new(counts, 2);
        let mut buckets = Buckets::new(&scatter.first_rows());
        buckets.push(0, 0, 1.0);
        buckets.push(0, 1, 1.0);
        assert_eq!(scatter.put(&[buckets]), Err(Changed));

        let counts = RowCounts::new(2);
        counts.add(1, 1);
        assert_eq!(Scatter::<()>::new(counts, 2).finish().err(), Some(Changed));
    }
}
