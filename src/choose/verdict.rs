//! What the rules say together.

use crate::choose::corner::corner;
use crate::choose::corner_pruned::corner_pruned;
use crate::choose::noise_plain::noise_plain;
use crate::choose::{Curve, Point};

/// A rule that chooses a strength.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Rule {
    /// Largest curvature of the L-curve (ln ρ², ln η²), from the scalars of a fan.
    Corner,
    /// Corner of the discrete L-curve by adaptive pruning, from ρ and η alone.
    CornerPruned,
    /// Discrepancy principle without degrees of freedom: ρ² = m, σ stated.
    NoisePlain,
}

impl Rule {
    /// The word in settings and records.
    pub fn word(self) -> &'static str {
        match self {
            Self::Corner => "corner",
            Self::CornerPruned => "corner-pruned",
            Self::NoisePlain => "noise-plain",
        }
    }
}

/// One rule's view.
#[derive(Debug, Clone, PartialEq, serde::Serialize, serde::Deserialize)]
pub struct RuleResult {
    /// Whose view.
    pub rule: Rule,
    /// The rule's own strength, not rounded to the sweep's; `None` where it does not apply.
    pub strength: Option<f64>,
    /// Whether the rule says anything on this sweep; `note` says why not.
    pub applicable: bool,
    /// `strength` is an end of the sweep, so the rule may want one beyond it.
    pub at_edge: bool,
    /// Why it does not apply, or what to mind.
    pub note: String,
    /// Curvature at the strength, for rules that have one.
    #[serde(skip)]
    pub bend: Option<f64>,
}

impl RuleResult {
    /// The rule applies and chooses `strength`, inside the range.
    pub fn at(rule: Rule, strength: f64) -> Self {
        Self {
            rule,
            strength: Some(strength),
            applicable: true,
            at_edge: false,
            note: String::new(),
            bend: None,
        }
    }

    /// The rule does not apply, for the reason in `note`.
    pub fn not_applicable(rule: Rule, note: &str) -> Self {
        Self {
            rule,
            strength: None,
            applicable: false,
            at_edge: false,
            note: note.into(),
            bend: None,
        }
    }
}

/// How far the rules agree.
#[derive(Debug, Clone, Copy, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
#[serde(rename_all = "kebab-case")]
pub enum Verdict {
    /// The rules that apply lie within a factor of [`AGREED_FACTOR`].
    Agreed,
    /// They do not.
    Divided,
    /// They lie more than a factor of [`UNDETERMINED_FACTOR`] apart, only one applies or none, or
    /// the decisive one sits on an edge.
    Undetermined,
}

/// Rules within this factor of each other agree: the error of a reconstruction near its best
/// strength is flat over about that much.
pub const AGREED_FACTOR: f64 = 2.0;

/// Rules further apart than this: the data do not determine the strength.
pub const UNDETERMINED_FACTOR: f64 = 10.0;

/// The choice over a sweep.
#[derive(Debug, Clone, PartialEq, serde::Serialize, serde::Deserialize)]
pub struct Choice {
    /// The swept strength nearest to the decisive rule's, whose model is handed over.
    pub strength: f64,
    /// Its place in the sweep.
    #[serde(skip)]
    pub place: usize,
    /// The decisive rule; `None` where no rule applies.
    pub rule: Option<Rule>,
    /// Every rule's view, in the order in which they would decide.
    pub rules: Vec<RuleResult>,
    /// log₁₀ of the largest over the smallest strength of the rules that apply.
    pub spread_decades: f64,
    /// By the rules that apply, the decisive one or not.
    pub verdict: Verdict,
    /// Sentences behind the choice and the verdict, for the reader of a report.
    pub reasons: Vec<String>,
}

/// Applies every rule to the strengths that converged; `wanted` makes one decisive where it applies.
/// Else the noise level is where σ is stated, then the curvature corner, then the pruned one: on
/// test problems a corner was within twice the best error less often.
///
/// Panics on a sweep without points.
pub fn choose(curve: &Curve<'_>, wanted: Option<Rule>) -> Choice {
    let places: Vec<usize> =
        (0..curve.points.len()).filter(|&i| curve.points[i].converged).collect();
    let converged: Vec<Point> = places.iter().map(|&i| curve.points[i]).collect();
    let judged = Curve { points: &converged, ..*curve };
    let rules = vec![noise_plain(&judged), corner(&judged), corner_pruned(&judged)];
    let applicable: Vec<&RuleResult> = rules.iter().filter(|r| r.applicable).collect();
    let by_itself = applicable.iter().find(|r| !r.at_edge).or_else(|| applicable.first()).copied();
    let asked = wanted.and_then(|rule| applicable.iter().find(|r| r.rule == rule).copied());
    let decisive = asked.or(by_itself);
    let spread_decades = spread(&applicable);
    let mut reasons = Vec::new();
    let left_out = curve.points.len() - converged.len();
    if left_out > 0 {
        reasons.push(format!(
            "{left_out} of {} strengths did not converge and have no say.",
            curve.points.len()
        ));
    }
    if let Some(rule) = wanted.filter(|_| asked.is_none()) {
        let instead = match decisive {
            Some(result) => format!("{} decides instead", result.rule.word()),
            None => "no other does".into(),
        };
        reasons.push(format!("The rule asked for, {}, does not apply; {instead}.", rule.word()));
    }
    let verdict = judge(&applicable, spread_decades, decisive, &mut reasons);
    let place = match decisive.and_then(|result| result.strength) {
        Some(strength) => places[nearest(&converged, strength)],
        None => {
            reasons.push(
                "No rule applies, so nothing is chosen and the model in the middle of the range stands in: take a strength of your own with `ellbow solve`.".into(),
            );
            places.get(places.len() / 2).copied().unwrap_or(curve.points.len() / 2)
        }
    };
    let rule = decisive.map(|result| result.rule);
    reasons.extend(rule.map(|rule| character(rule).to_owned()));
    let strength = curve.points[place].strength;
    Choice { strength, place, rule, rules, spread_decades, verdict, reasons }
}

/// What a reader must know of the decisive rule.
fn character(rule: Rule) -> &'static str {
    match rule {
        Rule::Corner | Rule::CornerPruned => {
            "A corner tends to under-smooth: expect more detail and more noise than the data support."
        }
        Rule::NoisePlain => {
            "The plain noise level tends to over-smooth, and is only as good as the stated uncertainty."
        }
    }
}

fn spread(applicable: &[&RuleResult]) -> f64 {
    let strengths = applicable.iter().filter_map(|r| r.strength);
    let (low, high) =
        strengths.fold((f64::INFINITY, 0.0f64), |(low, high), s| (low.min(s), high.max(s)));
    if high > 0.0 { (high / low).log10() } else { 0.0 }
}

fn judge(
    applicable: &[&RuleResult],
    spread_decades: f64,
    decisive: Option<&RuleResult>,
    reasons: &mut Vec<String>,
) -> Verdict {
    for result in applicable.iter().filter(|r| r.at_edge) {
        reasons.push(format!(
            "{} lies on the edge of the range, at {:.3e}: extend it with --strengths.",
            result.rule.word(),
            result.strength.unwrap_or(f64::NAN)
        ));
    }
    if decisive.is_none_or(|r| r.at_edge) {
        return Verdict::Undetermined;
    }
    if applicable.len() < 2 {
        reasons.push("Only one rule applies: there is no second opinion.".into());
        return Verdict::Undetermined;
    }
    let factor = 10f64.powf(spread_decades);
    if factor > UNDETERMINED_FACTOR {
        reasons.push(format!("The rules lie a factor {factor:.1} apart: the strength is not determined by these data."));
        Verdict::Undetermined
    } else if factor > AGREED_FACTOR {
        reasons.push(format!(
            "The rules lie a factor {factor:.1} apart: look at both models before you act."
        ));
        Verdict::Divided
    } else {
        reasons.push(format!("The rules lie within a factor {factor:.1} of each other."));
        Verdict::Agreed
    }
}

/// Place of the swept strength nearest in log λ.
fn nearest(points: &[Point], strength: f64) -> usize {
    let distance = |p: &Point| (p.strength / strength).ln().abs();
    (0..points.len())
        .min_by(|&a, &b| distance(&points[a]).total_cmp(&distance(&points[b])))
        .expect("a sweep with points")
}

#[cfg(test)]
mod tests {
    use super::*;

    fn points(unconverged: usize) -> Vec<Point> {
        (0..12)
            .map(|i| {
                let strength = 10f64.powf(1.0 - i as f64 / 4.0);
                let converged = i < 12 - unconverged;
                // What did not converge lies anywhere.
                let residual_norm = if converged { strength } else { 50.0 };
                Point { strength, residual_norm, penalty_norm: 1.0, converged }
            })
            .collect()
    }

    #[test]
    fn strengths_that_did_not_converge_have_no_say() {
        let of = |unconverged, wanted| {
            let points = points(unconverged);
            let curve = Curve { points: &points, process: None, data_of_known_noise: Some(4) };
            choose(&curve, wanted)
        };
        let whole = of(0, None);
        assert_eq!((whole.rule, whole.place), (Some(Rule::NoisePlain), 3));
        let part = of(5, None);
        assert_eq!((part.rule, part.place), (whole.rule, whole.place));
        assert!(part.reasons[0].starts_with("5 of 12 strengths did not converge"));
        assert!(of(12, None).rule.is_none());
    }

    #[test]
    fn a_rule_that_does_not_apply_gives_way_and_says_so() {
        let points = points(0);
        let curve = Curve { points: &points, process: None, data_of_known_noise: Some(4) };
        let choice = choose(&curve, Some(Rule::Corner));
        assert_eq!(choice.rule, Some(Rule::NoisePlain));
        assert!(choice.reasons[0].contains("corner, does not apply; noise-plain decides"));
        let blind = Curve { points: &points[..2], data_of_known_noise: None, ..curve };
        let choice = choose(&blind, Some(Rule::Corner));
        assert!(choice.rule.is_none() && choice.verdict == Verdict::Undetermined);
        assert!(choice.reasons.iter().any(|reason| reason.contains("nothing is chosen")));
    }
}
