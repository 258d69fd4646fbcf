//! Row weights wᵢ, applied in the pass; the stored matrix is never scaled.

use ndarray::Array2;

/// Weights of the rows; 0 leaves a row out.
#[derive(Debug, Clone, PartialEq, Default)]
pub enum RowWeights {
    /// Every weight is 1.
    #[default]
    Ones,
    /// m weights, the same for every data set.
    Shared(Vec<f64>),
    /// m×k weights, one column a data set.
    PerSet(Array2<f64>),
}

impl RowWeights {
    /// Weight of row `i` in data set `set`.
    pub fn at(&self, i: usize, set: usize) -> f64 {
        match self {
            Self::Ones => 1.0,
            Self::Shared(weights) => weights[i],
            Self::PerSet(weights) => weights[[i, set]],
        }
    }
}
