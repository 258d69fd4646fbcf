//! One visit of all rows, in parallel, with the same bits for any number of threads.
//!
//! Slices of rows are cut into at most [`GROUPS_MAX`] groups. The cut
//! depends on the matrix and the number of weightings alone. Each group sums its columns in stored
//! order; the groups are added in order.
//!
//! Memory: per row 36 bytes, per column and group 28 + 8·d bytes for d weightings. The number of
//! groups falls until the columns of all groups take less than 12 bytes an entry (the size of the
//! matrix itself), or one group is left.

use std::ops::Range;

use rayon::prelude::*;

use super::spread::Histogram;
use crate::base::random::mix;
use crate::operator::row_visit::Entry;
use crate::operator::{RowWeights, StoredRows};

const GROUPS_MAX: usize = 8;

/// What a visit collects, of one group or of all rows.
pub(super) struct Visit {
    pub rows: RowSums,
    pub columns: ColumnSums,
    pub histogram: Histogram,
    pub explicit_zeros: usize,
    pub nonfinite: usize,
}

/// Per row; entries that are 0 do not count, and neither do those that are not finite.
#[derive(Default)]
pub(super) struct RowSums {
    pub count: Vec<u32>,
    pub sum: Vec<f64>,
    pub absolute: Vec<f64>,
    pub square: Vec<f64>,
    /// Equal for rows with equal entries.
    pub hash: Vec<u64>,
}

/// Per column.
pub(super) struct ColumnSums {
    pub count: Vec<u32>,
    pub absolute: Vec<f64>,
    pub square: Vec<f64>,
    /// Σ aᵢⱼ² wᵢ² for each weighting.
    pub weighted: Vec<Vec<f64>>,
    /// Equal for columns with equal entries: a sum, so that the order of rows is of no matter.
    pub hash: Vec<u64>,
}

/// Number of weightings: one, unless data sets differ.
fn weightings(weights: &RowWeights) -> usize {
    match weights {
        RowWeights::Ones | RowWeights::Shared(_) => 1,
        RowWeights::PerSet(weights) => weights.ncols(),
    }
}

pub(super) fn visit(matrix: &StoredRows, weights: &RowWeights) -> Visit {
    let groups = slice_groups(matrix, weightings(weights));
    let parts: Vec<Visit> =
        groups.into_par_iter().map(|slices| visit_group(matrix, weights, slices)).collect();
    let mut parts = parts.into_iter();
    let mut all = parts.next().expect("at least one group");
    parts.for_each(|part| all.append(part));
    all.rows.put_in_file_order(matrix);
    all
}

fn slice_groups(matrix: &StoredRows, weightings: usize) -> Vec<Range<usize>> {
    let (slices, entries) = (matrix.cut().slices(), matrix.entries());
    let column_bytes = matrix.columns().max(1) * (28 + 8 * weightings);
    let groups = (12 * entries / column_bytes).clamp(1, GROUPS_MAX);
    let cut = |group: usize| slices * group / groups;
    (0..groups).map(|group| cut(group)..cut(group + 1)).collect()
}

fn visit_group(matrix: &StoredRows, weights: &RowWeights, slices: Range<usize>) -> Visit {
    let n = matrix.columns();
    let d = weightings(weights);
    let mut part = Visit {
        rows: RowSums::default(),
        columns: ColumnSums {
            count: vec![0; n],
            absolute: vec![0.0; n],
            square: vec![0.0; n],
            weighted: vec![vec![0.0; n]; d],
            hash: vec![0; n],
        },
        histogram: Histogram::new(),
        explicit_zeros: 0,
        nonfinite: 0,
    };
    let mut squared_weights = vec![0.0; d];
    matrix.each_row(slices, |i, entries| {
        for (set, squared) in squared_weights.iter_mut().enumerate() {
            *squared = weights.at(i, set).powi(2);
        }
        part.add_row(i, entries, &squared_weights);
    });
    part
}

impl RowSums {
    /// From the order of the visit to that of the file.
    fn put_in_file_order(&mut self, matrix: &StoredRows) {
        self.count = matrix.in_file_order(&self.count);
        for list in [&mut self.sum, &mut self.absolute, &mut self.square] {
            *list = matrix.in_file_order(list);
        }
        self.hash = matrix.in_file_order(&self.hash);
    }
}

impl Visit {
    fn add_row(&mut self, i: usize, entries: &[Entry], squared_weights: &[f64]) {
        let (mut count, mut sum, mut absolute, mut square, mut hash) = (0, 0.0, 0.0, 0.0, 0u64);
        let row_key = mix(i as u64);
        for &(j, a) in entries {
            let j = j as usize;
            if a == 0.0 {
                self.explicit_zeros += 1;
                continue;
            }
            if !a.is_finite() {
                self.nonfinite += 1;
                continue;
            }
            let size = a.abs();
            count += 1;
            sum += a;
            absolute += size;
            square += a * a;
            let value_key = mix(a.to_bits());
            hash = hash.wrapping_add(mix(value_key.wrapping_add(j as u64)));
            self.histogram.add(size);
            let columns = &mut self.columns;
            columns.count[j] += 1;
            columns.absolute[j] += size;
            columns.square[j] += a * a;
            columns.hash[j] = columns.hash[j].wrapping_add(mix(value_key ^ row_key));
            for (weighted, squared) in columns.weighted.iter_mut().zip(squared_weights) {
                weighted[j] += a * a * squared;
            }
        }
        self.rows.count.push(count);
        self.rows.sum.push(sum);
        self.rows.absolute.push(absolute);
        self.rows.square.push(square);
        self.rows.hash.push(hash);
    }

    fn append(&mut self, next: Self) {
        self.rows.count.extend(next.rows.count);
        self.rows.sum.extend(next.rows.sum);
        self.rows.absolute.extend(next.rows.absolute);
        self.rows.square.extend(next.rows.square);
        self.rows.hash.extend(next.rows.hash);
        let columns = &mut self.columns;
        add(&mut columns.absolute, &next.columns.absolute);
        add(&mut columns.square, &next.columns.square);
        for (weighted, more) in columns.weighted.iter_mut().zip(&next.columns.weighted) {
            add(weighted, more);
        }
        for (count, more) in columns.count.iter_mut().zip(next.columns.count) {
            *count += more;
        }
        for (hash, more) in columns.hash.iter_mut().zip(next.columns.hash) {
            *hash = hash.wrapping_add(more);
        }
        self.histogram.merge(&next.histogram);
        self.explicit_zeros += next.explicit_zeros;
        self.nonfinite += next.nonfinite;
    }
}

fn add(to: &mut [f64], more: &[f64]) {
    for (value, more) in to.iter_mut().zip(more) {
        *value += more;
    }
}
