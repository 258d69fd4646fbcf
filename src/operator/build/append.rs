//! Entries that come row by row: each lands where it stays, and nothing needs to be counted first.

use std::sync::Arc;

use rayon::prelude::*;

use super::{Changed, Piece, RowCounts};
use crate::operator::keep::Keep;
use crate::operator::settle::Unsettled;

/// The final arrays while entries are appended.
pub struct Append<V> {
    columns_total: usize,
    counts: Arc<RowCounts>,
    columns: Vec<u32>,
    values: Vec<V>,
    filled: usize,
}

impl<V: Keep> Append<V> {
    /// The final arrays, zeroed, for so many entries; `counts` holds those of every piece that is
    /// put in.
    pub fn new(counts: Arc<RowCounts>, columns: usize, entries: usize) -> Self {
        let (places, values) = (vec![0; entries], vec![V::default(); entries]);
        Self { columns_total: columns, counts, columns: places, values, filled: 0 }
    }

    /// The same with values that hold more.
    pub fn widened(self) -> Append<V::Wider> {
        let Self { columns_total, counts, columns, values, filled } = self;
        let values = values.par_iter().map(|value| V::Wider::keep(value.number())).collect();
        Append { columns_total, counts, columns, values, filled }
    }

    /// Appends pieces that follow each other in order of rows.
    ///
    /// # Errors
    /// More entries than there is room for.
    pub fn put<W: Keep>(&mut self, pieces: &[Piece<W>]) -> Result<(), Changed> {
        let mut columns = &mut self.columns[self.filled..];
        let mut values = &mut self.values[self.filled..];
        let mut jobs = Vec::with_capacity(pieces.len());
        for piece in pieces {
            let (column_head, tail) = columns.split_at_mut_checked(piece.len()).ok_or(Changed)?;
            columns = tail;
            let (value_head, tail) = values.split_at_mut(piece.len());
            values = tail;
            self.filled += piece.len();
            jobs.push((piece.entries(), column_head, value_head));
        }
        jobs.into_par_iter().for_each(|(entries, columns, values)| {
            for ((entry, column), kept) in entries.iter().zip(columns).zip(values) {
                *column = entry.1;
                *kept = V::keep(entry.2.number());
            }
        });
        Ok(())
    }

    /// The filled arrays, rows not yet sorted.
    ///
    /// # Errors
    /// Fewer entries than there is room for, or other counts than what was put in.
    pub fn finish(self) -> Result<Unsettled<V>, Changed> {
        let counts = Arc::try_unwrap(self.counts).map_err(|_| Changed)?;
        let pointers = counts.into_pointers();
        if self.filled != self.columns.len() || pointers.last() != Some(&self.filled) {
            return Err(Changed);
        }
        Ok(Unsettled {
            columns_total: self.columns_total,
            pointers,
            columns: self.columns,
            values: self.values,
        })
    }
}
