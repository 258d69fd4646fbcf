//! `corner-pruned`: the corner of the discrete L-curve by adaptive pruning.
//!
//! Many points and small wiggles hide a corner, so the curve is looked at with only its p longest
//! segments, p growing; each view proposes corners by the sharpest angle and by the overall shape
//! (the point nearest to where the flat and the steep part would meet), and the candidates are
//! judged against each other at the end.
//!
//! Source: Hansen, Jensen & Rodriguez, J. Comput. Appl. Math. 198:483, 2007.

use crate::choose::{Curve, Rule, RuleResult};

type Place = [f64; 2];

/// Corner of the swept points.
pub fn corner_pruned(curve: &Curve<'_>) -> RuleResult {
    let rule = Rule::CornerPruned;
    // From weak to strong regularisation ρ grows and η falls: the order the method expects is by
    // falling strength, so that the curve starts on the flat side.
    let usable: Vec<(usize, Place)> = curve
        .points
        .iter()
        .enumerate()
        .filter(|(_, p)| p.residual_norm > 0.0 && p.penalty_norm > 0.0)
        .filter(|(_, p)| p.residual_norm.is_finite() && p.penalty_norm.is_finite())
        .map(|(i, p)| (i, [p.residual_norm.log10(), p.penalty_norm.log10()]))
        .collect();
    if usable.len() < 4 {
        return RuleResult::not_applicable(
            rule,
            "needs at least four points with a residual and a penalty",
        );
    }
    let places: Vec<Place> = usable.iter().map(|(_, place)| *place).collect();
    let Some(found) = pruned(&places) else {
        return RuleResult::not_applicable(
            rule,
            "the curve bends the other way everywhere: it has no corner",
        );
    };
    let strength = curve.points[usable[found].0].strength;
    let at_edge = found == 0 || found + 1 == places.len();
    let note = if at_edge { "at the end of the range: extend the strengths beyond it" } else { "" };
    RuleResult { at_edge, note: note.into(), ..RuleResult::at(rule, strength) }
}

/// Index of the corner among points ordered from strong to weak regularisation.
fn pruned(places: &[Place]) -> Option<usize> {
    let segments: Vec<Place> =
        places.windows(2).map(|pair| [pair[1][0] - pair[0][0], pair[1][1] - pair[0][1]]).collect();
    let mut by_length: Vec<usize> = (0..segments.len()).collect();
    let length = |i: usize| segments[i][0].hypot(segments[i][1]);
    by_length.sort_by(|&a, &b| length(b).total_cmp(&length(a)).then(a.cmp(&b)));
    let mut candidates = Vec::new();
    let mut kept = segments.len().min(5);
    loop {
        let mut longest = by_length[..kept].to_vec();
        longest.sort_unstable();
        candidates.extend(sharpest(&segments, &longest));
        candidates.extend(meeting_point(places, &segments, &longest));
        if kept == segments.len() {
            break;
        }
        kept = (2 * kept).min(segments.len());
    }
    candidates.sort_unstable();
    candidates.dedup();
    judge(places, &candidates)
}

fn unit(segment: Place) -> Place {
    let length = segment[0].hypot(segment[1]);
    if length > 0.0 { [segment[0] / length, segment[1] / length] } else { [0.0, 0.0] }
}

/// Sine of the turn from one direction to the next; negative where the curve turns towards the
/// corner of an L walked from strong to weak regularisation (up-left, then up).
fn turn(first: Place, second: Place) -> f64 {
    let (first, second) = (unit(first), unit(second));
    first[0] * second[1] - first[1] * second[0]
}

/// The point between two kept segments where the curve turns most sharply towards the corner.
fn sharpest(segments: &[Place], kept: &[usize]) -> Option<usize> {
    let mut best: Option<(usize, f64)> = None;
    for pair in kept.windows(2) {
        let sine = turn(segments[pair[0]], segments[pair[1]]);
        if sine < 0.0 && best.is_none_or(|(_, least)| sine < least) {
            // The later segment starts at the point of its own index.
            best = Some((pair[1], sine));
        }
    }
    best.map(|(place, _)| place)
}

/// The point nearest to where the most horizontal and the most vertical kept segments, taken as
/// level and plumb lines, would meet.
fn meeting_point(places: &[Place], segments: &[Place], kept: &[usize]) -> Option<usize> {
    let slope = |&i: &usize| unit(segments[i])[1].abs();
    let level = kept.iter().copied().min_by(|a, b| slope(a).total_cmp(&slope(b)))?;
    let plumb = kept.iter().copied().max_by(|a, b| slope(a).total_cmp(&slope(b)))?;
    // Walking from strong to weak, the level part comes first on an L.
    if level >= plumb {
        return None;
    }
    let meeting = [places[plumb][0], places[level + 1][1]];
    let distance = |p: Place| (p[0] - meeting[0]).hypot(p[1] - meeting[1]);
    (0..places.len()).min_by(|&a, &b| distance(places[a]).total_cmp(&distance(places[b])))
}

/// Walks the candidates from the strong end and takes the last one before the curve has turned
/// for good into its steep part.
fn judge(places: &[Place], candidates: &[usize]) -> Option<usize> {
    let (&last, _) = candidates.split_last()?;
    // From the first point, so that the first candidate has a way that leads to it.
    let mut stations = vec![0];
    stations.extend(candidates.iter().copied().filter(|&c| c != 0));
    let ways: Vec<Place> = stations
        .windows(2)
        .map(|pair| {
            let (a, b) = (places[pair[0]], places[pair[1]]);
            [b[0] - a[0], b[1] - a[1]]
        })
        .collect();
    for (i, way) in ways.iter().enumerate() {
        let steep = way[1].abs() >= way[0].abs();
        if !steep {
            continue;
        }
        let turns = i > 0 && turn(ways[i - 1], *way) < 0.0;
        if turns {
            return Some(stations[i]);
        }
    }
    Some(last)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_wiggly_ell_has_its_corner_where_the_arms_meet() {
        // Level arm to the left, then a steep arm up; small wiggles and crowded points near the corner.
        let mut places = Vec::new();
        for i in 0..12 {
            places.push([2.0 - i as f64 * 0.15, 0.01 * i as f64]);
        }
        for i in 0..8 {
            places
                .push([0.35 - 0.004 * i as f64 + 0.0005 * (i % 2) as f64, 0.115 + 0.01 * i as f64]);
        }
        for i in 0..12 {
            places.push([0.31 - 0.01 * i as f64, 0.25 + i as f64 * 0.3]);
        }
        let found = pruned(&places).unwrap();
        assert!((11..=20).contains(&found), "{found}: {:?}", places[found]);
    }

    #[test]
    fn a_curve_without_a_corner_says_so() {
        // Walked from strong to weak it turns the other way throughout: a quarter circle bulging outward.
        let places: Vec<Place> = (0..20)
            .map(|i| {
                let angle = i as f64 / 19.0 * std::f64::consts::FRAC_PI_2;
                [angle.cos(), angle.sin()]
            })
            .collect();
        assert_eq!(pruned(&places), None);
    }
}
