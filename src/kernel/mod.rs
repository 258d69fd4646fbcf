//! The pass over the stored matrix: the one operation that costs.
//!
//! For every row i and lane l, while the row is in cache:
//!
//! u_il ← f_il·(aᵢᵀ v_l) − α_l u_il,   s_l ← s_l + h_il u_il aᵢ,   q_l ← q_l + (g_il u_il)²
//!
//! `plain` is safe and obvious; faster twins are compared with it.

pub mod plain;
pub mod value;

pub use plain::{Factors, Lanes, Rows, pass};
pub use value::Value;
