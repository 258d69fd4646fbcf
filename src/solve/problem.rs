//! What the engine is given and what it hands back.

use ndarray::ArrayView2;
use rayon::prelude::*;

use crate::kernel::Block;
use crate::operator::{Operator, RowWeights, Stacked, Weighted};
use crate::solve::pieces::PIECE_ROWS;
use crate::solve::stop::{Fault, Stop};

/// An iterative method, one pass an iteration for all lanes.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Method {
    /// Minimises ‖[r; λy]‖ over the Krylov space. Paige & Saunders 1982.
    Lsqr,
    /// Minimises ‖Ãᵀr − λ²y‖ over the same space. Fong & Saunders 2011.
    Lsmr,
    /// Conjugate gradients on the normal equations, one strength a lane. Hestenes & Stiefel 1952.
    Cgls,
}

impl Method {
    /// The word in settings and records.
    pub fn word(self) -> &'static str {
        match self {
            Self::Lsqr => "lsqr",
            Self::Lsmr => "lsmr",
            Self::Cgls => "cgls",
        }
    }

    /// Whether one lane of this method carries any number of strengths.
    pub fn carries_strengths(self) -> bool {
        !matches!(self, Self::Cgls)
    }
}

/// One right-hand side in the blocks.
#[derive(Debug, Clone, PartialEq)]
pub struct Lane {
    /// Column of the data.
    pub set: usize,
    /// λ ≥ 0 of each track. Empty only with a scout. One for CGLS and for stacked problems.
    pub strengths: Vec<f64>,
}

/// Lanes that share their passes.
///
/// The engine works in variables y with x = x₀ + D y, D the operator's column scales and x₀ the
/// start (the reference unless another is given).
pub struct Problem<'a> {
    /// W A D.
    pub matrix: &'a Weighted<'a>,
    /// p ≥ 0 of P = diag(p), length n; `None` means 1.
    pub penalty: Option<&'a [f64]>,
    /// `false`: λ is a shift on y, which is the penalty only where D = 1/p and x₀ = x_ref.
    /// `true`: the operator carries penalty rows λP; any D and any x₀.
    pub stacked: bool,
    /// b, m×sets, data units, finite.
    pub data: ArrayView2<'a, f64>,
    /// x_ref, n×1 or n×sets; `None` means 0.
    pub reference: Option<ArrayView2<'a, f64>>,
    /// x₀ if it is not x_ref, n×1 or n×sets.
    pub start: Option<ArrayView2<'a, f64>>,
    /// At least one. Those of stacked problems carry one strength each.
    pub lanes: Vec<Lane>,
}

impl Problem<'_> {
    /// W A D, or [WA; λP] D where stacked: what a [`crate::solve::Recurrence`] multiplies with.
    pub fn operator(&self) -> Box<dyn Operator + '_> {
        if self.stacked {
            Box::new(Stacked::new(self.matrix, self.penalty))
        } else {
            Box::new(self.matrix)
        }
    }

    /// n.
    pub fn unknowns(&self) -> usize {
        self.matrix.columns()
    }

    /// p of unknown `j`.
    pub fn penalty_factor(&self, j: usize) -> f64 {
        self.penalty.map_or(1.0, |p| p[j])
    }

    /// x_ref of unknown `j` in a data set.
    pub fn reference_at(&self, j: usize, set: usize) -> f64 {
        at(&self.reference, j, set)
    }

    /// x₀ of unknown `j` in a data set.
    pub fn origin_at(&self, j: usize, set: usize) -> f64 {
        if self.start.is_some() { at(&self.start, j, set) } else { self.reference_at(j, set) }
    }

    /// Whether ‖y‖ is the penalty norm ‖P(x − x_ref)‖: D = 1/p on the free unknowns and x₀ = x_ref.
    pub fn penalty_is_step(&self) -> bool {
        // 1/p times p is 1 to one rounding.
        let is_one = |product: f64| (product - 1.0).abs() <= 2.0 * f64::EPSILON;
        let even = |j: usize| {
            let d = self.matrix.scale(j);
            d == 0.0 || is_one(d * self.penalty_factor(j))
        };
        !self.stacked && self.start.is_none() && (0..self.unknowns()).all(even)
    }

    /// Whether D = 1 on the free unknowns, so that gradients in y and in x are the same.
    pub fn steps_are_model(&self) -> bool {
        (0..self.unknowns()).all(|j| matches!(self.matrix.scale(j), 0.0 | 1.0))
    }

    /// A fault in the blocks, as the caller numbers unknowns.
    pub fn in_file(&self, fault: Fault) -> Fault {
        let (m, matrix) = (self.matrix.rows(), self.matrix.matrix());
        match fault {
            Fault::Column(place) => Fault::Column(matrix.unknown_at(place)),
            Fault::Row(row) if row >= m => Fault::Row(m + matrix.unknown_at(row - m)),
            other => other,
        }
    }

    /// u before the first pass: W b over λ P x_ref, rows×k, penalty rows in inner order.
    pub fn right_hand_sides(&self) -> Block {
        let (m, n, k) = (self.matrix.rows(), self.unknowns(), self.lanes.len());
        let penalty_rows = if self.stacked { n } else { 0 };
        let mut u = Block::zeros((m + penalty_rows) * k);
        let weights: &RowWeights = self.matrix.weights();
        u.par_chunks_mut(PIECE_ROWS * k.max(1)).enumerate().for_each(|(piece, rows)| {
            for (i, row) in (piece * PIECE_ROWS..).zip(rows.chunks_mut(k.max(1))) {
                for (out, lane) in row.iter_mut().zip(&self.lanes) {
                    *out = if i < m {
                        weights.at(i, lane.set) * self.data[[i, lane.set]]
                    } else {
                        let j = self.matrix.matrix().unknown_at(i - m);
                        lane.strengths[0] * self.penalty_factor(j) * self.reference_at(j, lane.set)
                    };
                }
            }
        });
        u
    }

    /// −x₀ of every lane, n×k in inner order: v of the first pass.
    pub fn negative_origins(&self) -> Block {
        let k = self.lanes.len();
        let mut v = Block::zeros(self.unknowns() * k);
        if self.start.is_some() || self.reference.is_some() {
            v.par_chunks_mut(PIECE_ROWS * k.max(1)).enumerate().for_each(|(piece, rows)| {
                for (place, row) in (piece * PIECE_ROWS..).zip(rows.chunks_mut(k.max(1))) {
                    let j = self.matrix.matrix().unknown_at(place);
                    for (out, lane) in row.iter_mut().zip(&self.lanes) {
                        *out = -self.origin_at(j, lane.set);
                    }
                }
            });
        }
        v
    }
}

fn at(values: &Option<ArrayView2<'_, f64>>, j: usize, set: usize) -> f64 {
    values.as_ref().map_or(0.0, |v| v[[j, if v.ncols() == 1 { 0 } else { set }]])
}

/// One finished track; every norm recomputed from its definition.
#[derive(Debug, Clone)]
pub struct Solved {
    /// Data set, from 0.
    pub set: usize,
    /// λ ≥ 0.
    pub strength: f64,
    /// x, length n.
    pub model: Vec<f64>,
    /// b − Ax in data units, length m (also of rows of weight 0).
    pub residual: Vec<f64>,
    /// Why it stopped, by the recomputed norms.
    pub stop: Stop,
    /// Iterations of this track; 0 for a dense decomposition.
    pub iterations: u64,
    /// ρ = ‖W(b − Ax)‖.
    pub residual_norm: f64,
    /// η = ‖P(x − x_ref)‖.
    pub penalty_norm: f64,
    /// ‖x‖.
    pub model_norm: f64,
    /// ‖AᵀW²(b − Ax) − λ²P²(x − x_ref)‖ over the unknowns that are free.
    pub gradient_norm: f64,
    /// gradient_norm / (‖[WA; λP]‖_F ‖[W(b−Ax); λP(x−x_ref)]‖).
    pub relative_gradient: f64,
    /// ‖AᵀW²(b − Ax)‖ over the free unknowns: orthogonality of the residual.
    pub orthogonality: f64,
    /// ‖Wb‖.
    pub data_norm: f64,
}

impl Solved {
    /// Whether every norm of the certificate is finite: nothing else can be called converged.
    pub fn is_finite(&self) -> bool {
        let norms = [
            self.residual_norm,
            self.penalty_norm,
            self.model_norm,
            self.gradient_norm,
            self.relative_gradient,
        ];
        norms.iter().all(|norm| norm.is_finite())
    }
}
