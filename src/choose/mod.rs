//! Rules that choose a strength, one file each, and the verdict over them.
//!
//! A rule sees records of a sweep, never the matrix. Each gives its own strength, whether it
//! applies and why not, and whether it sits on an edge of the range.

pub mod corner;
pub mod corner_pruned;
pub mod noise_plain;
pub mod verdict;

pub use verdict::{Choice, Rule, RuleResult, Verdict, choose};

use crate::solve::{Process, Solved};

/// One point of the trade-off curve.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Point {
    /// λ.
    pub strength: f64,
    /// ρ, not squared.
    pub residual_norm: f64,
    /// η, not squared.
    pub penalty_norm: f64,
    /// [`crate::solve::Stop::converged`] of the track.
    pub converged: bool,
}

impl From<&Solved> for Point {
    fn from(solved: &Solved) -> Self {
        Self {
            strength: solved.strength,
            residual_norm: solved.residual_norm,
            penalty_norm: solved.penalty_norm,
            converged: solved.stop.converged(),
        }
    }
}

/// What a rule may look at.
#[derive(Clone, Copy)]
pub struct Curve<'a> {
    /// Strengths descending, as swept.
    pub points: &'a [Point],
    /// Scalars from which ρ, η and dη/dλ follow at any strength; present for a fan.
    pub process: Option<&'a Process>,
    /// Number of data of positive weight, where σ is stated.
    pub data_of_known_noise: Option<usize>,
}
