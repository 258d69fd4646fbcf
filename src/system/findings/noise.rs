//! Whether the residuals of a quick fit agree with the stated σ, and whether the data follow the
//! matrix at all.
//!
//! The noise against σ at the chosen strength is r = 1.4826 · median |eᵢ/σᵢ| / √(1 − tr H/m):
//! robust, so that a few bad rows do not decide. But the strength itself is uncertain, the more
//! so the fewer data are to spare, and too weak or too strong a one mistakes noise for model or
//! model for noise. So r is an interval: what it would be at every strength whose GCV is within a
//! factor 2 of the least, i.e. that predicts as well up to 40 %. For a right σ it contains 1;
//! modelling errors of the size of the noise move it by 1.4. An interval that meets 1/3 to 3 says
//! nothing, and neither does one below 1/3 if the error of prediction √GCV, which contains the
//! noise, is not below it too.
//!
//! - *Variance for σ.* If what is called σ is σ², then eᵢ/√(stated) has the scale 1: named if that
//!   scale's interval, widened by half for the uncertain traces, contains 1.
//! - *Percent for fraction.* The interval, widened likewise, contains 100 or 1/100.
//! - *Units.* It contains 1000, and nothing else told the size of the data.
//! - *Permuted rows.* The predictive share is 1 − GCV/GCV₀, GCV₀ the least of the reference
//!   model's, one constant's, and the mean datum's. Data in the order of the matrix that stand
//!   above their noise can be predicted from the rest; data in another order cannot. Named if σ
//!   says that there is something to explain (r > 2: two witnesses need not shout as loud as one)
//!   and the share is below 0.3.

use super::{Finding, Kind, QuickFit, Severity, number, predicted_by_reference, weighted};
use crate::base::sums::dot;
use crate::system::spread::middle;
use crate::system::{Facts, System};

const AGREES: f64 = 3.0;
const EXPLAINABLE: f64 = 2.0;
const WIDENED: f64 = 1.5;
const PREDICTED_MIN: f64 = 0.3;
/// Without σ only data that are no better than noise are suspicious, and only if the row sums
/// too say nothing about them.
const PREDICTED_WITHOUT_SIGMA_MIN: f64 = 0.1;
const ROW_SUM_DEVIATIONS: f64 = 3.0;
/// Fewer data to spare than this leave the noise unknown.
const SPARE_DATA_MIN: f64 = 5.0;

/// What other families have found.
pub(super) struct Known {
    /// The size of the data has been tested.
    pub size: bool,
    pub dead: bool,
}

/// A factor known up to an interval.
#[derive(Clone, Copy)]
struct Interval {
    low: f64,
    high: f64,
}

impl Interval {
    fn times(self, factor: f64) -> Self {
        Self { low: self.low * factor, high: self.high * factor }
    }

    fn may_be(self, value: f64) -> bool {
        value >= self.low / WIDENED && value <= self.high * WIDENED
    }

    /// The end nearer to 1, for a careful sentence.
    fn careful(self) -> f64 {
        if self.low > 1.0 { self.low } else { self.high }
    }
}

pub(super) fn find(system: &System, facts: &Facts, fit: &QuickFit, known: Known) -> Vec<Finding> {
    let data = facts.sets[fit.data_set].data;
    let chosen = &fit.trials[fit.chosen];
    if data as f64 - chosen.effective_parameters < SPARE_DATA_MIN {
        return Vec::new();
    }
    let share = predictive_share(system, facts, fit);
    let Some(sigma) = &system.uncertainty else {
        return unrelated(system, facts, fit, share).into_iter().collect();
    };
    let column = if sigma.ncols() == 1 { 0 } else { fit.data_set };
    let spare = (1.0 - chosen.effective_parameters / data as f64).sqrt();
    let scale = |deviation: fn(f64) -> f64| {
        let rows = (0..facts.rows).filter(|&i| system.included(i, fit.data_set));
        let mut sizes: Vec<f64> =
            rows.map(|i| (fit.residual[i] / deviation(sigma[[i, column]])).abs()).collect();
        sizes.sort_unstable_by(f64::total_cmp);
        1.4826 * middle(&sizes) / spare
    };
    let (low, high) = fit.noise_range(data);
    let here = chosen.noise(data);
    let range = Interval { low: low / here, high: high / here };
    let ratio_here = scale(|sigma| sigma);
    let ratio = range.times(ratio_here);
    let mut found = Vec::new();
    if ratio.low > EXPLAINABLE && share < PREDICTED_MIN && !known.dead {
        found.push(permuted(ratio.low, share));
    }
    // The error of prediction contains the noise: no noise is too small if that is not.
    let prediction = ratio_here * chosen.gcv(data).sqrt() / here;
    if ratio.low < AGREES && ratio.high.max(prediction) > 1.0 / AGREES {
        return found;
    }
    let as_variance = range.times(scale(f64::sqrt));
    if as_variance.may_be(1.0) {
        found.push(variance(ratio.careful(), as_variance.careful()));
    }
    if ratio.may_be(100.0) || ratio.may_be(0.01) {
        found.push(percent(ratio.careful()));
    }
    if ratio.may_be(1000.0) && !known.size {
        found.push(units(ratio.careful()));
    }
    if found.is_empty() {
        found.push(misfit(ratio.careful()));
    }
    found
}

fn predictive_share(system: &System, facts: &Facts, fit: &QuickFit) -> f64 {
    let set = fit.data_set;
    let of_set = &facts.sets[set];
    let m = of_set.data as f64;
    let one_spent = m / (m - 1.0).powi(2);
    let mut null = of_set.weighted_data_square / m;
    if let Some(predicted) = predicted_by_reference(system, set) {
        let left = weighted(system, set, |i| system.data[[i, set]] - predicted[i]);
        null = null.min(dot(&left, &left) / m);
    } else if let Some(constant) = of_set.constant {
        null = null.min(of_set.weighted_data_square * (1.0 - constant.share) * one_spent);
    }
    let w = weighted(system, set, |_| 1.0);
    let b = weighted(system, set, |i| system.data[[i, set]]);
    let mean = dot(&w, &b) / dot(&w, &w);
    let left = weighted(system, set, |i| system.data[[i, set]] - mean);
    null = null.min(dot(&left, &left) * one_spent);
    1.0 - fit.trials[fit.chosen].gcv(of_set.data) / null
}

fn permuted(ratio: f64, share: f64) -> Finding {
    let sentence = format!(
        "The data stand {} times above their stated noise, yet the matrix predicts next to nothing of them: data and rows of the matrix look to be in different orders.",
        number(ratio)
    );
    let remedy = "check that row i of the matrix and datum i belong to the same measurement (sorting, dropped rows, another file)";
    Finding::new(Kind::PermutedRows, Severity::Fault, sentence, remedy)
        .with("noise against stated uncertainty", ratio)
        .with("share of the data predicted beyond one value", share)
}

/// Without σ: neither a model nor the row sums say anything about the data.
fn unrelated(system: &System, facts: &Facts, fit: &QuickFit, share: f64) -> Option<Finding> {
    let set = fit.data_set;
    let rows: Vec<usize> = (0..facts.rows).filter(|&i| system.included(i, set)).collect();
    let mean = |value: &dyn Fn(usize) -> f64| {
        rows.iter().map(|&i| value(i)).sum::<f64>() / rows.len() as f64
    };
    let (sum, datum) = (|i: usize| facts.row.sum[i], |i: usize| system.data[[i, set]]);
    let (mean_sum, mean_datum) = (mean(&sum), mean(&datum));
    let product = mean(&|i| (sum(i) - mean_sum) * (datum(i) - mean_datum));
    let squares =
        mean(&|i| (sum(i) - mean_sum).powi(2)) * mean(&|i| (datum(i) - mean_datum).powi(2));
    // A shuffled order leaves a correlation of standard deviation 1/√(m − 1).
    let deviations = product / squares.sqrt() * (rows.len() as f64 - 1.0).sqrt();
    if !(share < PREDICTED_WITHOUT_SIGMA_MIN && deviations.abs() < ROW_SUM_DEVIATIONS) {
        return None;
    }
    let sentence = "The matrix predicts nothing of the data beyond one value, and the data do not follow the row sums: they are noise, or in another order than the rows of the matrix.";
    let remedy = "check that row i of the matrix and datum i belong to the same measurement; state the uncertainty of the data, which would tell noise from disorder";
    Some(
        Finding::new(Kind::PermutedRows, Severity::Caution, sentence.into(), remedy)
            .with("share of the data predicted beyond one value", share)
            .with(
                "correlation with the row sums, in standard deviations of a shuffled order",
                deviations,
            ),
    )
}

fn variance(ratio: f64, as_variance: f64) -> Finding {
    let sentence = format!(
        "A first model misses the data by {} times the stated uncertainty, but by {} times its square root: the uncertainties look like variances.",
        number(ratio),
        number(as_variance)
    );
    let remedy = "give standard deviations: the square roots of the variances";
    Finding::new(Kind::VarianceForSigma, Severity::Caution, sentence, remedy)
        .with("noise against stated uncertainty", ratio)
        .with("noise against the square root of the stated uncertainty", as_variance)
}

fn percent(ratio: f64) -> Finding {
    let (word, remedy) = if ratio > 1.0 {
        (
            "too small: a fraction may stand where a percentage is meant",
            "multiply the uncertainties by 100 if they were meant as percent (0.02 for 2 %)",
        )
    } else {
        (
            "too large: a percentage may stand where a fraction is meant",
            "divide the uncertainties by 100 if percent was taken for a fraction (2 for 0.02)",
        )
    };
    let sentence = format!(
        "A first model misses the data by {} times the stated uncertainty, which looks a factor 100 {word}.",
        number(ratio)
    );
    Finding::new(Kind::PercentForFraction, Severity::Caution, sentence, remedy)
        .with("noise against stated uncertainty", ratio)
}

fn units(ratio: f64) -> Finding {
    let sentence = format!(
        "A first model misses the data by {} times the stated uncertainty: data and uncertainty may be in units a factor 1000 apart.",
        number(ratio)
    );
    let remedy = "give data and uncertainty in the same unit, that in which the matrix predicts";
    Finding::new(Kind::DataUnits, Severity::Caution, sentence, remedy)
        .with("noise against stated uncertainty", ratio)
}

fn misfit(ratio: f64) -> Finding {
    let (word, remedy) = if ratio > 1.0 {
        (
            "more than",
            "check the uncertainties; if they are right, look for what the matrix leaves out, or for rows that do not belong",
        )
    } else {
        ("less than", "check the uncertainties: rules that rely on them would smooth too much")
    };
    let sentence = format!(
        "A first model misses the data by {} times the stated uncertainty, {word} a right one allows.",
        number(ratio)
    );
    Finding::new(Kind::SigmaMisfit, Severity::Caution, sentence, remedy)
        .with("noise against stated uncertainty", ratio)
}
