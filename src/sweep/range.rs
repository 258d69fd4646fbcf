//! The strengths of a sweep: given, or found from the largest singular value.

use crate::solve::Process;

/// Steps of the process after which its largest singular value is taken for that of the operator.
pub const SCOUT_STEPS: usize = 20;

/// The range found by itself: from s₁ down to this times s₁.
pub const SPAN: f64 = 1e-5;

/// Strengths per factor of ten when no count is given.
pub const PER_DECADE: usize = 10;

/// What a sweep is asked for.
#[derive(Debug, Clone, PartialEq)]
pub enum Strengths {
    /// These, in descending order.
    Given(Vec<f64>),
    /// From the largest singular value down to [`SPAN`] times it, evenly in log λ.
    Found {
        /// `None`: [`PER_DECADE`] a decade.
        count: Option<usize>,
    },
}

impl Strengths {
    /// How many there are, or will be once they are found.
    pub fn count(&self) -> usize {
        match self {
            Self::Given(list) => list.len(),
            Self::Found { count } => count.unwrap_or_else(|| spaced(1.0, SPAN, None).len()),
        }
    }

    /// `count` strengths from `from` to `to`, evenly in log λ, descending; [`PER_DECADE`] a
    /// decade when no count is given.
    ///
    /// Panics if an end is not positive and finite.
    pub fn between(from: f64, to: f64, count: Option<usize>) -> Self {
        Self::Given(spaced(from, to, count))
    }
}

fn spaced(from: f64, to: f64, count: Option<usize>) -> Vec<f64> {
    assert!(from > 0.0 && to > 0.0 && from.is_finite() && to.is_finite(), "positive strengths");
    let (high, low) = (from.max(to), from.min(to));
    let decades = (high / low).log10();
    let count = count.unwrap_or_else(|| (decades * PER_DECADE as f64).ceil() as usize + 1).max(1);
    if count == 1 || high == low {
        return vec![high];
    }
    // The ends are exact; what lies between is a product, so that rounding stays at one place.
    (0..count)
        .map(|i| match i {
            0 => high,
            _ if i + 1 == count => low,
            _ => high * (low / high).powf(i as f64 / (count - 1) as f64),
        })
        .collect()
}

/// The range for processes of one operator: the largest of their top singular values is nearest
/// to s₁. A process without a step (zero data, or data orthogonal to every column) says nothing; if
/// none says anything every strength gives the reference and 1 stands for all.
pub fn found(processes: &[&Process], count: Option<usize>) -> Vec<f64> {
    let largest = processes
        .iter()
        .filter(|process| process.alphas.first().is_some_and(|a| *a > 0.0))
        .filter_map(|process| process.singular_values_extreme())
        .map(|(largest, _)| largest)
        .fold(0.0, f64::max);
    if largest > 0.0 && largest.is_finite() {
        spaced(largest, SPAN * largest, count)
    } else {
        vec![1.0]
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn strengths_are_even_in_the_logarithm_and_descend() {
        let list = spaced(0.1, 10.0, Some(5));
        assert_eq!(list.len(), 5);
        assert_eq!((list[0], list[4]), (10.0, 0.1));
        for pair in list.windows(2) {
            assert!((pair[0] / pair[1] - 100f64.powf(0.25)).abs() < 1e-13);
        }
        assert_eq!(spaced(1.0, 1e-5, None).len(), 51);
    }
}
