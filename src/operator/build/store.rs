//! Which way the final arrays are filled, and how they keep values, as far as is known.

use std::sync::Arc;

use super::counts::Starts;
use super::{Append, Changed, Piece, RowCounts, Scatter};
use crate::operator::keep::Keep;
use crate::operator::settle::{Refused, Rules, Settled, Unsettled};

/// How entries come.
pub enum Order {
    /// Any; so many in each row.
    Counted(Starts),
    /// Row by row, so many in all; the counts grow while pieces are made.
    ByRow(Arc<RowCounts>, usize),
}

/// Fills the final arrays from pieces; values are kept as narrow as those so far allow.
///
/// Memory: 4 bytes and a value an entry, 8 bytes a row. Where the first value that f32 cannot hold
/// comes late, both ways of keeping values exist for a moment: 16 bytes an entry.
pub struct Store {
    columns: usize,
    /// f32 whatever the values.
    rounded: bool,
    state: State,
}

enum State {
    Waiting(Option<Order>),
    Pattern(Filler<()>),
    Single(Filler<f32>),
    Double(Filler<f64>),
}

enum Filler<V> {
    Scatter(Scatter<V>),
    Append(Append<V>),
}

impl<V: Keep> Filler<V> {
    fn new(order: Order, columns: usize) -> Self {
        match order {
            Order::Counted(starts) => Self::Scatter(Scatter::new(starts, columns)),
            Order::ByRow(counts, entries) => Self::Append(Append::new(counts, columns, entries)),
        }
    }

    fn widened(self) -> Filler<V::Wider> {
        match self {
            Self::Scatter(scatter) => Filler::Scatter(scatter.widened()),
            Self::Append(append) => Filler::Append(append.widened()),
        }
    }

    fn put<W: Keep>(&mut self, pieces: &[Piece<W>]) -> Result<(), Changed> {
        match self {
            Self::Scatter(scatter) => scatter.put(pieces),
            Self::Append(append) => append.put(pieces),
        }
    }

    fn finish(self) -> Result<Unsettled<V>, Changed> {
        match self {
            Self::Scatter(scatter) => scatter.finish(),
            Self::Append(append) => append.finish(),
        }
    }
}

impl Store {
    /// Nothing is allocated before the first batch. `rounded`: values are kept as f32.
    pub fn new(order: Order, columns: usize, rounded: bool) -> Self {
        Self { columns, rounded, state: State::Waiting(Some(order)) }
    }

    /// Puts a batch in place, for counted rows sorted by their ranges; `single` if f32 holds each
    /// of its values exactly.
    ///
    /// # Errors
    /// The entries are not those that were counted.
    pub fn put<W: Keep>(&mut self, pieces: &[Piece<W>], single: bool) -> Result<(), Changed> {
        self.prepare::<W>(single);
        match &mut self.state {
            State::Waiting(_) => Err(Changed),
            State::Pattern(filler) => filler.put(pieces),
            State::Single(filler) => filler.put(pieces),
            State::Double(filler) => filler.put(pieces),
        }
    }

    fn prepare<W: Keep>(&mut self, single: bool) {
        let columns = self.columns;
        let narrow = single || self.rounded;
        let state = std::mem::replace(&mut self.state, State::Waiting(None));
        self.state = match state {
            State::Waiting(Some(order)) if W::BYTES == 0 => {
                State::Pattern(Filler::new(order, columns))
            }
            State::Waiting(Some(order)) if narrow => State::Single(Filler::new(order, columns)),
            State::Waiting(Some(order)) => State::Double(Filler::new(order, columns)),
            State::Single(filler) if !narrow => State::Double(filler.widened()),
            as_it_is => as_it_is,
        };
    }

    /// The matrix of all that was put in; `W` as in [`Store::put`].
    ///
    /// # Errors
    /// The entries are not those that were counted; or see [`Unsettled::settle`].
    pub fn finish<W: Keep>(mut self, rules: &Rules) -> Result<Result<Settled, Refused>, Changed> {
        self.prepare::<W>(true);
        Ok(match self.state {
            State::Waiting(_) => return Err(Changed),
            State::Pattern(filler) => filler.finish()?.settle(rules),
            State::Single(filler) => filler.finish()?.settle(rules),
            State::Double(filler) => filler.finish()?.settle(rules),
        })
    }
}
