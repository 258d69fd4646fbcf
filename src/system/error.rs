//! Why a system could not be put together.

use crate::base::Complaint;

/// A fault in the parts of a system, sorted by the part at fault. Displays as its [`Complaint`].
#[derive(Debug, Clone, PartialEq, Eq, thiserror::Error)]
pub enum SystemError {
    /// Two parts that must have the same length do not.
    #[error("{0}")]
    Length(Complaint),
    /// A datum is not a number, or none is left.
    #[error("{0}")]
    Data(Complaint),
    /// A σ is zero, negative, not finite, or cannot be turned into a weight.
    #[error("{0}")]
    Uncertainty(Complaint),
    /// The weight of a block.
    #[error("{0}")]
    Weight(Complaint),
    /// The rows table.
    #[error("{0}")]
    Rows(Complaint),
    /// The columns table.
    #[error("{0}")]
    Columns(Complaint),
    /// The reference model: its shape or its values.
    #[error("{0}")]
    Reference(Complaint),
    /// The linearisation point or what was predicted there: length or values.
    #[error("{0}")]
    Linearisation(Complaint),
    /// The grid does not fit the matrix.
    #[error("{0}")]
    Grid(Complaint),
}

impl SystemError {
    /// What to tell the user.
    pub fn complaint(&self) -> &Complaint {
        match self {
            Self::Length(complaint)
            | Self::Data(complaint)
            | Self::Uncertainty(complaint)
            | Self::Weight(complaint)
            | Self::Rows(complaint)
            | Self::Columns(complaint)
            | Self::Reference(complaint)
            | Self::Linearisation(complaint)
            | Self::Grid(complaint) => complaint,
        }
    }
}
