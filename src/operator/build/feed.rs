//! Entries that come one after another.

use super::{Changed, Piece, RowCounts, Scatter};
use crate::operator::keep::Keep;
use crate::operator::settle::Unsettled;

/// Entries handed to the ranges at once by a [`Feeder`].
const FEED: usize = 1 << 18;

/// Fills a [`Scatter`] with entries that come one after another.
pub struct Feeder<V> {
    scatter: Scatter<V>,
    held: Piece<V>,
}

impl<V: Keep> Feeder<V> {
    /// As [`Scatter::new`], with an empty batch.
    pub fn new(counts: RowCounts, columns: usize) -> Self {
        Self { scatter: Scatter::new(counts.into_starts(), columns), held: Piece::default() }
    }

    /// Adds an entry; as [`Piece::push`].
    ///
    /// # Errors
    /// As [`Scatter::put`].
    pub fn push(&mut self, row: usize, column: u32, value: f64) -> Result<(), Changed> {
        self.held.push(row, column, value);
        if self.held.len() == FEED { self.flush() } else { Ok(()) }
    }

    fn flush(&mut self) -> Result<(), Changed> {
        let mut full = std::mem::take(&mut self.held);
        full.sort(self.scatter.ranges());
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
