//! One-sided Jacobi: the slower, surer way to a singular value decomposition.
//!
//! A = Q R; columns of R are turned in pairs until all are orthogonal:
//!
//! R V = U_R Σ,   A = (Q U_R) Σ Vᵀ
//!
//! Sources: Hestenes, J. SIAM 6:51, 1958; Demmel & Veselić, SIMAX 13:1204, 1992 (accuracy).

use nalgebra::DMatrix;

/// A = left · diag(singular_values) · rightᵀ, in no order. A column of `left` is zero where its
/// singular value is.
pub struct Factors {
    pub left: DMatrix<f64>,
    pub singular_values: Vec<f64>,
    pub right: DMatrix<f64>,
}

/// Six to ten are usual; the convergence is quadratic in the end.
const SWEEPS_MAX: usize = 60;

/// Decomposes an m×n matrix with min(m, n) values; `None` if the columns do not become orthogonal.
/// Costs some 60 min(m, n)³ multiplications besides one QR decomposition.
pub fn decompose(dense: &DMatrix<f64>) -> Option<Factors> {
    if dense.nrows() < dense.ncols() {
        let Factors { left, singular_values, right } = decompose(&dense.transpose())?;
        return Some(Factors { left: right, singular_values, right: left });
    }
    let n = dense.ncols();
    let qr = dense.clone().qr();
    let (mut turned, mut right) = (qr.r(), DMatrix::identity(n, n));
    // Inner products between columns that are rounding themselves.
    let noise = (f64::EPSILON * turned.norm()).powi(2);
    for _ in 0..SWEEPS_MAX {
        let mut still = true;
        for p in 0..n {
            for q in p + 1..n {
                if let Some((c, s)) = angle(&turned, p, q, noise) {
                    turn(&mut turned, p, q, c, s);
                    turn(&mut right, p, q, c, s);
                    still = false;
                }
            }
        }
        if still {
            return Some(finish(&qr.q(), turned, right));
        }
    }
    None
}

/// Cosine and sine that make columns p and q orthogonal; `None` where they are, to rounding.
fn angle(turned: &DMatrix<f64>, p: usize, q: usize, noise: f64) -> Option<(f64, f64)> {
    let (a, b) = (turned.column(p), turned.column(q));
    let (alpha, beta, gamma) = (a.norm_squared(), b.norm_squared(), a.dot(&b));
    let rounding = turned.nrows() as f64 * f64::EPSILON * alpha.sqrt() * beta.sqrt();
    if gamma.abs() <= rounding.max(noise) {
        return None;
    }
    let zeta = (beta - alpha) / (2.0 * gamma);
    let tangent = zeta.signum() / (zeta.abs() + zeta.hypot(1.0));
    let c = 1.0 / tangent.hypot(1.0);
    Some((c, c * tangent))
}

fn turn(matrix: &mut DMatrix<f64>, p: usize, q: usize, c: f64, s: f64) {
    let rows = matrix.nrows();
    let (low, high) = matrix.as_mut_slice().split_at_mut(q * rows);
    for (a, b) in low[p * rows..][..rows].iter_mut().zip(&mut high[..rows]) {
        (*a, *b) = (c * *a - s * *b, s * *a + c * *b);
    }
}

fn finish(q: &DMatrix<f64>, mut turned: DMatrix<f64>, right: DMatrix<f64>) -> Factors {
    let singular_values: Vec<f64> = turned.column_iter().map(|column| column.norm()).collect();
    for (mut column, &sigma) in turned.column_iter_mut().zip(&singular_values) {
        if sigma > 0.0 {
            column /= sigma;
        }
    }
    Factors { left: q * turned, singular_values, right }
}
