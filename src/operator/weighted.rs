//! Ã = W A D: the stored matrix with row weights and column scales as vectors beside it.

use std::ops::Range;

use crate::each_storage;
use crate::kernel::{self, Factors};
use crate::operator::{Frame, Operator, Pass, RowWeights, Scratch, StoredRows};

/// Most groups of rows with a partial s of their own: each costs n·k numbers.
const GROUPS_MAX: usize = 8;

/// Entries that a group must hold for each column before its partial s is worth adding up.
const ENTRIES_PER_COLUMN_MIN: usize = 8;

/// W A D over a borrowed matrix, never copied.
pub struct Weighted<'a> {
    matrix: &'a StoredRows,
    weights: &'a RowWeights,
    /// D; `None` means 1. A zero holds its unknown at the start model.
    scales: Option<&'a [f64]>,
    groups: Vec<Range<usize>>,
}

impl<'a> Weighted<'a> {
    /// Panics if `scales` does not hold one value per column.
    pub fn new(matrix: &'a StoredRows, weights: &'a RowWeights, scales: Option<&'a [f64]>) -> Self {
        assert!(scales.is_none_or(|d| d.len() == matrix.columns()), "one scale per column");
        Self { matrix, weights, scales, groups: groups(matrix) }
    }

    /// A, as stored.
    pub fn matrix(&self) -> &'a StoredRows {
        self.matrix
    }

    /// W.
    pub fn weights(&self) -> &'a RowWeights {
        self.weights
    }

    /// D of unknown `j`.
    pub fn scale(&self, j: usize) -> f64 {
        self.scales.map_or(1.0, |d| d[j])
    }

    /// Σᵢ wᵢ² aᵢⱼ² for every column j of the unscaled matrix, with the weights of data set `set`.
    /// One visit of the rows (not a pass: nothing is multiplied with).
    pub fn column_squares(&self, set: usize) -> Vec<f64> {
        let mut squares = vec![0.0; self.matrix.columns()];
        for i in 0..self.matrix.rows() {
            let w = self.weights.at(i, set);
            for (j, a) in self.matrix.row(i).entries() {
                squares[j] += (w * a) * (w * a);
            }
        }
        squares
    }

    fn scale_into(&self, v: &[f64], k: usize, scaled: &mut [f64]) {
        for ((out, v), j) in scaled.chunks_mut(k).zip(v.chunks(k)).zip(0..) {
            let d = self.scale(j);
            for (out, v) in out.iter_mut().zip(v) {
                *out = d * v;
            }
        }
    }
}

/// Contiguous groups of rows with about equal entries. From the matrix alone, so that the order
/// of sums is too.
fn groups(matrix: &StoredRows) -> Vec<Range<usize>> {
    let entries = matrix.entries();
    let wanted = entries / (ENTRIES_PER_COLUMN_MIN * matrix.columns().max(1));
    let count = wanted.clamp(1, GROUPS_MAX);
    let pointers = matrix.pointers();
    let mut groups = Vec::with_capacity(count);
    let mut first = 0;
    for g in 1..=count {
        let target = entries * g / count;
        let last = if g == count {
            matrix.rows()
        } else {
            pointers.partition_point(|&p| p < target).clamp(first, matrix.rows())
        };
        groups.push(first..last);
        first = last;
    }
    groups
}

impl Operator for Weighted<'_> {
    fn rows(&self) -> usize {
        self.matrix.rows()
    }

    fn columns(&self) -> usize {
        self.matrix.columns()
    }

    fn pass(&self, pass: Pass<'_>) {
        let Pass { frame, sets, v, alpha, u, s, squares, scratch, .. } = pass;
        let k = sets.len();
        let n_k = self.columns() * k;
        assert!(v.len() == n_k && s.len() == n_k, "v and s are n×k");
        assert!(u.len() == self.rows() * k, "u is m×k");
        let Scratch { scaled, partial, partial_squares } = scratch;
        let v = if frame == Frame::Step && self.scales.is_some() {
            self.scale_into(v, k, &mut scaled[..n_k]);
            &scaled[..n_k]
        } else {
            v
        };
        let certificate = frame == Frame::Certificate;
        let factors = |i: usize, l: usize| {
            let w = self.weights.at(i, sets[l]);
            if certificate {
                Factors { dot: 1.0, scatter: w * w, square: w }
            } else {
                Factors { dot: w, scatter: w, square: 1.0 }
            }
        };
        let lanes = kernel::Lanes { count: k, v, alpha, u, s, squares, partial, partial_squares };
        each_storage!(self.matrix, a => {
            let rows = kernel::Rows {
                pointers: self.matrix.pointers(),
                columns: a.indices(),
                values: a.data(),
                groups: &self.groups,
            };
            kernel::pass(rows, &factors, lanes);
        });
        if !certificate && let Some(scales) = self.scales {
            for (s, d) in s.chunks_mut(k).zip(scales) {
                s.iter_mut().for_each(|s| *s *= d);
            }
        }
    }

    fn scratch(&self, lanes: usize) -> Scratch {
        let n_k = self.columns() * lanes;
        let groups = if self.groups.len() > 1 { self.groups.len() } else { 0 };
        Scratch {
            scaled: vec![0.0; if self.scales.is_some() { n_k } else { 0 }],
            partial: vec![0.0; groups * n_k],
            partial_squares: vec![0.0; groups * lanes],
        }
    }

    fn scratch_bytes(&self, lanes: usize) -> u64 {
        let groups = if self.groups.len() > 1 { self.groups.len() } else { 0 };
        let scaled = usize::from(self.scales.is_some());
        8 * ((groups + scaled) * self.columns() * lanes + groups * lanes) as u64
    }

    fn bytes_per_pass(&self, lanes: usize) -> u64 {
        let (m, n, k) = (self.rows() as u64, self.columns() as u64, lanes as u64);
        let groups = self.groups.len() as u64;
        let partials = if groups > 1 { 24 * groups * n * k } else { 16 * n * k };
        // A partial s that stays in cache never reaches memory, but which does is the
        // machine's affair; it is counted.
        self.matrix.bytes() + 16 * m * k + 8 * n * k + partials
    }
}
