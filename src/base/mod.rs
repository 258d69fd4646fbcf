//! What every room stands on: complaints about input, grids, ordered sums and
//! counter-hashed random numbers. Nothing here knows a matrix or a file.

pub mod complaint;
pub mod grid;
pub mod memory;
pub mod random;
pub mod sums;

pub use complaint::{Complaint, Warning};
pub use grid::{Axis, Grid};
