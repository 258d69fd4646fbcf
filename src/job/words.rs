//! Values that are typed as a word or a short text, the same as a flag and in a job file.

use std::str::FromStr;

use serde::Deserialize;
use serde::de::{self, Deserializer};

/// Words for a choice, the same on the command line and in a job file.
macro_rules! words {
    ($(#[$meta:meta])* $name:ident { $($variant:ident = $word:literal),+ }) => {
        $(#[$meta])*
        #[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize, serde::Serialize)]
        pub enum $name { $(#[serde(rename = $word)] $variant),+ }

        impl FromStr for $name {
            type Err = String;
            fn from_str(text: &str) -> Result<Self, String> {
                match text {
                    $($word => Ok(Self::$variant),)+
                    _ => Err(format!("one of: {}", [$($word),+].join(", "))),
                }
            }
        }
    };
}

words!(CommandName { Inspect = "inspect", Solve = "solve", Sweep = "sweep" });
words!(Missing { Nan = "nan" });
words!(Duplicates { Sum = "sum", Error = "error", Last = "last" });
words!(Precision { Double = "double", Single = "single" });
words!(RuleName { Corner = "corner", CornerPruned = "corner-pruned", NoisePlain = "noise-plain" });
words!(MethodName { Lsqr = "lsqr", Lsmr = "lsmr", Cgls = "cgls", Direct = "direct" });
words!(ScalingName { Auto = "auto", On = "on", Off = "off" });

/// Defines a type read from text, with its own rule.
macro_rules! from_text {
    ($name:ident) => {
        impl<'de> Deserialize<'de> for $name {
            fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
                let text = String::deserialize(deserializer)?;
                text.parse().map_err(de::Error::custom)
            }
        }
    };
}

/// `FROM..TO`, both positive.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
pub struct StrengthRange {
    pub from: f64,
    pub to: f64,
}
from_text!(StrengthRange);

impl FromStr for StrengthRange {
    type Err = String;
    fn from_str(text: &str) -> Result<Self, String> {
        let number =
            |part: &str| part.trim().parse::<f64>().ok().filter(|x| *x > 0.0 && x.is_finite());
        text.split_once("..")
            .and_then(|(from, to)| Some(Self { from: number(from)?, to: number(to)? }))
            .ok_or_else(|| "two positive numbers with two dots between, e.g. 1e-4..10".into())
    }
}

/// A duration: a number and one of `s`, `m`, `h`, e.g. `90s`, `0.2s`, `55m`, `2h`.
#[derive(Debug, Clone, Copy, PartialEq, serde::Serialize)]
#[serde(transparent)]
pub struct DurationText {
    pub seconds: f64,
}
from_text!(DurationText);

impl FromStr for DurationText {
    type Err = String;
    fn from_str(text: &str) -> Result<Self, String> {
        let units = [("s", 1.0), ("m", 60.0), ("h", 3600.0)];
        units
            .iter()
            .find_map(|(unit, factor)| Some((text.strip_suffix(unit)?, factor)))
            .and_then(|(number, factor)| Some(factor * number.parse::<f64>().ok()?))
            // A century: beyond it a sum of times could overflow.
            .filter(|seconds| *seconds > 0.0 && *seconds < 3.2e9)
            .map(|seconds| Self { seconds })
            .ok_or_else(|| "a positive number with s, m or h, e.g. 90s, 55m, 2h".into())
    }
}
