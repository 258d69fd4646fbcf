//! Element types of .npy arrays.

use crate::base::Complaint;
use crate::base::complaint::quote;

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Class {
    Boolean,
    Signed,
    Unsigned,
    Float,
}

/// A number of 1, 2, 4 or 8 bytes in either byte order.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub struct Dtype {
    class: Class,
    pub bytes: usize,
    big: bool,
}

impl Dtype {
    /// Reads a type description such as `<f8`.
    ///
    /// # Errors
    /// Types that are not plain real numbers.
    pub fn parse(text: &str) -> Result<Self, Complaint> {
        let refuse = |cause: String, remedy: &str| Err(Complaint::new(cause, remedy));
        let shown = quote(text.as_bytes());
        let (order, kind) =
            text.split_at(text.len().min(usize::from(text.starts_with(['<', '>', '=', '|']))));
        let (class, bytes) = match kind {
            "f4" => (Class::Float, 4),
            "f8" => (Class::Float, 8),
            "b1" | "?" => (Class::Boolean, 1),
            "i1" | "i2" | "i4" | "i8" => (Class::Signed, usize::from(kind.as_bytes()[1] - b'0')),
            "u1" | "u2" | "u4" | "u8" => (Class::Unsigned, usize::from(kind.as_bytes()[1] - b'0')),
            _ => {
                return match kind.as_bytes().first() {
                    Some(b'O') => refuse(
                        "the array holds Python objects, which would have to be unpickled".into(),
                        "save it as numbers: numpy.save(file, array.astype(float), allow_pickle=False)",
                    ),
                    Some(b'M' | b'm') => refuse(
                        format!("the array holds dates or durations ({shown})"),
                        "convert them to numbers in the unit of the data before saving",
                    ),
                    Some(b'c') => refuse(
                        format!("the array holds complex numbers ({shown})"),
                        "save real and imaginary part as two rows of real numbers",
                    ),
                    _ => refuse(
                        format!("the element type {shown} is not a plain number"),
                        "save it as numbers: numpy.save(file, array.astype(float))",
                    ),
                };
            }
        };
        if bytes > 1 && !matches!(order, "<" | ">" | "=") {
            return refuse(
                format!("the element type {shown} does not state its byte order"),
                "save the array again with numpy.save",
            );
        }
        Ok(Self {
            class,
            bytes,
            big: order == ">" || (order == "=" && cfg!(target_endian = "big")),
        })
    }

    pub fn is_boolean(self) -> bool {
        self.class == Class::Boolean
    }

    /// Appends the elements of `raw` as f64; 64-bit integers are rounded to the nearest.
    ///
    /// Panics if `raw` is not a whole number of elements.
    pub fn decode(self, raw: &[u8], out: &mut Vec<f64>) {
        let swap = self.big;
        match (self.class, self.bytes) {
            (Class::Boolean, _) => {
                each::<1>(raw, swap, |b| out.push(f64::from(u8::from(b[0] != 0))))
            }
            (Class::Float, 4) => each(raw, swap, |b| out.push(f64::from(f32::from_le_bytes(b)))),
            (Class::Float, _) => each(raw, swap, |b| out.push(f64::from_le_bytes(b))),
            _ => self.decode_whole(raw, |value| out.push(value as f64)),
        }
    }

    /// Whether elements are integers or booleans.
    pub fn is_whole(self) -> bool {
        self.class != Class::Float
    }

    /// Hands over the elements of an integer or boolean type. Panics for floats.
    pub fn decode_whole(self, raw: &[u8], mut take: impl FnMut(i128)) {
        let swap = self.big;
        match (self.class, self.bytes) {
            (Class::Float, _) => panic!("whole numbers are asked of a float type"),
            (Class::Boolean, _) => each::<1>(raw, swap, |b| take(i128::from(b[0] != 0))),
            (Class::Signed, 1) => each(raw, swap, |b| take(i8::from_le_bytes(b).into())),
            (Class::Signed, 2) => each(raw, swap, |b| take(i16::from_le_bytes(b).into())),
            (Class::Signed, 4) => each(raw, swap, |b| take(i32::from_le_bytes(b).into())),
            (Class::Signed, _) => each(raw, swap, |b| take(i64::from_le_bytes(b).into())),
            (Class::Unsigned, 1) => each(raw, swap, |b| take(u8::from_le_bytes(b).into())),
            (Class::Unsigned, 2) => each(raw, swap, |b| take(u16::from_le_bytes(b).into())),
            (Class::Unsigned, 4) => each(raw, swap, |b| take(u32::from_le_bytes(b).into())),
            (Class::Unsigned, _) => each(raw, swap, |b| take(u64::from_le_bytes(b).into())),
        }
    }
}

/// Each element's bytes, in little-endian order.
#[inline(always)]
fn each<const N: usize>(raw: &[u8], swap: bool, mut take: impl FnMut([u8; N])) {
    let (elements, rest) = raw.as_chunks::<N>();
    assert!(rest.is_empty(), "a whole number of elements");
    if swap {
        for element in elements {
            let mut element = *element;
            element.reverse();
            take(element);
        }
    } else {
        elements.iter().for_each(|element| take(*element));
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn both_byte_orders_and_all_types() {
        let decoded = |dtype: &str, raw: &[u8]| {
            let mut out = Vec::new();
            Dtype::parse(dtype).unwrap().decode(raw, &mut out);
            out
        };
        assert_eq!(decoded("<f8", &(-1.5f64).to_le_bytes()), [-1.5]);
        assert_eq!(decoded(">f8", &(-1.5f64).to_be_bytes()), [-1.5]);
        assert_eq!(decoded(">f4", &(0.1f32).to_be_bytes()), [f64::from(0.1f32)]);
        assert_eq!(decoded(">i2", &[0xff, 0xfe]), [-2.0]);
        assert_eq!(decoded("<u4", &[1, 0, 0, 0x80]), [2_147_483_649.0]);
        assert_eq!(decoded("|b1", &[0, 1, 7]), [0.0, 1.0, 1.0]);
        assert_eq!(decoded("|i1", &[0x80]), [-128.0]);
        assert_eq!(decoded("<u8", &[0xff; 8]), [1.8446744073709552e19]);
    }

    #[test]
    fn types_that_are_no_plain_numbers_are_refused() {
        for (dtype, words) in [
            ("|O", "unpickled"),
            ("<M8[s]", "dates"),
            ("<c16", "complex"),
            ("<f2", "plain number"),
            ("|S3", "plain number"),
            ("|V8", "plain number"),
            ("i4", "byte order"),
            ("", "plain number"),
            ("é4", "plain number"),
        ] {
            let cause = Dtype::parse(dtype).unwrap_err().cause;
            assert!(cause.contains(words), "{dtype}: {cause}");
        }
    }
}
