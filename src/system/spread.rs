//! Smallest, middle and largest of many magnitudes.

/// Spread of positive magnitudes. All 0 where there is none.
#[derive(Debug, Clone, Copy, Default, PartialEq, serde::Serialize)]
pub struct Spread {
    /// Smallest.
    pub min: f64,
    /// Exact, or within 3 % where the owner says so.
    pub median: f64,
    /// Largest.
    pub max: f64,
}

impl Spread {
    /// Of the values above 0; exact, by sorting.
    pub fn of(values: impl Iterator<Item = f64>) -> Self {
        let mut sorted: Vec<f64> = values.filter(|&value| value > 0.0).collect();
        sorted.sort_unstable_by(f64::total_cmp);
        match sorted.as_slice() {
            [] => Self::default(),
            [min, .., max] => Self { min: *min, median: middle(&sorted), max: *max },
            [one] => Self { min: *one, median: *one, max: *one },
        }
    }

    /// max/min; 1 where there is nothing.
    pub fn ratio(&self) -> f64 {
        if self.min > 0.0 { self.max / self.min } else { 1.0 }
    }
}

/// Median of an ascending, non-empty list.
pub(super) fn middle(sorted: &[f64]) -> f64 {
    let half = sorted.len() / 2;
    if sorted.len() % 2 == 1 { sorted[half] } else { 0.5 * (sorted[half - 1] + sorted[half]) }
}

/// Sixteen bins an octave: the top 4 bits of the fraction behind the exponent.
const BINS: usize = 1 << 15;
const SHIFT: u32 = 48;

/// Counts of magnitudes in bins of 1/16 octave, so that a median of any number of entries takes
/// 256 KiB and its error is below half a bin, 3 %.
pub(super) struct Histogram {
    counts: Vec<u64>,
    min: f64,
    max: f64,
}

impl Histogram {
    pub fn new() -> Self {
        Self { counts: vec![0; BINS], min: f64::INFINITY, max: 0.0 }
    }

    /// Panics if `magnitude` is negative.
    pub fn add(&mut self, magnitude: f64) {
        self.counts[(magnitude.to_bits() >> SHIFT) as usize] += 1;
        self.min = self.min.min(magnitude);
        self.max = self.max.max(magnitude);
    }

    pub fn merge(&mut self, other: &Self) {
        for (count, more) in self.counts.iter_mut().zip(&other.counts) {
            *count += more;
        }
        self.min = self.min.min(other.min);
        self.max = self.max.max(other.max);
    }

    pub fn spread(&self) -> Spread {
        let total: u64 = self.counts.iter().sum();
        let mut below = 0;
        for (bin, count) in self.counts.iter().enumerate() {
            below += count;
            if 2 * below >= total && total > 0 {
                // The middle of the bin, but never outside what was seen.
                let bits = ((bin as u64) << SHIFT) | (1 << (SHIFT - 1));
                let median = f64::from_bits(bits).clamp(self.min, self.max);
                return Spread { min: self.min, median, max: self.max };
            }
        }
        Spread::default()
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn exact_spread_ignores_zeros() {
        let spread = Spread::of([4.0, 0.0, 1.0, 2.0].into_iter());
        assert_eq!(spread, Spread { min: 1.0, median: 2.0, max: 4.0 });
        assert_eq!(Spread::of([4.0, 1.0].into_iter()).median, 2.5);
        assert_eq!(Spread::of([3.0].into_iter()).ratio(), 1.0);
        assert_eq!(Spread::of([0.0].into_iter()).ratio(), 1.0);
    }

    #[test]
    fn histogram_median_lies_within_its_bin() {
        let mut all = Histogram::new();
        let mut half = Histogram::new();
        for i in 1..=999 {
            let value = 1.001f64.powi(i);
            if i % 2 == 0 { all.add(value) } else { half.add(value) }
        }
        all.merge(&half);
        let spread = all.spread();
        assert_eq!((spread.min, spread.max), (1.001, 1.001f64.powi(999)));
        // True median 1.001^500 = 1.6483; a bin is 1/16 of the octave from 1, half of it 1/32.
        assert!((spread.median - 1.001f64.powi(500)).abs() <= 1.0 / 32.0);
        assert_eq!(Histogram::new().spread(), Spread::default());
    }
}
