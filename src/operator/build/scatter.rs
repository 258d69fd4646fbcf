//! Entries of any order, whose number in each row is known.

use std::sync::Arc;

use rayon::prelude::*;

use super::counts::Starts;
use super::{Changed, Piece, Ranges};
use crate::operator::keep::Keep;
use crate::operator::settle::Unsettled;

/// The final arrays while they are being filled.
pub struct Scatter<V> {
    columns_total: usize,
    /// Place 0 is 0; place i + 1 is where row i's next entry goes, so that it is the row's end
    /// once all are in.
    next: Vec<usize>,
    ranges: Arc<Ranges>,
    columns: Vec<u32>,
    values: Vec<V>,
    filled: usize,
}

impl<V: Keep> Scatter<V> {
    /// The final arrays for what was counted, zeroed; 4 bytes and a value an entry, 8 bytes a row.
    pub fn new(starts: Starts, columns: usize) -> Self {
        let Starts { next, ranges, total } = starts;
        Self {
            columns_total: columns,
            next,
            ranges,
            columns: vec![0; total],
            values: vec![V::default(); total],
            filled: 0,
        }
    }

    /// What pieces are to be sorted by.
    pub fn ranges(&self) -> &Ranges {
        &self.ranges
    }

    /// The same with values that hold more.
    pub fn widened(self) -> Scatter<V::Wider> {
        let Self { columns_total, next, ranges, columns, values, filled } = self;
        let values = values.par_iter().map(|value| V::Wider::keep(value.number())).collect();
        Scatter { columns_total, next, ranges, columns, values, filled }
    }

    /// Puts a batch of sorted pieces in place; they are taken in order.
    ///
    /// # Errors
    /// More entries in a range of rows than were counted.
    pub fn put<W: Keep>(&mut self, pieces: &[Piece<W>]) -> Result<(), Changed> {
        let (mut next, mut columns, mut values) =
            (&mut self.next[1..], self.columns.as_mut_slice(), self.values.as_mut_slice());
        let mut jobs = Vec::with_capacity(self.ranges.cuts.len());
        for (range, pair) in self.ranges.cuts.windows(2).enumerate() {
            let (rows, entries) = (pair[1].0 - pair[0].0, pair[1].1 - pair[0].1);
            let (head, tail) = next.split_at_mut(rows);
            next = tail;
            let (column_head, tail) = columns.split_at_mut(entries);
            columns = tail;
            let (value_head, tail) = values.split_at_mut(entries);
            values = tail;
            let filling =
                Filling { first: pair[0], next: head, columns: column_head, values: value_head };
            jobs.push((range, filling));
        }
        self.filled += jobs
            .into_par_iter()
            .map(|(range, mut filling)| {
                pieces.iter().try_fold(0, |count, piece| {
                    let entries = piece.of_range(range);
                    filling.take(entries)?;
                    Ok(count + entries.len())
                })
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

/// One range of rows in the final arrays.
struct Filling<'a, V> {
    /// First row and first entry.
    first: (usize, usize),
    next: &'a mut [usize],
    columns: &'a mut [u32],
    values: &'a mut [V],
}

impl<V: Keep> Filling<'_, V> {
    fn take<W: Keep>(&mut self, entries: &[(u32, u32, W)]) -> Result<(), Changed> {
        for &(row, column, value) in entries {
            let place = &mut self.next[row as usize - self.first.0];
            let at = *place - self.first.1;
            *self.columns.get_mut(at).ok_or(Changed)? = column;
            self.values[at] = V::keep(value.number());
            *place += 1;
        }
        Ok(())
    }
}
