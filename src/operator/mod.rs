//! Linear operators: what the solvers multiply with.

pub mod rows;
pub mod weights;

pub use rows::{Precision, Row, StoredRows};
pub use weights::RowWeights;
