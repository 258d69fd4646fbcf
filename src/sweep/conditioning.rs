//! How much of a solution rounding may have eaten.

use crate::solve::Process;

/// Beyond this condition a relative rounding error ε of the data alone can change x by ε·10¹³
/// ≈ 0.2 %, and an iterative method in double precision has no digits to vouch for.
pub const CONDITION_MAX: f64 = 1e13;

/// σ_max/σ_min of W A, not scaled.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct Condition {
    /// What is known of it: the condition itself where `exact`.
    pub value: f64,
    /// From a dense decomposition; otherwise from the process, which can only miss small singular
    /// values: the true condition is at least this.
    pub exact: bool,
    /// As high as it may be, as far as one can tell; `value` where nothing else is known.
    pub possible: f64,
}

impl Condition {
    /// From the bidiagonal of a process; `None` before its first step.
    pub fn of_process(process: &Process) -> Option<Self> {
        let (largest, smallest) = process.singular_values_extreme()?;
        let value = largest / smallest;
        Some(Self { value, exact: false, possible: value })
    }

    /// Where the columns were evened out. `span` is the largest over the smallest column norm,
    /// `process` that of the even columns, `columns` their number.
    ///
    /// κ(WA) ≥ span. Even columns have, to √n, the smallest condition of all scalings (van der
    /// Sluis, Numer. Math. 14:14, 1969), so κ(WA) ≥ κ(WAD)/√n; and κ(WA) ≤ κ(WAD)·span.
    pub fn of_evened(span: f64, process: Option<&Process>, columns: usize) -> Self {
        let evened = process.and_then(Self::of_process).map_or(1.0, |even| even.value);
        let value = span.max(evened / (columns as f64).sqrt());
        Self { value, exact: false, possible: value.max(span * evened) }
    }

    /// From a dense decomposition.
    pub fn exact(value: f64) -> Self {
        Self { value, exact: true, possible: value }
    }

    /// Whether the condition may lie beyond [`CONDITION_MAX`], or is not a number.
    pub fn hopeless(&self) -> bool {
        self.possible.is_nan() || self.possible > CONDITION_MAX
    }
}
