//! Entries on their way to their rows.

use crate::operator::keep::Keep;

/// Ranges of rows that are filled in parallel, at most. More than most machines have use for; the
/// result does not depend on it.
const RANGES: usize = 64;

/// Rows are cut at multiples of a power of two, of which there are at most about this many, so
/// that the range of a row is one look into a table that stays in cache.
const BLOCKS: usize = 4096;

/// The rows cut into ranges of about as many entries each.
#[derive(Debug)]
pub struct Ranges {
    /// (first row, first entry) of each range, and one past the last.
    pub cuts: Vec<(usize, usize)>,
    /// Range of each block of 2^shift rows.
    range_of: Vec<u8>,
    shift: u32,
}

impl Ranges {
    /// `starts` holds the place of row i's first entry at i + 1.
    pub fn new(starts: &[usize], total: usize) -> Self {
        let rows = starts.len() - 1;
        let shift = (rows / BLOCKS).checked_ilog2().map_or(0, |log| log + 1);
        let mut cuts = vec![(0, 0)];
        let mut range_of = Vec::with_capacity((rows >> shift) + 1);
        for row in (0..rows).step_by(1 << shift) {
            // A range takes blocks until it has its share of the entries.
            let share = (total / RANGES + 1) * cuts.len();
            if starts[row + 1] >= share && cuts.len() < RANGES {
                cuts.push((row, starts[row + 1]));
            }
            range_of.push((cuts.len() - 1) as u8);
        }
        cuts.push((rows, total));
        Self { cuts, range_of, shift }
    }

    fn count(&self) -> usize {
        self.cuts.len() - 1
    }

    #[inline(always)]
    fn of(&self, row: u32) -> usize {
        usize::from(self.range_of[row as usize >> self.shift])
    }
}

/// Some of the entries, in order of arrival until they are sorted by range.
pub struct Piece<V> {
    entries: Vec<(u32, u32, V)>,
    /// Once sorted: where the entries of each range begin, and the end.
    cuts: Vec<usize>,
}

impl<V> Default for Piece<V> {
    fn default() -> Self {
        Self { entries: Vec::new(), cuts: Vec::new() }
    }
}

impl<V: Keep> Piece<V> {
    /// Adds an entry. Panics if the row is beyond u32.
    #[inline(always)]
    pub fn push(&mut self, row: usize, column: u32, value: f64) {
        let row = u32::try_from(row).expect("rows are numbered in 32 bits");
        self.entries.push((row, column, V::keep(value)));
    }

    /// Entries held.
    pub fn len(&self) -> usize {
        self.entries.len()
    }

    /// (row, column, value), in the order they lie in.
    pub fn entries(&self) -> &[(u32, u32, V)] {
        &self.entries
    }

    /// Entries of one range, in order of arrival. Panics unless sorted.
    pub fn of_range(&self, range: usize) -> &[(u32, u32, V)] {
        &self.entries[self.cuts[range]..self.cuts[range + 1]]
    }

    /// Brings the entries of each range together, keeping their order.
    ///
    /// Panics if a row is out of range.
    pub fn sort(&mut self, ranges: &Ranges) {
        let mut places = vec![0; ranges.count() + 1];
        for entry in &self.entries {
            places[ranges.of(entry.0) + 1] += 1;
        }
        for range in 0..ranges.count() {
            places[range + 1] += places[range];
        }
        self.cuts.clone_from(&places);
        let mut sorted = vec![(0, 0, V::default()); self.entries.len()];
        for entry in &self.entries {
            let place = &mut places[ranges.of(entry.0)];
            sorted[*place] = *entry;
            *place += 1;
        }
        self.entries = sorted;
    }
}
