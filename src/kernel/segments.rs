//! The inner loops over the segments of a tile, written once for any number of lanes K.
//!
//! They are inlined into the functions of [`super::twins`], which are compiled for one instruction
//! set each; `FUSED` says whether that set multiplies and adds with one rounding.

use super::tiles::Segments;
use super::value::Value;

/// Partial sums of a segment's product: enough for the processor to have several additions
/// under way, and as many as one 256-bit register holds.
pub const PARTS: usize = 4;

#[inline(always)]
pub fn multiply_add<const FUSED: bool>(a: f64, b: f64, c: f64) -> f64 {
    if FUSED { a.mul_add(b, c) } else { a * b + c }
}

/// t ← t + A v over segments, for lanes `0..K` of rows `stride` numbers apart.
///
/// # Safety
/// For every column c that occurs, `c * stride .. + K` from `v` must be readable, and for every row
/// r that occurs, `r * stride .. + K` from `t` must lie in one allocation with `t` and be writable by
/// the caller alone; nothing is asked of other rows. Columns and values must be as many as the
/// lengths, each plus one, add up to.
#[inline(always)]
#[allow(unsafe_code)]
pub unsafe fn dots<V: Value, const K: usize, const FUSED: bool>(
    segments: Segments<'_, V>,
    stride: usize,
    v: *const f64,
    t: *mut f64,
) {
    let (mut columns, mut values) = (segments.columns.as_ptr(), segments.values.as_ptr());
    for (&row, &less) in segments.rows.iter().zip(segments.lengths) {
        let length = usize::from(less) + 1;
        let mut parts = [[0.0f64; K]; PARTS];
        let whole = length / PARTS * PARTS;
        let mut e = 0;
        // SAFETY: e + part < length, so column and value exist; rows and columns that occur are
        // the caller's promise.
        unsafe {
            while e < whole {
                for (part, sums) in parts.iter_mut().enumerate() {
                    let at = v.add(usize::from(*columns.add(e + part)) * stride);
                    let a = (*values.add(e + part)).number();
                    for (l, sum) in sums.iter_mut().enumerate() {
                        *sum = multiply_add::<FUSED>(a, *at.add(l), *sum);
                    }
                }
                e += PARTS;
            }
            for sums in &mut parts {
                if e == length {
                    break;
                }
                let at = v.add(usize::from(*columns.add(e)) * stride);
                let a = (*values.add(e)).number();
                for (l, sum) in sums.iter_mut().enumerate() {
                    *sum = multiply_add::<FUSED>(a, *at.add(l), *sum);
                }
                e += 1;
            }
            let t = t.add(usize::from(row) * stride);
            let sums: [f64; K] =
                std::array::from_fn(|l| (parts[0][l] + parts[2][l]) + (parts[1][l] + parts[3][l]));
            for (l, sum) in sums.iter().enumerate() {
                *t.add(l) += sum;
            }
            columns = columns.add(length);
            values = values.add(length);
        }
    }
}

/// s ← s + Aᵀ p over segments, for lanes `0..K` of rows `stride` numbers apart.
///
/// # Safety
/// As [`dots`], with `p` in the place of t and only read, and `s` in the place of v and written.
#[inline(always)]
#[allow(unsafe_code)]
pub unsafe fn scatter<V: Value, const K: usize, const FUSED: bool>(
    segments: Segments<'_, V>,
    stride: usize,
    p: *const f64,
    s: *mut f64,
) {
    let (mut columns, mut values) = (segments.columns.as_ptr(), segments.values.as_ptr());
    for (&row, &less) in segments.rows.iter().zip(segments.lengths) {
        let length = usize::from(less) + 1;
        // SAFETY: rows and columns that occur are the caller's promise.
        unsafe {
            let p = p.add(usize::from(row) * stride);
            let push: [f64; K] = std::array::from_fn(|l| *p.add(l));
            for e in 0..length {
                let at = s.add(usize::from(*columns.add(e)) * stride);
                let a = (*values.add(e)).number();
                let sums: [f64; K] =
                    std::array::from_fn(|l| multiply_add::<FUSED>(a, push[l], *at.add(l)));
                for (l, sum) in sums.iter().enumerate() {
                    *at.add(l) = *sum;
                }
            }
            columns = columns.add(length);
            values = values.add(length);
        }
    }
}
