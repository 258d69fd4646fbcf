//! How many entries each row has.

use std::sync::Arc;
use std::sync::atomic::{AtomicUsize, Ordering};

use super::Ranges;

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

    /// The place of each row's first entry, and one past the last; in all m + 1.
    pub fn into_pointers(self) -> Vec<usize> {
        let mut pointers: Vec<usize> =
            self.counts.into_iter().map(AtomicUsize::into_inner).collect();
        let mut total = 0;
        for pointer in &mut pointers {
            total += *pointer;
            *pointer = total;
        }
        pointers
    }

    /// Turns the counts into the place of each row's first entry.
    pub fn into_starts(self) -> Starts {
        let mut next: Vec<usize> = self.counts.into_iter().map(AtomicUsize::into_inner).collect();
        let mut total = 0;
        for start in &mut next[1..] {
            total += std::mem::replace(start, total);
        }
        let ranges = Arc::new(Ranges::new(&next, total));
        Starts { next, ranges, total }
    }
}

/// Where the entries of each row begin.
pub struct Starts {
    /// Place 0 is 0; place i + 1 is that of row i's first entry.
    pub next: Vec<usize>,
    /// The rows in ranges of about as many entries each.
    pub ranges: Arc<Ranges>,
    /// Entries of all rows.
    pub total: usize,
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
