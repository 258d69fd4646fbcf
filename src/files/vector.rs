//! Data, uncertainties, references and lists of cells from files.

use std::path::Path;

use ndarray::Array2;

use super::dense::Array;
use super::source::{Kind, Source, kind_of};
use super::text_columns::read_columns;
use super::{Facts, FileError, Loaded, matrix_market};
use crate::base::Complaint;

/// What is done about NaN and infinite values.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum NonFinite {
    /// They are an error.
    Refuse,
    /// They are read as they stand.
    Keep,
}

const ACCEPTED: &str = "an array (.npy), a Matrix Market array (.mtx), or columns of numbers as \
    text (.csv, .txt; also gzip)";

/// Reads values × data sets: m×k, a one-dimensional file as m×1.
///
/// Formats, told by content: .npy of one or two dimensions; Matrix Market array, or n×1 coordinate
/// in which a missing entry is 0; text columns. Text may be gzip.
///
/// # Errors
/// The file cannot be read; it breaks its format; it holds no values; a value is not finite and
/// that is to be refused.
pub fn read(path: &Path, nonfinite: NonFinite) -> Result<Loaded<Array2<f64>>, FileError> {
    let source = Source::open(path)?;
    let keep = nonfinite == NonFinite::Keep;
    match kind_of(source.bytes()) {
        Kind::Npy => read_npy(&source, keep),
        Kind::Zip => Err(source.bad(Complaint::new(
            "this is an archive of several arrays (.npz), where one vector is needed",
            "save the one array that is meant with numpy.save",
        ))),
        Kind::Gzip | Kind::Other => read_text(&source, keep),
        kind @ Kind::Foreign(..) => Err(source.unreadable(kind, ACCEPTED)),
    }
}

fn read_text(source: &Source, keep: bool) -> Result<Loaded<Array2<f64>>, FileError> {
    let mut text = source.text();
    let head = text.batch().map_err(|fault| source.bad(fault))?.unwrap_or_default();
    if matrix_market::recognise(head) {
        return matrix_market::read_dense(source, keep);
    }
    if kind_of(head) != Kind::Other {
        return Err(source.bad(Complaint::new(
            "what is compressed is itself an array or an archive",
            "decompress the file with gunzip first",
        )));
    }
    if head.contains(&0) {
        return Err(source.unreadable(Kind::Other, ACCEPTED));
    }
    read_columns(source, keep)
}

fn read_npy(source: &Source, keep: bool) -> Result<Loaded<Array2<f64>>, FileError> {
    let bad = |complaint| source.bad(complaint);
    let array = Array::new(source.bytes()).map_err(bad)?;
    let (rows, columns) = match *array.header.shape.as_slice() {
        [rows] => (rows as usize, 1),
        [rows, columns] => (rows as usize, columns as usize),
        _ => {
            return Err(bad(Complaint::new(
                format!("the array has shape {}", array.header.shape_text()),
                "save one dimension, or two: values by data sets",
            )));
        }
    };
    if rows == 0 || columns == 0 {
        return Err(bad(Complaint::new(
            format!("the array of shape {} holds no values", array.header.shape_text()),
            "give at least one value",
        )));
    }
    let mut values = Array2::zeros((rows, columns));
    let mut count = 0;
    let fortran = array.header.fortran;
    array
        .each(|place, value| {
            let at = if fortran {
                [place % rows, place / rows]
            } else {
                [place / columns, place % columns]
            };
            if !value.is_finite() {
                if !keep {
                    return Err(not_finite(at, columns, value));
                }
                count += 1;
            }
            values[at] = value;
            Ok(())
        })
        .map_err(bad)?;
    let facts =
        Facts { format: array.format(), bytes: source.len(), nonfinite: count, ..Facts::default() };
    Ok(Loaded { value: values, warnings: Vec::new(), facts })
}

fn not_finite([row, column]: [usize; 2], columns: usize, value: f64) -> Complaint {
    let set = if columns > 1 { format!(" of data set {}", column + 1) } else { String::new() };
    Complaint::new(
        format!("value {}{set} is {value}", row + 1),
        "correct it; pass --missing nan to leave out data that are NaN",
    )
}

/// Reads which of `cells` cells are unknowns: a mask of `cells` values 0 or 1 (true or false), or a
/// list of cell numbers, which begin at 0. The numbers come back in the order of unknowns.
///
/// # Errors
/// As [`read`]; several columns; values that are neither a mask nor a list without repeats; values
/// that could be both.
pub fn read_active(path: &Path, cells: usize) -> Result<Vec<u32>, FileError> {
    let Loaded { value: values, .. } = read(path, NonFinite::Refuse)?;
    let bad =
        |cause: String, remedy: &str| Err(FileError::bad(path)(Complaint::new(cause, remedy)));
    if values.ncols() != 1 {
        return bad(
            format!("the cells are given as {} columns", values.ncols()),
            "give one column: a mask in the order of the cell numbers, or a list of cell numbers",
        );
    }
    let values: Vec<f64> = values.into_raw_vec_and_offset().0;
    let is_mask_like = values.iter().all(|&value| value == 0.0 || value == 1.0);
    let list = as_list(&values, cells);
    match (is_mask_like && values.len() == cells, list) {
        (true, Ok(_)) if !states_booleans(path)? => bad(
            format!("with {cells} cells the values could be a mask as well as a list"),
            "save the mask as booleans (.npy), or leave the active cells out if all are",
        ),
        (true, _) => match mask(&values) {
            active if active.is_empty() => {
                bad("the mask leaves no cell active".into(), "mark at least one cell with 1")
            }
            active => Ok(active),
        },
        (false, Ok(active)) if !states_booleans(path)? => Ok(active),
        (false, Err(fault)) if !is_mask_like => Err(FileError::bad(path)(fault)),
        (false, _) => bad(
            format!(
                "this looks like a mask of {} values, but there are {cells} cells",
                values.len()
            ),
            "give one value per cell, or a list of cell numbers without repeats",
        ),
    }
}

fn mask(values: &[f64]) -> Vec<u32> {
    (0u32..).zip(values).filter(|&(_, &value)| value == 1.0).map(|(cell, _)| cell).collect()
}

/// Only .npy files tell booleans from numbers.
fn states_booleans(path: &Path) -> Result<bool, FileError> {
    let source = Source::open(path)?;
    if kind_of(source.bytes()) != Kind::Npy {
        return Ok(false);
    }
    let array = Array::new(source.bytes()).map_err(|fault| source.bad(fault))?;
    Ok(array.dtype.is_boolean())
}

fn as_list(values: &[f64], cells: usize) -> Result<Vec<u32>, Complaint> {
    let remedy = format!("give whole numbers from 0 to {}, each once", cells.saturating_sub(1));
    let fault = |cause: String| Err(Complaint::new(cause, remedy.clone()));
    let mut first_at = vec![0usize; cells];
    let mut list = Vec::with_capacity(values.len());
    for (place, &value) in (1..).zip(values) {
        if value.fract() != 0.0 || value < 0.0 {
            return fault(format!("value {place} is {value}, not a cell number"));
        }
        let Some(seen) = first_at.get_mut(value as usize) else {
            return fault(format!("value {place} is {value}, beyond the {cells} cells"));
        };
        if *seen > 0 {
            return fault(format!("cell {value} is listed twice, as values {seen} and {place}"));
        }
        *seen = place;
        list.push(value as u32);
    }
    Ok(list)
}
