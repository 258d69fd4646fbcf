//! What happened, iteration by iteration.

/// One track after one iteration.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct HistoryRow {
    /// Data set, from 0.
    pub set: usize,
    /// λ.
    pub strength: f64,
    /// Iterations done, from 1.
    pub iteration: u64,
    /// ‖r‖ = √(total² − λ²‖y‖²), recurred; NaN where a stacked operator does not tell it from the
    /// penalty.
    pub residual_norm: f64,
    /// ‖y‖, recurred: η where P(x − x_ref) = y. NaN as `residual_norm`.
    pub penalty_norm: f64,
    /// ‖Ãᵀr − λ²y‖ in the operator's own variables, recurred.
    pub gradient_norm: f64,
    /// Since the group of this track began.
    pub seconds: f64,
}
