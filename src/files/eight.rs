//! Text eight bytes at a time, in one register: no branch for each byte.
//!
//! A word holds eight bytes of text, the first in its lowest byte.

const ONES: u64 = 0x0101_0101_0101_0101;
const HIGHS: u64 = 0x8080_8080_8080_8080;

/// Powers of ten up to eight digits.
pub const TENS: [u64; 9] = tens();

/// The eight bytes at `at`; beyond the end of the text stand zeros, which are no digits.
#[inline(always)]
pub fn word_at(bytes: &[u8], at: usize) -> u64 {
    match bytes.get(at..).and_then(<[u8]>::first_chunk) {
        Some(&chunk) => u64::from_le_bytes(chunk),
        None => last_word(bytes, at),
    }
}

#[cold]
fn last_word(bytes: &[u8], at: usize) -> u64 {
    let rest = bytes.get(at..).unwrap_or_default();
    rest.iter().rev().fold(0, |word, &byte| word << 8 | u64::from(byte))
}

/// How many digits a word begins with, 0 to 8, and the number they are.
#[inline(always)]
pub fn digits(word: u64) -> (usize, u64) {
    let word = word ^ (ONES * u64::from(b'0'));
    // A byte above 9 gets its high bit. It may carry into the bytes after it, which then say
    // nothing; only the first of them is asked for.
    let others = (word.wrapping_add(ONES * (0x7f - 9)) | word) & HIGHS;
    let count = (others.trailing_zeros() / 8) as usize;
    // Zeros in front make eight digits of any number of them. A shift by 64 is one by 32 twice.
    let shift = 32 - 4 * count as u32;
    (count, number_of(word << shift << shift))
}

/// The number that a word of eight digits is. The place after it is then known without counting, so
/// that a processor which guesses this branch right need not wait.
#[inline(always)]
pub fn eight_digits(word: u64) -> Option<u64> {
    let word = word ^ (ONES * u64::from(b'0'));
    let others = (word.wrapping_add(ONES * (0x7f - 9)) | word) & HIGHS;
    (others == 0).then(|| number_of(word))
}

/// Eight digits, the first the lowest byte, as a number: pairs, then fours, then all.
#[inline(always)]
fn number_of(digits: u64) -> u64 {
    const PAIR: u64 = 0x0000_00ff_0000_00ff;
    let pairs = digits.wrapping_mul(10).wrapping_add(digits >> 8);
    let first = (pairs & PAIR).wrapping_mul(100 + (1_000_000 << 32));
    let second = (pairs >> 16 & PAIR).wrapping_mul(1 + (10_000 << 32));
    first.wrapping_add(second) >> 32
}

/// Place of the first line end at or after `at`.
#[inline(always)]
pub fn line_feed(bytes: &[u8], at: usize) -> Option<usize> {
    let mut at = at;
    loop {
        let others = word_at(bytes, at) ^ (ONES * u64::from(b'\n'));
        // The lowest high bit marks the first byte that is 0; those after it may be wrong.
        let found = others.wrapping_sub(ONES) & !others & HIGHS;
        if found != 0 {
            return Some(at + (found.trailing_zeros() / 8) as usize);
        }
        at += 8;
        if at >= bytes.len() {
            return None;
        }
    }
}

const fn tens() -> [u64; 9] {
    let mut tens = [1; 9];
    let mut n = 1;
    while n < 9 {
        tens[n] = 10 * tens[n - 1];
        n += 1;
    }
    tens
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    proptest! {
        #[test]
        fn digits_equal_a_loop_over_bytes(bytes in "[0-9]{0,9}[ -~\u{80}-\u{ff}]{0,9}") {
            let bytes = bytes.as_bytes();
            for at in 0..=bytes.len() + 1 {
                let rest = bytes.get(at..).unwrap_or_default();
                let run: Vec<u64> = rest
                    .iter()
                    .take(8)
                    .take_while(|b| b.is_ascii_digit())
                    .map(|b| u64::from(b - b'0'))
                    .collect();
                let number = run.iter().fold(0, |number, digit| 10 * number + digit);
                prop_assert_eq!(digits(word_at(bytes, at)), (run.len(), number));
                let whole = (run.len() == 8).then_some(number);
                prop_assert_eq!(eight_digits(word_at(bytes, at)), whole);
            }
        }

        #[test]
        fn line_ends_equal_a_loop_over_bytes(bytes in proptest::collection::vec(8u8..13, 0..40)) {
            for at in 0..=bytes.len() {
                let wanted = bytes[at..].iter().position(|&b| b == b'\n').map(|place| at + place);
                prop_assert_eq!(line_feed(&bytes, at), wanted);
            }
        }
    }

    #[test]
    fn every_byte_after_a_digit_ends_the_run() {
        for byte in 0..=255u8 {
            let word = u64::from_le_bytes([b'7', byte, b'9', b'9', b'9', b'9', b'9', b'9']);
            match byte {
                b'0'..=b'9' => {
                    assert_eq!(digits(word), (8, 70_999_999 + 1_000_000 * u64::from(byte - b'0')));
                }
                _ => assert_eq!(digits(word), (1, 7), "{byte}"),
            }
        }
    }
}
