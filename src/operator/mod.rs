//! Linear operators: what the solvers multiply with.
//!
//! An operator works on blocks of lanes: v and s are n×k, u is m×k, row-major with lanes
//! contiguous. A lane is one least-squares problem on the same matrix.
//!
//! Rows of u stand in file order. Rows of v and s stand in the inner order of the stored matrix,
//! where neighbours in space are neighbours in memory: [`StoredRows::place_of`] says where an unknown
//! is, and whoever fills or reads such a block asks it once per solve.

pub(crate) mod build;
pub mod compressed;
pub(crate) mod keep;
pub(crate) mod order;
pub mod row_visit;
pub mod rows;
pub(crate) mod settle;
pub mod stack;
pub(crate) mod tile;
pub(crate) mod traffic;
pub mod weighted;
pub mod weights;

pub use compressed::{CompressedRows, Precision};
pub use order::OrderedBy;
pub use rows::{Row, StoredRows};
pub use settle::Duplicates;
pub use stack::Stacked;
pub use weighted::Weighted;
pub use weights::RowWeights;

use crate::kernel::{Block, Room};

/// In which variables a pass reads v and writes s.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Frame {
    /// v and s in the operator's own variables y, where x = x₀ + D y.
    Step,
    /// v is a model x, s in the operator's own variables: how a process starts.
    Start,
    /// v is a model x, u the residual in data units (not weighted), s = AᵀW²u the gradient in x,
    /// squares of Wu: how a result is certified.
    Certificate,
}

/// One pass: u ← Ã v − u·diag(α), s ← Ãᵀ u, squares ← ‖u_l‖² per lane.
pub struct Pass<'a> {
    /// Variables of v and s.
    pub frame: Frame,
    /// Data set of each lane, for weights that differ between sets. Its length is k.
    pub sets: &'a [usize],
    /// Strength λ of each lane; read only by operators with penalty rows.
    pub strengths: &'a [f64],
    /// n×k, inner order.
    pub v: &'a [f64],
    /// k.
    pub alpha: &'a [f64],
    /// m×k, file order.
    pub u: &'a mut [f64],
    /// n×k, inner order.
    pub s: &'a mut [f64],
    /// k.
    pub squares: &'a mut [f64],
    /// From [`Operator::scratch`] of the same operator, for at least k lanes.
    pub scratch: &'a mut Scratch,
}

/// Memory an operator needs besides the blocks; made once, before the first pass.
#[derive(Debug, Default)]
pub struct Scratch {
    pub(crate) scaled: Block,
    pub(crate) room: Room,
    pub(crate) penalty_squares: Vec<f64>,
}

/// What a solver multiplies with: one [`Pass`] is Ã and Ãᵀ in a single traversal.
pub trait Operator: Sync {
    /// Rows of u, penalty rows included.
    fn rows(&self) -> usize;

    /// n: rows of v and s.
    fn columns(&self) -> usize;

    /// One traversal of the matrix. Deterministic: the same bits for any number of threads, and
    /// in each lane whatever the other lanes are.
    ///
    /// Panics if a block does not have its documented shape.
    fn pass(&self, pass: Pass<'_>);

    /// Memory for passes of up to `lanes` lanes: [`Operator::scratch_bytes`].
    fn scratch(&self, lanes: usize) -> Scratch;

    /// Bytes that [`Operator::scratch`] allocates for so many lanes.
    fn scratch_bytes(&self, lanes: usize) -> u64;

    /// Bytes a pass with `lanes` lanes moves to and from memory, counted from the sizes.
    fn bytes_per_pass(&self, lanes: usize) -> u64;
}

impl<T: Operator + ?Sized> Operator for &T {
    fn rows(&self) -> usize {
        (**self).rows()
    }
    fn columns(&self) -> usize {
        (**self).columns()
    }
    fn pass(&self, pass: Pass<'_>) {
        (**self).pass(pass);
    }
    fn scratch(&self, lanes: usize) -> Scratch {
        (**self).scratch(lanes)
    }
    fn scratch_bytes(&self, lanes: usize) -> u64 {
        (**self).scratch_bytes(lanes)
    }
    fn bytes_per_pass(&self, lanes: usize) -> u64 {
        (**self).bytes_per_pass(lanes)
    }
}
