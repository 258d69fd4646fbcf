//! LSMR: the model that minimises ‖Ãᵀr − λ²y‖ over the Krylov space; safer to stop early.
//!
//! | symbol | here | meaning |
//! |---|---|---|
//! | ᾱ, α̂ | alpha_bar, alpha_hat | diagonal before and after the damping rotation |
//! | ρ, θ | rho, theta | first bidiagonal factor |
//! | ρ̄, θ̄, ζ̄ | rho_hat, theta_hat, zeta_bar | second factor and its right-hand side |
//! | h, h̄ | vectors 1, 2 | directions |
//!
//! Source: Fong & Saunders, SISC 33:2950, 2011; ‖r‖ by their section 5.1.

use crate::solve::Estimate;
use crate::solve::fan::Rotations;
use crate::solve::pieces::PIECE_ROWS;

/// Scalars of one track of LSMR; three vectors: y, h, h̄.
pub struct Lsmr {
    lambda: f64,
    alpha_bar: f64,
    zeta_bar: f64,
    zeta: f64,
    rho: f64,
    rho_hat: f64,
    c_hat: f64,
    s_hat: f64,
    residual: Residual,
    norm: f64,
}

/// h̄ ← h − back·h̄,  y += step·h̄,  h ← v − turn·h.
#[derive(Clone, Copy)]
pub struct Update {
    back: f64,
    step: f64,
    turn: f64,
}

impl Rotations for Lsmr {
    const VECTORS: usize = 3;
    type Update = Update;

    fn new(damping: f64, beta: f64, alpha: f64) -> Self {
        Self {
            lambda: damping,
            alpha_bar: alpha,
            zeta_bar: alpha * beta,
            zeta: 0.0,
            rho: 1.0,
            rho_hat: 1.0,
            c_hat: 1.0,
            s_hat: 0.0,
            residual: Residual::new(beta),
            norm: 0.0,
        }
    }

    fn damping(&self) -> f64 {
        self.lambda
    }

    fn turn(&mut self, beta: f64, alpha: f64) -> Update {
        // Damping row.
        let alpha_hat = self.alpha_bar.hypot(self.lambda);
        let (c_damp, s_damp) = (self.alpha_bar / alpha_hat, self.lambda / alpha_hat);
        // First factor.
        let rho_old = self.rho;
        self.rho = alpha_hat.hypot(beta);
        let (c, s) = (alpha_hat / self.rho, beta / self.rho);
        let theta = s * alpha;
        self.alpha_bar = c * alpha;
        // Second factor.
        let (rho_hat_old, zeta_old) = (self.rho_hat, self.zeta);
        let theta_hat = self.s_hat * self.rho;
        let rho_part = self.c_hat * self.rho;
        self.rho_hat = rho_part.hypot(theta);
        self.c_hat = rho_part / self.rho_hat;
        self.s_hat = theta / self.rho_hat;
        self.zeta = self.c_hat * self.zeta_bar;
        self.zeta_bar *= -self.s_hat;
        self.residual.turn(c_damp, s_damp, c, s, theta_hat, self.rho_hat, zeta_old, self.zeta);
        Update {
            back: theta_hat * self.rho / (rho_old * rho_hat_old),
            step: self.zeta / (self.rho * self.rho_hat),
            turn: theta / self.rho,
        }
    }

    fn begin(v: &[f64], vectors: &mut [f64]) {
        vectors[..v.len()].fill(0.0);
        vectors[PIECE_ROWS..PIECE_ROWS + v.len()].copy_from_slice(v);
        vectors[2 * PIECE_ROWS..2 * PIECE_ROWS + v.len()].fill(0.0);
    }

    fn apply(update: Update, v: &[f64], vectors: &mut [f64]) -> f64 {
        let (y, rest) = vectors.split_at_mut(PIECE_ROWS);
        let (h, h_hat) = rest.split_at_mut(PIECE_ROWS);
        let mut sum = 0.0;
        for (((y, h), h_hat), v) in y.iter_mut().zip(h).zip(h_hat).zip(v) {
            *h_hat = *h - update.back * *h_hat;
            *y += update.step * *h_hat;
            *h = v - update.turn * *h;
            sum += *y * *y;
        }
        sum
    }

    fn set_model_norm_squared(&mut self, squared: f64) {
        self.norm = squared.sqrt();
    }

    fn estimate(&self) -> Estimate {
        Estimate {
            total: self.residual.norm,
            penalty: self.norm,
            gradient: self.zeta_bar.abs(),
            ..Estimate::default()
        }
    }
}

/// ‖[r; λy]‖ from scalars.
struct Residual {
    beta_ddot: f64,
    beta_dot: f64,
    rho_dot: f64,
    tau: f64,
    theta: f64,
    taken: f64,
    norm: f64,
}

impl Residual {
    fn new(beta: f64) -> Self {
        Self {
            beta_ddot: beta,
            beta_dot: 0.0,
            rho_dot: 1.0,
            tau: 0.0,
            theta: 0.0,
            taken: 0.0,
            norm: beta,
        }
    }

    #[expect(clippy::too_many_arguments, reason = "the rotations of one step, by their symbols")]
    fn turn(
        &mut self,
        c_damp: f64,
        s_damp: f64,
        c: f64,
        s: f64,
        theta_hat: f64,
        rho_hat: f64,
        zeta_old: f64,
        zeta: f64,
    ) {
        let damped = -s_damp * self.beta_ddot;
        let kept = c_damp * self.beta_ddot;
        let beta_hat = c * kept;
        self.beta_ddot = -s * kept;
        let theta_old = self.theta;
        let rho_tilde = self.rho_dot.hypot(theta_hat);
        let (c_tilde, s_tilde) = (self.rho_dot / rho_tilde, theta_hat / rho_tilde);
        self.theta = s_tilde * rho_hat;
        self.rho_dot = c_tilde * rho_hat;
        self.beta_dot = c_tilde * beta_hat - s_tilde * self.beta_dot;
        self.tau = (zeta_old - theta_old * self.tau) / rho_tilde;
        let tau_dot = (zeta - self.theta * self.tau) / self.rho_dot;
        self.taken += damped * damped;
        self.norm =
            (self.taken + (self.beta_dot - tau_dot).powi(2) + self.beta_ddot.powi(2)).sqrt();
    }
}
