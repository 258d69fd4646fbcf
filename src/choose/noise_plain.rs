//! `noise-plain`: the strength at which the residual is as large as the noise, ‖W(b − Ax)‖ = √m.
//!
//! Needs σ, and a right one. It takes the model as if it had no parameters, so it over-smooths.
//! Source: Morozov, Soviet Math. Dokl. 7:414, 1966.

use crate::choose::{Curve, Rule, RuleResult};

/// Halvings of the bracket in ln λ: from any range of strengths to a relative 1e-12.
const HALVINGS: usize = 60;

/// Finds the crossing. The residual norm grows with λ, so there is at most one.
pub fn noise_plain(curve: &Curve<'_>) -> RuleResult {
    let rule = Rule::NoisePlain;
    let Some(data) = curve.data_of_known_noise else {
        return RuleResult::not_applicable(rule, "the uncertainty of the data is not stated");
    };
    let target = (data as f64).sqrt();
    let (Some(first), Some(last)) = (curve.points.first(), curve.points.last()) else {
        return RuleResult::not_applicable(rule, "no strengths");
    };
    if last.residual_norm > target {
        let note = "the residual exceeds the noise at every strength: the uncertainty may be too \
                    small, or the range ends too early";
        return RuleResult {
            at_edge: true,
            note: note.into(),
            ..RuleResult::at(rule, last.strength)
        };
    }
    if first.residual_norm < target {
        let note = "the residual is below the noise at every strength: the reference already fits, \
                    or the uncertainty is too large";
        return RuleResult {
            at_edge: true,
            note: note.into(),
            ..RuleResult::at(rule, first.strength)
        };
    }
    let residual = |log: f64| match curve.process {
        Some(process) => process.at(log.exp()).residual_norm,
        None => interpolated(curve, log),
    };
    let (mut low, mut high) = (last.strength.ln(), first.strength.ln());
    for _ in 0..HALVINGS {
        let middle = (low + high) / 2.0;
        if residual(middle) < target { low = middle } else { high = middle }
    }
    RuleResult::at(rule, ((low + high) / 2.0).exp())
}

/// ρ between swept strengths, straight in the logarithms.
fn interpolated(curve: &Curve<'_>, log: f64) -> f64 {
    let pair = curve.points.windows(2).find(|pair| pair[1].strength.ln() <= log);
    let Some([strong, weak]) = pair else {
        return curve.points.last().map_or(f64::NAN, |p| p.residual_norm);
    };
    let share = (log - weak.strength.ln()) / (strong.strength.ln() - weak.strength.ln());
    let (a, b) = (weak.residual_norm.max(f64::MIN_POSITIVE).ln(), strong.residual_norm.ln());
    (a + share * (b - a)).exp()
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::choose::Point;

    #[test]
    fn the_crossing_is_found_between_two_strengths() {
        // ρ = λ: √m = 3 is crossed at λ = 3, and straight in the logarithms in between.
        let points: Vec<Point> = [10.0, 1.0, 0.1]
            .map(|s| Point { strength: s, residual_norm: s, penalty_norm: 1.0, converged: true })
            .to_vec();
        let curve = |data| Curve { points: &points, process: None, data_of_known_noise: data };
        let found = noise_plain(&curve(Some(9)));
        assert!((found.strength.unwrap() - 3.0).abs() < 1e-9 && !found.at_edge);
        assert!(noise_plain(&curve(Some(400))).at_edge);
        assert!(!noise_plain(&curve(None)).applicable);
    }
}
