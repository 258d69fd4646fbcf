//! CGLS with both products in one pass.
//!
//! u = Ã p,  t = Ãᵀu (one pass),  δ = ‖u‖² + λ²‖p‖²,  a = pᵀg/δ,
//! y += a p,  g −= a (t + λ² p),  γ' = ‖g‖²,  p ← g + (γ'/γ) p
//!
//! The gradient g is recurred and drifts from its definition. Every [`REFRESH_STEPS`] steps, and
//! whenever the recurred gradient claims convergence or a recurred norm has no digit left, a pass
//! recomputes it; a track is believed right after that only. Where the recomputed gradient stays
//! behind the recurred one, rounding has the last word: the lane reports its floor instead of going
//! on, since beyond it the iteration diverges. The step length is an exact line search (pᵀg, not
//! ‖g‖²), so that a refreshed gradient can be used with the old direction.
//!
//! Sources: Hestenes & Stiefel, J. Res. NBS 49:409, 1952; Björck, Elfving & Strakoš, SIMAX
//! 19:720, 1998 (attainable accuracy).

use crate::operator::{Frame, Operator, Pass, Scratch};
use crate::solve::pieces;
use crate::solve::problem::Problem;
use crate::solve::process::Process;
use crate::solve::stop::{self, Fault, StopRules};
use crate::solve::{Estimate, Recurrence, Stepped};

/// Steps between refreshes: 2 % more passes.
pub const REFRESH_STEPS: usize = 50;

/// A recomputed gradient above this many times the recurred one has drifted: the direction is
/// started anew.
const DRIFT: f64 = 2.0;

/// Drifted refreshes in a row, none of which halved the gradient, that mean the floor is reached.
const IDLE_REFRESHES_MAX: u32 = 3;

struct LaneState {
    damping: f64,
    frobenius: f64,
    data_norm: f64,
    /// γ = ‖g‖².
    gamma: f64,
    /// pᵀg and ‖p‖².
    slope: f64,
    direction_squared: f64,
    /// ‖[r; λy]‖², and what it was when last recomputed: the recurred one is a difference from it.
    total_squared: f64,
    total_squared_refreshed: f64,
    /// The last direction was one that the operator takes to nothing but rounding.
    null_direction: bool,
    /// ‖y‖².
    model_squared: f64,
    trusted: bool,
    smallest: f64,
    idle: u32,
    floor: bool,
    fault: Option<Fault>,
    /// y, once the lane has left the blocks.
    packed: Option<Vec<f64>>,
}

/// CGLS on blocks of lanes, one strength a lane: six blocks (u and b̃ of m rows, p, t, g, y of n).
pub struct Cgls<'a> {
    problem: &'a Problem<'a>,
    operator: Box<dyn Operator + 'a>,
    /// Weighted data over penalty rows, as u before the start.
    right: Vec<f64>,
    lanes: Vec<LaneState>,
    live: Vec<usize>,
    frozen: Vec<bool>,
    u: Vec<f64>,
    p: Vec<f64>,
    /// Product t, or the recomputed gradient.
    t: Vec<f64>,
    /// Gradient; during a refresh −x.
    g: Vec<f64>,
    y: Vec<f64>,
    squares: Vec<f64>,
    sums: Vec<f64>,
    sets: Vec<usize>,
    strengths: Vec<f64>,
    alpha: Vec<f64>,
    factor: Vec<f64>,
    fresh: Vec<f64>,
    scratch: Scratch,
    since_refresh: usize,
    rules: &'a StopRules,
}

impl<'a> Cgls<'a> {
    /// One strength a lane. The tolerances tell when recurred norms are worth a refresh;
    /// `frobenius[l]` is ‖[Ã; λP]‖_F of lane l.
    pub fn new(problem: &'a Problem<'a>, frobenius: &[f64], rules: &'a StopRules) -> Self {
        let operator = problem.operator();
        let (n, k) = (problem.unknowns(), problem.lanes.len());
        let strengths: Vec<f64> = problem.lanes.iter().map(|lane| lane.strengths[0]).collect();
        let damping = |l: usize| if problem.stacked { 0.0 } else { strengths[l] };
        let right = problem.right_hand_sides();
        Self {
            lanes: (0..k).map(|l| LaneState::new(damping(l), frobenius[l])).collect(),
            live: (0..k).collect(),
            frozen: vec![false; k],
            u: right.clone(),
            right,
            p: vec![0.0; n * k],
            t: vec![0.0; n * k],
            g: problem.negative_origins(),
            y: vec![0.0; n * k],
            squares: vec![0.0; k],
            sums: vec![0.0; 2 * pieces::count(n) * k],
            sets: problem.lanes.iter().map(|lane| lane.set).collect(),
            strengths,
            alpha: vec![0.0; k],
            factor: vec![0.0; k],
            fresh: vec![1.0; k],
            scratch: operator.scratch(k),
            operator,
            problem,
            since_refresh: 0,
            rules,
        }
    }

    fn width(&self) -> usize {
        self.live.len()
    }

    /// u ← Ã v + …, t ← Ãᵀu with v the direction p, or −x (held in g) for a refresh.
    fn pass(&mut self, frame: Frame) {
        let v = if frame == Frame::Step { &self.p } else { &self.g };
        self.operator.pass(Pass {
            frame,
            sets: &self.sets,
            strengths: &self.strengths,
            v,
            alpha: &self.alpha,
            u: &mut self.u,
            s: &mut self.t,
            squares: &mut self.squares,
            scratch: &mut self.scratch,
        });
    }

    /// g ← Ãᵀ(b − A x) − λ²y by definition, with x from y.
    fn refresh(&mut self) {
        self.u.copy_from_slice(&self.right);
        self.alpha.fill(-1.0);
        self.pass(Frame::Start);
        let k = self.width();
        let (lanes, live) = (&self.lanes, &self.live);
        self.g.copy_from_slice(&self.t);
        pieces::for_each(k, &mut self.g, &self.y, &mut self.sums, |g, y, sums| {
            sums.fill(0.0);
            for (g, y) in g.chunks_exact_mut(k).zip(y.chunks_exact(k)) {
                for l in 0..k {
                    g[l] -= lanes[live[l]].damping.powi(2) * y[l];
                    sums[2 * l] += g[l] * g[l];
                    sums[2 * l + 1] += y[l] * y[l];
                }
            }
        });
        for place in 0..k {
            let gamma = pieces::total(&self.sums, 2 * k, 2 * place);
            let model_squared = pieces::total(&self.sums, 2 * k, 2 * place + 1);
            let squared = self.squares[place];
            let finite = gamma.is_finite() && squared.is_finite();
            let fault = if finite { None } else { Some(self.locate(place)) };
            let lane = &mut self.lanes[self.live[place]];
            lane.fault = lane.fault.or(fault);
            let kept = lane.accept_refresh(gamma, model_squared, squared);
            (self.fresh[place], self.factor[place]) = if kept { (0.0, 1.0) } else { (1.0, 0.0) };
        }
        self.since_refresh = 0;
    }

    /// g ← −x = −(x₀ + D y), the v of a refresh.
    fn hold_negative_model(&mut self) {
        let k = self.width();
        for (j, (g, y)) in self.g.chunks_mut(k).zip(self.y.chunks(k)).enumerate() {
            let d = self.problem.matrix.scale(j);
            for l in 0..k {
                g[l] = -(self.problem.origin_at(j, self.sets[l]) + d * y[l]);
            }
        }
    }

    /// p ← fresh·g + factor·p, pᵀg and ‖p‖². A step has fresh 1; after a refresh a direction is
    /// kept (0, 1) or started anew (1, 0).
    fn turn_direction(&mut self) {
        let k = self.width();
        let (fresh, factor) = (&self.fresh, &self.factor);
        pieces::for_each(k, &mut self.p, &self.g, &mut self.sums, |p, g, sums| {
            sums.fill(0.0);
            for (p, g) in p.chunks_exact_mut(k).zip(g.chunks_exact(k)) {
                for l in 0..k {
                    p[l] = fresh[l] * g[l] + factor[l] * p[l];
                    sums[2 * l] += p[l] * g[l];
                    sums[2 * l + 1] += p[l] * p[l];
                }
            }
        });
        for place in 0..k {
            let lane = &mut self.lanes[self.live[place]];
            lane.slope = pieces::total(&self.sums, 2 * k, 2 * place);
            lane.direction_squared = pieces::total(&self.sums, 2 * k, 2 * place + 1);
        }
    }

    /// y += a p, g −= a (t + λ²p), γ.
    fn advance(&mut self) {
        let k = self.width();
        for place in 0..k {
            let lane = &mut self.lanes[self.live[place]];
            let delta = self.squares[place] + lane.damping.powi(2) * lane.direction_squared;
            // ‖Ãp‖ below ε‖Ã‖‖p‖ is rounding: a step of slope/δ would go anywhere.
            let least = (f64::EPSILON * lane.frobenius).powi(2) * lane.direction_squared;
            lane.null_direction = delta <= least;
            let moves = !lane.null_direction && !lane.floor;
            self.factor[place] = if moves { lane.slope / delta } else { 0.0 };
            lane.total_squared -= self.factor[place] * lane.slope;
        }
        let (lanes, live, step) = (&self.lanes, &self.live, &self.factor);
        let update = pieces::Two { a: &mut self.y, b: &mut self.g, c: &self.p, d: &self.t };
        pieces::for_each_two(k, update, &mut self.sums, |y, g, p, t, sums| {
            sums.fill(0.0);
            for (((y, g), p), t) in y
                .chunks_exact_mut(k)
                .zip(g.chunks_exact_mut(k))
                .zip(p.chunks_exact(k))
                .zip(t.chunks_exact(k))
            {
                for l in 0..k {
                    let damped = lanes[live[l]].damping.powi(2) * p[l];
                    y[l] += step[l] * p[l];
                    g[l] -= step[l] * (t[l] + damped);
                    sums[2 * l] += g[l] * g[l];
                    sums[2 * l + 1] += y[l] * y[l];
                }
            }
        });
        for place in 0..k {
            let gamma = pieces::total(&self.sums, 2 * k, 2 * place);
            let finite = gamma.is_finite() && self.squares[place].is_finite();
            let fault = if finite { None } else { Some(self.locate(place)) };
            let lane = &mut self.lanes[self.live[place]];
            lane.model_squared = pieces::total(&self.sums, 2 * k, 2 * place + 1);
            lane.fault = lane.fault.or(fault);
            lane.trusted = false;
            self.factor[place] = if lane.gamma > 0.0 { gamma / lane.gamma } else { 0.0 };
            lane.gamma = gamma;
        }
    }

    fn refresh_due(&self) -> bool {
        self.since_refresh >= REFRESH_STEPS
            || (self.since_refresh > 0
                && self.live.iter().any(|&lane| self.lanes[lane].claims(self.rules)))
    }

    fn locate(&self, place: usize) -> Fault {
        let k = self.width();
        let first = |block: &[f64]| block.chunks(k).position(|row| !row[place].is_finite());
        if let Some(row) = first(&self.u) {
            Fault::Row(row)
        } else if let Some(column) = first(&self.t) {
            Fault::Column(column)
        } else {
            Fault::Norm
        }
    }
}

impl LaneState {
    fn new(damping: f64, frobenius: f64) -> Self {
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
    fn claims(&self, rules: &StopRules) -> bool {
        let total = self.total_squared.max(0.0).sqrt();
        // Every step since took a rounding error of the starting value: no digit is left.
        let lost = 2.0 * REFRESH_STEPS as f64 * f64::EPSILON * self.total_squared_refreshed;
        self.null_direction
            || self.total_squared <= lost
            || self.gamma.sqrt()
                <= rules.gradient_tolerance.max(f64::EPSILON) * self.frobenius * total
            || total <= self.rounding().max(rules.residual_tolerance * self.data_norm)
    }

    fn rounding(&self) -> f64 {
        stop::rounding_of_residual(self.frobenius, self.model_squared.sqrt(), self.data_norm)
    }

    /// Takes recomputed sums; returns whether the direction can be kept.
    fn accept_refresh(&mut self, gamma: f64, model_squared: f64, residual_squared: f64) -> bool {
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
        self.floor =
            self.idle >= IDLE_REFRESHES_MAX || recomputed <= 0.1 * self.frobenius * self.rounding();
        !drifted
    }
}

impl Recurrence for Cgls<'_> {
    fn start(&mut self) {
        self.refresh();
        for lane in &mut self.lanes {
            lane.data_norm = lane.total_squared.sqrt();
            (lane.idle, lane.floor) = (0, false);
        }
        self.fresh.fill(1.0);
        self.factor.fill(0.0);
        self.turn_direction();
    }

    fn step(&mut self) -> Stepped {
        if self.refresh_due() {
            self.hold_negative_model();
            self.refresh();
            self.turn_direction();
            return Stepped::Refresh;
        }
        self.alpha.fill(0.0);
        self.pass(Frame::Step);
        self.advance();
        self.fresh.fill(1.0);
        self.turn_direction();
        self.since_refresh += 1;
        Stepped::Iteration
    }

    fn tracks(&self) -> usize {
        self.lanes.len()
    }

    fn lane(&self, track: usize) -> usize {
        track
    }

    fn estimate(&self, track: usize) -> Estimate {
        let lane = &self.lanes[track];
        Estimate {
            total: lane.total_squared.max(0.0).sqrt(),
            penalty: lane.model_squared.sqrt(),
            gradient: lane.gamma.sqrt(),
            trusted: lane.trusted,
            ended: lane.gamma == 0.0,
            floor: lane.floor,
        }
    }

    fn lane_ended(&self, lane: usize) -> bool {
        let lane = &self.lanes[lane];
        lane.gamma == 0.0 || lane.fault.is_some()
    }

    fn fault(&self, lane: usize) -> Option<Fault> {
        self.lanes[lane].fault
    }

    fn freeze(&mut self, track: usize) {
        self.frozen[track] = true;
    }

    fn pack(&mut self) {
        let k = self.width();
        let kept: Vec<usize> = (0..k).filter(|&place| !self.frozen[self.live[place]]).collect();
        if kept.len() == k {
            return;
        }
        for place in (0..k).filter(|place| !kept.contains(place)) {
            let y = self.y.chunks(k).map(|row| row[place]).collect();
            self.lanes[self.live[place]].packed = Some(y);
        }
        let blocks =
            [&mut self.right, &mut self.u, &mut self.p, &mut self.t, &mut self.g, &mut self.y];
        for block in blocks {
            pieces::pack(block, k, &kept);
        }
        for list in [&mut self.squares, &mut self.strengths, &mut self.alpha] {
            pieces::pack(list, k, &kept);
        }
        for list in [&mut self.factor, &mut self.fresh] {
            pieces::pack(list, k, &kept);
        }
        self.sums.truncate(2 * pieces::count(self.problem.unknowns()) * kept.len());
        self.sets = kept.iter().map(|&place| self.sets[place]).collect();
        self.live = kept.iter().map(|&place| self.live[place]).collect();
    }

    /// Panics: this method carries one strength a lane.
    fn open(&mut self, _strengths: &[f64]) {
        panic!("CGLS carries one strength a lane, given when it is made");
    }

    fn model(&self, track: usize, y: &mut [f64]) {
        match (&self.lanes[track].packed, self.live.binary_search(&track)) {
            (Some(packed), _) => y.copy_from_slice(packed),
            (None, Ok(place)) => {
                let k = self.width();
                for (out, row) in y.iter_mut().zip(self.y.chunks(k)) {
                    *out = row[place];
                }
            }
            (None, Err(_)) => unreachable!("a lane is in the blocks until it is packed"),
        }
    }

    fn process(&self, _lane: usize) -> Option<&Process> {
        None
    }

    fn workspace_bytes(&self) -> u64 {
        let blocks = [&self.right, &self.u, &self.p, &self.t, &self.g, &self.y, &self.sums];
        blocks.iter().map(|block| 8 * block.capacity() as u64).sum::<u64>()
            + self.operator.scratch_bytes(self.lanes.len())
    }
}
