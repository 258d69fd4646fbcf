//! Runs the groups of a sweep and gathers their tracks by data set.

use ndarray::{Array2, ArrayView2};

use crate::operator::{RowWeights, StoredRows, Weighted};
use crate::solve::{
    self, HistoryRow, Interrupt, Lane, Method, Outcome, Problem, Process, Scout, Solved, StopRules,
    Watch,
};
use crate::sweep::plan::{Facts, Plan, Scaling};
use crate::sweep::{LANES_MAX, Strengths, range};

/// A family of strengths on one system.
pub struct Request<'a> {
    /// A, m×n.
    pub matrix: &'a StoredRows,
    /// W: 1/σ times the weight of the block, 0 for a datum that does not count.
    pub weights: &'a RowWeights,
    /// m×sets, data units.
    pub data: ArrayView2<'a, f64>,
    /// n×1 or n×sets.
    pub reference: Option<&'a Array2<f64>>,
    /// n×1 or n×sets, where it is not the reference.
    pub start: Option<&'a Array2<f64>>,
    /// p, one factor per unknown.
    pub penalty: Option<&'a [f64]>,
    /// Unknowns held at the reference.
    pub held: Option<&'a [bool]>,
    /// Not used by [`crate::sweep::dense`].
    pub method: Method,
    /// Column scaling; not used by [`crate::sweep::dense`].
    pub scaling: Scaling,
    /// Which λ. With several, all are to be above 0: 0 is solved in other variables.
    pub strengths: Strengths,
    /// When tracks stop; its time limit is one for all groups.
    pub rules: StopRules,
}

/// One data set's tracks.
#[derive(Debug)]
pub struct SetSweep {
    /// In the order of [`Sweep::strengths`].
    pub solved: Vec<Solved>,
    /// The Golub–Kahan scalars of a fan: every norm at any strength follows from them.
    pub process: Option<Process>,
}

/// What [`run`] leaves.
#[derive(Debug)]
pub struct Sweep {
    /// Descending.
    pub strengths: Vec<f64>,
    /// One per data set.
    pub sets: Vec<SetSweep>,
    /// Traversals of the matrix in all groups.
    pub passes: u64,
    /// Iterations of the slowest track, added over the groups that ran one after the other.
    pub iterations: u64,
    /// Rows of all groups, one group after the other; seconds begin anew in each.
    pub history: Vec<HistoryRow>,
    /// How it was solved; the same for all groups.
    pub plan: Plan,
    /// Lanes of the widest group.
    pub lanes_max: usize,
    /// The largest of the groups', which run one after the other.
    pub workspace_bytes: u64,
    /// The first reason for which a group was cut short.
    pub interrupted: Option<Interrupt>,
}

/// Runs the sweep, group by group. Stops early when `watch` asks for it; what is missing then is
/// certified as far as it came.
///
/// Panics if a block does not have its documented shape.
pub fn run(request: &Request<'_>, watch: &dyn Watch) -> Sweep {
    let bare = Weighted::new(request.matrix, request.weights, None);
    let column_squares = bare.column_squares(0);
    let facts = Facts {
        column_squares: &column_squares,
        penalty: request.penalty,
        data: (0..request.matrix.rows()).filter(|&i| request.weights.at(i, 0) > 0.0).count(),
        held: request.held,
        starts_elsewhere: request.start.is_some(),
        method: request.method,
        scaling: request.scaling,
    };
    let (smallest, many) = match &request.strengths {
        Strengths::Given(list) => {
            (list.iter().copied().fold(f64::INFINITY, f64::min), list.len() > 1)
        }
        // A scale-free stand-in: the range ends at this share of the largest singular value,
        // which is at least the largest column norm.
        Strengths::Found { .. } => {
            let largest = column_squares.iter().copied().fold(0.0, f64::max).sqrt();
            (range::SPAN * largest.max(f64::MIN_POSITIVE), true)
        }
    };
    let plan = Plan::new(&facts, smallest, many);
    let matrix = Weighted::new(request.matrix, request.weights, plan.scales.as_deref());
    let mut run = Running { request, plan: &plan, matrix: &matrix, watch, groups: Vec::new() };
    let strengths = run.all();
    let groups = std::mem::take(&mut run.groups);
    gather(request, plan.clone(), strengths, groups)
}

/// One group's outcome with the lanes that took part.
struct Group {
    lanes: Vec<Lane>,
    outcome: Outcome,
}

struct Running<'a, 'r> {
    request: &'a Request<'r>,
    plan: &'a Plan,
    matrix: &'a Weighted<'a>,
    watch: &'a dyn Watch,
    groups: Vec<Group>,
}

impl Running<'_, '_> {
    /// Runs everything; returns the strengths.
    fn all(&mut self) -> Vec<f64> {
        let sets: Vec<usize> = (0..self.request.data.ncols()).collect();
        let mut strengths = match &self.request.strengths {
            Strengths::Given(list) => Some(list.clone()),
            Strengths::Found { count } if !self.plan.fan => Some(self.scouted(*count)),
            Strengths::Found { .. } => None,
        };
        if self.plan.fan {
            for group in sets.chunks(LANES_MAX) {
                let found = self.fan(group, strengths.as_deref());
                strengths.get_or_insert(found);
            }
        } else {
            // Lanes of one strength side by side: the strengths of one data set share passes.
            let list = strengths.clone().expect("known before lanes are made");
            let lanes: Vec<Lane> = sets
                .iter()
                .flat_map(|&set| list.iter().map(move |&s| Lane { set, strengths: vec![s] }))
                .collect();
            for group in lanes.chunks(LANES_MAX) {
                self.group(group.to_vec(), None);
            }
        }
        strengths.expect("a sweep has at least one data set")
    }

    /// All strengths of some data sets in one process each; returns the strengths.
    fn fan(&mut self, sets: &[usize], strengths: Option<&[f64]>) -> Vec<f64> {
        let list = strengths.map(<[f64]>::to_vec).unwrap_or_default();
        let lanes = sets.iter().map(|&set| Lane { set, strengths: list.clone() }).collect();
        let count = match self.request.strengths {
            Strengths::Found { count } => count,
            Strengths::Given(_) => None,
        };
        let choose = |processes: &[&Process]| range::found(processes, count);
        let allowed = usize::try_from(self.request.rules.max_iterations).unwrap_or(usize::MAX);
        let scout = Scout { steps: range::SCOUT_STEPS.min(allowed), choose: &choose };
        self.group(lanes, strengths.is_none().then_some(scout));
        let solved = &self.groups.last().expect("a group just ran").outcome.solved;
        solved.iter().filter(|s| s.set == sets[0]).map(|s| s.strength).collect()
    }

    /// The range from a short process of its own, for methods without a fan: in the variables in
    /// which the penalty is I, as a fan would, and from as many data sets as one would have as lanes.
    fn scouted(&mut self, count: Option<usize>) -> Vec<f64> {
        let scale = |j: usize| match self.request.penalty.map_or(1.0, |p| p[j]) {
            _ if self.request.held.is_some_and(|held| held[j]) => 0.0,
            p if p > 0.0 => 1.0 / p,
            _ => 1.0,
        };
        let scales: Vec<f64> = (0..self.request.matrix.columns()).map(scale).collect();
        let even = Weighted::new(self.request.matrix, self.request.weights, Some(&scales));
        let sets = self.request.data.ncols().min(LANES_MAX);
        let lanes = (0..sets).map(|set| Lane { set, strengths: vec![0.0] }).collect();
        let problem = Problem { matrix: &even, start: None, ..self.problem(lanes, false) };
        let rules = StopRules {
            max_iterations: range::SCOUT_STEPS as u64,
            // Nothing but the end of the process stops it early.
            gradient_tolerance: f64::MIN_POSITIVE,
            residual_tolerance: 0.0,
            noise_factor: None,
            ..self.request.rules.clone()
        };
        let outcome = solve::run(&problem, Method::Lsqr, &rules, None, self.watch);
        let processes: Vec<&Process> = outcome.processes.iter().collect();
        let strengths = range::found(&processes, count);
        self.groups.push(Group { lanes: Vec::new(), outcome });
        strengths
    }

    fn problem(&self, lanes: Vec<Lane>, stacked: bool) -> Problem<'_> {
        Problem {
            matrix: self.matrix,
            penalty: self.request.penalty,
            stacked,
            data: self.request.data.view(),
            reference: self.request.reference.map(|r| r.view()),
            start: self.request.start.map(|s| s.view()),
            lanes,
        }
    }

    fn group(&mut self, lanes: Vec<Lane>, scout: Option<Scout<'_>>) {
        let problem = self.problem(lanes.clone(), self.plan.stacked);
        let outcome =
            solve::run(&problem, self.request.method, &self.request.rules, scout, self.watch);
        self.groups.push(Group { lanes, outcome });
    }
}

fn gather(request: &Request<'_>, plan: Plan, strengths: Vec<f64>, groups: Vec<Group>) -> Sweep {
    let mut sets: Vec<SetSweep> = (0..request.data.ncols())
        .map(|_| SetSweep { solved: Vec::with_capacity(strengths.len()), process: None })
        .collect();
    let mut sweep = Sweep {
        strengths,
        sets: Vec::new(),
        passes: 0,
        iterations: 0,
        history: Vec::new(),
        plan,
        lanes_max: 0,
        workspace_bytes: 0,
        interrupted: None,
    };
    for Group { lanes, outcome } in groups {
        sweep.passes += outcome.passes;
        sweep.workspace_bytes = sweep.workspace_bytes.max(outcome.workspace_bytes);
        sweep.interrupted = sweep.interrupted.or(outcome.interrupted);
        sweep.lanes_max = sweep.lanes_max.max(lanes.len());
        // The scouting run of a method without a fan has no lanes of its own to keep.
        if lanes.is_empty() {
            continue;
        }
        sweep.iterations += outcome.iterations;
        sweep.history.extend(outcome.history);
        for solved in outcome.solved {
            sets[solved.set].solved.push(solved);
        }
        if sweep.plan.fan {
            for (lane, process) in lanes.iter().zip(outcome.processes) {
                sets[lane.set].process = Some(process);
            }
        }
    }
    sweep.sets = sets;
    sweep
}
