//! The ways a matrix keeps its values, and which of them holds a number exactly.

use sprs::CsMatI;

use super::compressed::CompressedRows;
use crate::kernel::Value;

/// A value that the matrix can keep.
pub trait Keep: Value + Default + PartialEq + Send + Sync {
    /// The next storage that holds more.
    type Wider: Keep;

    /// The number as stored, rounded where it must be.
    fn keep(number: f64) -> Self;

    /// The number as stored, if the storage holds it exactly (a NaN counts as exact).
    fn keep_exactly(number: f64) -> Option<Self> {
        let kept = Self::keep(number);
        (kept.number() == number || number.is_nan()).then_some(kept)
    }

    /// The matrix in the variant of [`CompressedRows`] for this storage; nothing is copied.
    fn store(matrix: CsMatI<Self, u32, usize>) -> CompressedRows;
}

impl Keep for f64 {
    type Wider = f64;
    fn keep(number: f64) -> Self {
        number
    }
    fn store(matrix: CsMatI<Self, u32, usize>) -> CompressedRows {
        CompressedRows::Double(matrix)
    }
}

impl Keep for f32 {
    type Wider = f64;
    fn keep(number: f64) -> Self {
        number as f32
    }
    fn store(matrix: CsMatI<Self, u32, usize>) -> CompressedRows {
        CompressedRows::Single(matrix)
    }
}

impl Keep for () {
    type Wider = f32;
    fn keep(_: f64) -> Self {}
    fn keep_exactly(number: f64) -> Option<Self> {
        (number == 1.0).then_some(())
    }
    fn store(matrix: CsMatI<Self, u32, usize>) -> CompressedRows {
        CompressedRows::Pattern(matrix)
    }
}
