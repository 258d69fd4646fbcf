//! Ellbow turns indirect measurements into a model of what was measured: sparse, regularised
//! least squares, at many strengths in one process, with a record that others can check.
//!
//! minimise over x:  Σᵢ wᵢ² (aᵢᵀx − bᵢ)² + λ² ‖L (x − x_ref)‖²,  wᵢ = 1/σᵢ
//!
//! | symbol | word in the interface | meaning, unit |
//! |---|---|---|
//! | A, m×n | matrix | forward model, data unit per model unit |
//! | b, σ | data, uncertainty | data unit |
//! | λ | strength | squared in the objective, everywhere |
//! | L | penalty | here P = diag(p), p from the columns table, 1 where absent |
//! | x_ref | reference | model that the penalty pulls towards; 0 if absent |
//! | ρ = ‖W(b − Ax)‖ | residual norm | dimensionless once weighted |
//! | η = ‖L(x − x_ref)‖ | penalty norm | |
//! | tr H | effective parameters | H = WA(AᵀW²A + λ²LᵀL)⁻¹AᵀW |
//!
//! Where things are, in the order data flow through them:
//!
//! - [`files`] reads and writes; nothing else touches the disk.
//! - [`system`] checks what was read: weights, names, facts, findings.
//! - [`operator`] is W A D over the stored matrix, which is never changed; [`kernel`] is the pass.
//! - [`solve`] is the one loop over recurrences; [`sweep`] says which strengths are which lanes.
//! - [`choose`] holds the rules over a sweep, [`appraise`] what a result is worth.
//! - [`job`] conducts one job; [`report`] renders its records; [`cli`] is what people type.
//! - [`team`] is who takes part, [`base`] what everything stands on.
//!
//! To solve one system from Rust: read it with [`files::matrix::read`] and [`files::vector::read`],
//! join the parts with [`system::System::assemble`], and hand a [`sweep::Request`] to
//! [`sweep::run()`].
#![deny(unsafe_code)]
#![warn(missing_docs)]

pub mod appraise;
pub mod base;
pub mod choose;
pub mod cli;
pub mod files;
pub mod job;
pub mod kernel;
pub mod operator;
pub mod report;
pub mod solve;
pub mod sweep;
pub mod system;
pub mod team;
