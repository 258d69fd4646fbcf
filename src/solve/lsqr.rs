//! LSQR: the model that minimises ‖[b̃; 0] − [Ã; λI] y‖ over the Krylov space, step by step.
//!
//! | symbol | here | meaning |
//! |---|---|---|
//! | φ̄ | phi_bar | residual norm of the undamped part |
//! | ρ̄, ϱ | rho_bar, rho | diagonal of the bidiagonal factor before, after the second rotation |
//! | θ | theta | its superdiagonal |
//! | ψ² summed | damped | what the damping rotations took out of φ̄² |
//! | w | vector 1 | direction |
//!
//! Source: Paige & Saunders, ACM TOMS 8(1):43 and 8(2):195, 1982. ‖y‖ by their second rotation.

use crate::solve::Estimate;
use crate::solve::fan::Rotations;
use crate::solve::pieces::PIECE_ROWS;

/// Scalars of one track of LSQR; two vectors: y, w.
pub struct Lsqr {
    lambda: f64,
    phi_bar: f64,
    rho_bar: f64,
    damped: f64,
    gradient: f64,
    norm: ModelNorm,
}

/// y += step·w,  w ← v − turn·w.
#[derive(Clone, Copy)]
pub struct Update {
    step: f64,
    turn: f64,
}

impl Rotations for Lsqr {
    const VECTORS: usize = 2;
    type Update = Update;

    fn new(damping: f64, beta: f64, alpha: f64) -> Self {
        Self {
            lambda: damping,
            phi_bar: beta,
            rho_bar: alpha,
            damped: 0.0,
            gradient: alpha * beta,
            norm: ModelNorm::new(),
        }
    }

    fn damping(&self) -> f64 {
        self.lambda
    }

    fn turn(&mut self, beta: f64, alpha: f64) -> Update {
        // ρ̃ = √(ρ̄² + λ²): rotate the damping row away.
        let rho_tilde = self.rho_bar.hypot(self.lambda);
        let psi = self.lambda / rho_tilde * self.phi_bar;
        self.phi_bar *= self.rho_bar / rho_tilde;
        self.damped += psi * psi;
        // ϱ = √(ρ̃² + β²): rotate the new row away.
        let rho = rho_tilde.hypot(beta);
        let (c, s) = (rho_tilde / rho, beta / rho);
        let theta = s * alpha;
        self.rho_bar = -c * alpha;
        let phi = c * self.phi_bar;
        self.phi_bar *= s;
        self.gradient = (self.phi_bar * alpha * c).abs();
        self.norm.turn(rho, theta, phi);
        Update { step: phi / rho, turn: theta / rho }
    }

    fn begin(v: &[f64], vectors: &mut [f64]) {
        vectors[..v.len()].fill(0.0);
        vectors[PIECE_ROWS..PIECE_ROWS + v.len()].copy_from_slice(v);
    }

    fn apply(update: Update, v: &[f64], vectors: &mut [f64]) -> f64 {
        let (y, w) = vectors.split_at_mut(PIECE_ROWS);
        for ((y, w), v) in y.iter_mut().zip(w).zip(v) {
            *y += update.step * *w;
            *w = v - update.turn * *w;
        }
        0.0
    }

    fn estimate(&self) -> Estimate {
        Estimate {
            total: (self.phi_bar * self.phi_bar + self.damped).sqrt(),
            penalty: self.norm.current,
            gradient: self.gradient,
            ..Estimate::default()
        }
    }
}

/// ‖y‖ from scalars: R is made lower bidiagonal from the right; there the solution has its norm.
struct ModelNorm {
    c: f64,
    s: f64,
    z: f64,
    settled: f64,
    current: f64,
}

impl ModelNorm {
    fn new() -> Self {
        Self { c: -1.0, s: 0.0, z: 0.0, settled: 0.0, current: 0.0 }
    }

    fn turn(&mut self, rho: f64, theta: f64, phi: f64) {
        let delta = self.s * rho;
        let gamma_bar = -self.c * rho;
        let right = phi - delta * self.z;
        self.current = (self.settled + (right / gamma_bar).powi(2)).sqrt();
        let gamma = gamma_bar.hypot(theta);
        self.c = gamma_bar / gamma;
        self.s = theta / gamma;
        self.z = right / gamma;
        self.settled += self.z * self.z;
    }
}
