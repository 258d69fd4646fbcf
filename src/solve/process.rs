//! The scalars of a finished Golub–Kahan process, and what follows from them without a pass.
//!
//! After k steps A V_k = U_{k+1} B_k with B_k lower bidiagonal, (k+1)×k: α on the diagonal, β
//! below. For any λ the projected problem min ‖B_k y − β₁e₁‖² + λ²‖y‖² costs O(k).
//!
//! Sources: Paige & Saunders, ACM TOMS 8(1):43, 1982; Golub & Kahan, SINUM 2:205, 1965.

/// α and β of one lane.
#[derive(Debug, Clone, Default, PartialEq)]
pub struct Process {
    /// β₁ = ‖b̃‖.
    pub beta_first: f64,
    /// α₁ … α_{k+1}; the last is 0 where the process ended.
    pub alphas: Vec<f64>,
    /// β₂ … β_{k+1}.
    pub betas: Vec<f64>,
}

/// The trade-off curve at one λ, from the projected problem.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct CurvePoint {
    /// λ.
    pub strength: f64,
    /// ρ.
    pub residual_norm: f64,
    /// η.
    pub penalty_norm: f64,
    /// ‖Ãᵀr − λ²y‖, the gradient in full space.
    pub gradient_norm: f64,
    /// d(η²)/dλ.
    pub penalty_slope: f64,
}

/// Entries of the triangular factor R of [B; λI] = QR and the rotated right-hand side.
struct Rotated {
    diagonal: f64,
    above: f64,
    right: f64,
}

impl Process {
    /// Steps taken.
    pub fn steps(&self) -> usize {
        self.betas.len()
    }

    /// The curve at λ > 0 (λ = 0 too where B has full rank). O(k) time and memory.
    pub fn at(&self, strength: f64) -> CurvePoint {
        let mut damped = 0.0;
        let (mut phi_bar, mut rho_bar) =
            (self.beta_first, self.alphas.first().copied().unwrap_or(0.0));
        let mut gradient_norm = phi_bar * rho_bar;
        let mut above = 0.0;
        let mut rows = Vec::with_capacity(self.steps());
        for (&beta, &alpha) in self.betas.iter().zip(&self.alphas[1..]) {
            let rho_tilde = rho_bar.hypot(strength);
            let psi = strength / rho_tilde * phi_bar;
            phi_bar *= rho_bar / rho_tilde;
            damped += psi * psi;
            let diagonal = rho_tilde.hypot(beta);
            let (c, s) = (rho_tilde / diagonal, beta / diagonal);
            rows.push(Rotated { diagonal, above, right: c * phi_bar });
            above = s * alpha;
            rho_bar = -c * alpha;
            phi_bar *= s;
            gradient_norm = (phi_bar * alpha * c).abs();
        }
        let total_squared = phi_bar * phi_bar + damped;
        let y = back_substitute(&rows);
        let penalty_squared: f64 = y.iter().map(|y| y * y).sum();
        let spread_squared = forward_norm_squared(&rows, &y);
        let residual_squared = total_squared - strength * strength * penalty_squared;
        CurvePoint {
            strength,
            residual_norm: residual_squared.max(0.0).sqrt(),
            penalty_norm: penalty_squared.sqrt(),
            gradient_norm,
            penalty_slope: -4.0 * strength * spread_squared,
        }
    }

    /// Largest and smallest singular value of B_k, by bisection on the Golub–Kahan tridiagonal
    /// form, which determines them to high relative accuracy (Demmel & Kahan, SISC 11:873, 1990).
    /// The largest tends to σ_max(Ã) from below; the smallest to the smallest that b̃ excites, from
    /// above. `None` before the first step.
    pub fn singular_values_extreme(&self) -> Option<(f64, f64)> {
        let k = self.steps();
        if k == 0 {
            return None;
        }
        // Off-diagonals α₁, β₂, α₂, β₃, … of the shuffled matrix of order 2k + 1.
        let off: Vec<f64> =
            self.alphas.iter().zip(&self.betas).flat_map(|(&a, &b)| [a, b]).collect();
        let bound = off.windows(2).map(|pair| pair[0] + pair[1]).fold(0.0, f64::max);
        let below = |x: f64| eigenvalues_below(&off, x) - (k + 1);
        let bisect = |wanted: usize| {
            let (mut low, mut high) = (0.0f64, bound * (1.0 + 1e-15) + f64::MIN_POSITIVE);
            // Down to relative 1e-15 from any start: exponents first, then digits.
            for _ in 0..1200 {
                let middle = if low == 0.0 { high / 1024.0 } else { (low * high).sqrt() };
                if middle <= f64::MIN_POSITIVE * 1e10 || (high - low) <= 4.0 * f64::EPSILON * high {
                    break;
                }
                if below(middle) >= wanted { high = middle } else { low = middle }
            }
            high
        };
        Some((bisect(k), bisect(1)))
    }
}

fn back_substitute(rows: &[Rotated]) -> Vec<f64> {
    let mut y = vec![0.0; rows.len()];
    let mut next = 0.0;
    for i in (0..rows.len()).rev() {
        let above = rows.get(i + 1).map_or(0.0, |row| row.above);
        next = (rows[i].right - above * next) / rows[i].diagonal;
        y[i] = next;
    }
    y
}

/// ‖R⁻ᵀy‖² = yᵀ(BᵀB + λ²I)⁻¹y.
fn forward_norm_squared(rows: &[Rotated], y: &[f64]) -> f64 {
    let mut last = 0.0;
    let mut sum = 0.0;
    for (row, y) in rows.iter().zip(y) {
        last = (y - row.above * last) / row.diagonal;
        sum += last * last;
    }
    sum
}

/// Eigenvalues below `x` of the symmetric tridiagonal matrix with zero diagonal and these
/// off-diagonals (Sturm count).
fn eigenvalues_below(off: &[f64], x: f64) -> usize {
    let mut d = -x;
    let mut count = usize::from(d < 0.0);
    for e in off {
        if d == 0.0 {
            d = f64::MIN_POSITIVE;
        }
        d = -x - e * (e / d);
        count += usize::from(d < 0.0);
    }
    count
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn extreme_singular_values_of_a_known_bidiagonal() {
        // B = [1; 1 1; 1] lower bidiagonal with ones: BᵀB = [2 1; 1 2], σ² = 3 and 1.
        let process =
            Process { beta_first: 1.0, alphas: vec![1.0, 1.0, 0.0], betas: vec![1.0, 1.0] };
        let (largest, smallest) = process.singular_values_extreme().unwrap();
        assert!((largest - 3f64.sqrt()).abs() < 1e-14, "{largest}");
        assert!((smallest - 1.0).abs() < 1e-14, "{smallest}");
    }

    #[test]
    fn curve_point_is_the_projected_solution() {
        let process =
            Process { beta_first: 2.0, alphas: vec![1.0, 1.0, 0.0], betas: vec![1.0, 1.0] };
        let lambda = 0.5f64;
        // (BᵀB + λ²I) y = Bᵀ(2e₁): [2.25 1; 1 2.25] y = [2; 0].
        let det = 2.25 * 2.25 - 1.0;
        let y = [2.0 * 2.25 / det, -2.0 / det];
        let r = [2.0 - y[0], -(y[0] + y[1]), -y[1]];
        let norm = |v: &[f64]| v.iter().map(|a| a * a).sum::<f64>().sqrt();
        let point = process.at(lambda);
        assert!((point.penalty_norm - norm(&y)).abs() < 1e-14);
        assert!((point.residual_norm - norm(&r)).abs() < 1e-14);
        let h = 1e-5;
        let eta = |l: f64| process.at(l).penalty_norm.powi(2);
        let slope = (eta(lambda + h) - eta(lambda - h)) / (2.0 * h);
        // Central difference: error h²·η''' / 6, far below 1e-8 here.
        assert!((point.penalty_slope - slope).abs() < 1e-8, "{} {slope}", point.penalty_slope);
    }
}
