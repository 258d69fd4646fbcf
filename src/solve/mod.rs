//! Iterative and direct solution of damped least-squares problems, many at once.
//!
//! minimise over x:  ‖W(Ax − b)‖² + λ² ‖P(x − x_ref)‖²,  P = diag(p)
//!
//! One loop ([`engine`]) drives a [`Recurrence`]; a method is `start` and `step`, one pass of the
//! matrix each. A *lane* is one right-hand side in the blocks; a *track* is one strength of one
//! lane, with a model of its own. Methods on the Golub–Kahan process carry any number of tracks
//! per lane.

pub mod certificate;
pub mod cgls;
mod cgls_lane;
pub mod direct;
pub mod engine;
pub mod fan;
mod golub_kahan;
pub mod history;
mod jacobi;
pub mod lsmr;
pub mod lsqr;
pub(crate) mod pieces;
pub mod problem;
pub mod process;
pub mod stop;

pub use engine::{Outcome, Progress, Scout, Watch, run};
pub use history::HistoryRow;
pub use problem::{Lane, Method, Problem, Solved};
pub use process::Process;
pub use stop::{Fault, Interrupt, Stop, StopRules};

/// What one call of [`Recurrence::step`] was.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Stepped {
    /// One step of the method on every lane in the blocks: one pass.
    Iteration,
    /// A pass spent on recomputing what was recurred; the models did not change.
    Refresh,
    /// A step of tracks opened later, on kept vectors: no pass.
    Replay,
}

/// What a track's scalars say; all norms in the operator's own variables.
#[derive(Debug, Clone, Copy, Default)]
pub struct Estimate {
    /// √(‖r‖² + λ²‖y‖²).
    pub total: f64,
    /// ‖y‖, which is the penalty norm η when L was made into I.
    pub penalty: f64,
    /// ‖Ãᵀr − λ²y‖.
    pub gradient: f64,
    /// The gradient is not merely recurred (CGLS: since the last refresh).
    pub trusted: bool,
    /// The process ended: no further step can change the model.
    pub ended: bool,
    /// The method knows that rounding keeps it from going on.
    pub floor: bool,
}

impl Estimate {
    /// ‖r‖ from the total, λ and ‖y‖.
    pub fn residual(&self, strength: f64) -> f64 {
        let penalty = strength * self.penalty;
        (self.total * self.total - penalty * penalty).max(0.0).sqrt()
    }
}

/// A method: `start` and `step`, each one pass. No loop, no printing, no clock, no allocation.
pub trait Recurrence {
    /// First pass: u = W(b − A x₀), s = Ãᵀu, and every track at y = 0. Called once.
    fn start(&mut self);

    /// Advances every lane in the blocks; at most one pass, as [`Stepped`] tells.
    fn step(&mut self) -> Stepped;

    /// Number of tracks; each keeps its number when others freeze.
    fn tracks(&self) -> usize;

    /// Norms of a track after the last step, from scalars: O(1), no pass.
    fn estimate(&self, track: usize) -> Estimate;

    /// Lane of a track, in the problem's numbering.
    fn lane(&self, track: usize) -> usize;

    /// No further step changes anything in this lane.
    fn lane_ended(&self, lane: usize) -> bool;

    /// The first non-finite number met in a lane, where it can be placed.
    fn fault(&self, lane: usize) -> Option<Fault>;

    /// Stops updating a track; its model stays as it is.
    fn freeze(&mut self, track: usize);

    /// Takes lanes without a live track out of the blocks. The bits of the others do not change.
    fn pack(&mut self);

    /// Gives every lane these strengths, as if it had carried them from the start. Only for
    /// methods made with a scout; panics otherwise.
    fn open(&mut self, strengths: &[f64]);

    /// Writes the track's y, length n.
    fn model(&self, track: usize, y: &mut [f64]);

    /// The lane's Golub–Kahan scalars; `None` for methods without.
    fn process(&self, lane: usize) -> Option<&Process>;

    /// Bytes of blocks, tracks, scratch and room for α and β; lists of a few numbers a lane or
    /// track are left out.
    fn workspace_bytes(&self) -> u64;
}
