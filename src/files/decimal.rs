//! Decimal numbers to the nearest f64, for text that states ordinary numbers.
//!
//! A number of at most 19 significant digits is w·10^q with w below 2⁶⁴. The nearest f64 comes
//! from the 128 leading bits of 5^q: the product of its upper half with w decides nearly always,
//! the lower half the rest (D. Lemire, Number parsing at a gigabyte per second, 2021,
//! doi:10.1002/spe.2984, section 5). Here q is kept between -54 and 55, where the table is small enough
//! to stay in the nearest cache and no result is subnormal or infinite; everything else, and what
//! the algorithm leaves open, is for fast-float2. Every answer is correctly rounded.

use super::eight::{TENS, digits, eight_digits, word_at};

/// The least and the greatest power of ten that is not left to fast-float2.
const POWER_MIN: i32 = -54;
const POWER_MAX: i32 = 55;

/// The 128 leading bits of 5^q, q from [`POWER_MIN`] to [`POWER_MAX`].
static FIVES: [u128; (POWER_MAX - POWER_MIN + 1) as usize] = fives();

/// The least number that `n` more digits could take beyond 19 digits.
const FULL: [u64; 9] = full();

/// A number at the start of `bytes`: its value and length.
///
/// `None` where there is none, or none of the ordinary kind.
#[inline(always)]
pub fn ordinary(bytes: &[u8]) -> Option<(f64, usize)> {
    let negative = bytes.first() == Some(&b'-');
    let start = usize::from(negative);
    let (mut w, mut at) = append(0, bytes, start)?;
    let mut count = at - start;
    let mut power = 0;
    if bytes.get(at) == Some(&b'.') {
        let point = at + 1;
        (w, at) = append(w, bytes, point)?;
        count += at - point;
        power = -i32::try_from(at - point).ok()?;
    }
    if count == 0 {
        return None;
    }
    if matches!(bytes.get(at), Some(b'e' | b'E')) {
        let (exponent, length) = exponent(&bytes[at + 1..])?;
        power += exponent;
        at += 1 + length;
    }
    let bits = nearest(w, power)?;
    Some((f64::from_bits(bits | u64::from(negative) << 63), at))
}

/// Appends the digits at `at` to a number; the new number, and where the digits end. `None` if it
/// might have more than 19 digits.
#[inline(always)]
fn append(mut number: u64, bytes: &[u8], mut at: usize) -> Option<(u64, usize)> {
    loop {
        let word = word_at(bytes, at);
        let Some(more) = eight_digits(word) else {
            let (count, more) = digits(word);
            let fits = number < FULL[count];
            return fits.then(|| (number * TENS[count] + more, at + count));
        };
        if number >= FULL[8] {
            return None;
        }
        number = number * TENS[8] + more;
        at += 8;
    }
}

/// The exponent after its letter: value and length. `None` without digits, or with many.
#[inline(always)]
fn exponent(bytes: &[u8]) -> Option<(i32, usize)> {
    let negative = bytes.first() == Some(&b'-');
    let sign = usize::from(negative || bytes.first() == Some(&b'+'));
    let (count, number) = digits(word_at(bytes, sign));
    let number = if negative { -(number as i32) } else { number as i32 };
    (count > 0 && count < 8).then_some((number, sign + count))
}

/// Bits of the f64 nearest to w·10^q, ties to even. `None` where q is out of range, or the product
/// leaves the rounding open.
#[inline(always)]
fn nearest(w: u64, q: i32) -> Option<u64> {
    let five = *FIVES.get(usize::try_from(q - POWER_MIN).ok()?)?;
    if w == 0 {
        return Some(0);
    }
    let zeros = w.leading_zeros();
    let w = w << zeros;
    let mut product = u128::from(w) * (five >> 64);
    // Of the upper half, 55 bits are used. If all below them are 1, the lower half of the power
    // may carry into them.
    if product >> 64 & 0x1ff == 0x1ff {
        product += (u128::from(w) * (five & u128::from(u64::MAX))) >> 64;
        if product as u64 == u64::MAX && q < -27 {
            return None;
        }
    }
    let (high, low) = ((product >> 64) as u64, product as u64);
    let top = (high >> 63) as u32;
    let mut mantissa = high >> (top + 9);
    // Exactly between two f64 (which only small powers allow): to even, not up.
    if low <= 1 && (-4..=23).contains(&q) && mantissa & 3 == 1 && mantissa << (top + 9) == high {
        mantissa &= !1;
    }
    mantissa = (mantissa + (mantissa & 1)) >> 1;
    // ⌊q·log₂ 10⌋ for such q, then the place of the leading bit; 1023 is the bias of f64.
    let binary = ((q * 217_706) >> 16) + 63 + top as i32 - zeros as i32 + 1023;
    // A mantissa rounded up to 2⁵³ carries into the exponent by itself, for its leading bit is not
    // stored but added to an exponent that is one less.
    Some(((binary as u64 - 1) << 52) + mantissa)
}

const fn full() -> [u64; 9] {
    let mut full = [10_000_000_000_000_000_000; 9];
    let mut n = 1;
    while n < 9 {
        full[n] = full[n - 1] / 10;
        n += 1;
    }
    full
}

const fn fives() -> [u128; (POWER_MAX - POWER_MIN + 1) as usize] {
    let mut table = [0; (POWER_MAX - POWER_MIN + 1) as usize];
    let mut five = 1u128;
    let mut n = 0;
    while n <= POWER_MAX {
        // 5⁵⁵ is below 2¹²⁸.
        table[(n - POWER_MIN) as usize] = five << five.leading_zeros();
        if n > 0 && n <= -POWER_MIN {
            table[(-n - POWER_MIN) as usize] = reciprocal(five, n <= 27);
        }
        if n < POWER_MAX {
            five *= 5;
        }
        n += 1;
    }
    table
}

/// The 128 leading bits of 1/five, by long division; rounded up where the paper does, so that
/// products that are exact come out exact.
const fn reciprocal(five: u128, up: bool) -> u128 {
    // Below 5⁵⁴ < 2¹²⁶, so that twice the remainder fits.
    let (mut quotient, mut remainder) = (0u128, 1u128);
    while quotient >> 127 == 0 {
        remainder *= 2;
        quotient *= 2;
        if remainder >= five {
            remainder -= five;
            quotient += 1;
        }
    }
    if up { quotient + 1 } else { quotient }
}

#[cfg(test)]
mod tests {
    use super::*;
    use crate::base::random::Stream;

    /// Compares with the standard library; whether there was an answer to compare.
    fn check(text: &str) -> bool {
        let Some((value, length)) = ordinary(text.as_bytes()) else { return false };
        let wanted: f64 = text[..length].parse().unwrap();
        assert_eq!(value.to_bits(), wanted.to_bits(), "{text}");
        assert_eq!(length, text.len(), "{text}");
        true
    }

    /// Random digits with a point somewhere and perhaps an exponent.
    fn shaped(stream: &Stream, k: u64) -> String {
        let uniform =
            |place: u64, below: u64| (stream.uniform(32 * k + place) * below as f64) as u64;
        let count = 1 + uniform(0, 19) as usize;
        let mut text: String =
            (0..count).map(|d| char::from(b'0' + uniform(1 + d as u64, 10) as u8)).collect();
        if uniform(20, 4) > 0 {
            text.insert(uniform(21, count as u64 + 1) as usize, '.');
        }
        if uniform(22, 3) == 0 {
            let letter = ["e", "E", "e+", "E-", "e-"][uniform(23, 5) as usize];
            text += &format!("{letter}{}", uniform(24, 40));
        }
        if uniform(25, 2) == 0 { format!("-{text}") } else { text }
    }

    #[test]
    fn values_equal_those_of_the_standard_library() {
        let stream = Stream::new(17, 0);
        let mut answered = 0;
        for k in 0..150_000 {
            let normal = stream.normal(k);
            let wide = normal * 10f64.powi((k % 80) as i32 - 40);
            let shapes = [
                format!("{normal}"),
                format!("{normal:.9}"),
                format!("{wide:e}"),
                format!("{wide:.16e}"),
                format!("{}", normal as f32),
                shaped(&stream, k),
            ];
            answered += shapes.iter().filter(|text| check(text)).count();
        }
        assert!(answered > 800_000, "{answered} of 900,000 were ordinary");
    }

    /// Numbers half way between two f64, and next to it: where rounding is hardest.
    #[test]
    fn ties_go_to_even() {
        let stream = Stream::new(18, 0);
        let mut answered = 0;
        for k in 0..20_000u64 {
            let odd = (1u64 << 53) + ((stream.uniform(k) * (1u64 << 53) as f64) as u64 | 1);
            for near in [odd - 1, odd, odd + 1] {
                for text in [format!("{near}"), format!("{near}e3"), format!("{near}00e-2")] {
                    answered += usize::from(check(&text));
                }
                // Fractions with few bits: 54 bits in all, so the last is half a unit.
                let digits = u128::from(near >> 20) * 625;
                answered += usize::from(check(&format!("{digits}e-4")));
            }
        }
        assert_eq!(answered, 240_000);
        for text in ["9007199254740993", "9007199254740992.5", "4503599627370496.5"] {
            assert!(check(text));
        }
    }

    #[test]
    fn every_power_of_the_table_is_right() {
        for q in POWER_MIN..=POWER_MAX {
            for w in
                [1, 2, 3, 7, 9, 123_456_789, 9_007_199_254_740_993, 9_999_999_999_999_999_999u64]
            {
                let text = format!("{w}e{q}");
                let bits = nearest(w, q).unwrap();
                assert_eq!(f64::from_bits(bits), text.parse::<f64>().unwrap(), "{text}");
            }
        }
        assert_eq!(nearest(1, POWER_MIN - 1), None);
        assert_eq!(nearest(1, POWER_MAX + 1), None);
    }

    #[test]
    fn what_is_not_ordinary_is_left_alone() {
        for text in [
            "",
            "-",
            ".",
            "-.",
            "+1",
            "nan",
            "inf",
            "e5",
            "1e",
            "1e+",
            "1e99999999",
            "1e300",
            "12345678901234567890",
            "0.12345678901234567891",
        ] {
            assert_eq!(ordinary(text.as_bytes()), None, "{text}");
        }
        for text in ["0", "-0", "0.0", "-.5", "5.", "0.0000000000000000000001", "1e-5", "-0e3"] {
            assert!(check(text), "{text}");
        }
        assert_eq!(ordinary(b"1.5D+02"), Some((1.5, 3)));
    }
}
