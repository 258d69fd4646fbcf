//! Norms and gradients recomputed from their definitions: what is reported.
//!
//! All tracks of a group are lanes of shared passes: u ← b − A x, s ← AᵀW²u.
//!
//! relative gradient = ‖AᵀW²(b−Ax) − λ²P²(x−x_ref)‖ / (‖[WA; λP]‖_F · ‖[W(b−Ax); λP(x−x_ref)]‖)

use rayon::prelude::*;

use crate::base::sums;
use crate::kernel::Block;
use crate::operator::{Frame, Operator, Pass};
use crate::solve::pieces::PIECE_ROWS;
use crate::solve::problem::{Problem, Solved};
use crate::solve::stop::Stop;

/// Most tracks certified in one pass: with more, the blocks leave the cache.
pub const WIDTH_MAX: usize = 32;

/// Column sums Σ(w a)² of the lanes' data sets, and the norms that follow.
pub struct Frobenius {
    /// One list per data set in use, or one for all.
    columns: Vec<Vec<f64>>,
    set_of: Vec<usize>,
}

impl Frobenius {
    /// `column_squares[i]` belongs to data set `i`, or to all when there is one list.
    pub fn new(column_squares: Vec<Vec<f64>>, sets: usize) -> Self {
        let shared = column_squares.len() == 1;
        Self {
            columns: column_squares,
            set_of: (0..sets).map(|s| if shared { 0 } else { s }).collect(),
        }
    }

    /// Visits the rows once per distinct weighting.
    pub fn of(problem: &Problem<'_>) -> Self {
        let sets = problem.data.ncols();
        let distinct = match problem.matrix.weights() {
            crate::operator::RowWeights::PerSet(_) => sets,
            _ => 1,
        };
        let columns = (0..distinct).map(|set| problem.matrix.column_squares(set)).collect();
        Self::new(columns, sets)
    }

    /// ‖[WA; λP]‖_F over the free unknowns.
    pub fn in_model(&self, problem: &Problem<'_>, set: usize, strength: f64) -> f64 {
        self.norm(problem, set, strength, |d| if d == 0.0 { 0.0 } else { 1.0 })
    }

    /// ‖[WA; λP] D‖_F.
    pub fn in_steps(&self, problem: &Problem<'_>, set: usize, strength: f64) -> f64 {
        self.norm(problem, set, strength, |d| d)
    }

    fn norm(
        &self,
        problem: &Problem<'_>,
        set: usize,
        strength: f64,
        scale: impl Fn(f64) -> f64,
    ) -> f64 {
        let columns = &self.columns[self.set_of[set]];
        let terms: Vec<f64> = columns
            .iter()
            .enumerate()
            .map(|(j, squares)| {
                let (d, p) = (scale(problem.matrix.scale(j)), strength * problem.penalty_factor(j));
                d * d * (squares + p * p)
            })
            .collect();
        let ones: Vec<f64> = vec![1.0; terms.len()];
        sums::dot(&terms, &ones).sqrt()
    }
}

/// A model to certify.
pub struct Candidate {
    /// Data set, from 0.
    pub set: usize,
    /// λ ≥ 0.
    pub strength: f64,
    /// x, length n, model unit.
    pub model: Vec<f64>,
    /// Handed on to the [`Solved`] record.
    pub iterations: u64,
}

/// What the recomputation found besides the [`Solved`] record.
pub struct Certified {
    /// Norms by definition; `stop` is still to be decided.
    pub solved: Solved,
    /// Relative gradient in the operator's own variables: what the stop rule tests.
    pub relative_gradient_in_steps: f64,
}

/// Certifies up to [`WIDTH_MAX`] models in one pass. `stop` in the records is left
/// at [`Stop::Gradient`] for the engine to decide.
pub fn certify(
    problem: &Problem<'_>,
    frobenius: &Frobenius,
    candidates: Vec<Candidate>,
) -> Vec<Certified> {
    let (m, n, k) = (problem.matrix.rows(), problem.unknowns(), candidates.len());
    assert!((1..=WIDTH_MAX).contains(&k), "one to {WIDTH_MAX} models a pass");
    let matrix = problem.matrix.matrix();
    let mut u = Block::zeros(m * k);
    let mut v = Block::zeros(n * k);
    u.par_chunks_mut(k).enumerate().with_min_len(PIECE_ROWS).for_each(|(i, row)| {
        for (u, candidate) in row.iter_mut().zip(&candidates) {
            *u = problem.data[[i, candidate.set]];
        }
    });
    v.par_chunks_mut(k).enumerate().with_min_len(PIECE_ROWS).for_each(|(place, row)| {
        let j = matrix.unknown_at(place);
        for (v, candidate) in row.iter_mut().zip(&candidates) {
            *v = -candidate.model[j];
        }
    });
    let mut s = Block::zeros(n * k);
    let mut squares = vec![0.0; k];
    let sets: Vec<usize> = candidates.iter().map(|c| c.set).collect();
    problem.matrix.pass(Pass {
        frame: Frame::Certificate,
        sets: &sets,
        strengths: &[],
        v: &v,
        alpha: &vec![-1.0; k],
        u: &mut u,
        s: &mut s,
        squares: &mut squares,
        scratch: &mut problem.matrix.scratch(k),
    });
    drop(v);
    candidates
        .into_iter()
        .enumerate()
        .map(|(l, candidate)| {
            let residual: Vec<f64> = u.par_chunks(k).map(|row| row[l]).collect();
            let pulled: Vec<f64> =
                (0..n).into_par_iter().map(|j| s[matrix.place_of(j) * k + l]).collect();
            finish(problem, frobenius, candidate, residual, &pulled, squares[l].sqrt())
        })
        .collect()
}

fn finish(
    problem: &Problem<'_>,
    frobenius: &Frobenius,
    candidate: Candidate,
    residual: Vec<f64>,
    pulled: &[f64],
    residual_norm: f64,
) -> Certified {
    let Candidate { set, strength, model, iterations } = candidate;
    let departure =
        |j: usize| problem.penalty_factor(j) * (model[j] - problem.reference_at(j, set));
    let free = |j: usize| problem.matrix.scale(j) != 0.0;
    let penalty: Vec<f64> = (0..model.len()).map(departure).collect();
    let orthogonal: Vec<f64> =
        pulled.iter().enumerate().map(|(j, s)| if free(j) { *s } else { 0.0 }).collect();
    let gradient: Vec<f64> = (0..model.len())
        .map(|j| {
            // In this order λ² never stands alone, where it could overflow.
            let pull = (strength * problem.penalty_factor(j)) * (strength * penalty[j]);
            if free(j) { pulled[j] - pull } else { 0.0 }
        })
        .collect();
    let in_steps: Vec<f64> =
        gradient.iter().enumerate().map(|(j, g)| problem.matrix.scale(j) * g).collect();
    let penalty_norm = sums::norm(&penalty);
    let total = residual_norm.hypot(strength * penalty_norm);
    let gradient_norm = sums::norm(&gradient);
    let relative = |gradient: f64, frobenius: f64| {
        // A zero residual leaves nothing to be orthogonal to: the model is exact.
        if gradient == 0.0 { 0.0 } else { gradient / (frobenius * total) }
    };
    let data: Vec<f64> = (0..residual.len())
        .map(|i| problem.matrix.weights().at(i, set) * problem.data[[i, set]])
        .collect();
    let solved = Solved {
        set,
        strength,
        stop: Stop::Gradient,
        iterations,
        residual_norm,
        penalty_norm,
        model_norm: sums::norm(&model),
        gradient_norm,
        relative_gradient: relative(gradient_norm, frobenius.in_model(problem, set, strength)),
        orthogonality: sums::norm(&orthogonal),
        data_norm: sums::norm(&data),
        model,
        residual,
    };
    let frobenius = frobenius.in_steps(problem, set, strength);
    Certified { relative_gradient_in_steps: relative(sums::norm(&in_steps), frobenius), solved }
}
