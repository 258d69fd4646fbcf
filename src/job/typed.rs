//! What was typed: every setting as an option, from flags or from a job file, flags winning.
//!
//! One definition serves both: a field is a flag for clap and a key for TOML.

use std::path::{Path, PathBuf};
use std::str::FromStr;

use serde::Deserialize;
use serde::de::{self, Deserializer, SeqAccess, Visitor};

pub use crate::job::words::{
    CommandName, Duplicates, DurationText, MethodName, Missing, PassName, Precision, RuleName,
    ScalingName, StrengthRange,
};

/// All settings, none of them resolved.
#[derive(Debug, Clone, Default, PartialEq, Deserialize, clap::Args)]
#[serde(deny_unknown_fields)]
pub struct Typed {
    /// In a job file: the command it was written for. What is typed on the command line decides.
    #[arg(skip)]
    pub command: Option<CommandName>,

    /// Forward model A, data unit per model unit: .mtx, .mtx.gz, .npz (SciPy CSR,
    /// CSC, COO) or 2-D .npy
    #[arg(long, value_name = "FILE", help_heading = "System")]
    pub matrix: Option<PathBuf>,

    /// Data b: .npy, .mtx, .csv or .txt; a matrix m×k is k data sets on one system
    #[arg(long, value_name = "FILE", help_heading = "System")]
    pub data: Option<Data>,

    /// σ of the data, one standard deviation: a number or file in data units, a
    /// percentage of |b|, or both in quadrature [default: none, weights 1]
    #[arg(long, value_name = "FILE|NUMBER|2%|0.5+2%", help_heading = "System")]
    pub uncertainty: Option<NumberOrText>,

    /// Model that the penalty pulls towards, in model units; `fit` is the one
    /// constant that fits all data best [default: 0]
    #[arg(
        long,
        value_name = "FILE|NUMBER|fit",
        allow_hyphen_values = true,
        help_heading = "System"
    )]
    pub reference: Option<NumberOrText>,

    /// Model to start from [default: the reference]
    #[arg(long, value_name = "FILE", help_heading = "System")]
    pub start: Option<PathBuf>,

    /// Table with one line per datum: id, group, order, use, and any others
    #[arg(long, value_name = "FILE.csv", help_heading = "System")]
    pub rows: Option<PathBuf>,

    /// Table with one line per unknown: name, kind, penalty_weight, fixed
    #[arg(long, value_name = "FILE.csv", help_heading = "System")]
    pub columns: Option<PathBuf>,

    /// `nan`: a datum that is NaN is left out of its data set [default: an error]
    #[arg(long, value_name = "nan", help_heading = "System")]
    pub missing: Option<Missing>,

    /// Model x_k at which A is the derivative of g; needs --predicted
    #[arg(long, value_name = "FILE", help_heading = "System")]
    pub linearised_at: Option<PathBuf>,

    /// Data g(x_k) predicted at that model
    #[arg(long, value_name = "FILE", help_heading = "System")]
    pub predicted: Option<PathBuf>,

    /// Entries of the matrix given more than once [default: sum]
    #[arg(long, value_name = "sum|error|last", help_heading = "System")]
    pub duplicates: Option<Duplicates>,

    /// Read nan, inf and overflowing numbers in the matrix instead of refusing them
    #[arg(long, num_args = 0, default_missing_value = "true", help_heading = "System")]
    pub allow_nonfinite: Option<bool>,

    /// How values are kept: `double` (f32 where that loses nothing) or `single`
    /// (rounded to f32) [default: double]
    #[arg(long, value_name = "double|single", help_heading = "System")]
    pub precision: Option<Precision>,

    /// Strength λ ≥ 0 of one reconstruction, squared in the objective
    #[arg(long, allow_negative_numbers = true, value_name = "λ", help_heading = "Strength")]
    pub strength: Option<f64>,

    /// Take the strength of a finished run's folder
    #[arg(long, value_name = "RUN", help_heading = "Strength")]
    pub strength_from: Option<PathBuf>,

    /// Range of a sweep [default: from the largest singular value down to 1e-5 of
    /// it]
    #[arg(long, value_name = "FROM..TO", help_heading = "Strength")]
    pub strengths: Option<StrengthRange>,

    /// Number of strengths, evenly in log λ [default: 10 a decade]
    #[arg(long, value_name = "N", help_heading = "Strength")]
    pub strength_count: Option<usize>,

    /// Rule that decides: noise-plain, corner or corner-pruned [default: the first
    /// of these that applies]
    #[arg(long, value_name = "NAME", help_heading = "Strength")]
    pub rule: Option<RuleName>,

    /// Iteration [default: lsqr]; `direct` is a dense decomposition for small
    /// systems
    #[arg(long, value_name = "lsqr|lsmr|cgls|direct", help_heading = "Solver")]
    pub method: Option<MethodName>,

    /// Even out the columns as a preconditioner: `auto` does where their norms span
    /// more than a factor 100 and it does not cost a sweep its shared process
    /// [default: auto]
    #[arg(long, value_name = "auto|on|off", help_heading = "Solver")]
    pub column_scaling: Option<ScalingName>,

    /// Stop a track after this many iterations [default: 20 times the smaller side,
    /// 1000 to 20000]
    #[arg(long, value_name = "N", help_heading = "Solver")]
    pub max_iterations: Option<u64>,

    /// Relative gradient that counts as converged; 0 asks for rounding level
    /// [default: 1e-8]
    #[arg(long, allow_negative_numbers = true, value_name = "T", help_heading = "Solver")]
    pub gradient_tolerance: Option<f64>,

    /// λ = 0 only: residual norm over data norm that counts as converged
    /// [default: 0, rounding level]
    #[arg(long, allow_negative_numbers = true, value_name = "T", help_heading = "Solver")]
    pub residual_tolerance: Option<f64>,

    /// λ = 0 only: stop at a residual norm of τ√m (needs --uncertainty)
    #[arg(long, allow_negative_numbers = true, value_name = "τ", help_heading = "Solver")]
    pub noise_factor: Option<f64>,

    /// Stop this long after the start, loading included, with what is there, e.g.
    /// 90s, 55m, 2h
    #[arg(long, value_name = "D", help_heading = "Solver")]
    pub time_limit: Option<DurationText>,

    /// Folder for the results, made if absent [default: ellbow-result]
    #[arg(long, value_name = "DIR", help_heading = "Running")]
    pub out: Option<PathBuf>,

    /// How a pass goes through the matrix: once, or products first and sums after;
    /// results do not depend on it [default: auto, by counted memory traffic]
    #[arg(long, value_name = "auto|one|two-phase", help_heading = "Running")]
    pub pass: Option<PassName>,

    /// Threads; results do not depend on it [default: what the environment grants]
    #[arg(long, value_name = "N", help_heading = "Running")]
    pub threads: Option<usize>,

    /// Seed of everything random [default: 1]
    #[arg(long, value_name = "S", help_heading = "Running")]
    pub seed: Option<u64>,

    /// Replace a different run in the same folder
    #[arg(long, num_args = 0, default_missing_value = "true", help_heading = "Running")]
    #[serde(skip)]
    pub force: Option<bool>,

    /// `[units]` of a job file.
    #[arg(skip)]
    pub units: Option<UnitsTable>,

    /// `[grid]` of a job file.
    #[arg(skip)]
    pub grid: Option<GridTable>,
}

/// `data`: a file, or in a job file several blocks.
#[derive(Debug, Clone, PartialEq)]
pub enum Data {
    /// m×k, the rows of `matrix`.
    File(PathBuf),
    /// Each with a matrix of its own.
    Blocks(Vec<Block>),
}

/// `[[data]]`: rows of one matrix, stacked with those of the others.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct Block {
    /// For messages and records; `block 1`, `block 2`, … where unstated.
    pub name: Option<String>,
    /// A of the block; all blocks have the same unknowns.
    pub matrix: PathBuf,
    /// b of the block; all blocks have the same number of data sets.
    pub data: PathBuf,
    /// σ of the block; that of the whole job where unstated.
    pub uncertainty: Option<NumberOrText>,
    /// Multiplies 1/σ.
    pub weight: Option<f64>,
}

/// `[units]`: words for messages and records; no number is converted.
#[derive(Debug, Clone, PartialEq, Deserialize)]
#[serde(deny_unknown_fields)]
pub struct UnitsTable {
    /// e.g. `s`
    pub data: Option<String>,
    /// e.g. `s/m`
    pub model: Option<String>,
    /// e.g. `slowness`
    pub model_quantity: Option<String>,
    /// Values an expert would call possible, for `inspect`.
    pub plausible: Option<[f64; 2]>,
}

/// `[grid]`: a rectangular grid whose cells are unknowns; lists hold one value per axis.
#[derive(Debug, Clone, PartialEq, Deserialize, serde::Serialize)]
#[serde(deny_unknown_fields)]
pub struct GridTable {
    /// Names, one to three.
    pub axes: Vec<String>,
    /// Cells along each axis.
    pub shape: Vec<usize>,
    /// Width of a cell along each axis, in `unit`.
    pub spacing: Vec<f64>,
    /// Outer border of the first cell along each axis, in `unit`.
    pub origin: Vec<f64>,
    /// Of all lengths, e.g. `m`.
    pub unit: String,
    /// Name of the axis along which the cell number runs fastest: the first or the last.
    pub fastest: String,
    /// File with a mask of all cells, or a list of cell numbers.
    pub active: Option<PathBuf>,
}

/// A number, or a text that may be a number, a percentage or a file.
#[derive(Debug, Clone, PartialEq)]
pub struct NumberOrText(pub String);

impl FromStr for NumberOrText {
    type Err = String;
    /// A flag's value may be a negative number; anything else that begins with `-` is the next
    /// option, before which the value was forgotten.
    fn from_str(text: &str) -> Result<Self, String> {
        let value = Self(text.to_owned());
        if text.starts_with('-') && value.number().is_none() {
            return Err("a value is missing; write ./-name for a file that begins with -".into());
        }
        Ok(value)
    }
}

impl<'de> Deserialize<'de> for NumberOrText {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct Text;
        impl Visitor<'_> for Text {
            type Value = NumberOrText;
            fn expecting(&self, out: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
                write!(out, "a number or a text")
            }
            fn visit_str<E: de::Error>(self, text: &str) -> Result<NumberOrText, E> {
                Ok(NumberOrText(text.to_owned()))
            }
            fn visit_f64<E: de::Error>(self, number: f64) -> Result<NumberOrText, E> {
                Ok(NumberOrText(format!("{number:e}")))
            }
            fn visit_i64<E: de::Error>(self, number: i64) -> Result<NumberOrText, E> {
                Ok(NumberOrText(number.to_string()))
            }
        }
        deserializer.deserialize_any(Text)
    }
}

impl FromStr for Data {
    type Err = std::convert::Infallible;
    fn from_str(text: &str) -> Result<Self, Self::Err> {
        Ok(Self::File(text.into()))
    }
}

impl<'de> Deserialize<'de> for Data {
    fn deserialize<D: Deserializer<'de>>(deserializer: D) -> Result<Self, D::Error> {
        struct FileOrBlocks;
        impl<'de> Visitor<'de> for FileOrBlocks {
            type Value = Data;
            fn expecting(&self, out: &mut std::fmt::Formatter<'_>) -> std::fmt::Result {
                write!(out, "a file name, or [[data]] blocks")
            }
            fn visit_str<E: de::Error>(self, text: &str) -> Result<Data, E> {
                Ok(Data::File(text.into()))
            }
            fn visit_seq<A: SeqAccess<'de>>(self, mut list: A) -> Result<Data, A::Error> {
                let mut blocks = Vec::new();
                while let Some(block) = list.next_element()? {
                    blocks.push(block);
                }
                Ok(Data::Blocks(blocks))
            }
        }
        deserializer.deserialize_any(FileOrBlocks)
    }
}

impl Typed {
    /// These settings with `flags` winning wherever they say something.
    pub fn overridden_by(mut self, flags: Self) -> Self {
        // Two ways of saying one thing: whichever is a flag replaces both.
        if flags.strength.is_some() || flags.strength_from.is_some() {
            (self.strength, self.strength_from) = (None, None);
        }
        macro_rules! either {
            ($($field:ident),+ $(,)?) => { Self { $($field: flags.$field.or(self.$field)),+ } };
        }
        either!(
            command,
            matrix,
            data,
            uncertainty,
            reference,
            start,
            rows,
            columns,
            missing,
            linearised_at,
            predicted,
            duplicates,
            allow_nonfinite,
            precision,
            strength,
            strength_from,
            strengths,
            strength_count,
            rule,
            method,
            column_scaling,
            max_iterations,
            gradient_tolerance,
            residual_tolerance,
            noise_factor,
            time_limit,
            out,
            pass,
            threads,
            seed,
            force,
            units,
            grid,
        )
    }

    /// Makes relative paths start at `folder`: a job file means files beside itself.
    pub fn rebased(mut self, folder: &Path) -> Self {
        let rebase = |path: &mut PathBuf| *path = folder.join(&path);
        let single = [
            &mut self.matrix,
            &mut self.start,
            &mut self.rows,
            &mut self.columns,
            &mut self.linearised_at,
            &mut self.predicted,
            &mut self.strength_from,
            &mut self.out,
        ];
        single.into_iter().flatten().for_each(rebase);
        for text in [&mut self.uncertainty, &mut self.reference].into_iter().flatten() {
            text.rebase(folder);
        }
        match &mut self.data {
            Some(Data::File(path)) => rebase(path),
            Some(Data::Blocks(blocks)) => {
                for block in blocks {
                    rebase(&mut block.matrix);
                    rebase(&mut block.data);
                    if let Some(text) = &mut block.uncertainty {
                        text.rebase(folder);
                    }
                }
            }
            None => {}
        }
        if let Some(active) = self.grid.as_mut().and_then(|grid| grid.active.as_mut()) {
            rebase(active);
        }
        self
    }
}

impl NumberOrText {
    /// The text as a number, `inf` and `nan` among them; `None` where it is none.
    pub fn number(&self) -> Option<f64> {
        self.0.trim().parse().ok()
    }

    /// Whether it can only be a file.
    fn is_path(&self) -> bool {
        self.number().is_none() && !self.0.ends_with('%') && self.0 != "fit"
    }

    fn rebase(&mut self, folder: &Path) {
        if self.is_path() {
            self.0 = folder.join(&self.0).to_string_lossy().into_owned();
        }
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn durations_and_ranges_are_read_or_refused() {
        let seconds = |text: &str| text.parse::<DurationText>().map(|d| d.seconds);
        assert_eq!(seconds("90s"), Ok(90.0));
        assert_eq!(seconds("55m"), Ok(3300.0));
        assert_eq!(seconds("0.2s"), Ok(0.2));
        for bad in ["90", "-1s", "s", "1d", "1e99h", "nans"] {
            assert!(seconds(bad).is_err(), "{bad}");
        }
        assert_eq!("1e-4..10".parse(), Ok(StrengthRange { from: 1e-4, to: 10.0 }));
        assert!("0..1".parse::<StrengthRange>().is_err());
        assert!("1".parse::<StrengthRange>().is_err());
    }

    #[test]
    fn a_job_file_means_files_beside_itself_and_flags_win() {
        let text = "matrix = \"a.mtx\"\ndata = \"b.npy\"\nuncertainty = 0.5\nreference = \"fit\"\nstrength = 1.0";
        let job: Typed = toml::from_str(text).unwrap();
        let job = job.rebased(Path::new("/jobs"));
        assert_eq!(job.matrix, Some("/jobs/a.mtx".into()));
        assert_eq!(job.uncertainty.as_ref().unwrap().number(), Some(0.5));
        assert_eq!(job.reference.as_ref().unwrap().0, "fit");
        let flags = Typed { strength: Some(2.0), ..Typed::default() };
        let both = job.overridden_by(flags);
        assert_eq!((both.strength, both.matrix), (Some(2.0), Some("/jobs/a.mtx".into())));
    }
}
