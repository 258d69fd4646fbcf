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
use crate::operator::{RowWeights, StoredRows};

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
    /// Added to `data` gives the data as read (g(x_k) − A x_k); `None` without a linearisation point. Length m.
    pub data_shift: Option<Vec<f64>>,
    /// σ in data units, m×1 or m×k; `None` if the user gave none. Unchecked where a datum does
    /// not count.
    pub uncertainty: Option<Array2<f64>>,
    /// block weight/σ, and 0 for a datum that is left out.
    pub weights: RowWeights,
    /// x_ref, n×1 or n×k, model unit; `None` means 0. A fixed unknown holds its value here.
    pub reference: Option<Array2<f64>>,
    pub rows: RowTable,
    pub columns: ColumnTable,
    /// In the order of their rows; at least one.
    pub blocks: Vec<BlockSpan>,
    pub grid: Option<Grid>,
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
    pub name: String,
    pub first_row: usize,
    pub rows: usize,
    /// Multiplies 1/σ of the block's rows.
    pub weight: f64,
}

/// What `--rows` says; every list has length m where present.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct RowTable {
    pub ids: Option<Vec<String>>,
    /// Place in `group_names` of each row's group.
    pub groups: Option<Vec<u32>>,
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
    pub names: Option<Vec<String>>,
    /// e.g. `cell`, `station`; with a grid, unknowns of kind `cell` (or of no kind) are its cells in order.
    pub kinds: Option<Vec<String>>,
    /// Factor on the penalty of each unknown, not negative; absent means 1.
    pub penalty_weights: Option<Vec<f64>>,
    /// Value at which an unknown is held, in model units; NaN where it is free.
    pub fixed: Option<Vec<f64>>,
}

/// How σ was given.
#[derive(Debug, Clone, PartialEq)]
pub enum Uncertainty {
    /// √(absolute² + (percent/100·|b|)²), data units. `2%` is (0, 2), `0.5` is (0.5, 0), `0.5+2%` is (0.5, 2).
    Formula { absolute: f64, percent: f64 },
    /// m×1 or m×k σ values read from `path`.
    Values { values: Array2<f64>, path: PathBuf },
}

/// How x_ref was given.
#[derive(Debug, Clone, PartialEq)]
pub enum Reference {
    Number(f64),
    /// n×1 or n×k.
    Values {
        values: Array2<f64>,
        path: PathBuf,
    },
    /// The one constant that fits all data best (weighted), per data set.
    Fit,
}

/// One block as read, before it is checked against the others.
#[derive(Debug)]
pub struct BlockPart {
    pub name: String,
    pub matrix: StoredRows,
    pub matrix_path: PathBuf,
    /// m×k.
    pub data: Array2<f64>,
    pub data_path: PathBuf,
    pub uncertainty: Option<Uncertainty>,
    pub weight: f64,
}

/// The linearisation point of an outer loop: A is the derivative of g at x_k.
#[derive(Debug)]
pub struct Linearisation {
    /// x_k, length n.
    pub model: Vec<f64>,
    pub model_path: PathBuf,
    /// g(x_k), length m (all blocks).
    pub predicted: Vec<f64>,
    pub predicted_path: PathBuf,
}

/// Everything `System::assemble` needs, as read from files.
#[derive(Debug)]
pub struct Parts {
    pub blocks: Vec<BlockPart>,
    pub rows: Option<(RowTable, PathBuf)>,
    pub columns: Option<(ColumnTable, PathBuf)>,
    pub reference: Option<Reference>,
    /// A NaN datum is left out (of its data set); otherwise it is an error.
    pub missing_nan: bool,
    pub linearisation: Option<Linearisation>,
    pub grid: Option<Grid>,
    pub units: Units,
}
