//! Stored values as numbers.

/// A stored value as the number it stands for.
pub trait Value: Copy + Send + Sync {
    /// Memory that one value takes.
    const BYTES: u64;
    /// The value as f64; exact for every storage.
    fn number(self) -> f64;
}

impl Value for f64 {
    const BYTES: u64 = 8;
    #[inline(always)]
    fn number(self) -> f64 {
        self
    }
}

impl Value for f32 {
    const BYTES: u64 = 4;
    #[inline(always)]
    fn number(self) -> f64 {
        f64::from(self)
    }
}

/// An entry of a pattern matrix: 1, kept nowhere.
impl Value for () {
    const BYTES: u64 = 0;
    #[inline(always)]
    fn number(self) -> f64 {
        1.0
    }
}
