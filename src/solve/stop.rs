//! Why a track stopped, and the rules that decide it.

use std::time::Instant;

/// Where a number stopped being finite.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Fault {
    /// Row of the matrix, from 0.
    Row(usize),
    /// Column of the matrix, from 0.
    Column(usize),
    /// A norm overflowed though every element is finite.
    Norm,
}

/// Who ended a run before its tracks had stopped by themselves.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Interrupt {
    /// [`StopRules::time_limit`] has passed.
    TimeLimit,
    /// Whoever looks on asked for it.
    Signal,
}

/// Why a track stopped.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Stop {
    /// The relative gradient, recomputed from its definition, is within ten times the tolerance.
    Gradient,
    /// λ = 0 and the residual norm reached the tolerance.
    Residual,
    /// λ = 0 and the residual is at rounding level: the data are fitted exactly.
    ExactFit,
    /// The weighted data minus the reference's prediction are zero: x = x_ref.
    ZeroData,
    /// λ = 0 and the residual norm fell to τ√m.
    NoiseLevel,
    /// With tolerance 0: the recomputed gradient is at rounding level.
    Floor,
    /// The recurred gradient passed, the recomputed one did not, or rounding ended the progress.
    Stalled,
    /// [`StopRules::max_iterations`] was reached first.
    IterationLimit,
    /// Ended from outside; the model is that of the last iteration.
    Interrupted(Interrupt),
    /// Not iterated: a dense decomposition.
    Direct,
    /// A number stopped being finite.
    NotFinite(Fault),
}

impl Stop {
    /// The word in files and tables.
    pub fn word(self) -> &'static str {
        match self {
            Self::Gradient => "gradient",
            Self::Residual => "residual",
            Self::ExactFit => "exact-fit",
            Self::ZeroData => "zero-data",
            Self::NoiseLevel => "noise-level",
            Self::Floor => "floor",
            Self::Stalled => "stalled",
            Self::IterationLimit => "iteration-limit",
            Self::Interrupted(Interrupt::TimeLimit) => "time-limit",
            Self::Interrupted(Interrupt::Signal) => "signal",
            Self::Direct => "direct",
            Self::NotFinite(_) => "not-finite",
        }
    }

    /// Whether the model is what was asked for; `false` where it was cut short or broke down.
    pub fn converged(self) -> bool {
        matches!(
            self,
            Self::Gradient
                | Self::Residual
                | Self::ExactFit
                | Self::ZeroData
                | Self::NoiseLevel
                | Self::Floor
                | Self::Direct
        )
    }
}

/// When to stop. Every default is stated here and nowhere else.
#[derive(Debug, Clone, PartialEq)]
pub struct StopRules {
    /// Relative gradient (see [`crate::solve::certificate`]) at which a track has converged; 0 asks
    /// for rounding level.
    pub gradient_tolerance: f64,
    /// λ = 0 only: ‖r‖ ≤ this × ‖b‖ is converged. 0: rounding level only.
    pub residual_tolerance: f64,
    /// λ = 0 only: stop at ‖r‖ ≤ τ√(rows of positive weight).
    pub noise_factor: Option<f64>,
    /// Most iterations of a track; passes for refreshes and certificates come on top.
    pub max_iterations: u64,
    /// The moment at which every track stops; one for all groups of a sweep.
    pub time_limit: Option<Instant>,
}

impl StopRules {
    /// Default of `gradient_tolerance`.
    pub const GRADIENT_TOLERANCE: f64 = 1e-8;
    /// Default of `residual_tolerance`: rounding level only.
    pub const RESIDUAL_TOLERANCE: f64 = 0.0;

    /// Twenty times the smaller side, between 1,000 and 20,000: ill-conditioned survey systems need
    /// about eleven times the smaller side at λ = 0 (illc1033: 3,700 iterations for 320 unknowns).
    pub fn max_iterations_default(rows: usize, columns: usize) -> u64 {
        (20 * rows.min(columns) as u64).clamp(1_000, 20_000)
    }
}

/// Rounding level of ‖r‖ for a model of norm ‖x‖ and data of norm ‖b‖: 10 ε (‖A‖_F‖x‖ + ‖b‖).
pub fn rounding_of_residual(frobenius: f64, model_norm: f64, data_norm: f64) -> f64 {
    10.0 * f64::EPSILON * (frobenius * model_norm + data_norm)
}
