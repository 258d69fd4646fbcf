//! The pass over the stored matrix: the one operation that costs.
//!
//! For every row i and lane l:
//!
//! u_il ← f_il·(aᵢᵀ v_l) − α_l u_il,   s_l ← s_l + h_il u_il aᵢ,   q_l ← q_l + (g_il u_il)²
//!
//! The matrix lies in [`tiles`]. [`pass()`] goes through it one of two [`Way`]s, which give the same
//! bits: every sum goes over fixed pieces in a fixed order, whatever the way, the number of
//! threads, and the lanes beside.
//!
//! - A row's product: per tile in order, four partial sums over the entries taken in turn, added
//!   pairwise, then the tiles' sums in order.
//! - A column's sum: inner rows in order; where there are several groups of bands, each group
//!   for itself, then the groups in order.
//! - Squares: rows of a slice in order, slices pairwise.
//!
//! [`twins`] holds the inner loops, one source compiled for several instruction sets and chosen at
//! run time; [`plain`] says the same in safe code, and tests compare them.

pub mod block;
pub mod pass;
pub mod plain;
pub mod row_order;
mod schedule;
mod segments;
pub mod tiles;
pub mod twins;
pub mod value;

pub use block::Block;
pub use pass::{Factors, Lanes, Room, Way, pass};
pub use row_order::RowOrder;
pub use tiles::Tiles;
pub use twins::Twin;
pub use value::Value;
