//! Which strengths, which lanes, in what groups; and the runs themselves.
//!
//! Data sets are lanes of shared passes, at most [`LANES_MAX`] in a group. Where L can be made
//! into I by a change of variables each lane carries all its strengths in one process (a *fan*);
//! otherwise each strength is a lane over [WA; λP].

pub mod conditioning;
pub mod dense;
pub mod plan;
pub mod range;
pub mod run;

pub use conditioning::Condition;
pub use plan::{Plan, Scaling};
pub use range::Strengths;
pub use run::{Request, SetSweep, Sweep, run};

/// Most lanes in one group: wider blocks leave the cache.
pub const LANES_MAX: usize = 16;
