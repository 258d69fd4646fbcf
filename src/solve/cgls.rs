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

use crate::base::sums;
use crate::kernel::Block;
use crate::operator::{Frame, Operator, Pass, Scratch};
use crate::solve::cgls_lane::LaneState;
use crate::solve::pieces;
use crate::solve::problem::Problem;
use crate::solve::process::Process;
use crate::solve::stop::{Fault, StopRules};
use crate::solve::{Estimate, Recurrence, Stepped};

/// Steps between refreshes: 2 % more passes.
pub const REFRESH_STEPS: usize = 50;

/// CGLS on blocks of lanes, one strength a lane: u and b̃ of m rows; p, t, g, −x and y of n.
pub struct Cgls<'a> {
    problem: &'a Problem<'a>,
    operator: Box<dyn Operator + 'a>,
    /// Weighted data over penalty rows, as u before the start.
    right: Block,
    lanes: Vec<LaneState>,
    live: Vec<usize>,
    frozen: Vec<bool>,
    u: Block,
    p: Block,
    /// Product t, or the recomputed gradient.
    t: Block,
    /// Gradient.
    g: Block,
    /// −x, the v of a refresh.
    x: Block,
    y: Block,
    squares: Vec<f64>,
    sums: Vec<f64>,
    sets: Vec<usize>,
    strengths: Vec<f64>,
    alpha: Vec<f64>,
    factor: Vec<f64>,
    fresh: Vec<f64>,
    scratch: Scratch,
    /// Lanes whose own claim or count asks for the refresh being made.
    due: Vec<bool>,
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
            u: Block::zeros(right.len()),
            right,
            p: Block::zeros(n * k),
            t: Block::zeros(n * k),
            g: Block::zeros(n * k),
            x: problem.negative_origins(),
            y: Block::zeros(n * k),
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
            due: vec![true; k],
            rules,
        }
    }

    fn width(&self) -> usize {
        self.live.len()
    }

    /// u ← Ã v + …, t ← Ãᵀu with v the direction p, or −x for a refresh.
    fn pass(&mut self, frame: Frame) {
        let v = if frame == Frame::Step { &self.p } else { &self.x };
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

    /// g ← Ãᵀ(b − A x) − λ²y by definition, with x from y, in the lanes that are due. The others ride
    /// along and keep what they have: a lane's course does not depend on its neighbours.
    fn refresh(&mut self) {
        self.u.copy_from_slice(&self.right);
        self.alpha.fill(-1.0);
        self.pass(Frame::Start);
        let k = self.width();
        let (lanes, live, due) = (&self.lanes, &self.live, &self.due);
        // t ← t − λ²y and its norm, then into g where it is due.
        pieces::for_each(k, &mut self.t, &self.y, &mut self.sums, |t, y, sums| {
            sums.fill(0.0);
            for (t, y) in t.chunks_exact_mut(k).zip(y.chunks_exact(k)) {
                for l in 0..k {
                    t[l] -= lanes[live[l]].damping.powi(2) * y[l];
                    sums[2 * l] += t[l] * t[l];
                    sums[2 * l + 1] += y[l] * y[l];
                }
            }
        });
        for (g, t) in self.g.chunks_mut(k).zip(self.t.chunks(k)) {
            for l in 0..k {
                if due[l] {
                    g[l] = t[l];
                }
            }
        }
        for place in 0..k {
            (self.fresh[place], self.factor[place]) = (0.0, 1.0);
            if !self.due[place] {
                continue;
            }
            let gamma = sums::total(&self.sums, 2 * k, 2 * place);
            let model_squared = sums::total(&self.sums, 2 * k, 2 * place + 1);
            let squared = self.squares[place];
            let finite = gamma.is_finite() && squared.is_finite();
            let fault =
                if finite { None } else { Some(pieces::locate(&self.u, &self.t, k, place)) };
            let lane = &mut self.lanes[self.live[place]];
            lane.fault = lane.fault.or(fault);
            if !lane.accept_refresh(gamma, model_squared, squared) {
                (self.fresh[place], self.factor[place]) = (1.0, 0.0);
            }
        }
    }

    /// −x = −(x₀ + D y), the v of a refresh.
    fn hold_negative_model(&mut self) {
        let k = self.width();
        for (place, (x, y)) in self.x.chunks_mut(k).zip(self.y.chunks(k)).enumerate() {
            let j = self.problem.matrix.matrix().unknown_at(place);
            let d = self.problem.matrix.scale(j);
            for l in 0..k {
                x[l] = -(self.problem.origin_at(j, self.sets[l]) + d * y[l]);
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
            lane.slope = sums::total(&self.sums, 2 * k, 2 * place);
            lane.direction_squared = sums::total(&self.sums, 2 * k, 2 * place + 1);
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
            let gamma = sums::total(&self.sums, 2 * k, 2 * place);
            let finite = gamma.is_finite() && self.squares[place].is_finite();
            let fault =
                if finite { None } else { Some(pieces::locate(&self.u, &self.t, k, place)) };
            let lane = &mut self.lanes[self.live[place]];
            lane.model_squared = sums::total(&self.sums, 2 * k, 2 * place + 1);
            lane.fault = lane.fault.or(fault);
            lane.trusted = false;
            lane.since_refresh += 1;
            self.factor[place] = if lane.gamma > 0.0 { gamma / lane.gamma } else { 0.0 };
            lane.gamma = gamma;
        }
    }

    /// Marks the lanes that want a refresh; whether any does.
    fn mark_due(&mut self) -> bool {
        for (due, &lane) in self.due.iter_mut().zip(&self.live) {
            let lane = &self.lanes[lane];
            *due = lane.since_refresh >= REFRESH_STEPS
                || (lane.since_refresh > 0 && lane.claims(self.rules));
        }
        self.due.contains(&true)
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
        if self.mark_due() {
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
        let blocks = [
            &mut self.right,
            &mut self.u,
            &mut self.p,
            &mut self.t,
            &mut self.g,
            &mut self.x,
            &mut self.y,
        ];
        for block in blocks {
            let length = pieces::pack(block, k, &kept);
            block.truncate(length);
        }
        for list in [
            &mut self.squares,
            &mut self.strengths,
            &mut self.alpha,
            &mut self.factor,
            &mut self.fresh,
        ] {
            let length = pieces::pack(list, k, &kept);
            list.truncate(length);
        }
        self.sums.truncate(2 * pieces::count(self.problem.unknowns()) * kept.len());
        self.due.truncate(kept.len());
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
        let blocks = [&self.right, &self.u, &self.p, &self.t, &self.g, &self.x, &self.y];
        blocks.iter().map(|block| block.allocated()).sum::<u64>()
            + 8 * self.sums.capacity() as u64
            + self.operator.scratch_bytes(self.lanes.len())
    }
}
