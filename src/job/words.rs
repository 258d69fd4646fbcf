//! Values that are typed as a word or a short text, the same as a flag and in a job file.

use std::str::FromStr;

use serde::Deserialize;
use serde::de::{self, Deserializer};

/// Words for a choice, the same on the command line and in a job file.
macro_rules! words {
    ($(#[$meta:meta])* $name:ident {
        $($(#[$of_variant:meta])* $variant:ident = $word:literal),+ $(,)?
    }) => {
        $(#[$meta])*
        #[derive(Debug, Clone, Copy, PartialEq, Eq, Deserialize, serde::Serialize)]
        pub enum $name { $($(#[$of_variant])* #[serde(rename = $word)] $variant),+ }

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

words!(
    /// The command a job file was written for.
    CommandName {
        /// Looks at the system without a solve.
        Inspect = "inspect",
        /// One strength.
        Solve = "solve",
        /// Many strengths.
        Sweep = "sweep",
    }
);
words!(
    /// How a datum that is missing is written in the data.
    Missing {
        /// As NaN: left out of its data set.
        Nan = "nan",
    }
);
words!(
    /// What several entries at one place of the matrix mean.
    Duplicates {
        /// They are added, in file order.
        Sum = "sum",
        /// They are an error.
        Error = "error",
        /// The last one counts.
        Last = "last",
    }
);
words!(
    /// How values of the matrix are kept.
    Precision {
        /// f64, or f32 where every value is exactly an f32.
        Double = "double",
        /// Rounded to f32.
        Single = "single",
    }
);
words!(
    /// A rule that chooses a strength: [`crate::choose::Rule`].
    RuleName {
        /// Largest curvature of the L-curve.
        Corner = "corner",
        /// Corner of the discrete L-curve by pruning.
        CornerPruned = "corner-pruned",
        /// Discrepancy principle without degrees of freedom.
        NoisePlain = "noise-plain",
    }
);
words!(
    /// How one strength is solved: [`crate::solve::Method`], or a decomposition.
    MethodName {
        /// Smallest damped residual over the Krylov space.
        Lsqr = "lsqr",
        /// Smallest gradient over the same space.
        Lsmr = "lsmr",
        /// Conjugate gradients on the normal equations.
        Cgls = "cgls",
        /// Dense singular value decomposition: [`crate::solve::direct`].
        Direct = "direct",
    }
);
words!(
    /// Column scaling as a preconditioner: [`crate::sweep::Scaling`].
    ScalingName {
        /// Where it pays and costs a sweep no shared process.
        Auto = "auto",
        /// Always.
        On = "on",
        /// Never.
        Off = "off",
    }
);

words!(
    /// How a pass goes through the stored matrix: [`crate::kernel::Way`]. Changes no bit.
    PassName {
        /// The way of less counted memory traffic.
        Auto = "auto",
        /// Products and sums of a few rows at a time.
        One = "one",
        /// Products of all rows, then all sums.
        TwoPhase = "two-phase",
    }
);

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
    /// Either end; the order does not matter.
    pub from: f64,
    /// The other end.
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
    /// Above 0, below a century.
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
