//! How a set of strengths is solved: variables, scaling, fan or stacked lanes.

use crate::solve::Method;

/// Column norms that span more than this factor are evened out by scaling.
pub const SPAN_MAX: f64 = 100.0;

/// Column scaling as a preconditioner: the same solution, fewer passes.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Scaling {
    /// Where the column norms of [WA; λP] span more than [`SPAN_MAX`], and it does not cost a
    /// sweep its fan.
    #[default]
    Auto,
    /// Always: a λ > 0 is then stacked and no fan is left.
    On,
    /// Never.
    Off,
}

/// What the plan is made from.
pub struct Facts<'a> {
    /// Σᵢ(wᵢaᵢⱼ)² of every column, of the first data set.
    pub column_squares: &'a [f64],
    /// p, or `None` for 1.
    pub penalty: Option<&'a [f64]>,
    /// Data of positive weight, of the first data set.
    pub data: usize,
    /// Unknowns held at the reference.
    pub held: Option<&'a [bool]>,
    /// A start x₀ other than x_ref is given.
    pub starts_elsewhere: bool,
    /// Decides whether a lane can carry several strengths.
    pub method: Method,
    /// What the caller wants.
    pub scaling: Scaling,
}

/// The variables y of x = x₀ + D y, and who carries λ.
#[derive(Debug, Clone, PartialEq)]
pub struct Plan {
    /// D; `None` means 1.
    pub scales: Option<Vec<f64>>,
    /// Penalty rows in the operator instead of λ as a shift.
    pub stacked: bool,
    /// One lane carries all strengths.
    pub fan: bool,
    /// D evens out the columns.
    pub scaled: bool,
}

impl Plan {
    /// For strengths of which `smallest` is the least; `many` if a fan would carry more than one.
    pub fn new(facts: &Facts<'_>, smallest: f64, many: bool) -> Self {
        let norms = facts.norms(smallest);
        let shifts = facts.can_shift(smallest);
        let carries = facts.method.carries_strengths();
        let keeps_fan = many && shifts && carries;
        let scaled = match facts.scaling {
            Scaling::On => true,
            Scaling::Off => false,
            // Where a solution is not unique, scaling would change which one is nearest.
            Scaling::Auto => span(&norms) > SPAN_MAX && !keeps_fan && facts.may_be_unique(smallest),
        };
        if scaled {
            let scales = (0..norms.len()).map(|j| facts.scale(j, || 1.0 / norms[j], norms[j]));
            let stacked = smallest > 0.0;
            return Self {
                scales: Some(scales.collect()),
                stacked,
                scaled,
                fan: carries && !stacked,
            };
        }
        let stacked = !shifts;
        let made_identity = facts.penalty.filter(|_| !stacked && facts.invertible());
        let scales = match (made_identity, facts.held) {
            (None, None) => None,
            (penalty, _) => Some(
                (0..norms.len())
                    .map(|j| facts.scale(j, || penalty.map_or(1.0, |p| 1.0 / p[j]), 1.0))
                    .collect(),
            ),
        };
        Self { scales, stacked, scaled, fan: carries && !stacked }
    }
}

impl Facts<'_> {
    /// Whether L is I in some variables, so that λ is a shift.
    fn can_shift(&self, smallest: f64) -> bool {
        smallest == 0.0 || (self.invertible() && !self.starts_elsewhere)
    }

    /// Whether p > 0 for every free unknown.
    fn invertible(&self) -> bool {
        self.penalty.is_none_or(|p| {
            p.iter().enumerate().all(|(j, p)| *p > 0.0 || self.held.is_some_and(|h| h[j]))
        })
    }

    /// Whether shape alone lets the solution be unique: a strength above 0, or data enough.
    fn may_be_unique(&self, smallest: f64) -> bool {
        let held = self.held.map_or(0, |held| held.iter().filter(|h| **h).count());
        smallest > 0.0 || self.data >= self.column_squares.len() - held
    }

    /// Norms of the columns of [WA; λP]; 0 for a held unknown.
    fn norms(&self, strength: f64) -> Vec<f64> {
        let norm = |j: usize| {
            let p = strength * self.penalty.map_or(1.0, |p| p[j]);
            let held = self.held.is_some_and(|h| h[j]);
            if held { 0.0 } else { (self.column_squares[j] + p * p).sqrt() }
        };
        (0..self.column_squares.len()).map(norm).collect()
    }

    fn scale(&self, j: usize, scale: impl Fn() -> f64, norm: f64) -> f64 {
        if self.held.is_some_and(|h| h[j]) {
            0.0
        } else if norm == 0.0 {
            // Neither data nor penalty touch it: it stays where it starts.
            1.0
        } else {
            scale()
        }
    }
}

/// Largest over smallest positive norm; 1 if there is none.
pub fn span(norms: &[f64]) -> f64 {
    let positive = norms.iter().copied().filter(|norm| *norm > 0.0);
    let (low, high) =
        positive.fold((f64::INFINITY, 0.0f64), |(low, high), x| (low.min(x), high.max(x)));
    if high > 0.0 { high / low } else { 1.0 }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn facts(squares: &[f64]) -> Facts<'_> {
        Facts {
            column_squares: squares,
            penalty: None,
            data: 9,
            held: None,
            starts_elsewhere: false,
            method: Method::Lsqr,
            scaling: Scaling::Auto,
        }
    }

    #[test]
    fn scaling_comes_on_beyond_a_factor_of_a_hundred_but_never_costs_a_sweep_its_fan() {
        let near = [1.0, 9_900.0];
        let far = [1.0, 10_100.0];
        assert!(!Plan::new(&facts(&near), 0.0, false).scaled);
        let plan = Plan::new(&facts(&far), 0.0, false);
        assert!(plan.scaled && !plan.stacked);
        assert_eq!(plan.scales.unwrap()[0], 1.0);
        // With λ = 10 the columns of [WA; λI] span about 10 only.
        assert!(!Plan::new(&facts(&far), 10.0, false).scaled);
        let plan = Plan::new(&facts(&far), 0.1, false);
        assert!(plan.scaled && plan.stacked);
        let plan = Plan::new(&facts(&far), 0.1, true);
        assert!(plan.fan && !plan.scaled && plan.scales.is_none());
    }

    #[test]
    fn with_fewer_data_than_unknowns_the_nearest_solution_stays_the_nearest() {
        let squares = [1.0, 1e6];
        let weights = [2.0, 4.0];
        let few = Facts { data: 1, penalty: Some(&weights), ..facts(&squares) };
        let plan = Plan::new(&few, 0.0, false);
        // ‖P(x − x₀)‖ is what is least, as in the limit of small strengths.
        assert_eq!((plan.scaled, plan.scales), (false, Some(vec![0.5, 0.25])));
    }

    #[test]
    fn what_rules_out_the_fan_stacks() {
        let squares = [1.0, 1.0];
        let zero = [0.0, 2.0];
        let plain = facts(&squares);
        assert!(Plan::new(&Facts { starts_elsewhere: true, ..plain }, 1.0, false).stacked);
        let plain = facts(&squares);
        assert!(Plan::new(&Facts { penalty: Some(&zero), ..plain }, 1.0, true).stacked);
        let plain = facts(&squares);
        let held = Facts { penalty: Some(&zero), held: Some(&[true, false]), ..plain };
        let plan = Plan::new(&held, 1.0, true);
        assert_eq!((plan.stacked, plan.scales.unwrap()), (false, vec![0.0, 0.5]));
        let cgls = Facts { method: Method::Cgls, ..facts(&squares) };
        let plan = Plan::new(&cgls, 1.0, true);
        assert!(!plan.stacked && !plan.fan);
    }
}
