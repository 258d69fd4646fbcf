//! The pass over compressed rows, in safe code.
//!
//! Bytes moved from memory in one pass with k lanes: the matrix once (4 to 12 bytes an entry),
//! u read and written (16·m·k), and for each of G groups its partial s (zeroed, filled, added:
//! 24·n·k each); v and the partial s are expected to stay in cache.
//!
//! Order of sums: within a lane it depends on the matrix alone – entries in row order, rows in
//! order within a group, groups in order. Neither threads nor the number of lanes change a bit.

use std::ops::Range;

use rayon::prelude::*;

use crate::base::sums::{PARALLEL_MIN, PIECE};
use crate::kernel::Value;

/// Rows whose squares are added to one subtotal, so that long sums lose few digits.
const SUBTOTAL_ROWS: usize = 256;

/// Compressed rows, borrowed.
pub struct Rows<'a, V> {
    /// Place of each row's first entry, and one past the last: length m + 1.
    pub pointers: &'a [usize],
    /// Column of each entry, below n.
    pub columns: &'a [u32],
    /// One per entry.
    pub values: &'a [V],
    /// Contiguous rows that share one partial s; together all rows, in order.
    pub groups: &'a [Range<usize>],
}

impl<V> Clone for Rows<'_, V> {
    fn clone(&self) -> Self {
        *self
    }
}
impl<V> Copy for Rows<'_, V> {}

/// The factors f (dot), h (scatter) and g (squares) of a row in a lane.
#[derive(Clone, Copy)]
pub struct Factors {
    /// f: multiplies aᵢᵀv.
    pub dot: f64,
    /// h: multiplies u before it goes into s.
    pub scatter: f64,
    /// g: multiplies u before it is squared.
    pub square: f64,
}

/// The blocks of one pass: row-major, lanes contiguous.
pub struct Lanes<'a> {
    /// k.
    pub count: usize,
    /// n×k.
    pub v: &'a [f64],
    /// k.
    pub alpha: &'a [f64],
    /// m×k.
    pub u: &'a mut [f64],
    /// n×k; overwritten.
    pub s: &'a mut [f64],
    /// k; overwritten.
    pub squares: &'a mut [f64],
    /// Room for the groups' partial s, at least groups×n×k unless there is one group.
    pub partial: &'a mut [f64],
    /// Room for the groups' partial squares, at least groups×k.
    pub partial_squares: &'a mut [f64],
}

/// One traversal. `factors(row, lane)` gives f, h, g.
///
/// Panics if a block is shorter than its documented shape.
pub fn pass<V: Value>(
    rows: Rows<'_, V>,
    factors: &(impl Fn(usize, usize) -> Factors + Sync),
    lanes: Lanes<'_>,
) {
    let k = lanes.count;
    let groups = rows.groups.len();
    let n_k = lanes.s.len();
    let task = Task { rows, factors, k, v: lanes.v, alpha: lanes.alpha };
    if groups == 1 {
        task.group(0, lanes.u, lanes.s, lanes.squares);
        return;
    }
    let partial = &mut lanes.partial[..groups * n_k];
    let partial_squares = &mut lanes.partial_squares[..groups * k];
    task.split(0..groups, lanes.u, partial, partial_squares);
    add_groups(partial, lanes.s);
    for (l, square) in lanes.squares.iter_mut().enumerate() {
        *square = (0..groups).map(|g| partial_squares[g * k + l]).sum();
    }
}

/// s ← partial₀ + partial₁ + …, in group order for every element.
fn add_groups(partial: &[f64], s: &mut [f64]) {
    let n_k = s.len();
    let add = |(piece, s): (usize, &mut [f64])| {
        let from = piece * PIECE;
        s.copy_from_slice(&partial[from..from + s.len()]);
        for group in partial.chunks(n_k).skip(1) {
            for (s, p) in s.iter_mut().zip(&group[from..]) {
                *s += p;
            }
        }
    };
    if n_k < PARALLEL_MIN {
        s.chunks_mut(PIECE).enumerate().for_each(add);
    } else {
        s.par_chunks_mut(PIECE).enumerate().for_each(add);
    }
}

struct Task<'a, V, F> {
    rows: Rows<'a, V>,
    factors: &'a F,
    k: usize,
    v: &'a [f64],
    alpha: &'a [f64],
}

impl<V: Value, F: Fn(usize, usize) -> Factors + Sync> Task<'_, V, F> {
    /// Halves the groups until one is left; no list of tasks, so no allocation in a pass.
    fn split(&self, groups: Range<usize>, u: &mut [f64], partial: &mut [f64], squares: &mut [f64]) {
        let count = groups.len();
        if count == 1 {
            return self.group(groups.start, u, partial, squares);
        }
        let middle = groups.start + count / 2;
        let first_row = self.rows.groups[groups.start].start;
        let rows_before = self.rows.groups[middle].start - first_row;
        let (u_low, u_high) = u.split_at_mut(rows_before * self.k);
        let (p_low, p_high) = partial.split_at_mut(partial.len() / count * (count / 2));
        let (q_low, q_high) = squares.split_at_mut(self.k * (count / 2));
        rayon::join(
            || self.split(groups.start..middle, u_low, p_low, q_low),
            || self.split(middle..groups.end, u_high, p_high, q_high),
        );
    }

    fn group(&self, group: usize, u: &mut [f64], s: &mut [f64], squares: &mut [f64]) {
        s.fill(0.0);
        squares.fill(0.0);
        let range = self.rows.groups[group].clone();
        let mut lane = 0;
        // A row is met once per sub-block of lanes while it is in L1; powers of two cover any k.
        while lane < self.k {
            lane += match self.k - lane {
                16.. => self.block::<16>(lane, range.clone(), u, s, squares),
                8..16 => self.block::<8>(lane, range.clone(), u, s, squares),
                4..8 => self.block::<4>(lane, range.clone(), u, s, squares),
                2..4 => self.block::<2>(lane, range.clone(), u, s, squares),
                _ => self.block::<1>(lane, range.clone(), u, s, squares),
            };
        }
    }

    /// Lanes `first .. first + K` of all rows of a group; returns K.
    fn block<const K: usize>(
        &self,
        first: usize,
        range: Range<usize>,
        u: &mut [f64],
        s: &mut [f64],
        squares: &mut [f64],
    ) -> usize {
        let alpha: [f64; K] = std::array::from_fn(|l| self.alpha[first + l]);
        let mut total = [0.0f64; K];
        let mut subtotal = [0.0f64; K];
        for (place, i) in range.clone().enumerate() {
            let u_row = &mut u[place * self.k + first..][..K];
            self.row::<K>(i, first, &alpha, u_row, s, &mut subtotal);
            if (place + 1) % SUBTOTAL_ROWS == 0 || i + 1 == range.end {
                for l in 0..K {
                    total[l] += subtotal[l];
                    subtotal[l] = 0.0;
                }
            }
        }
        squares[first..first + K].copy_from_slice(&total);
        K
    }

    #[inline(always)]
    fn row<const K: usize>(
        &self,
        i: usize,
        first: usize,
        alpha: &[f64; K],
        u_row: &mut [f64],
        s: &mut [f64],
        squares: &mut [f64; K],
    ) {
        let entries = self.rows.pointers[i]..self.rows.pointers[i + 1];
        let columns = &self.rows.columns[entries.clone()];
        let values = &self.rows.values[entries];
        let mut dots = [0.0f64; K];
        for (&column, &value) in columns.iter().zip(values) {
            let v = &self.v[column as usize * self.k + first..][..K];
            let a = value.number();
            for l in 0..K {
                dots[l] += a * v[l];
            }
        }
        let mut push = [0.0f64; K];
        for l in 0..K {
            let f = (self.factors)(i, first + l);
            let new = f.dot * dots[l] - alpha[l] * u_row[l];
            u_row[l] = new;
            push[l] = f.scatter * new;
            let weighted = f.square * new;
            squares[l] += weighted * weighted;
        }
        for (&column, &value) in columns.iter().zip(values) {
            let s = &mut s[column as usize * self.k + first..][..K];
            let a = value.number();
            for l in 0..K {
                s[l] += push[l] * a;
            }
        }
    }
}
