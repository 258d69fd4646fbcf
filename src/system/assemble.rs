//! Puts a system together from the parts read from files, checking each against the others.

use ndarray::{Array2, s};

use super::lengths::{check, of_block};
use super::names::row_name;
use super::{
    BlockPart, BlockSpan, ColumnTable, Linearisation, Parts, RowTable, System, SystemError,
};
use super::{reference, sigma, stack};
use crate::base::{Complaint, Warning};
use crate::operator::StoredRows;

/// What an error message needs to name a row.
pub(super) struct Names<'a> {
    pub rows: &'a RowTable,
    pub blocks: &'a [BlockSpan],
}

impl Names<'_> {
    pub fn row(&self, i: usize) -> String {
        row_name(i, self.rows, self.blocks)
    }

    /// The row, and the data set where there are several.
    pub fn datum(&self, i: usize, set: usize, sets: usize) -> String {
        if sets == 1 { self.row(i) } else { format!("{}, data set {}", self.row(i), set + 1) }
    }

    /// Place of the block that holds row `i`.
    pub fn block_of(&self, i: usize) -> usize {
        self.blocks.iter().rposition(|block| block.first_row <= i).unwrap_or(0)
    }
}

impl System {
    /// Checks all parts against each other and puts them together.
    ///
    /// One block's matrix and data are moved; several are stacked with at most 24 bytes an entry
    /// of the matrix at the peak, parts included. With a linearisation point the rows are visited
    /// once, with a reference fitted to the data or fixed unknowns once more.
    ///
    /// # Errors
    /// Lengths that disagree, data, uncertainties, weights or table values that cannot be used,
    /// a data set without a datum that counts, a grid with another number of cells than the
    /// matrix has columns; the message names row or column, file, and remedy.
    ///
    /// # Panics
    /// If `parts` holds no block: the caller reads at least one.
    pub fn assemble(parts: Parts) -> Result<(Self, Vec<Warning>), SystemError> {
        assert!(!parts.blocks.is_empty(), "a system has at least one block");
        check(&parts)?;
        let mut warnings = Vec::new();
        let blocks = block_spans(&parts.blocks)?;
        let (rows, rows_path) = parts.rows.unzip();
        let rows = rows.unwrap_or_default();
        if let Some(path) = &rows_path {
            check_order(&rows).map_err(|complaint| SystemError::Rows(complaint.in_file(path)))?;
        }
        let (columns, columns_path) = parts.columns.unzip();
        let columns = columns.unwrap_or_default();
        if let Some(path) = &columns_path {
            check_columns(&columns)
                .map_err(|complaint| SystemError::Columns(complaint.in_file(path)))?;
        }

        let names = Names { rows: &rows, blocks: &blocks };
        let mut origins = Vec::with_capacity(blocks.len());
        let mut matrices = Vec::with_capacity(blocks.len());
        let mut data = Vec::with_capacity(blocks.len());
        for part in parts.blocks {
            matrices.push(part.matrix);
            data.push(part.data);
            origins.push(sigma::Origin {
                data_path: part.data_path,
                uncertainty: part.uncertainty,
                block_weight: part.weight,
            });
        }
        let mut data = join(data);
        let absent = data.mapv(|value: f64| !value.is_finite());
        let absent = absent.iter().any(|gone| *gone).then_some(absent);
        let left_out = leave_out(&mut data, parts.missing_nan, &names, &origins, &mut warnings)?;
        let (uncertainty, weights) = sigma::weigh(&data, origins, left_out.as_ref(), &names)?;
        let matrix = StoredRows::build(stack::stack(matrices), parts.grid.as_ref());
        let data_shift = match &parts.linearisation {
            Some(point) => Some(linearise(&mut data, &matrix, point, absent.as_ref())?),
            None => None,
        };
        let fit = reference::Fit { matrix: &matrix, data: &data, weights: &weights };
        let reference = reference::resolve(parts.reference, &columns, &fit)?;
        let system = Self {
            matrix,
            data,
            absent,
            data_shift,
            uncertainty,
            weights,
            reference,
            rows,
            columns,
            blocks,
            grid: parts.grid,
            units: parts.units,
        };
        Ok((system, warnings))
    }

    /// Number of data sets.
    pub fn sets(&self) -> usize {
        self.data.ncols()
    }

    /// Whether the datum of row `i` in data set `set` counts.
    pub fn included(&self, i: usize, set: usize) -> bool {
        self.weights.at(i, set) > 0.0
    }
}

fn block_spans(parts: &[BlockPart]) -> Result<Vec<BlockSpan>, SystemError> {
    let mut first_row = 0;
    let mut spans = Vec::with_capacity(parts.len());
    for part in parts {
        if !(part.weight > 0.0 && part.weight.is_finite()) {
            let cause = format!("the weight{} is {}", of_block(&part.name), part.weight);
            let remedy = "give a positive, finite weight; to leave a block out, take it out of the job or give its rows use = 0 in the rows table";
            let complaint = Complaint::new(cause, remedy).in_file(&part.matrix_path);
            return Err(SystemError::Weight(complaint));
        }
        let rows = part.matrix.rows();
        spans.push(BlockSpan { name: part.name.clone(), first_row, rows, weight: part.weight });
        first_row += rows;
    }
    Ok(spans)
}

fn check_order(rows: &RowTable) -> Result<(), Complaint> {
    let Some(order) = &rows.order else { return Ok(()) };
    match order.iter().position(|value| !value.is_finite()) {
        None => Ok(()),
        Some(i) => Err(Complaint::new(
            format!("the order of row {} is {}", i + 1, order[i]),
            "give every row a finite place (time, angle, offset), or leave the column out",
        )),
    }
}

fn check_columns(columns: &ColumnTable) -> Result<(), Complaint> {
    if let Some(weights) = &columns.penalty_weights
        && let Some(j) = weights.iter().position(|w| !(*w >= 0.0 && w.is_finite()))
    {
        return Err(Complaint::new(
            format!("the penalty weight of column {} is {}", j + 1, weights[j]),
            "give a finite weight that is not negative; 0 leaves the unknown free of the penalty",
        ));
    }
    if let Some(fixed) = &columns.fixed {
        if let Some(j) = fixed.iter().position(|value| value.is_infinite()) {
            return Err(Complaint::new(
                format!("column {} is fixed at {}", j + 1, fixed[j]),
                "give the value at which the unknown is held, or leave it empty",
            ));
        }
        if fixed.iter().all(|value| !value.is_nan()) {
            return Err(Complaint::new(
                format!("all {} unknowns are fixed, so there is nothing to solve for", fixed.len()),
                "leave the value of `fixed` empty for the unknowns to be found",
            ));
        }
    }
    Ok(())
}

/// One block's data are moved, several are copied below each other.
fn join(mut parts: Vec<Array2<f64>>) -> Array2<f64> {
    if parts.len() == 1 {
        return parts.remove(0);
    }
    let rows = parts.iter().map(|part| part.nrows()).sum();
    let mut all = Array2::zeros((rows, parts[0].ncols()));
    let mut first = 0;
    for part in parts {
        let end = first + part.nrows();
        all.slice_mut(s![first..end, ..]).assign(&part);
        first = end;
    }
    all
}

/// Which data do not count: m×k, or `None` if all do. A datum that is not finite and does not
/// count becomes 0; one that does count is an error.
fn leave_out(
    data: &mut Array2<f64>,
    missing_nan: bool,
    names: &Names,
    origins: &[sigma::Origin],
    warnings: &mut Vec<Warning>,
) -> Result<Option<Array2<bool>>, SystemError> {
    let (rows, sets) = data.dim();
    let unused = |i: usize| names.rows.used.as_ref().is_some_and(|used| !used[i]);
    let any_unused = (0..rows).any(unused);
    let all_finite = data.iter().all(|value| value.is_finite());
    if !any_unused && all_finite {
        return if rows == 0 { Err(nothing_left(0, sets, names, origins)) } else { Ok(None) };
    }
    let mut left_out = Array2::from_elem((rows, sets), false);
    let mut missing = 0usize;
    for i in 0..rows {
        for set in 0..sets {
            let value = data[[i, set]];
            let is_missing = missing_nan && value.is_nan();
            if !value.is_finite() && !is_missing && !unused(i) {
                return Err(not_a_number(i, set, value, sets, names, origins));
            }
            left_out[[i, set]] = unused(i) || is_missing;
            missing += usize::from(is_missing && !unused(i));
            if !value.is_finite() {
                data[[i, set]] = 0.0;
            }
        }
    }
    for set in 0..sets {
        if left_out.column(set).iter().all(|&out| out) {
            return Err(nothing_left(set, sets, names, origins));
        }
    }
    if missing > 0 {
        let cause = format!("{missing} of {} data are missing (NaN) and left out", rows * sets);
        warnings.push(Complaint::new(cause, "none needed if this many are expected").into());
    }
    Ok(Some(left_out))
}

fn not_a_number(
    i: usize,
    set: usize,
    value: f64,
    sets: usize,
    names: &Names,
    origins: &[sigma::Origin],
) -> SystemError {
    let cause = format!("the datum of {} is {value}", names.datum(i, set, sets));
    let remedy = if value.is_nan() {
        "give a number, leave missing data out with `--missing nan`, or give the row use = 0 in the rows table"
    } else {
        "give a finite number; mark a missing datum as NaN and use `--missing nan`, or give the row use = 0 in the rows table"
    };
    let path = &origins[names.block_of(i)].data_path;
    SystemError::Data(Complaint::new(cause, remedy).in_file(path))
}

fn nothing_left(set: usize, sets: usize, names: &Names, origins: &[sigma::Origin]) -> SystemError {
    let rows: usize = names.blocks.iter().map(|block| block.rows).sum();
    let of = if sets == 1 { String::new() } else { format!(" of data set {}", set + 1) };
    let cause = if rows == 0 {
        "there are no data: the matrix has no rows".to_string()
    } else {
        format!("all {rows} data{of} are left out, so nothing is left to fit")
    };
    let remedy = "give data, or check the column `use` of the rows table and the data marked NaN";
    SystemError::Data(Complaint::new(cause, remedy).in_file(&origins[0].data_path))
}

/// Turns the data into b − g(x_k) + A x_k and hands back g(x_k) − A x_k. Absent data keep 0.
fn linearise(
    data: &mut Array2<f64>,
    matrix: &crate::operator::StoredRows,
    point: &Linearisation,
    absent: Option<&Array2<bool>>,
) -> Result<Vec<f64>, SystemError> {
    let refuse = |word: &str, place: usize, value: f64, path: &std::path::Path| {
        let cause = format!("the {word} {} is {value}", place + 1);
        let remedy = "give finite numbers for the linearisation point and the data predicted there";
        Err(SystemError::Linearisation(Complaint::new(cause, remedy).in_file(path)))
    };
    if let Some(j) = point.model.iter().position(|value| !value.is_finite()) {
        return refuse("model value of column", j, point.model[j], &point.model_path);
    }
    if let Some(i) = point.predicted.iter().position(|value| !value.is_finite()) {
        return refuse("predicted datum of row", i, point.predicted[i], &point.predicted_path);
    }
    // Rows are independent, so the bits do not depend on who sums which.
    let shift = matrix.map_rows(|i, entries| {
        let product: f64 = entries.iter().map(|&(j, a)| a * point.model[j as usize]).sum();
        point.predicted[i] - product
    });
    for ((i, set), datum) in data.indexed_iter_mut() {
        if !absent.is_some_and(|gone| gone[[i, set]]) {
            *datum -= shift[i];
        }
    }
    Ok(shift)
}

#[cfg(test)]
#[path = "assemble_tests.rs"]
mod tests;
