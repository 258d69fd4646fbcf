//! The inner loops compiled for several instruction sets, and the choice among them at run time.
//!
//! A plain build reaches full speed anywhere: what the processor offers is asked when a run begins.
//! `avx2` and `avx512` give the same bits (one order, fused multiplications); `portable` rounds
//! products and sums apart and gives the same bits on every machine. `ELLBOW_SIMD` set to one of
//! the names decides instead; a set that the processor lacks is refused.

use std::ffi::OsStr;
use std::sync::OnceLock;

use super::segments;
use super::tiles::Segments;
use super::value::Value;
use crate::base::Complaint;
use crate::base::complaint::quote;

/// An instruction set that the inner loops are compiled for.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Twin {
    /// What every processor of the architecture has; no fused multiplication.
    Portable,
    /// 256-bit registers, fused multiplication.
    Avx2,
    /// 512-bit registers, fused multiplication.
    Avx512,
}

/// Environment variable that names the twin.
pub const VARIABLE: &str = "ELLBOW_SIMD";

impl Twin {
    /// All twins, least first.
    pub const ALL: [Self; 3] = [Self::Portable, Self::Avx2, Self::Avx512];

    /// The word in records and in [`VARIABLE`].
    pub fn word(self) -> &'static str {
        match self {
            Self::Portable => "portable",
            Self::Avx2 => "avx2",
            Self::Avx512 => "avx512",
        }
    }

    /// Whether this processor has what the twin needs.
    pub fn is_available(self) -> bool {
        #[cfg(target_arch = "x86_64")]
        {
            let avx2 = is_x86_feature_detected!("avx2") && is_x86_feature_detected!("fma");
            match self {
                Self::Portable => true,
                Self::Avx2 => avx2,
                Self::Avx512 => {
                    avx2 && is_x86_feature_detected!("avx512f")
                        && is_x86_feature_detected!("avx512vl")
                        && is_x86_feature_detected!("avx512dq")
                }
            }
        }
        #[cfg(not(target_arch = "x86_64"))]
        {
            self == Self::Portable
        }
    }

    /// What [`VARIABLE`] asks for, else the most that the processor has.
    ///
    /// # Errors
    /// The variable holds no twin's name, or one that this processor cannot run.
    pub fn chosen() -> Result<Self, Complaint> {
        Self::decide(std::env::var_os(VARIABLE).as_deref(), Self::is_available)
    }

    fn decide(asked: Option<&OsStr>, available: impl Fn(Self) -> bool) -> Result<Self, Complaint> {
        let Some(asked) = asked.filter(|value| !value.is_empty()) else {
            return Ok(Self::best());
        };
        let known = Self::ALL.into_iter().find(|twin| asked == twin.word());
        match known {
            Some(twin) if available(twin) => Ok(twin),
            _ => {
                let value = quote(asked.as_encoded_bytes());
                let fault = if known.is_some() {
                    "this processor lacks it"
                } else {
                    "no such set is known"
                };
                let has = Self::ALL.into_iter().filter(|twin| available(*twin));
                let has: Vec<&str> = has.map(Self::word).collect();
                Err(Complaint::new(
                    format!("the environment says {VARIABLE}=\"{value}\", but {fault}"),
                    format!(
                        "unset {VARIABLE}, or set it to what this processor has: {}",
                        has.join(", ")
                    ),
                ))
            }
        }
    }

    /// The most that the processor has.
    fn best() -> Self {
        Self::ALL.into_iter().rev().find(|twin| twin.is_available()).unwrap_or(Self::Portable)
    }

    /// The twin of this process: [`Twin::chosen`] once, or the best where that is an error (which
    /// the program refuses before it comes here).
    pub fn current() -> Self {
        static CURRENT: OnceLock<Twin> = OnceLock::new();
        *CURRENT.get_or_init(|| Self::chosen().unwrap_or_else(|_| Self::best()))
    }

    /// Lanes of the widest inner loop: what the registers hold.
    fn widest(self) -> usize {
        if self == Self::Avx512 { 16 } else { 8 }
    }
}

/// Lanes that inner loops are compiled for; any number is made up of them.
const WIDTHS: [usize; 5] = [16, 8, 4, 2, 1];

/// Widths that make up `lanes` lanes, widest first, with the first lane of each.
pub fn widths(twin: Twin, lanes: usize) -> impl Iterator<Item = (usize, usize)> {
    let mut first = 0;
    std::iter::from_fn(move || {
        let left = lanes - first;
        let width = *WIDTHS.iter().find(|&&width| width <= left.min(twin.widest()))?;
        first += width;
        Some((first - width, width))
    })
}

// SAFETY: whoever calls one keeps the promises of `segments`; it runs where its twin is available.
type Loop<'a, V> = unsafe fn(Segments<'a, V>, usize, *const f64, *mut f64);

/// The two inner loops for some lanes.
pub struct Loops<'a, V> {
    /// The products: `dots` in `segments`.
    pub dots: Loop<'a, V>,
    /// The sums: `scatter` in `segments`.
    pub scatter: Loop<'a, V>,
}

/// The inner loops of a twin. Panics if the processor cannot run it, or `width` is not compiled.
pub fn loops<'a, V: Value>(twin: Twin, width: usize) -> Loops<'a, V> {
    assert!(twin.is_available(), "a twin that this processor can run");
    match width {
        16 => of::<V, 16>(twin),
        8 => of::<V, 8>(twin),
        4 => of::<V, 4>(twin),
        2 => of::<V, 2>(twin),
        1 => of::<V, 1>(twin),
        other => panic!("{other} lanes have no loop of their own"),
    }
}

fn of<'a, V: Value, const K: usize>(twin: Twin) -> Loops<'a, V> {
    // Sixteen lanes fit the registers of one twin only; the others take eight at a time.
    match twin {
        #[cfg(target_arch = "x86_64")]
        Twin::Avx2 => Loops { dots: avx2::dots::<V, K>, scatter: avx2::scatter::<V, K> },
        #[cfg(target_arch = "x86_64")]
        Twin::Avx512 => Loops { dots: avx512::dots::<V, K>, scatter: avx512::scatter::<V, K> },
        _ => {
            Loops { dots: segments::dots::<V, K, false>, scatter: segments::scatter::<V, K, false> }
        }
    }
}

#[cfg(target_arch = "x86_64")]
#[allow(unsafe_code)]
mod avx2 {
    use super::{Segments, Value, segments};

    /// # Safety
    /// As [`segments::dots`], on a processor with AVX2 and FMA.
    #[target_feature(enable = "avx2,fma")]
    pub unsafe fn dots<V: Value, const K: usize>(
        all: Segments<'_, V>,
        stride: usize,
        v: *const f64,
        t: *mut f64,
    ) {
        // SAFETY: the caller's promise is the same.
        unsafe { segments::dots::<V, K, true>(all, stride, v, t) }
    }

    /// # Safety
    /// As [`segments::scatter`], on a processor with AVX2 and FMA.
    #[target_feature(enable = "avx2,fma")]
    pub unsafe fn scatter<V: Value, const K: usize>(
        all: Segments<'_, V>,
        stride: usize,
        p: *const f64,
        s: *mut f64,
    ) {
        // SAFETY: the caller's promise is the same.
        unsafe { segments::scatter::<V, K, true>(all, stride, p, s) }
    }
}

#[cfg(target_arch = "x86_64")]
#[allow(unsafe_code)]
mod avx512 {
    use super::{Segments, Value, segments};

    /// # Safety
    /// As [`segments::dots`], on a processor with AVX-512 F, VL and DQ, AVX2 and FMA.
    #[target_feature(enable = "avx512f,avx512vl,avx512dq,avx2,fma")]
    pub unsafe fn dots<V: Value, const K: usize>(
        all: Segments<'_, V>,
        stride: usize,
        v: *const f64,
        t: *mut f64,
    ) {
        // SAFETY: the caller's promise is the same.
        unsafe { segments::dots::<V, K, true>(all, stride, v, t) }
    }

    /// # Safety
    /// As [`segments::scatter`], on a processor with AVX-512 F, VL and DQ, AVX2 and FMA.
    #[target_feature(enable = "avx512f,avx512vl,avx512dq,avx2,fma")]
    pub unsafe fn scatter<V: Value, const K: usize>(
        all: Segments<'_, V>,
        stride: usize,
        p: *const f64,
        s: *mut f64,
    ) {
        // SAFETY: the caller's promise is the same.
        unsafe { segments::scatter::<V, K, true>(all, stride, p, s) }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn a_set_that_the_processor_lacks_is_refused_with_what_it_has() {
        let of = |text: &str| {
            Twin::decide(Some(OsStr::new(text)), |twin| twin != Twin::Avx512)
                .map_err(|complaint| complaint.to_string())
        };
        assert_eq!(of("portable"), Ok(Twin::Portable));
        assert_eq!(of("avx2"), Ok(Twin::Avx2));
        assert_eq!(of(""), Ok(Twin::best()));
        let lacking = of("avx512").unwrap_err();
        assert!(
            lacking.contains("ELLBOW_SIMD=\"avx512\", but this processor lacks it"),
            "{lacking}"
        );
        assert!(lacking.ends_with("what this processor has: portable, avx2"), "{lacking}");
        let unknown = of("AVX2\u{1b}").unwrap_err();
        assert!(unknown.contains("no such set is known"), "{unknown}");
        assert!(!unknown.contains('\u{1b}'), "{unknown}");
    }
}
