//! What can be said of a system before anyone pays for a solve.

use super::reference::{Constant, RowSums};
pub use super::spread::Spread;
pub use super::twins::DuplicateRows;
use super::{System, twins, visit};
use crate::base::sums::dot;

/// Shape, coverage, scaling, repeats and the one-value fit of a system.
///
/// Entries that are 0 or not finite count in `explicit_zeros` and `nonfinite_entries` and nowhere
/// else. Rows and columns are numbered from 0.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct Facts {
    /// m.
    pub rows: usize,
    /// n.
    pub columns: usize,
    /// k.
    pub data_sets: usize,
    /// Stored entries, explicit zeros included.
    pub entries: usize,
    /// Stored entries that are 0.
    pub explicit_zeros: usize,
    /// Stored entries that are NaN or infinite.
    pub nonfinite_entries: usize,
    /// `f64`, `f32` or `pattern`.
    pub storage: &'static str,
    /// Memory of the arrays that a pass reads.
    pub matrix_bytes: u64,
    /// Row by row.
    pub row: RowFacts,
    /// Column by column.
    pub column: ColumnFacts,
    /// Magnitudes |aᵢⱼ| of the entries; the median within 3 %.
    pub entry_magnitude: Spread,
    /// Of Σⱼ |aᵢⱼ| over the rows that have entries.
    pub row_magnitude: Spread,
    /// Of Σᵢ |aᵢⱼ| over the columns that have entries.
    pub column_magnitude: Spread,
    /// Rows without an entry that counts, ascending.
    pub empty_rows: Vec<usize>,
    /// Columns without an entry that counts, ascending.
    pub empty_columns: Vec<usize>,
    /// Classes of equal rows, by first member.
    pub duplicate_rows: Vec<DuplicateRows>,
    /// Classes of equal columns: the data cannot tell their unknowns apart.
    pub duplicate_columns: Vec<Vec<usize>>,
    /// Rows without entries whose datum counts and is not 0, in any data set: beyond any model.
    pub unexplainable_rows: Vec<usize>,
    /// One for each data set.
    pub sets: Vec<SetFacts>,
}

/// Sums over the entries of each row; all of length m.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct RowFacts {
    /// Entries.
    pub count: Vec<u32>,
    /// Σⱼ aᵢⱼ.
    pub sum: Vec<f64>,
    /// Σⱼ |aᵢⱼ|.
    pub absolute_sum: Vec<f64>,
    /// Σⱼ aᵢⱼ².
    pub square_sum: Vec<f64>,
}

/// Sums over the entries of each column; all of length n.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct ColumnFacts {
    /// Hits.
    pub count: Vec<u32>,
    /// Σᵢ |aᵢⱼ|.
    pub absolute_sum: Vec<f64>,
    /// Σᵢ aᵢⱼ².
    pub square_sum: Vec<f64>,
    /// Σᵢ wᵢ² aᵢⱼ², one list for each weighting: one, or k where data sets differ in their weights.
    pub weighted_square_sums: Vec<Vec<f64>>,
}

/// What depends on the data set.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct SetFacts {
    /// Data that count.
    pub data: usize,
    /// ‖WA‖_F².
    pub weighted_matrix_square: f64,
    /// ‖Wb‖².
    pub weighted_data_square: f64,
    /// Share of ‖Wb‖² in rows without entries, which no model explains.
    pub unexplainable_share: f64,
    /// `None` where every value fits equally well: all row sums or all data are 0.
    pub constant: Option<ConstantFit>,
}

/// The one value for all unknowns that fits the data best; fixed unknowns keep theirs.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct ConstantFit {
    /// Model unit.
    pub value: f64,
    /// One over it, for those who think in the reciprocal (velocity for slowness).
    pub reciprocal: f64,
    /// Share of ‖Wb‖² (less what fixed unknowns contribute) that it explains, 0 to 1.
    pub share: f64,
    /// Standard deviation of the value, model unit, if weights are 1/σ and the model is constant.
    pub deviation: f64,
}

impl Facts {
    /// Σᵢ wᵢ² aᵢⱼ² of each column in data set `set`: the squares of the weighted column norms.
    ///
    /// Panics if `set` is not a data set.
    pub fn weighted_column_squares(&self, set: usize) -> &[f64] {
        assert!(set < self.data_sets, "data set {set} of {}", self.data_sets);
        let lists = &self.column.weighted_square_sums;
        &lists[if lists.len() == 1 { 0 } else { set }]
    }
}

impl System {
    /// Collects the facts in one visit of the rows, parallel and with the same bits for any
    /// number of threads; two more short ones where columns look equal or unknowns are fixed.
    ///
    /// Memory beyond the result: a few vectors of length m and n (see `visit`); never a copy of
    /// the matrix.
    pub fn facts(&self) -> Facts {
        let seen = visit::visit(&self.matrix, &self.weights);
        let (rows, columns) = (&seen.rows, &seen.columns);
        let empty = |count: &[u32]| -> Vec<usize> {
            (0..count.len()).filter(|&place| count[place] == 0).collect()
        };
        let duplicate_rows =
            twins::duplicate_rows(&self.matrix, &self.data, &rows.count, &rows.hash);
        let duplicate_columns =
            twins::duplicate_columns(&self.matrix, &columns.count, &columns.hash);
        let empty_rows = empty(&rows.count);
        let sets = self.set_facts(&rows.sum, &rows.square, &empty_rows);
        let speaks = |i: usize| {
            (0..self.sets()).any(|set| self.included(i, set) && self.data[[i, set]] != 0.0)
        };
        Facts {
            rows: self.matrix.rows(),
            columns: self.matrix.columns(),
            data_sets: self.sets(),
            entries: self.matrix.entries(),
            explicit_zeros: seen.explicit_zeros,
            nonfinite_entries: seen.nonfinite,
            storage: self.matrix.storage_name(),
            matrix_bytes: self.matrix.bytes(),
            entry_magnitude: seen.histogram.spread(),
            row_magnitude: Spread::of(rows.absolute.iter().copied()),
            column_magnitude: Spread::of(columns.absolute.iter().copied()),
            unexplainable_rows: empty_rows.iter().copied().filter(|&i| speaks(i)).collect(),
            empty_rows,
            empty_columns: empty(&columns.count),
            duplicate_rows,
            duplicate_columns,
            sets,
            row: RowFacts {
                count: seen.rows.count,
                sum: seen.rows.sum,
                absolute_sum: seen.rows.absolute,
                square_sum: seen.rows.square,
            },
            column: ColumnFacts {
                count: seen.columns.count,
                absolute_sum: seen.columns.absolute,
                square_sum: seen.columns.square,
                weighted_square_sums: seen.columns.weighted,
            },
        }
    }

    fn set_facts(&self, sums: &[f64], squares: &[f64], empty_rows: &[usize]) -> Vec<SetFacts> {
        let fixed = self.columns.fixed.as_ref().is_some_and(|f| f.iter().any(|v| !v.is_nan()));
        let row_sums = if fixed {
            RowSums::of(&self.matrix, &self.columns)
        } else {
            RowSums { free: sums.to_vec(), fixed: None }
        };
        (0..self.sets())
            .map(|set| {
                let rows = 0..self.matrix.rows();
                let weights: Vec<f64> = rows.map(|i| self.weights.at(i, set)).collect();
                let wa: Vec<f64> = weights.iter().zip(squares).map(|(w, a)| w * w * a).collect();
                let wb: Vec<f64> =
                    weights.iter().zip(self.data.column(set)).map(|(w, b)| w * b).collect();
                let square = dot(&wb, &wb);
                let lost: Vec<f64> = empty_rows.iter().map(|&i| wb[i]).collect();
                SetFacts {
                    data: weights.iter().filter(|&&w| w > 0.0).count(),
                    weighted_matrix_square: dot(&wa, &vec![1.0; wa.len()]),
                    weighted_data_square: square,
                    unexplainable_share: if square > 0.0 {
                        dot(&lost, &lost) / square
                    } else {
                        0.0
                    },
                    constant: row_sums.constant(&self.data, &self.weights, set).map(Into::into),
                }
            })
            .collect()
    }
}

impl From<Constant> for ConstantFit {
    fn from(constant: Constant) -> Self {
        Self {
            value: constant.value,
            reciprocal: 1.0 / constant.value,
            share: constant.share,
            deviation: constant.deviation,
        }
    }
}

#[cfg(test)]
#[path = "facts_tests.rs"]
mod tests;
