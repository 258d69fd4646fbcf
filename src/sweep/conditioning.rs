//! How much of a solution rounding may have eaten.

use crate::solve::Process;

/// Beyond this condition a relative rounding error ε of the data alone can change x by ε·10¹³
/// ≈ 0.2 %, and an iterative method in double precision has no digits to vouch for.
pub const CONDITION_MAX: f64 = 1e13;

/// σ_max/σ_min of W A, not scaled.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Condition {
    pub value: f64,
    /// From a dense decomposition; otherwise from the process, which can only miss small singular values: the
    /// true condition is at least this.
    pub exact: bool,
}

impl Condition {
    /// From the bidiagonal of a process; `None` before its first step.
    pub fn of_process(process: &Process) -> Option<Self> {
        let (largest, smallest) = process.singular_values_extreme()?;
        Some(Self { value: largest / smallest, exact: false })
    }

    pub fn hopeless(&self) -> bool {
        self.value.is_nan() || self.value > CONDITION_MAX
    }
}
