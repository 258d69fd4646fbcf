//! What happened, iteration by iteration.

/// One track after one iteration.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct HistoryRow {
    pub set: usize,
    pub strength: f64,
    pub iteration: u64,
    pub residual_norm: f64,
    pub penalty_norm: f64,
    pub gradient_norm: f64,
    pub seconds: f64,
}
