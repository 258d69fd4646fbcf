//! Sums whose order depends on the length alone, never on threads.

use rayon::prelude::*;

/// Elements per piece. Pieces are the unit of parallel work on vectors and of every ordered sum.
pub const PIECE: usize = 4096;

/// Below this many elements the work is done on the calling thread: handing pieces to a pool
/// costs more than it saves. The order of sums is the same either way.
pub const PARALLEL_MIN: usize = 32_768;

/// Adds partial sums pairwise: (0+1)+(2+3)+…; the error grows with the logarithm of their number.
pub fn tree(parts: &[f64]) -> f64 {
    match parts.len() {
        0 => 0.0,
        1 => parts[0],
        n => {
            let half = n.next_power_of_two() / 2;
            tree(&parts[..half]) + tree(&parts[half..])
        }
    }
}

/// Number `l` of every `width` numbers, added pairwise in order.
pub fn total(sums: &[f64], width: usize, l: usize) -> f64 {
    strided_tree(sums, width, l, 0, sums.len() / width)
}

fn strided_tree(sums: &[f64], width: usize, l: usize, from: usize, count: usize) -> f64 {
    match count {
        0 => 0.0,
        1 => sums[from * width + l],
        _ => {
            let half = count.next_power_of_two() / 2;
            strided_tree(sums, width, l, from, half)
                + strided_tree(sums, width, l, from + half, count - half)
        }
    }
}

fn piece_sum(values: &[f64], other: &[f64]) -> f64 {
    let mut sums = [0.0f64; 8];
    let (heads, tail) = values.as_chunks::<8>();
    let (other_heads, other_tail) = other.as_chunks::<8>();
    for (a, b) in heads.iter().zip(other_heads) {
        for lane in 0..8 {
            sums[lane] += a[lane] * b[lane];
        }
    }
    let rest: f64 = tail.iter().zip(other_tail).map(|(a, b)| a * b).sum();
    tree(&sums) + rest
}

/// aᵀb in fixed order. Panics if the lengths differ.
pub fn dot(a: &[f64], b: &[f64]) -> f64 {
    assert_eq!(a.len(), b.len(), "dot product of vectors of different lengths");
    if a.len() < PARALLEL_MIN {
        let parts: Vec<f64> =
            a.chunks(PIECE).zip(b.chunks(PIECE)).map(|(a, b)| piece_sum(a, b)).collect();
        return tree(&parts);
    }
    let parts: Vec<f64> =
        a.par_chunks(PIECE).zip(b.par_chunks(PIECE)).map(|(a, b)| piece_sum(a, b)).collect();
    tree(&parts)
}

/// ‖a‖ in fixed order.
pub fn norm(a: &[f64]) -> f64 {
    dot(a, a).sqrt()
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn tree_adds_everything_once() {
        for n in 0..70 {
            let parts: Vec<f64> = (0..n).map(|i| i as f64).collect();
            assert_eq!(tree(&parts), (0..n).sum::<usize>() as f64);
        }
    }

    #[test]
    fn parallel_and_serial_sums_have_the_same_bits() {
        let stream = crate::base::random::Stream::new(1, 1);
        let a: Vec<f64> = (0..100_000).map(|i| stream.normal(i)).collect();
        let whole = dot(&a, &a);
        let parts: Vec<f64> = a.chunks(PIECE).map(|p| dot(p, p)).collect();
        assert_eq!(whole.to_bits(), tree(&parts).to_bits());
    }
}
