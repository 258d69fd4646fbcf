//! Linear operators: what the solvers multiply with.

pub mod build;
pub mod keep;
pub mod rows;
pub mod settle;
pub mod weights;

pub use rows::{Precision, Row, StoredRows};
pub use settle::Duplicates;
pub use weights::RowWeights;
