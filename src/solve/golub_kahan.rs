//! The Golub–Kahan process of all lanes, one pass a step.
//!
//! β_{k+1} u_{k+1} = A v_k − α_k u_k,   α_{k+1} v_{k+1} = Aᵀ u_{k+1} − β_{k+1} v_k
//!
//! The pass computes û = A v − (α/β) û_old with û = β u kept unscaled, s = Aᵀû and ‖û‖² in one
//! traversal; then β = ‖û‖ and v ← (s/β − β v)/α. The same algebra as two products, to rounding.
//! Source: Golub & Kahan, SIAM J. Numer. Anal. 2:205, 1965.

use crate::base::sums;
use crate::kernel::Block;
use crate::operator::{Frame, Operator, Pass, Scratch};
use crate::solve::pieces;
use crate::solve::problem::Problem;
use crate::solve::process::Process;
use crate::solve::stop::Fault;

pub struct GolubKahan<'a> {
    operator: Box<dyn Operator + 'a>,
    /// Scalars and state of every lane, packed away or not.
    pub lanes: Vec<LaneState>,
    /// Lanes in the blocks, ascending.
    pub live: Vec<usize>,
    u: Block,
    /// Inner order.
    pub v: Block,
    s: Block,
    squares: Vec<f64>,
    sums: Vec<f64>,
    sets: Vec<usize>,
    strengths: Vec<f64>,
    /// Lanes that take part in the step being made.
    stepping: Vec<bool>,
    alpha: Vec<f64>,
    scale: Vec<f64>,
    shift: Vec<f64>,
    scratch: Scratch,
}

pub struct LaneState {
    pub process: Process,
    /// 10 ε ‖Ã‖_F: an α or β below it is rounding, and the process has ended.
    null: f64,
    pub ended: bool,
    pub fault: Option<Fault>,
}

impl LaneState {
    pub fn alpha(&self) -> f64 {
        *self.process.alphas.last().expect("a started process")
    }

    pub fn beta(&self) -> f64 {
        self.process.betas.last().copied().unwrap_or(self.process.beta_first)
    }

    pub fn running(&self) -> bool {
        !self.ended && self.fault.is_none()
    }
}

impl<'a> GolubKahan<'a> {
    /// `frobenius[l]` is ‖Ã‖_F with the weights of lane l; `steps_max` reserves room for scalars.
    pub fn new(problem: &'a Problem<'a>, frobenius: &[f64], steps_max: usize) -> Self {
        let operator = problem.operator();
        let (n, k) = (operator.columns(), problem.lanes.len());
        let lanes = frobenius
            .iter()
            .map(|norm| LaneState {
                process: Process {
                    beta_first: 0.0,
                    alphas: Vec::with_capacity(steps_max + 1),
                    betas: Vec::with_capacity(steps_max),
                },
                null: 10.0 * f64::EPSILON * norm,
                ended: false,
                fault: None,
            })
            .collect();
        Self {
            lanes,
            live: (0..k).collect(),
            u: problem.right_hand_sides(),
            v: problem.negative_origins(),
            s: Block::zeros(n * k),
            squares: vec![0.0; k],
            sums: vec![0.0; pieces::count(n) * k],
            sets: problem.lanes.iter().map(|lane| lane.set).collect(),
            strengths: problem
                .lanes
                .iter()
                .map(|lane| lane.strengths.first().copied().unwrap_or(0.0))
                .collect(),
            stepping: vec![true; k],
            alpha: vec![0.0; k],
            scale: vec![0.0; k],
            shift: vec![0.0; k],
            scratch: operator.scratch(k),
            operator,
        }
    }

    pub fn bytes(&self) -> u64 {
        // The scratch was made for all lanes and stays.
        let k = self.lanes.len();
        let scalars =
            |lane: &LaneState| lane.process.alphas.capacity() + lane.process.betas.capacity();
        let kept: usize = self.lanes.iter().map(scalars).sum();
        let blocks: u64 = [&self.u, &self.v, &self.s].map(Block::allocated).iter().sum();
        blocks + 8 * (self.sums.capacity() + kept) as u64 + self.operator.scratch_bytes(k)
    }

    pub fn width(&self) -> usize {
        self.live.len()
    }

    /// û ← b − A x₀, β₁, v₁, α₁.
    pub fn start(&mut self) {
        self.alpha.fill(-1.0);
        self.pass(Frame::Start);
        for place in 0..self.width() {
            let beta = self.squares[place].sqrt();
            let lane = &mut self.lanes[self.live[place]];
            lane.process.beta_first = beta;
            lane.ended = beta == 0.0;
            self.scale[place] = if lane.ended { 0.0 } else { 1.0 / beta };
            self.shift[place] = 0.0;
        }
        self.turn();
    }

    /// One step of every lane in the blocks; ended lanes stand still.
    pub fn step(&mut self) {
        for place in 0..self.width() {
            let lane = &self.lanes[self.live[place]];
            self.stepping[place] = lane.running();
            self.alpha[place] = if lane.running() { lane.alpha() / lane.beta() } else { 0.0 };
        }
        self.pass(Frame::Step);
        for place in 0..self.width() {
            let lane = &mut self.lanes[self.live[place]];
            (self.scale[place], self.shift[place]) = (0.0, 0.0);
            if !self.stepping[place] {
                continue;
            }
            let beta = self.squares[place].sqrt();
            lane.ended = beta <= lane.null;
            lane.process.betas.push(if lane.ended { 0.0 } else { beta });
            if !lane.ended {
                (self.scale[place], self.shift[place]) = (1.0 / beta, beta);
            }
        }
        self.turn();
    }

    fn pass(&mut self, frame: Frame) {
        self.operator.pass(Pass {
            frame,
            sets: &self.sets,
            strengths: &self.strengths,
            v: &self.v,
            alpha: &self.alpha,
            u: &mut self.u,
            s: &mut self.s,
            squares: &mut self.squares,
            scratch: &mut self.scratch,
        });
    }

    /// v ← s·scale − v·shift, α = ‖v‖, v ← v/α. Moves 24·n·k bytes, then 16·n·k.
    fn turn(&mut self) {
        let k = self.width();
        let (scale, shift) = (&self.scale, &self.shift);
        pieces::for_each(k, &mut self.v, &self.s, &mut self.sums, |v, s, sums| {
            sums.fill(0.0);
            for (v, s) in v.chunks_exact_mut(k).zip(s.chunks_exact(k)) {
                for l in 0..k {
                    // A lane that stands still keeps zeros whatever s holds.
                    let new = if scale[l] == 0.0 { 0.0 } else { s[l] * scale[l] - shift[l] * v[l] };
                    v[l] = new;
                    sums[l] += new * new;
                }
            }
        });
        for place in 0..k {
            let alpha = sums::total(&self.sums, k, place).sqrt();
            self.accept(place, alpha);
        }
        let scale = &self.scale;
        pieces::for_each(k, &mut self.v, &self.s, &mut self.sums, |v, _, _| {
            for v in v.chunks_exact_mut(k) {
                for l in 0..k {
                    v[l] *= scale[l];
                }
            }
        });
    }

    /// Records α of a lane and leaves 1/α in `scale`, 0 where the lane ends.
    fn accept(&mut self, place: usize, alpha: f64) {
        let index = self.live[place];
        self.scale[place] = 0.0;
        if !self.stepping[place] {
            return;
        }
        let finite = alpha.is_finite() && self.squares[place].is_finite();
        let fault =
            if finite { None } else { Some(pieces::locate(&self.u, &self.s, self.width(), place)) };
        let lane = &mut self.lanes[index];
        lane.fault = fault;
        lane.ended |= alpha <= lane.null;
        let running = finite && !lane.ended;
        lane.process.alphas.push(if running { alpha } else { 0.0 });
        if running {
            self.scale[place] = 1.0 / alpha;
        }
    }

    /// Keeps only the lanes for which `wanted` holds.
    pub fn pack(&mut self, wanted: impl Fn(usize) -> bool) {
        let k = self.width();
        let kept: Vec<usize> = (0..k).filter(|&place| wanted(self.live[place])).collect();
        if kept.len() == k {
            return;
        }
        for block in [&mut self.u, &mut self.v, &mut self.s] {
            let length = pieces::pack(block, k, &kept);
            block.truncate(length);
        }
        for list in [
            &mut self.sums,
            &mut self.squares,
            &mut self.alpha,
            &mut self.scale,
            &mut self.shift,
            &mut self.strengths,
        ] {
            let length = pieces::pack(list, k, &kept);
            list.truncate(length);
        }
        self.stepping = kept.iter().map(|&place| self.stepping[place]).collect();
        self.sets = kept.iter().map(|&place| self.sets[place]).collect();
        self.live = kept.iter().map(|&place| self.live[place]).collect();
    }
}
