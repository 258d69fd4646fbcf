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
use crate::solve::jacobi::{self, Factors};

/// The decomposition of W A D with the weights of one data set.
pub struct Dense {
    left: DMatrix<f64>,
    right: DMatrix<f64>,
    /// σ₁ ≥ σ₂ ≥ …, min(m, n) of them.
    pub singular_values: Vec<f64>,
    /// max(m, n) · ε · σ₁: a smaller σ counts as zero.
    pub rank_tolerance: f64,
    /// Number of σ above `rank_tolerance`.
    pub rank: usize,
}

/// Multiplications that the decomposition is allowed to cost when nobody asked for it.
const CHEAP: f64 = 1e8;

/// Numbers in the dense array of such a decomposition: 8 MB, and its factors twice as much.
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
    /// Returns `None` if an entry is not finite, or if the iteration for the singular values fails
    /// or gives factors that do not multiply to the matrix.
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
        let Factors { left, singular_values: unordered, right } = decompose(&dense)?;
        let mut order: Vec<usize> = (0..unordered.len()).collect();
        order.sort_by(|&a, &b| unordered[b].total_cmp(&unordered[a]));
        let singular_values: Vec<f64> = order.iter().map(|&i| unordered[i]).collect();
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

/// The usual decomposition where its factors multiply to the matrix, else the surer one.
///
/// The usual one has been seen to end with factors that are wrong in the first digit, with nothing
/// to show for it (sums over rows and columns of 5×5 cells, whose singular values repeat). The test
/// costs m n min(m, n) multiplications.
fn decompose(dense: &DMatrix<f64>) -> Option<Factors> {
    let usual = || {
        // Five: what the library takes by itself; with less it fails more often.
        let svd = dense.clone().try_svd(true, true, 5.0 * f64::EPSILON, 0)?;
        let singular_values = svd.singular_values.as_slice().to_vec();
        Some(Factors { left: svd.u?, singular_values, right: svd.v_t?.transpose() })
    };
    usual()
        .filter(|factors| multiply_to(factors, dense))
        .or_else(|| jacobi::decompose(dense))
        .filter(|factors| multiply_to(factors, dense))
}

/// Whether U Σ Vᵀ is the matrix: a stable decomposition is off by a modest multiple of ε‖A‖.
fn multiply_to(factors: &Factors, dense: &DMatrix<f64>) -> bool {
    let allowed = 10.0 * dense.nrows().max(dense.ncols()) as f64 * f64::EPSILON * dense.norm();
    let mut scaled = factors.left.clone();
    for (mut column, sigma) in scaled.column_iter_mut().zip(&factors.singular_values) {
        column *= *sigma;
    }
    let mut rest = dense.clone();
    rest.gemm(-1.0, &scaled, &factors.right.transpose(), 1.0);
    rest.norm() <= allowed
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn both_decompositions_multiply_to_the_matrix_with_orthogonal_factors() {
        let noise = crate::base::random::Stream::new(3, 3);
        for (m, n) in [(9, 9), (30, 7), (7, 30), (12, 1), (1, 5)] {
            for lost in [0, 2] {
                let mut dense = DMatrix::from_fn(m, n, |i, j| noise.normal((i * n + j) as u64));
                // Equal and empty columns: singular values that are zero.
                for j in 0..lost.min(n - 1) {
                    let copy =
                        if j == 0 { 0.0 * dense.column(0) } else { dense.column(n - 1).into() };
                    dense.set_column(j, &copy);
                }
                let factors = jacobi::decompose(&dense).unwrap();
                assert!(multiply_to(&factors, &dense), "{m}×{n}, {lost} columns lost");
                let v = &factors.right;
                if m >= n {
                    let off = (v.transpose() * v - DMatrix::identity(n, n)).norm();
                    assert!(off <= 100.0 * n as f64 * f64::EPSILON, "{off:e}");
                }
                assert!(decompose(&dense).is_some());
            }
        }
    }

    #[test]
    fn wrong_factors_are_told_from_right_ones() {
        let dense = DMatrix::from_fn(4, 3, |i, j| (i * 3 + j) as f64);
        let mut factors = jacobi::decompose(&dense).unwrap();
        factors.singular_values.iter_mut().for_each(|sigma| *sigma *= 1.0 + 1e-12);
        assert!(!multiply_to(&factors, &dense));
    }
}
