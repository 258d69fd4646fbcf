//! The quick way through a line: each function gives up with `None` at anything unusual.

use super::super::number::{quick_real, quick_whole};
use super::walk::Entry;

#[inline(always)]
pub fn blanks(bytes: &[u8], mut at: usize) -> usize {
    while matches!(bytes.get(at), Some(b' ' | b'\t')) {
        at += 1;
    }
    at
}

/// Length of the line if nothing but blanks follows `at`.
#[inline(always)]
pub fn line_end(bytes: &[u8], at: usize) -> Option<usize> {
    let mut at = blanks(bytes, at);
    at += usize::from(bytes.get(at) == Some(&b'\r'));
    match bytes.get(at) {
        None => Some(at),
        Some(b'\n') => Some(at + 1),
        Some(_) => None,
    }
}

#[inline(always)]
pub fn quick_entry(
    quick: impl Fn(&[u8]) -> Option<(f64, usize)>,
) -> impl Fn(&[u8]) -> Option<(Entry, usize)> {
    move |bytes| {
        let mut at = blanks(bytes, 0);
        let (row, length) = quick_whole(&bytes[at..])?;
        let gap = at + length;
        at = blanks(bytes, gap);
        let (column, length) = if at > gap { quick_whole(&bytes[at..])? } else { return None };
        let gap = at + length;
        at = blanks(bytes, gap);
        let (value, length) = quick(&bytes[at..])?;
        if length > 0 && at == gap {
            return None;
        }
        Some(((row, column, value), line_end(bytes, at + length)?))
    }
}

#[inline(always)]
pub fn quick_one(_: &[u8]) -> Option<(f64, usize)> {
    Some((1.0, 0))
}

#[inline(always)]
pub fn quick_value(bytes: &[u8]) -> Option<(f64, usize)> {
    quick_real(bytes)
}

/// A whole number with or without a minus.
#[inline(always)]
pub fn quick_signed(bytes: &[u8]) -> Option<(f64, usize)> {
    let sign = usize::from(bytes.first() == Some(&b'-'));
    let (value, length) = quick_count(&bytes[sign..])?;
    Some((if sign == 1 { -value } else { value }, sign + length))
}

/// A whole number small enough for f64 to hold exactly.
#[inline(always)]
pub fn quick_count(bytes: &[u8]) -> Option<(f64, usize)> {
    let (value, length) = quick_whole(bytes)?;
    (value < 1 << 53).then_some((value as f64, length))
}
