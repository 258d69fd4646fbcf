//! The reference model x_ref, and the one constant that fits all data best.

use std::path::Path;

use ndarray::Array2;

use super::lengths::differs;
use super::{ColumnTable, Reference, SystemError};
use crate::base::sums::dot;
use crate::base::{Complaint, complaint::show};
use crate::operator::row_visit::Entry;
use crate::operator::{RowWeights, StoredRows};

/// What a constant is fitted to.
pub(super) struct Fit<'a> {
    pub matrix: &'a StoredRows,
    pub data: &'a Array2<f64>,
    pub weights: &'a RowWeights,
}

/// One constant value for all free cells (unknowns of another kind, say station terms, stay 0: they
/// have another unit), fitted to one data set.
#[derive(Debug, Clone, Copy, PartialEq)]
pub(super) struct Constant {
    /// c = Σ wᵢ² sᵢ bᵢ / Σ wᵢ² sᵢ², sᵢ the sum of row i; model unit.
    pub value: f64,
    /// 1 − Σ wᵢ² (sᵢ c − bᵢ)² / Σ wᵢ² bᵢ², between 0 and 1.
    pub share: f64,
    /// 1/√(Σ wᵢ² sᵢ²): the standard deviation of c if the weights are 1/σ; model unit.
    pub deviation: f64,
}

/// Sums of the rows over the free cells, and what the fixed ones contribute to each datum.
pub(super) struct RowSums {
    pub free: Vec<f64>,
    /// `None` where nothing is fixed.
    pub fixed: Option<Vec<f64>>,
}

impl RowSums {
    /// One visit of the rows.
    pub fn of(matrix: &StoredRows, columns: &ColumnTable) -> Self {
        let held = columns.fixed.as_ref().filter(|values| values.iter().any(|v| !v.is_nan()));
        let takes = columns.taking_constant();
        let sum = |_: usize, entries: &[Entry]| {
            let (mut free, mut fixed) = (0.0, 0.0);
            for &(j, a) in entries {
                let j = j as usize;
                match held.map(|values| values[j]).filter(|value| !value.is_nan()) {
                    None if takes(j) => free += a,
                    None => {}
                    Some(value) => fixed += a * value,
                }
            }
            (free, fixed)
        };
        let (free, fixed): (Vec<f64>, Vec<f64>) = matrix.map_rows(sum).into_iter().unzip();
        Self { free, fixed: held.map(|_| fixed) }
    }

    /// The constant of data set `set`; `None` if all weighted row sums or all weighted data are
    /// 0, so that no constant is better than another.
    pub fn constant(
        &self,
        data: &Array2<f64>,
        weights: &RowWeights,
        set: usize,
    ) -> Option<Constant> {
        let rows = self.free.len();
        let mut ws = Vec::with_capacity(rows);
        let mut wb = Vec::with_capacity(rows);
        for i in 0..rows {
            let w = weights.at(i, set);
            let known = self.fixed.as_ref().map_or(0.0, |list| list[i]);
            ws.push(w * self.free[i]);
            wb.push(w * (data[[i, set]] - known));
        }
        let (ss, sb, bb) = (dot(&ws, &ws), dot(&ws, &wb), dot(&wb, &wb));
        let known = ss > 0.0 && bb > 0.0 && ss.is_finite() && bb.is_finite();
        known.then(|| Constant {
            value: sb / ss,
            share: (sb / ss) * (sb / bb),
            deviation: 1.0 / ss.sqrt(),
        })
    }
}

/// x_ref as an n×1 or n×k array, fixed unknowns at their values; `None` means 0.
pub(super) fn resolve(
    given: Option<Reference>,
    columns: &ColumnTable,
    fit: &Fit,
) -> Result<Option<Array2<f64>>, SystemError> {
    let n = fit.matrix.columns();
    let mut reference = match given {
        None => None,
        Some(Reference::Number(value)) => {
            if !value.is_finite() {
                let cause = format!("the reference is {value}");
                let remedy = "give a finite number in model units, a file, or `fit`";
                return Err(SystemError::Reference(Complaint::new(cause, remedy)));
            }
            Some(Array2::from_elem((n, 1), value))
        }
        Some(Reference::Values { values, path }) => {
            check_values(&values, n, fit.data.ncols(), &path)?;
            Some(values)
        }
        Some(Reference::Fit) => Some(fitted(columns, fit)?),
    };
    if let Some(fixed) = &columns.fixed
        && fixed.iter().any(|value| !value.is_nan())
    {
        let reference = reference.get_or_insert_with(|| Array2::zeros((n, 1)));
        for (mut row, &value) in reference.rows_mut().into_iter().zip(fixed) {
            if !value.is_nan() {
                row.fill(value);
            }
        }
    }
    Ok(reference)
}

fn check_values(
    values: &Array2<f64>,
    n: usize,
    sets: usize,
    path: &Path,
) -> Result<(), SystemError> {
    if values.nrows() != n {
        let remedy = "give one value for each column of the matrix, or a single number for all";
        let complaint =
            differs("the reference is", values.nrows(), "the columns of the matrix", n, remedy);
        return Err(SystemError::Reference(complaint.in_file(path)));
    }
    if values.ncols() != 1 && values.ncols() != sets {
        let cause = format!("the reference holds {} models for {sets} data sets", values.ncols());
        let remedy = "give one reference for all data sets, or one for each";
        return Err(SystemError::Reference(Complaint::new(cause, remedy).in_file(path)));
    }
    if let Some(((j, set), value)) = values.indexed_iter().find(|(_, value)| !value.is_finite()) {
        let of = if values.ncols() == 1 { String::new() } else { format!(", model {}", set + 1) };
        let cause = format!("the reference of column {}{of} is {value}", j + 1);
        let remedy = format!("give finite numbers in model units in {}", show(path));
        return Err(SystemError::Reference(Complaint::new(cause, remedy).in_file(path)));
    }
    Ok(())
}

fn fitted(columns: &ColumnTable, fit: &Fit) -> Result<Array2<f64>, SystemError> {
    let sums = RowSums::of(fit.matrix, columns);
    let takes = columns.taking_constant();
    let sets = fit.data.ncols();
    let mut values = Array2::zeros((fit.matrix.columns(), sets));
    for set in 0..sets {
        let Some(constant) = sums.constant(fit.data, fit.weights, set) else {
            let of = if sets == 1 { String::new() } else { format!(" of data set {}", set + 1) };
            let cause = format!(
                "no single value can be fitted to the data{of}: the row sums of the matrix, or the data, are all 0"
            );
            let remedy = "give the reference as a number or a file, or leave it out";
            return Err(SystemError::Reference(Complaint::new(cause, remedy)));
        };
        for (j, value) in values.column_mut(set).iter_mut().enumerate() {
            if takes(j) {
                *value = constant.value;
            }
        }
    }
    Ok(values)
}
