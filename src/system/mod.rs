//! The problem in hand: matrix, data, weights, reference, and the names of rows and columns.
//!
//! minimise over x:  Σᵢ wᵢ² (aᵢᵀx − bᵢ)² + λ² ‖L(x − x_ref)‖²,  wᵢ = 1/σᵢ
//!
//! Everything here is in the order of the user's files.

mod assemble;
mod error;
pub mod facts;
pub mod findings;
pub mod inspection;
mod lengths;
mod names;
mod reference;
mod sigma;
mod spread;
mod stack;
mod twins;
mod visit;

pub use error::SystemError;
pub mod rays;
pub use facts::Facts;
pub use findings::{Finding, QuickFit, findings};
pub use inspection::{Forecast, Inspection};

use std::path::PathBuf;

use ndarray::Array2;

use crate::base::Grid;
use crate::operator::{CompressedRows, RowWeights, StoredRows};

/// A checked system: all lengths agree, all weights are finite and not negative.
#[derive(Debug)]
pub struct System {
    /// m×n.
    pub matrix: StoredRows,
    /// m×k, data unit: what the model is fitted to. With a linearisation point this is
    /// b − g(x_k) + A x_k. A datum that is missing (NaN) is 0 here; one whose row is left out by
    /// the rows table keeps its value, so that its residual can be looked at. Neither counts
    /// (see [`System::included`]).
    pub data: Array2<f64>,
    /// m×k: no datum was given (NaN, or not finite in a row left out); `None` if all were.
    pub absent: Option<Array2<bool>>,
    /// Added to `data` gives the data as read (g(x_k) − A x_k); `None` without a linearisation
    /// point. Length m.
    pub data_shift: Option<Vec<f64>>,
    /// σ in data units, m×1 or m×k; `None` if the user gave none. Unchecked where a datum does
    /// not count.
    pub uncertainty: Option<Array2<f64>>,
    /// block weight/σ, and 0 for a datum that is left out.
    pub weights: RowWeights,
    /// x_ref, n×1 or n×k, model unit; `None` means 0. A fixed unknown holds its value here.
    pub reference: Option<Array2<f64>>,
    /// Without lists where no table was given.
    pub rows: RowTable,
    /// Without lists where no table was given.
    pub columns: ColumnTable,
    /// In the order of their rows; at least one.
    pub blocks: Vec<BlockSpan>,
    /// Cells that unknowns stand for, if the user describes any.
    pub grid: Option<Grid>,
    /// For words in reports and bounds in findings; no number is converted.
    pub units: Units,
}

/// Words for quantities, as the user states them; empty when unstated.
#[derive(Debug, Clone, Default, PartialEq, serde::Serialize)]
pub struct Units {
    /// e.g. `s`
    pub data: String,
    /// e.g. `s/m`
    pub model: String,
    /// e.g. `slowness`
    pub model_quantity: String,
    /// Values of the model that an expert of the field would call possible, in model units.
    pub plausible: Option<(f64, f64)>,
}

/// The rows of one data block.
#[derive(Debug, Clone, PartialEq, serde::Serialize)]
pub struct BlockSpan {
    /// As the user calls it; `data` where there is one block without a name.
    pub name: String,
    /// From 0, in the stacked matrix.
    pub first_row: usize,
    /// Rows of the block, those that are left out among them.
    pub rows: usize,
    /// Multiplies 1/σ of the block's rows.
    pub weight: f64,
}

/// What `--rows` says; every list has length m where present.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct RowTable {
    /// Names of the rows for messages.
    pub ids: Option<Vec<String>>,
    /// Place in `group_names` of each row's group.
    pub groups: Option<Vec<u32>>,
    /// In order of first appearance; empty without groups.
    pub group_names: Vec<String>,
    /// Physical order of the rows (time, angle, offset), for whiteness.
    pub order: Option<Vec<f64>>,
    /// `false`: the row is left out.
    pub used: Option<Vec<bool>>,
    /// Any other columns, as text: (heading, values).
    pub others: Vec<(String, Vec<String>)>,
}

/// What `--columns` says; every list has length n where present.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct ColumnTable {
    /// Names of the unknowns for messages.
    pub names: Option<Vec<String>>,
    /// e.g. `cell`, `station`; with a grid, unknowns of kind `cell` (or of no kind) are its cells
    /// in order.
    pub kinds: Option<Vec<String>>,
    /// Factor on the penalty of each unknown, not negative; absent means 1.
    pub penalty_weights: Option<Vec<f64>>,
    /// Value at which an unknown is held, in model units; NaN where it is free.
    pub fixed: Option<Vec<f64>>,
}

/// How σ was given.
#[derive(Debug, Clone, PartialEq)]
pub enum Uncertainty {
    /// √(absolute² + (percent/100·|b|)²), data units. `2%` is (0, 2), `0.5` is (0.5, 0), `0.5+2%`
    /// is (0.5, 2).
    Formula {
        /// Data unit.
        absolute: f64,
        /// Of |b|.
        percent: f64,
    },
    /// m×1 or m×k σ values read from `path`.
    Values {
        /// Data unit.
        values: Array2<f64>,
        /// For messages.
        path: PathBuf,
    },
}

/// How x_ref was given.
#[derive(Debug, Clone, PartialEq)]
pub enum Reference {
    /// The same value for every unknown, model unit.
    Number(f64),
    /// n×1 or n×k.
    Values {
        /// Model unit.
        values: Array2<f64>,
        /// For messages.
        path: PathBuf,
    },
    /// The one constant that fits all data best (weighted), per data set.
    Fit,
}

/// One block as read, before it is checked against the others.
#[derive(Debug)]
pub struct BlockPart {
    /// For messages, and in [`BlockSpan`].
    pub name: String,
    /// A of the block, rows of the block × n.
    pub matrix: CompressedRows,
    /// For messages.
    pub matrix_path: PathBuf,
    /// m×k.
    pub data: Array2<f64>,
    /// For messages.
    pub data_path: PathBuf,
    /// `None`: σ = 1 and unstated.
    pub uncertainty: Option<Uncertainty>,
    /// Multiplies 1/σ; positive and finite, or [`SystemError::Weight`].
    pub weight: f64,
}

/// The linearisation point of an outer loop: A is the derivative of g at x_k.
#[derive(Debug)]
pub struct Linearisation {
    /// x_k, length n.
    pub model: Vec<f64>,
    /// For messages.
    pub model_path: PathBuf,
    /// g(x_k), length m (all blocks).
    pub predicted: Vec<f64>,
    /// For messages.
    pub predicted_path: PathBuf,
}

/// Everything `System::assemble` needs, as read from files.
#[derive(Debug)]
pub struct Parts {
    /// In the order in which they are stacked; at least one.
    pub blocks: Vec<BlockPart>,
    /// The table and its file; lists as long as all blocks together.
    pub rows: Option<(RowTable, PathBuf)>,
    /// The table and its file.
    pub columns: Option<(ColumnTable, PathBuf)>,
    /// `None`: 0.
    pub reference: Option<Reference>,
    /// A NaN datum is left out (of its data set); otherwise it is an error.
    pub missing_nan: bool,
    /// Turns the data into b − g(x_k) + A x_k.
    pub linearisation: Option<Linearisation>,
    /// As many cells as unknowns of kind `cell`.
    pub grid: Option<Grid>,
    /// Handed on to [`System::units`].
    pub units: Units,
}
