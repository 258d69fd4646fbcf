//! Whether data and matrix speak of the same size and sign.
//!
//! Three witnesses, in order; the first that accuses is heard:
//!
//! 1. *A reference model.* Data and A x_ref are compared by their regression slope. It counts if
//!    their correlation exceeds 0.7 in size, i.e. the reference explains half of ‖Wb‖². A
//!    negative one says the sign is wrong; a slope off by 30 or more (no reference worth the name
//!    is) that the unit is.
//! 2. *One constant.* Where no entry is negative, the constant Σ sᵢbᵢ/Σ sᵢ² that fits best is an
//!    average of the true unknowns with weights that are not negative, whatever the model. So it
//!    lies within the range of values called plausible, up to noise: five standard deviations,
//!    taken from the misfit of the constant fit itself, which contains more than noise. All data
//!    count alike here, so that a wrong σ does not decide who is heard.
//! 3. *A quick fit.* The share of the model's size that lies outside the plausible range. A
//!    regularised model overshoots by a tenth or two of its size; 0.25 is beyond that. A fit that
//!    spends nearly as many parameters as there are data follows the noise and is not heard.
//!
//! A sign or a factor between units is named only if it brings the value back into the range.

use super::{Finding, Kind, QuickFit, Severity, number, predicted_by_reference, weighted};
use crate::base::sums::dot;
use crate::system::{Facts, System};

const CORRELATION_MIN: f64 = 0.7;
const SLOPE_OFF_MIN: f64 = 30.0;
const DEVIATIONS: f64 = 5.0;
const OUTSIDE_MIN: f64 = 0.25;
/// Effective parameters for each datum beyond which a model follows the noise.
const PARAMETERS_MAX: f64 = 0.8;
/// A hypothesis must remove three quarters of what lies outside.
const OUTSIDE_LEFT_MAX: f64 = 0.25;
/// Overshoot allowed beyond the range, as a part of its width, before a factor is suspected.
const WIDENED: f64 = 0.2;

/// Data over what they should be: milli, micro, percent, minutes, hours, and back.
const FACTORS: [(f64, &str); 10] = [
    (1e3, "milliseconds for seconds"),
    (1e-3, "kilometres for metres"),
    (1e6, "micro-units for units"),
    (1e-6, "units for micro-units"),
    (1e2, "centimetres for metres"),
    (1e-2, "metres for centimetres"),
    (60.0, "seconds for minutes"),
    (1.0 / 60.0, "minutes for seconds"),
    (3600.0, "seconds for hours"),
    (1.0 / 3600.0, "hours for seconds"),
];

pub(super) struct Size {
    pub finding: Option<Finding>,
    /// Whether there was anything to judge the size by.
    pub tested: bool,
}

/// `odd_columns`: some columns are far out of scale, so that they rule the row sums and a constant
/// means nothing.
pub(super) fn find(
    system: &System,
    facts: &Facts,
    fit: Option<&QuickFit>,
    odd_columns: bool,
) -> Size {
    let mut tested = false;
    for set in 0..facts.data_sets {
        let fit = fit.filter(|fit| fit.data_set == set);
        let witnesses = [
            against_reference(system, facts, set),
            against_constant(system, facts, set).filter(|_| !odd_columns),
            fit.and_then(|fit| against_fit(system, fit, facts.sets[set].data)),
        ];
        for verdict in witnesses.into_iter().flatten() {
            tested = true;
            if let Verdict::Accused(finding) = verdict {
                return Size { finding: Some(*finding), tested };
            }
        }
    }
    Size { finding: None, tested }
}

/// What a witness that can speak has to say.
enum Verdict {
    Sound,
    Accused(Box<Finding>),
}

fn accuse(finding: Finding) -> Option<Verdict> {
    Some(Verdict::Accused(Box::new(finding)))
}

const SIGN_REMEDY: &str = "check the sign convention of the data (observed minus predicted, or the reverse; up or down positive) against the matrix";
const UNIT_REMEDY: &str = "convert the data to the unit in which the matrix predicts them, and their uncertainty with them";

fn against_reference(system: &System, facts: &Facts, set: usize) -> Option<Verdict> {
    let predicted = predicted_by_reference(system, set)?;
    let p = weighted(system, set, |i| predicted[i]);
    let b = weighted(system, set, |i| system.data[[i, set]]);
    let (pp, pb) = (dot(&p, &p), dot(&p, &b));
    let bb = facts.sets[set].weighted_data_square;
    let correlation = pb / (pp * bb).sqrt();
    let slope = pb / pp;
    if !(correlation.abs() >= CORRELATION_MIN && slope.is_finite()) {
        return None;
    }
    let kind = if slope.abs() >= SLOPE_OFF_MIN || slope.abs() <= 1.0 / SLOPE_OFF_MIN {
        Kind::DataUnits
    } else if slope < 0.0 {
        Kind::DataSign
    } else {
        return Some(Verdict::Sound);
    };
    let (sentence, remedy) = if kind == Kind::DataSign {
        (
            "The data are what the reference model predicts, but with the opposite sign."
                .to_string(),
            SIGN_REMEDY,
        )
    } else {
        let sentence = format!(
            "The data are about {} times what the reference model predicts{}.",
            number(slope.abs()),
            example(slope.abs())
        );
        (sentence, UNIT_REMEDY)
    };
    accuse(
        Finding::new(kind, Severity::Fault, sentence, remedy)
            .with("slope of the data over those of the reference model", slope)
            .with("their correlation", correlation),
    )
}

fn against_constant(system: &System, facts: &Facts, set: usize) -> Option<Verdict> {
    let (low, high) = system.units.plausible?;
    let one_sign = facts.row.sum.iter().zip(&facts.row.absolute_sum).all(|(s, a)| s == a);
    let fixed = system.columns.fixed.as_ref();
    if !one_sign || fixed.is_some_and(|values| values.iter().any(|value| !value.is_nan())) {
        return None;
    }
    let counts = |i: usize| f64::from(u8::from(system.included(i, set)));
    let s: Vec<f64> = (0..facts.rows).map(|i| counts(i) * facts.row.sum[i]).collect();
    let b: Vec<f64> = (0..facts.rows).map(|i| counts(i) * system.data[[i, set]]).collect();
    let (ss, sb, bb) = (dot(&s, &s), dot(&s, &b), dot(&b, &b));
    let (value, share) = (sb / ss, sb / ss * (sb / bb));
    if !(share > 0.0 && value.is_finite()) {
        return None;
    }
    let misfit = (1.0 - share).max(0.0) * bb;
    let spare = DEVIATIONS * (misfit / facts.sets[set].data as f64 / ss).sqrt();
    let inside = |value: f64, spare: f64| value >= low - spare && value <= high + spare;
    if inside(value, spare) {
        return Some(Verdict::Sound);
    }
    let unit = &system.units.model;
    let seen = format!(
        "The one value that fits all data alike is {} {unit}, outside the plausible {} to {} {unit}",
        number(value),
        number(low),
        number(high)
    );
    let finding = if inside(-value, 0.0) {
        let sentence = format!("{seen}; with the opposite sign it would lie inside.");
        Finding::new(Kind::DataSign, Severity::Fault, sentence, SIGN_REMEDY)
    } else if let Some((factor, word)) =
        FACTORS.iter().find(|(factor, _)| inside(value / factor, spare / factor))
    {
        let sentence = format!(
            "{seen}; data divided by {} would bring it inside (e.g. {word}).",
            number(*factor)
        );
        Finding::new(Kind::DataUnits, Severity::Fault, sentence, UNIT_REMEDY)
    } else {
        let remedy = "check the units of data, matrix and plausible range against each other";
        Finding::new(Kind::ImplausibleSize, Severity::Caution, format!("{seen}."), remedy)
    };
    accuse(
        finding
            .with_unit("one value for all unknowns", value, unit)
            .with("share of the data it explains", share),
    )
}

fn against_fit(system: &System, fit: &QuickFit, data: usize) -> Option<Verdict> {
    let (low, high) = system.units.plausible?;
    if fit.trials[fit.chosen].effective_parameters > PARAMETERS_MAX * data as f64 {
        return None;
    }
    let is_free = |j: usize| {
        let fixed = system.columns.fixed.as_ref();
        fixed.is_none_or(|values| values[j].is_nan()) && system.columns.is_cell(j)
    };
    let values: Vec<f64> =
        (0..fit.model.len()).filter(|&j| is_free(j)).map(|j| fit.model[j]).collect();
    let outside = |factor: f64, spare: f64| {
        let (low, high) = (low - spare, high + spare);
        let beyond = |x: f64| (low - x).max(x - high).max(0.0);
        let total: f64 = values.iter().map(|x| (factor * x).abs()).sum();
        if total > 0.0 {
            values.iter().map(|x| beyond(factor * x)).sum::<f64>() / total
        } else {
            0.0
        }
    };
    let share = outside(1.0, 0.0);
    if share < OUTSIDE_MIN {
        return Some(Verdict::Sound);
    }
    let spare = WIDENED * (high - low);
    let unit = &system.units.model;
    let seen = format!(
        "Of a first model's size, {} % lies outside the plausible {} to {} {unit}",
        (100.0 * share).round(),
        number(low),
        number(high)
    );
    let finding = if outside(-1.0, 0.0) <= OUTSIDE_LEFT_MAX * share {
        let sentence = format!("{seen}; with data of the opposite sign nearly none would.");
        Finding::new(Kind::DataSign, Severity::Fault, sentence, SIGN_REMEDY)
    } else if outside(1.0, spare) < OUTSIDE_MIN {
        return Some(Verdict::Sound);
    } else if let Some((factor, word)) =
        FACTORS.iter().find(|(factor, _)| outside(1.0 / factor, spare) <= OUTSIDE_LEFT_MAX * share)
    {
        let sentence = format!(
            "{seen}; with data divided by {} nearly none would (e.g. {word}).",
            number(*factor)
        );
        Finding::new(Kind::DataUnits, Severity::Fault, sentence, UNIT_REMEDY)
    } else {
        let remedy = "check the units of data, matrix and plausible range against each other";
        Finding::new(Kind::ImplausibleSize, Severity::Caution, format!("{seen}."), remedy)
    };
    accuse(finding.with("share of a first model's size outside the plausible range", share))
}

/// A factor between units close by, in words.
fn example(slope: f64) -> String {
    let near = |factor: f64| (slope / factor).ln().abs() < 0.5;
    FACTORS
        .iter()
        .find(|(factor, _)| near(*factor))
        .map_or_else(String::new, |(_, word)| format!(" (e.g. {word})"))
}
