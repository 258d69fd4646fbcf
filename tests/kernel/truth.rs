//! What a pass is by definition, and how far two ways of computing it may lie apart.
//!
//! With ε = 2⁻⁵² and two evaluations whose sums are added in any order, with or without fused
//! multiplications (Higham, Accuracy and Stability of Numerical Algorithms, SIAM 2002, chapter 3):
//!
//! - u: a row of n entries. A term of the product meets at most 1 multiplication and n − 1
//!   additions, then f and the subtraction: n + 2 roundings of ε/2 each, and αu two. With
//!   M = |f| Σ|a v| + |αu| two evaluations differ by at most (n + 2) ε M.
//! - s: a column of c entries. A term h u a meets 2 multiplications and c − 1 additions, and u
//!   differs as above: ε Σ|h a| M (n + 2 + c + 1).
//! - squares over m rows: (g u)² meets 3 roundings and m − 1 additions, and u twice:
//!   ε Σ(g M)² (2 (n + 2) + m + 2).
//!
//! Terms of second order, below ε times these, are covered by one unit more for each factor.

use super::cases::{Blocks, Case};

/// u, s and squares after a pass: found, or by definition.
#[derive(Debug, Clone, PartialEq)]
pub struct Outcome {
    pub u: Vec<f64>,
    pub s: Vec<f64>,
    pub squares: Vec<f64>,
}

impl Outcome {
    /// Not a number is equal to itself here, and zeros of two signs are not.
    pub fn bits(&self) -> [Vec<u64>; 3] {
        [&self.u, &self.s, &self.squares].map(|block| block.iter().map(|x| x.to_bits()).collect())
    }

    pub fn lane(&self, l: usize, count: usize) -> Self {
        let pick = |block: &[f64]| block.iter().skip(l).step_by(count).copied().collect();
        Self { u: pick(&self.u), s: pick(&self.s), squares: pick(&self.squares) }
    }
}

/// The pass by definition, and the bound of each number.
pub struct Truth {
    pub is: Outcome,
    pub bound: Outcome,
}

impl Truth {
    pub fn new(case: &Case, blocks: &Blocks) -> Self {
        let (k, m, n) = (blocks.count, case.cut.rows, case.cut.columns);
        let zero = || Outcome { u: vec![0.0; m * k], s: vec![0.0; n * k], squares: vec![0.0; k] };
        let (mut is, mut bound) = (zero(), zero());
        let mut column_entries = vec![0usize; n];
        case.entries.iter().flatten().for_each(|entry| column_entries[entry.0] += 1);
        for (inner, entries) in case.entries.iter().enumerate() {
            let (row, length) = (case.row_at(inner), entries.len());
            for l in 0..k {
                let f = blocks.factors(row, l);
                let terms = entries.iter().map(|&(j, a)| f.dot * a * blocks.v[j * k + l]);
                let (dot, size) = terms.fold((0.0, 0.0), |(d, s), t| (d + t, s + f64::abs(t)));
                let carried = blocks.alpha[l] * blocks.u[row * k + l];
                let (u, size) = (dot - carried, size + carried.abs());
                is.u[row * k + l] = u;
                bound.u[row * k + l] = (length + 3) as f64 * f64::EPSILON * size;
                for &(j, a) in entries {
                    is.s[j * k + l] += f.scatter * u * a;
                    let roundings = (length + column_entries[j] + 5) as f64;
                    bound.s[j * k + l] += roundings * f64::EPSILON * (f.scatter * a).abs() * size;
                }
                is.squares[l] += (f.square * u).powi(2);
                let roundings = (2 * length + m + 8) as f64;
                bound.squares[l] += roundings * f64::EPSILON * (f.square * size).powi(2);
            }
        }
        Self { is, bound }
    }

    /// Panics where `found` and `other` lie further apart than two evaluations may.
    pub fn assert_near(&self, found: &Outcome, other: &Outcome, what: &str) {
        for (name, found, other, bound) in [
            ("u", &found.u, &other.u, &self.bound.u),
            ("s", &found.s, &other.s, &self.bound.s),
            ("squares", &found.squares, &other.squares, &self.bound.squares),
        ] {
            assert_eq!((found.len(), other.len()), (bound.len(), bound.len()));
            for (place, ((found, other), bound)) in found.iter().zip(other).zip(bound).enumerate() {
                let apart = (found - other).abs();
                assert!(apart <= *bound, "{what}: {name} {place} is {found}, not {other}: {bound}");
            }
        }
    }
}
