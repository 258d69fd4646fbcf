//! The one loop: it owns time, stopping, history, progress and interruption.

use std::time::{Duration, Instant};

use crate::base::sums;
use crate::operator::Operator;
use crate::solve::certificate::{self, Candidate, Certified, Frobenius};
use crate::solve::cgls::Cgls;
use crate::solve::fan::Fan;
use crate::solve::history::HistoryRow;
use crate::solve::lsmr::Lsmr;
use crate::solve::lsqr::Lsqr;
use crate::solve::problem::{Method, Problem, Solved};
use crate::solve::process::Process;
use crate::solve::stop::{Fault, Interrupt, Stop, StopRules, rounding_of_residual};
use crate::solve::{Estimate, Recurrence, Stepped};

/// What the loop tells while it runs.
#[derive(Debug, Clone, Copy)]
pub struct Progress {
    /// Iterations since the tracks were opened; while a scout runs, its steps.
    pub iteration: u64,
    /// Traversals of the matrix so far.
    pub passes: u64,
    /// Tracks opened; 0 while a scout runs.
    pub tracks: usize,
    /// Tracks that have not stopped.
    pub tracks_live: usize,
    /// Largest relative gradient among live tracks, recurred.
    pub relative_gradient: f64,
    /// [`StopRules::gradient_tolerance`], which `relative_gradient` is to reach.
    pub tolerance: f64,
    /// Since the group began.
    pub elapsed: Duration,
}

/// Whoever looks on: shows progress, and may ask for an end.
pub trait Watch: Sync {
    /// Called after every step, on the thread that runs the loop.
    fn progress(&self, _progress: &Progress) {}

    /// Asked before every step; a reason ends all tracks with the models they have.
    fn interrupted(&self) -> Option<Interrupt> {
        None
    }
}

/// Looks on and says nothing.
pub struct Unwatched;

impl Watch for Unwatched {}

/// Strengths to be chosen after a few steps, when the largest singular value is known.
pub struct Scout<'a> {
    /// Steps before `choose` is asked; fewer where every lane ended or an end was asked for.
    pub steps: usize,
    /// Gets the processes of all lanes; returns at least one λ for all of them.
    pub choose: &'a dyn Fn(&[&Process]) -> Vec<f64>,
}

/// Everything a run leaves.
#[derive(Debug)]
pub struct Outcome {
    /// One record per track: lanes in order, strengths in order within a lane.
    pub solved: Vec<Solved>,
    /// Traversals of the matrix: start, steps, refreshes, certificates.
    pub passes: u64,
    /// Iterations of the slowest track.
    pub iterations: u64,
    /// One row per live track and iteration, in order of iterations.
    pub history: Vec<HistoryRow>,
    /// One per lane, for methods on the Golub–Kahan process.
    pub processes: Vec<Process>,
    /// [`Recurrence::workspace_bytes`] at the end of the loop.
    pub workspace_bytes: u64,
    /// Who asked for an end before every track had stopped by itself.
    pub interrupted: Option<Interrupt>,
}

/// Runs one group of lanes to the end of its last track.
///
/// Cost: one pass per iteration for all lanes together, plus one to start and one per
/// [`certificate::WIDTH_MAX`] tracks to certify.
///
/// Panics if lanes carry a number of strengths that the method or a stacked problem cannot, or if
/// a block does not have the shape that [`Problem`] documents.
pub fn run<'p>(
    problem: &'p Problem<'p>,
    method: Method,
    rules: &'p StopRules,
    scout: Option<Scout<'_>>,
    watch: &dyn Watch,
) -> Outcome {
    let frobenius = Frobenius::of(problem);
    check(problem, method, scout.is_some());
    let of_lane = |with_strength: bool| -> Vec<f64> {
        let norm = |lane: &crate::solve::Lane| {
            let strength = if with_strength { lane.strengths[0] } else { 0.0 };
            frobenius.in_steps(problem, lane.set, strength)
        };
        problem.lanes.iter().map(norm).collect()
    };
    let steps_max = usize::try_from(rules.max_iterations.min(100_000)).expect("at most 100,000");
    let scout_steps = scout.as_ref().map(|s| s.steps);
    let recurrence: Box<dyn Recurrence + 'p> = match method {
        Method::Lsqr => {
            Box::new(Fan::<Lsqr>::new(problem, &of_lane(problem.stacked), steps_max, scout_steps))
        }
        Method::Lsmr => {
            Box::new(Fan::<Lsmr>::new(problem, &of_lane(problem.stacked), steps_max, scout_steps))
        }
        Method::Cgls => Box::new(Cgls::new(problem, &of_lane(true), rules)),
    };
    Run {
        problem,
        rules,
        watch,
        frobenius,
        recurrence,
        penalty_is_step: problem.penalty_is_step(),
        steps_are_model: problem.steps_are_model(),
        tracks: Vec::new(),
        history: Vec::new(),
    }
    .go(scout)
}

fn check(problem: &Problem<'_>, method: Method, scouting: bool) {
    let single = problem.stacked || !method.carries_strengths();
    for lane in &problem.lanes {
        let count = lane.strengths.len();
        assert!(!single || count == 1, "one strength a lane");
        assert!(scouting == (count == 0), "strengths, or a scout that chooses them");
        assert!(lane.strengths.iter().all(|s| *s >= 0.0 && s.is_finite()), "finite strengths");
    }
    assert!(problem.data.nrows() == problem.matrix.rows(), "one datum per row");
}

/// What the loop keeps of a track.
struct TrackState {
    lane: usize,
    set: usize,
    strength: f64,
    frobenius: f64,
    /// ‖[r; λy]‖ at the start is below this: nothing to do.
    data_norm: f64,
    /// Part of the rounding level that does not depend on y.
    rounding_fixed: f64,
    noise_limit: Option<f64>,
    iterations: u64,
    stop: Option<Stop>,
}

struct Run<'a, 'p> {
    problem: &'p Problem<'p>,
    rules: &'a StopRules,
    watch: &'a dyn Watch,
    frobenius: Frobenius,
    recurrence: Box<dyn Recurrence + 'p>,
    /// ‖y‖ is ‖P(x − x_ref)‖.
    penalty_is_step: bool,
    /// D = 1: the gradient in y is that in x.
    steps_are_model: bool,
    tracks: Vec<TrackState>,
    history: Vec<HistoryRow>,
}

impl Run<'_, '_> {
    fn go(mut self, mut scout: Option<Scout<'_>>) -> Outcome {
        let begun = Instant::now();
        let (mut iteration, mut passes) = (0u64, 1u64);
        let mut interrupted = None;
        self.recurrence.start();
        if scout.is_none() {
            let strengths: Vec<Vec<f64>> =
                self.problem.lanes.iter().map(|lane| lane.strengths.clone()).collect();
            self.open_tracks(&strengths);
        }
        loop {
            let out_of_time = self.rules.time_limit.is_some_and(|limit| Instant::now() >= limit);
            interrupted = interrupted
                .or_else(|| self.watch.interrupted())
                .or(out_of_time.then_some(Interrupt::TimeLimit));
            let scouted = scout.as_ref().is_some_and(|s| {
                iteration >= s.steps as u64 || self.lanes_ended() || interrupted.is_some()
            });
            if scouted && let Some(scout) = scout.take() {
                let processes: Vec<&Process> = (0..self.problem.lanes.len())
                    .map(|lane| self.recurrence.process(lane).expect("a process"))
                    .collect();
                let strengths = (scout.choose)(&processes);
                self.recurrence.open(&strengths);
                self.open_tracks(&vec![strengths; self.problem.lanes.len()]);
                iteration = 0;
            }
            if scout.is_none() {
                self.judge(iteration, interrupted);
                if self.tracks.iter().all(|track| track.stop.is_some()) {
                    break;
                }
            }
            let stepped = self.recurrence.step();
            iteration += u64::from(stepped != Stepped::Refresh);
            passes += u64::from(stepped != Stepped::Replay);
            if stepped == Stepped::Replay {
                // Lanes that ended meanwhile could not leave before.
                self.recurrence.pack();
            }
            self.note(iteration, passes, stepped, begun.elapsed());
        }
        let workspace_bytes = self.recurrence.workspace_bytes();
        self.finish(passes, interrupted, workspace_bytes)
    }

    fn lanes_ended(&self) -> bool {
        (0..self.problem.lanes.len()).all(|lane| self.recurrence.lane_ended(lane))
    }

    fn open_tracks(&mut self, strengths: &[Vec<f64>]) {
        let n = self.problem.unknowns();
        for (lane, strengths) in self.problem.lanes.iter().zip(strengths) {
            let set = lane.set;
            let data: Vec<f64> = (0..self.problem.matrix.rows())
                .map(|i| self.problem.matrix.weights().at(i, set) * self.problem.data[[i, set]])
                .collect();
            let origin: Vec<f64> = (0..n).map(|j| self.problem.origin_at(j, set)).collect();
            let data_norm = sums::norm(&data);
            let in_model = self.frobenius.in_model(self.problem, set, 0.0);
            let used = (0..self.problem.matrix.rows())
                .filter(|&i| self.problem.matrix.weights().at(i, set) > 0.0)
                .count();
            for &strength in strengths {
                let first = self.tracks.len();
                self.tracks.push(TrackState {
                    lane: self.recurrence.lane(first),
                    set,
                    strength,
                    frobenius: self.frobenius.in_steps(self.problem, set, strength),
                    data_norm,
                    rounding_fixed: rounding_of_residual(in_model, sums::norm(&origin), data_norm),
                    noise_limit: self.rules.noise_factor.map(|tau| tau * (used as f64).sqrt()),
                    iterations: 0,
                    stop: None,
                });
            }
        }
    }

    /// Freezes every track that has reason to stop.
    fn judge(&mut self, iteration: u64, interrupted: Option<Interrupt>) {
        let mut packing = false;
        for place in 0..self.tracks.len() {
            if self.tracks[place].stop.is_some() {
                continue;
            }
            let estimate = self.recurrence.estimate(place);
            let fault =
                self.recurrence.fault(self.tracks[place].lane).map(|f| self.problem.in_file(f));
            let reason = fault
                .map(Stop::NotFinite)
                .or_else(|| self.reason(place, &estimate, iteration))
                .or(interrupted.map(Stop::Interrupted));
            if let Some(stop) = reason {
                let track = &mut self.tracks[place];
                (track.stop, track.iterations) = (Some(stop), iteration);
                self.recurrence.freeze(place);
                packing = true;
            }
        }
        if packing && self.tracks.iter().any(|track| track.stop.is_none()) {
            self.recurrence.pack();
        }
    }

    fn reason(&self, place: usize, estimate: &Estimate, iteration: u64) -> Option<Stop> {
        let track = &self.tracks[place];
        let rules = self.rules;
        if iteration == 0 && estimate.total == 0.0 {
            return Some(Stop::ZeroData);
        }
        if track.strength == 0.0
            && let Some(stop) = self.reason_from_residual(track, estimate)
        {
            return Some(stop);
        }
        let tolerance = rules.gradient_tolerance.max(f64::EPSILON);
        let passed = estimate.gradient <= tolerance * track.frobenius * estimate.total;
        if (passed && estimate.trusted) || estimate.ended {
            let floor = rules.gradient_tolerance == 0.0;
            return Some(if floor { Stop::Floor } else { Stop::Gradient });
        }
        if estimate.floor && estimate.trusted {
            return Some(if rules.gradient_tolerance == 0.0 { Stop::Floor } else { Stop::Stalled });
        }
        (iteration >= rules.max_iterations).then_some(Stop::IterationLimit)
    }

    fn reason_from_residual(&self, track: &TrackState, estimate: &Estimate) -> Option<Stop> {
        let residual = estimate.total;
        let rounding =
            track.rounding_fixed + 10.0 * f64::EPSILON * track.frobenius * estimate.penalty;
        if residual <= rounding && estimate.trusted {
            return Some(Stop::ExactFit);
        }
        let tolerance = self.rules.residual_tolerance;
        if tolerance > 0.0 && residual <= tolerance * track.data_norm && estimate.trusted {
            return Some(Stop::Residual);
        }
        track.noise_limit.filter(|limit| residual <= *limit).map(|_| Stop::NoiseLevel)
    }

    fn note(&mut self, iteration: u64, passes: u64, stepped: Stepped, elapsed: Duration) {
        let seconds = elapsed.as_secs_f64();
        let mut worst = 0.0f64;
        for (place, track) in self.tracks.iter().enumerate() {
            if track.stop.is_some() {
                continue;
            }
            let estimate = self.recurrence.estimate(place);
            let relative = estimate.gradient / (track.frobenius * estimate.total);
            worst = worst.max(if relative.is_finite() { relative } else { 0.0 });
            if stepped == Stepped::Refresh {
                continue;
            }
            // What a norm in the steps' variables says of the model depends on what these are.
            let known = |norm: f64, is: bool| if is { norm } else { f64::NAN };
            let split = self.penalty_is_step;
            let strength = if split { track.strength } else { 0.0 };
            self.history.push(HistoryRow {
                set: track.set,
                strength: track.strength,
                iteration,
                residual_norm: known(estimate.residual(strength), split || track.strength == 0.0),
                penalty_norm: known(estimate.penalty, split),
                gradient_norm: known(estimate.gradient, self.steps_are_model),
                seconds,
            });
        }
        self.watch.progress(&Progress {
            iteration,
            passes,
            tracks: self.tracks.len(),
            tracks_live: self.tracks.iter().filter(|track| track.stop.is_none()).count(),
            relative_gradient: worst,
            tolerance: self.rules.gradient_tolerance,
            elapsed,
        });
    }

    fn finish(
        self,
        mut passes: u64,
        interrupted: Option<Interrupt>,
        workspace_bytes: u64,
    ) -> Outcome {
        let n = self.problem.unknowns();
        let processes = (0..self.problem.lanes.len())
            .filter_map(|lane| self.recurrence.process(lane).cloned())
            .collect();
        let mut candidates: Vec<Candidate> = Vec::with_capacity(self.tracks.len());
        let mut step_norms = Vec::with_capacity(self.tracks.len());
        for (place, track) in self.tracks.iter().enumerate() {
            let mut model = vec![0.0; n];
            self.recurrence.model(place, &mut model);
            step_norms.push(sums::norm(&model));
            let matrix = self.problem.matrix.matrix();
            let model: Vec<f64> = (0..n)
                .map(|j| {
                    let y = model[matrix.place_of(j)];
                    self.problem.origin_at(j, track.set) + self.problem.matrix.scale(j) * y
                })
                .collect();
            candidates.push(Candidate {
                set: track.set,
                strength: track.strength,
                model,
                iterations: track.iterations,
            });
        }
        // Blocks and tracks are given back before the certificate takes memory of its own.
        drop(self.recurrence);
        let mut solved = Vec::with_capacity(candidates.len());
        let mut tracks = self.tracks.iter().zip(step_norms);
        while !candidates.is_empty() {
            let rest = candidates.split_off(candidates.len().min(certificate::WIDTH_MAX));
            let group = std::mem::replace(&mut candidates, rest);
            passes += 1;
            for certified in certificate::certify(self.problem, &self.frobenius, group) {
                let (track, step_norm) = tracks.next().expect("a track for each candidate");
                solved.push(resolve(track, step_norm, certified, self.rules));
            }
        }
        Outcome {
            iterations: solved.iter().map(|s: &Solved| s.iterations).max().unwrap_or(0),
            solved,
            passes,
            history: self.history,
            processes,
            workspace_bytes,
            interrupted,
        }
    }
}

/// Recomputed norms have the last word on why a track stopped. `step_norm` is ‖y‖: rounding and
/// gradient are compared in the operator's own variables, where columns may have been scaled.
fn resolve(track: &TrackState, step_norm: f64, certified: Certified, rules: &StopRules) -> Solved {
    let Certified { mut solved, relative_gradient_in_steps: relative } = certified;
    let rounding = track.rounding_fixed + rounding_of_residual(track.frobenius, step_norm, 0.0);
    let total = solved.residual_norm.hypot(track.strength * solved.penalty_norm);
    let null = track.strength == 0.0 && solved.residual_norm <= 10.0 * rounding;
    let tolerance = rules.gradient_tolerance;
    let at_floor = relative * total <= 10.0 * rounding || relative <= 10.0 * f64::EPSILON;
    let candidate = track.stop.expect("a stopped track");
    solved.stop = match candidate {
        Stop::NotFinite(_) | Stop::ZeroData => candidate,
        _ if !solved.is_finite() => Stop::NotFinite(Fault::Norm),
        Stop::Residual
            if solved.residual_norm <= 10.0 * rules.residual_tolerance * solved.data_norm =>
        {
            candidate
        }
        Stop::NoiseLevel
            if track.noise_limit.is_some_and(|l| solved.residual_norm <= 1.000_001 * l) =>
        {
            candidate
        }
        _ if null => Stop::ExactFit,
        // Whatever was hoped for: this is the definition of converged.
        Stop::Gradient
        | Stop::Stalled
        | Stop::ExactFit
        | Stop::Residual
        | Stop::NoiseLevel
        | Stop::Floor
            if tolerance > 0.0 && relative <= 10.0 * tolerance =>
        {
            Stop::Gradient
        }
        Stop::IterationLimit | Stop::Interrupted(_) if tolerance > 0.0 && relative <= tolerance => {
            Stop::Gradient
        }
        _ if tolerance == 0.0 && at_floor => Stop::Floor,
        Stop::IterationLimit | Stop::Interrupted(_) => candidate,
        _ => Stop::Stalled,
    };
    solved
}
