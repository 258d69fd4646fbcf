//! Numbers in text: whole ones by an own loop, real ones by fast-float2, with the exponent letters
//! `d` and `D` of Fortran. A number followed by anything is not a number. The quick ways give the
//! same values for what is usual.

use super::decimal::ordinary;
use super::eight::{TENS, digits, word_at};

/// A real number as read.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Real {
    pub value: f64,
    /// The text states a finite number beyond the range of f64.
    pub overflow: bool,
    /// The text states a number other than 0 that f64 holds as 0.
    pub underflow: bool,
}

/// Reads a whole token; `None` if it is not exactly one number.
pub fn real(token: &[u8]) -> Option<Real> {
    let value = parse(token).or_else(|| parse(&with_e(token)?))?;
    let overflow = value.is_infinite() && !token.iter().any(|b| b.eq_ignore_ascii_case(&b'i'));
    let underflow = value == 0.0 && states_nonzero(token);
    Some(Real { value, overflow, underflow })
}

fn parse(token: &[u8]) -> Option<f64> {
    fast_float2::parse(token).ok()
}

/// The token with its exponent letter `d` or `D` as `e`, if it has one.
fn with_e(token: &[u8]) -> Option<Vec<u8>> {
    let place = token.iter().position(|b| b.eq_ignore_ascii_case(&b'd'))?;
    let mut token = token.to_vec();
    token[place] = b'e';
    Some(token)
}

fn states_nonzero(token: &[u8]) -> bool {
    token
        .iter()
        .take_while(|b| !matches!(b, b'e' | b'E' | b'd' | b'D'))
        .any(|b| matches!(b, b'1'..=b'9'))
}

/// A whole number, or why a token is none.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Whole {
    Is(u64),
    Negative,
    /// Beyond 2⁶⁴ − 1.
    TooLarge,
    NotOne,
}

/// Reads a whole token of digits, with an optional sign.
pub fn whole(token: &[u8]) -> Whole {
    let digits = token.strip_prefix(b"+").or(token.strip_prefix(b"-")).unwrap_or(token);
    if digits.is_empty() || !digits.iter().all(u8::is_ascii_digit) {
        return Whole::NotOne;
    }
    let value = digits
        .iter()
        .try_fold(0u64, |value, digit| value.checked_mul(10)?.checked_add(u64::from(digit - b'0')));
    match (value, token[0] == b'-') {
        (Some(0), _) => Whole::Is(0),
        (_, true) => Whole::Negative,
        (Some(value), false) => Whole::Is(value),
        (None, false) => Whole::TooLarge,
    }
}

/// Digits at the start of `bytes`, at most 15 of them: value and number; `None` where the slow way
/// must look.
#[inline(always)]
pub fn quick_whole(bytes: &[u8]) -> Option<(u64, usize)> {
    let (count, value) = digits(word_at(bytes, 0));
    match count {
        0 => None,
        8 => {
            let (more, low) = digits(word_at(bytes, 8));
            let value = value * TENS[more] + low;
            (more < 8).then_some((value, 8 + more))
        }
        _ => Some((value, count)),
    }
}

/// A real number at the start of `bytes`: its value and length.
#[inline(always)]
pub fn quick_real(bytes: &[u8]) -> Option<(f64, usize)> {
    ordinary(bytes).or_else(|| fast_float2::parse_partial(bytes).ok())
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn real_numbers_and_what_is_none() {
        let value = |text: &str| real(text.as_bytes()).map(|real| real.value);
        for (text, wanted) in [
            ("1.5D+02", 150.0),
            ("1d-3", 1e-3),
            ("+1.5", 1.5),
            ("-.5", -0.5),
            ("1.", 1.0),
            ("1E5", 1e5),
            ("-0", -0.0),
        ] {
            assert_eq!(value(text), Some(wanted), "{text}");
        }
        for text in
            ["", "1.5abc", "1,5", "0x1p3", "+-1", "1e", "d5", "1dd5", "1d5e2", "1.5+02", ".", "--1"]
        {
            assert_eq!(value(text), None, "{text}");
        }
    }

    #[test]
    fn overflow_and_underflow_are_told_from_infinity_and_zero() {
        let read = |text: &str| real(text.as_bytes()).unwrap();
        assert!(read("1E310").overflow && read("-1d999").overflow);
        assert!(!read("inf").overflow && !read("-Infinity").overflow);
        assert!(read("1e-400").underflow && read("0.00001d-330").underflow);
        assert!(!read("0.000e5").underflow && !read("-0").underflow);
    }

    #[test]
    fn whole_numbers_and_what_is_none() {
        assert_eq!(whole(b"18446744073709551615"), Whole::Is(u64::MAX));
        assert_eq!(whole(b"18446744073709551616"), Whole::TooLarge);
        assert_eq!(whole(b"-3"), Whole::Negative);
        assert_eq!(whole(b"+3"), Whole::Is(3));
        for text in [&b""[..], b"+", b"1.0", b"1e3", b"0x3"] {
            assert_eq!(whole(text), Whole::NotOne);
        }
        assert_eq!(quick_whole(b"123456789012345 "), Some((123_456_789_012_345, 15)));
        assert_eq!(quick_whole(b"12345678"), Some((12_345_678, 8)));
        assert_eq!(quick_whole(b"1234567890123456"), None);
    }
}
