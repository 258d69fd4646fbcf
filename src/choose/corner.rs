//! `corner`: the point of largest curvature of the L-curve (ln ‖r‖, ln ‖P(x − x_ref)‖) over all λ.
//!
//! With ρ, η the *squared* norms and η' = dη/dλ:
//!
//! κ = 2 (ρ η/|η'|) · (λ² η' ρ + 2 λ η ρ + λ⁴ η η') / (λ⁴ η² + ρ²)^{3/2}
//!
//! Sources: Hansen, SIAM Review 34:561, 1992; Hansen & O'Leary, SISC 14:1487, 1993. A corner tends
//! to under-smooth, moves with the axes and does not converge as the noise vanishes (Vogel, Inverse
//! Problems 12:535, 1996): it is a witness, not a proof.

use crate::choose::{Curve, Rule, RuleResult};
use crate::solve::Process;
use crate::solve::process::CurvePoint;

/// Evaluations per interval of the sweep: enough to see a corner between two strengths.
const STEPS_PER_INTERVAL: usize = 8;

/// The corner is located to this in ln λ.
const LOG_TOLERANCE: f64 = 1e-9;

/// Curvature at a point of the curve; `NaN` where the curve says nothing.
pub fn curvature(point: &CurvePoint) -> f64 {
    let lambda_squared = point.strength * point.strength;
    let rho = point.residual_norm * point.residual_norm;
    let eta = point.penalty_norm * point.penalty_norm;
    let slope = point.penalty_slope;
    if slope == 0.0 || rho == 0.0 || eta == 0.0 {
        return f64::NAN;
    }
    let bracket = lambda_squared * slope * rho
        + 2.0 * point.strength * eta * rho
        + lambda_squared * lambda_squared * eta * slope;
    let length = (lambda_squared * eta).hypot(rho);
    // length³ may overflow where the quotient does not.
    2.0 * (rho / length) * (eta / slope.abs()) * (bracket / length) / length
}

/// Looks for the largest curvature between the sweep's ends.
pub fn corner(curve: &Curve<'_>) -> RuleResult {
    let rule = Rule::Corner;
    let Some(process) = curve.process else {
        return RuleResult::not_applicable(
            rule,
            "needs lsqr or lsmr with one process for all strengths",
        );
    };
    let (Some(first), Some(last)) = (curve.points.first(), curve.points.last()) else {
        return RuleResult::not_applicable(rule, "no strengths");
    };
    if curve.points.len() < 3 || last.strength <= 0.0 {
        return RuleResult::not_applicable(rule, "needs at least three positive strengths");
    }
    let (high, low) = (first.strength.ln(), last.strength.ln());
    let steps = STEPS_PER_INTERVAL * (curve.points.len() - 1);
    let at = |log: f64| curvature(&process.at(log.exp()));
    let node = |i: usize| high + (low - high) * i as f64 / steps as f64;
    let mut best: Option<(usize, f64)> = None;
    for i in 0..=steps {
        let value = at(node(i));
        if value.is_finite() && best.is_none_or(|(_, top)| value > top) {
            best = Some((i, value));
        }
    }
    let Some((place, top)) = best else {
        return RuleResult::not_applicable(
            rule,
            "the curve has no slope: every strength gives the same model",
        );
    };
    if top <= 0.0 {
        return RuleResult::not_applicable(
            rule,
            "the curve bends the other way everywhere: it has no corner",
        );
    }
    if place == 0 || place == steps {
        let note = "largest at the end of the range: extend the strengths beyond it";
        return RuleResult {
            note: note.into(),
            at_edge: true,
            ..RuleResult::at(rule, node(place).exp())
        };
    }
    let log = golden_section(node(place + 1), node(place - 1), at);
    RuleResult { bend: Some(at(log)), ..RuleResult::at(rule, log.exp()) }
}

/// Largest value between two ends of an interval with one peak (Kiefer, Proc. AMS 4:502, 1953).
fn golden_section(mut low: f64, mut high: f64, at: impl Fn(f64) -> f64) -> f64 {
    let share = (5f64.sqrt() - 1.0) / 2.0;
    let (mut left, mut right) = (high - share * (high - low), low + share * (high - low));
    let (mut at_left, mut at_right) = (at(left), at(right));
    while high - low > LOG_TOLERANCE {
        if at_left >= at_right {
            (high, right, at_right) = (right, left, at_left);
            left = high - share * (high - low);
            at_left = at(left);
        } else {
            (low, left, at_left) = (left, right, at_right);
            right = low + share * (high - low);
            at_right = at(right);
        }
    }
    (low + high) / 2.0
}

/// Curvature at every swept strength, for the table; empty without a fan.
pub fn bends(process: Option<&Process>, strengths: &[f64]) -> Vec<f64> {
    process.map_or(Vec::new(), |process| {
        strengths.iter().map(|&s| curvature(&process.at(s))).collect()
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn curvature_is_that_of_the_curve_in_the_logarithmic_plane() {
        // σ = (1, 0.01): ρ, η and their derivatives in closed form.
        let (sigma, beta) = ([1.0, 0.01], [1.0, 0.5]);
        let rho = |l: f64| {
            (0..2).map(|i| (l * l / (sigma[i] * sigma[i] + l * l) * beta[i]).powi(2)).sum::<f64>()
        };
        let eta = |l: f64| {
            (0..2)
                .map(|i| (sigma[i] / (sigma[i] * sigma[i] + l * l) * beta[i]).powi(2))
                .sum::<f64>()
        };
        let slope = |l: f64| {
            (0..2)
                .map(|i| {
                    let s = sigma[i] * sigma[i];
                    -4.0 * l * s * beta[i] * beta[i] / (s + l * l).powi(3)
                })
                .sum::<f64>()
        };
        for lambda in [0.003, 0.02, 0.1, 0.7] {
            let point = CurvePoint {
                strength: lambda,
                residual_norm: rho(lambda).sqrt(),
                penalty_norm: eta(lambda).sqrt(),
                gradient_norm: 0.0,
                penalty_slope: slope(lambda),
            };
            // Parametric curvature of (ln √ρ, ln √η) by central differences in ln λ; their error
            // is h² times fourth derivatives of order 10: below 1e-5 with h = 1e-3.
            let (x, y) = (|t: f64| rho(t.exp()).ln() / 2.0, |t: f64| eta(t.exp()).ln() / 2.0);
            let (t, h) = (lambda.ln(), 1e-3);
            let d = |f: &dyn Fn(f64) -> f64| (f(t + h) - f(t - h)) / (2.0 * h);
            let dd = |f: &dyn Fn(f64) -> f64| (f(t + h) - 2.0 * f(t) + f(t - h)) / (h * h);
            let cross = d(&x) * dd(&y) - d(&y) * dd(&x);
            let expected = cross / (d(&x).powi(2) + d(&y).powi(2)).powf(1.5);
            let found = curvature(&point);
            assert!(
                (found - expected).abs() < 1e-4 * expected.abs().max(1.0),
                "{found} {expected}"
            );
        }
    }
}
