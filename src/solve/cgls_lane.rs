//! What CGLS keeps of a lane, and when it believes it.

use crate::solve::cgls::REFRESH_STEPS;
use crate::solve::stop::{self, Fault, StopRules};

/// A recomputed gradient above this many times the recurred one has drifted: the direction is
/// started anew.
const DRIFT: f64 = 2.0;

/// Drifted refreshes in a row, none of which halved the gradient, that mean the floor is reached.
const IDLE_REFRESHES_MAX: u32 = 3;

/// Scalars of one lane.
pub(super) struct LaneState {
    pub(super) damping: f64,
    pub(super) frobenius: f64,
    pub(super) data_norm: f64,
    /// γ = ‖g‖².
    pub(super) gamma: f64,
    /// pᵀg and ‖p‖².
    pub(super) slope: f64,
    pub(super) direction_squared: f64,
    /// ‖[r; λy]‖², and what it was when last recomputed: the recurred one is a difference from it.
    pub(super) total_squared: f64,
    pub(super) total_squared_refreshed: f64,
    /// The last direction was one that the operator takes to nothing but rounding.
    pub(super) null_direction: bool,
    pub(super) since_refresh: usize,
    /// ‖y‖².
    pub(super) model_squared: f64,
    pub(super) trusted: bool,
    pub(super) smallest: f64,
    pub(super) idle: u32,
    pub(super) floor: bool,
    pub(super) fault: Option<Fault>,
    /// y, once the lane has left the blocks.
    pub(super) packed: Option<Vec<f64>>,
}

impl LaneState {
    pub(super) fn new(damping: f64, frobenius: f64) -> Self {
        Self {
            damping,
            frobenius,
            data_norm: 0.0,
            gamma: 0.0,
            slope: 0.0,
            direction_squared: 0.0,
            total_squared: 0.0,
            total_squared_refreshed: 0.0,
            null_direction: false,
            since_refresh: 0,
            model_squared: 0.0,
            trusted: true,
            smallest: f64::INFINITY,
            idle: 0,
            floor: false,
            fault: None,
            packed: None,
        }
    }

    /// The recurred gradient or residual says that the lane is done.
    pub(super) fn claims(&self, rules: &StopRules) -> bool {
        let total = self.total_squared.max(0.0).sqrt();
        // Every step since took a rounding error of the starting value: no digit is left.
        let lost = 2.0 * REFRESH_STEPS as f64 * f64::EPSILON * self.total_squared_refreshed;
        self.null_direction
            || self.total_squared <= lost
            || self.gamma.sqrt()
                <= rules.gradient_tolerance.max(f64::EPSILON) * self.frobenius * total
            || total <= self.rounding().max(rules.residual_tolerance * self.data_norm)
    }

    pub(super) fn rounding(&self) -> f64 {
        stop::rounding_of_residual(self.frobenius, self.model_squared.sqrt(), self.data_norm)
    }

    /// Takes recomputed sums; returns whether the direction can be kept.
    pub(super) fn accept_refresh(
        &mut self,
        gamma: f64,
        model_squared: f64,
        residual_squared: f64,
    ) -> bool {
        let (recomputed, recurred) = (gamma.sqrt(), self.gamma.sqrt());
        let drifted = recomputed > DRIFT * recurred || self.null_direction;
        let progressed = recomputed <= 0.5 * self.smallest;
        self.idle = if drifted && !progressed { self.idle + 1 } else { 0 };
        self.smallest = self.smallest.min(recomputed);
        self.gamma = gamma;
        self.model_squared = model_squared;
        self.total_squared = residual_squared + self.damping.powi(2) * model_squared;
        self.total_squared_refreshed = self.total_squared;
        self.null_direction = false;
        self.trusted = true;
        self.since_refresh = 0;
        self.floor =
            self.idle >= IDLE_REFRESHES_MAX || recomputed <= 0.1 * self.frobenius * self.rounding();
        !drifted
    }
}
