//! Small systems exactly: a dense singular value decomposition.
//!
//! W A P⁻¹ = U Σ Vᵀ; with b̃ = W(b − A x_ref), fᵢ = σᵢ²/(σᵢ² + λ²):
//!
//! P(x_λ − x_ref) = Σ fᵢ (uᵢᵀb̃/σᵢ) vᵢ over σᵢ > tolerance,  tr H(λ) = Σ fᵢ
//!
//! At λ = 0 this is the solution of minimum ‖P(x − x_ref)‖. Costs O(m n min(m, n)) once; every
//! strength after that O((m + n) min(m, n)).
//! Source: Golub & Van Loan, Matrix Computations, 4th ed., §2.4 and §5.5.

use nalgebra::{DMatrix, DVector};

use crate::operator::Weighted;

/// The decomposition of W A D with the weights of one data set.
pub struct Dense {
    left: DMatrix<f64>,
    right: DMatrix<f64>,
    /// σ₁ ≥ σ₂ ≥ …, min(m, n) of them.
    pub singular_values: Vec<f64>,
    /// max(m, n) · ε · σ₁: a smaller σ counts as zero.
    pub rank_tolerance: f64,
    pub rank: usize,
}

/// Multiplications that the decomposition is allowed to cost when nobody asked for it.
const CHEAP: f64 = 1e8;

/// Numbers in the dense array of such a decomposition: 8 MB, and as much again twice for its factors.
const CHEAP_NUMBERS: usize = 1_000_000;

/// Numbers in the dense array that `--method direct` accepts: 160 MB.
pub const DENSE_NUMBERS_MAX: usize = 20_000_000;

/// Multiplications that `--method direct` accepts: some minutes.
pub const DENSE_WORK_MAX: f64 = 2e11;

/// m n min(m, n): what the decomposition costs, up to a factor.
pub fn work(rows: usize, columns: usize) -> f64 {
    rows as f64 * columns as f64 * rows.min(columns) as f64
}

/// Whether the decomposition is cheap enough to be made unasked, for an exact trace or condition.
pub fn cheap(rows: usize, columns: usize) -> bool {
    work(rows, columns) <= CHEAP && rows * columns <= CHEAP_NUMBERS
}

/// Whether `--method direct` takes a system of this size.
pub fn fits(rows: usize, columns: usize) -> bool {
    rows.checked_mul(columns).is_some_and(|numbers| numbers <= DENSE_NUMBERS_MAX)
        && work(rows, columns) <= DENSE_WORK_MAX
}

impl Dense {
    /// Decomposes W A D with the weights of data set `set`. One visit of the rows.
    ///
    /// Returns `None` if an entry is not finite or the iteration for the singular values fails.
    pub fn new(matrix: &Weighted<'_>, set: usize) -> Option<Self> {
        let (m, n) = (matrix.matrix().rows(), matrix.matrix().columns());
        let mut dense = DMatrix::zeros(m, n);
        for i in 0..m {
            let w = matrix.weights().at(i, set);
            for (j, a) in matrix.matrix().row(i).entries() {
                let value = w * a * matrix.scale(j);
                if !value.is_finite() {
                    return None;
                }
                dense[(i, j)] = value;
            }
        }
        let svd = dense.try_svd(true, true, f64::EPSILON, 0)?;
        let (left, right) = (svd.u?, svd.v_t?.transpose());
        let mut order: Vec<usize> = (0..svd.singular_values.len()).collect();
        order.sort_by(|&a, &b| svd.singular_values[b].total_cmp(&svd.singular_values[a]));
        let singular_values: Vec<f64> = order.iter().map(|&i| svd.singular_values[i]).collect();
        let rank_tolerance =
            m.max(n) as f64 * f64::EPSILON * singular_values.first().copied().unwrap_or(0.0);
        let rank = singular_values.iter().filter(|&&s| s > rank_tolerance).count();
        Some(Self {
            left: left.select_columns(&order),
            right: right.select_columns(&order),
            singular_values,
            rank_tolerance,
            rank,
        })
    }

    /// σ₁/σ_min over all min(m, n) values; infinite where the smallest is zero.
    pub fn condition(&self) -> f64 {
        match (self.singular_values.first(), self.singular_values.last()) {
            (Some(first), Some(last)) => first / last,
            _ => f64::NAN,
        }
    }

    /// y = D⁻¹(x − x_ref) for weighted data b̃ (length m) and λ ≥ 0.
    pub fn solve(&self, data: &[f64], strength: f64) -> Vec<f64> {
        let coefficients = self.left.tr_mul(&DVector::from_column_slice(data));
        let filtered = DVector::from_fn(self.singular_values.len(), |i, _| {
            let sigma = self.singular_values[i];
            if i >= self.rank {
                0.0
            } else if strength == 0.0 {
                coefficients[i] / sigma
            } else {
                // σ/(σ² + λ²) without squaring what may be tiny.
                coefficients[i] * (sigma / sigma.hypot(strength)) / sigma.hypot(strength)
            }
        });
        (&self.right * filtered).as_slice().to_vec()
    }

    /// tr H(λ); the rank at λ = 0.
    pub fn trace(&self, strength: f64) -> f64 {
        self.singular_values[..self.rank]
            .iter()
            .map(|sigma| (sigma / sigma.hypot(strength)).powi(2))
            .sum()
    }
}
