//! Whether all parts of a system have the lengths the matrices ask for.

use std::path::Path;

use super::names::quoted;
use super::{BlockPart, Parts, SystemError, Uncertainty};
use crate::base::Complaint;
use crate::base::complaint::show;

/// m over all blocks, and n.
#[derive(Debug, Clone, Copy)]
struct Size {
    rows: usize,
    columns: usize,
}

/// Checks every length but that of the reference, which needs the other parts first.
pub(super) fn check(parts: &Parts) -> Result<(), SystemError> {
    for block in &parts.blocks {
        check_block(block, &parts.blocks[0])?;
    }
    let first = &parts.blocks[0];
    let size = Size {
        rows: parts.blocks.iter().map(|block| block.matrix.rows()).sum(),
        columns: first.matrix.columns(),
    };
    if size.columns == 0 {
        let cause = "the matrix has no columns, so there is nothing to solve for";
        let complaint = Complaint::new(cause, "give a matrix with one column for each unknown");
        return Err(SystemError::Length(complaint.in_file(&first.matrix_path)));
    }
    check_tables(parts, size)?;
    check_linearisation(parts, size)?;
    check_grid(parts, size)
}

/// ` of block "upper"`, or nothing for a nameless block.
pub(super) fn of_block(name: &str) -> String {
    if name.is_empty() { String::new() } else { format!(" of block {}", quoted(name)) }
}

fn check_block(block: &BlockPart, first: &BlockPart) -> Result<(), SystemError> {
    let of = of_block(&block.name);
    if block.matrix.columns() != first.matrix.columns() {
        let cause = format!(
            "the matrix{of} has {} columns, but {} has {}",
            block.matrix.columns(),
            show(&first.matrix_path),
            first.matrix.columns()
        );
        let remedy = "all blocks share their unknowns: give each matrix the same columns, empty where a block does not see an unknown";
        return Err(SystemError::Length(Complaint::new(cause, remedy).in_file(&block.matrix_path)));
    }
    let (m, n) = (block.matrix.rows(), block.matrix.columns());
    if block.data.nrows() != m {
        let matrix = format!("the rows of {}", show(&block.matrix_path));
        return Err(SystemError::Length(
            differs(
                &format!("the data{of} are"),
                block.data.nrows(),
                &matrix,
                m,
                data_hint(block, n),
            )
            .in_file(&block.data_path),
        ));
    }
    if block.data.ncols() != first.data.ncols() || block.data.ncols() == 0 {
        let cause = format!(
            "the data{of} hold {} data sets, but {} holds {}",
            block.data.ncols(),
            show(&first.data_path),
            first.data.ncols()
        );
        let remedy = "give each block one column of data for each data set, at least one";
        return Err(SystemError::Length(Complaint::new(cause, remedy).in_file(&block.data_path)));
    }
    if let Some(Uncertainty::Values { values, path }) = &block.uncertainty {
        check_uncertainty(block, values.dim(), path)?;
    }
    Ok(())
}

fn data_hint(block: &BlockPart, n: usize) -> &'static str {
    if block.data.ncols() == block.matrix.rows() {
        "the data look transposed: store one row for each row of the matrix and one column for each data set"
    } else if block.data.nrows() == n {
        "there are as many values as the matrix has columns: give the data, not a model, or check that the matrix is not transposed"
    } else {
        "give one datum for each row of the matrix, in the same order"
    }
}

fn check_uncertainty(
    block: &BlockPart,
    (rows, sets): (usize, usize),
    path: &Path,
) -> Result<(), SystemError> {
    let what = format!("the uncertainties{}", of_block(&block.name));
    if rows != block.matrix.rows() {
        let matrix = format!("the rows of {}", show(&block.matrix_path));
        let remedy = "give one σ for each row of the matrix, or a single number for all";
        return Err(SystemError::Length(
            differs(&format!("{what} are"), rows, &matrix, block.matrix.rows(), remedy)
                .in_file(path),
        ));
    }
    if sets != 1 && sets != block.data.ncols() {
        let cause = format!(
            "{what} have {sets} columns, but {} holds {} data sets",
            show(&block.data_path),
            block.data.ncols()
        );
        let remedy = "give one column of σ for all data sets, or one for each";
        return Err(SystemError::Length(Complaint::new(cause, remedy).in_file(path)));
    }
    Ok(())
}

fn check_tables(parts: &Parts, size: Size) -> Result<(), SystemError> {
    let matrices = if parts.blocks.len() == 1 {
        format!("the rows of {}", show(&parts.blocks[0].matrix_path))
    } else {
        format!("the rows of all {} blocks together", parts.blocks.len())
    };
    if let Some((table, path)) = &parts.rows {
        let lengths = [
            table.ids.as_ref().map(Vec::len),
            table.groups.as_ref().map(Vec::len),
            table.order.as_ref().map(Vec::len),
            table.used.as_ref().map(Vec::len),
        ];
        let others = table.others.iter().map(|(_, values)| values.len());
        if let Some(got) = lengths.into_iter().flatten().chain(others).find(|&l| l != size.rows) {
            let remedy = "give the rows table one line for each datum, in the same order";
            let complaint = differs("the rows table is", got, &matrices, size.rows, remedy);
            return Err(SystemError::Rows(complaint.in_file(path)));
        }
    }
    if let Some((table, path)) = &parts.columns {
        let lengths = [
            table.names.as_ref().map(Vec::len),
            table.kinds.as_ref().map(Vec::len),
            table.penalty_weights.as_ref().map(Vec::len),
            table.fixed.as_ref().map(Vec::len),
        ];
        if let Some(got) = lengths.into_iter().flatten().find(|&length| length != size.columns) {
            let matrix = format!("the columns of {}", show(&parts.blocks[0].matrix_path));
            let remedy = "give the columns table one line for each unknown, in the same order";
            let complaint = differs("the columns table is", got, &matrix, size.columns, remedy);
            return Err(SystemError::Columns(complaint.in_file(path)));
        }
    }
    Ok(())
}

fn check_linearisation(parts: &Parts, size: Size) -> Result<(), SystemError> {
    let Some(point) = &parts.linearisation else { return Ok(()) };
    if point.model.len() != size.columns {
        let matrix = format!("the columns of {}", show(&parts.blocks[0].matrix_path));
        let remedy = "give the model at which the matrix was computed, one value for each unknown";
        let complaint =
            differs("the linearisation point is", point.model.len(), &matrix, size.columns, remedy);
        return Err(SystemError::Linearisation(complaint.in_file(&point.model_path)));
    }
    if point.predicted.len() != size.rows {
        let what = "the data predicted at the linearisation point are";
        let remedy = "give g(x_k), one value for each row of all blocks, in the order of the data";
        let complaint = differs(what, point.predicted.len(), "the data", size.rows, remedy);
        return Err(SystemError::Linearisation(complaint.in_file(&point.predicted_path)));
    }
    Ok(())
}

fn check_grid(parts: &Parts, size: Size) -> Result<(), SystemError> {
    let Some(grid) = &parts.grid else { return Ok(()) };
    let table = parts.columns.as_ref().map(|(table, _)| table);
    let cells = (0..size.columns).filter(|&j| table.is_none_or(|table| table.is_cell(j))).count();
    if cells == grid.unknowns() {
        return Ok(());
    }
    let shape: Vec<String> = grid.axes.iter().map(|axis| axis.cells.to_string()).collect();
    let active = if grid.active.is_some() { " active" } else { "" };
    let of = if cells == size.columns {
        String::new()
    } else {
        format!(" of kind `cell` (of {} columns in all)", size.columns)
    };
    let cause = format!(
        "the grid of {} has {}{active} cells, but the matrix has {cells} columns{of}",
        shape.join(" × "),
        grid.unknowns()
    );
    let remedy = "correct the grid's shape, list its active cells, or give the unknowns that are no cells another kind in the columns table";
    let complaint = Complaint::new(cause, remedy).in_file(&parts.blocks[0].matrix_path);
    Err(SystemError::Grid(complaint))
}

/// E.g. `the data are shorter than the rows of a.mtx: 99 against 100`; `what` ends with its verb.
pub(super) fn differs(what: &str, got: usize, than: &str, want: usize, remedy: &str) -> Complaint {
    let way = if got < want { "shorter" } else { "longer" };
    Complaint::new(format!("{what} {way} than {than}: {got} against {want}"), remedy)
}
