//! Settings resolved: every default filled in, every word understood, nothing left to look up.

use std::path::{Path, PathBuf};

use serde::Serialize;

use crate::base::Complaint;
use crate::job::JobError;
use crate::job::typed::{
    Data, Duplicates, DurationText, GridTable, MethodName, Missing, NumberOrText, PassName,
    Precision, RuleName, ScalingName, StrengthRange, Typed,
};
use crate::solve::StopRules;

/// What is run on a system.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum Command {
    /// One reconstruction per data set, at one strength.
    Solve,
    /// A family of strengths, rules that choose among them, and the chosen reconstruction.
    Sweep,
}

impl Command {
    /// The word on the command line and in records.
    pub fn word(self) -> &'static str {
        match self {
            Self::Solve => "solve",
            Self::Sweep => "sweep",
        }
    }
}

/// Where the system comes from. Also what `inspect` needs.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Source {
    pub(crate) blocks: Vec<BlockSource>,
    pub(crate) reference: Option<ReferenceSource>,
    pub(crate) start: Option<PathBuf>,
    pub(crate) rows: Option<PathBuf>,
    pub(crate) columns: Option<PathBuf>,
    pub(crate) missing: Option<Missing>,
    pub(crate) linearised_at: Option<PathBuf>,
    pub(crate) predicted: Option<PathBuf>,
    pub(crate) duplicates: Duplicates,
    pub(crate) allow_nonfinite: bool,
    pub(crate) precision: Precision,
    pub(crate) grid: Option<GridTable>,
    pub(crate) units: crate::system::Units,
    /// Changes no result, so that it makes no other run.
    #[serde(skip)]
    pub(crate) pass: PassName,
}

/// One matrix with its data; rows of several are stacked in this order.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct BlockSource {
    pub name: String,
    pub matrix: PathBuf,
    pub data: PathBuf,
    pub uncertainty: Option<UncertaintySource>,
    /// Multiplies 1/σ.
    pub weight: f64,
}

/// σ: √(absolute² + (percent/100·|b|)²), or a file of values.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum UncertaintySource {
    Formula { absolute: f64, percent: f64 },
    File(PathBuf),
}

/// x_ref: one value, a file, or the constant that fits all data best.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum ReferenceSource {
    Number(f64),
    File(PathBuf),
    Fit,
}

/// Which strengths are wanted.
#[derive(Debug, Clone, PartialEq, Serialize)]
#[serde(rename_all = "lowercase")]
pub enum StrengthsWanted {
    One(f64),
    Range { range: StrengthRange, count: Option<usize> },
    Found { count: Option<usize> },
}

/// Everything that decides a result, and where it goes.
#[derive(Debug, Clone, PartialEq, Serialize)]
pub struct Settings {
    pub(crate) command: Command,
    #[serde(flatten)]
    pub(crate) source: Source,
    pub(crate) strengths: StrengthsWanted,
    /// Penalty of this version: the size of the model's departure from the reference.
    pub(crate) penalty: &'static str,
    pub(crate) method: MethodName,
    pub(crate) rule: Option<RuleName>,
    pub(crate) column_scaling: ScalingName,
    /// `None`: from the size of the system; a record holds the number.
    pub(crate) max_iterations: Option<u64>,
    pub(crate) gradient_tolerance: f64,
    pub(crate) residual_tolerance: f64,
    pub(crate) noise_factor: Option<f64>,
    pub(crate) time_limit: Option<DurationText>,
    pub(crate) seed: u64,
    #[serde(skip)]
    pub(crate) out: PathBuf,
    #[serde(skip)]
    pub(crate) threads: Option<usize>,
    #[serde(skip)]
    pub(crate) force: bool,
}

/// Strengths whose squares an f64 holds with room to spare.
const POSSIBLE: std::ops::RangeInclusive<f64> = 1e-150..=1e150;

/// Most strengths of a sweep: a thousand a decade over ten decades, far more than any curve has features.
const STRENGTHS_MAX: usize = 10_000;

/// Folder for results when none is named.
pub const OUT_DEFAULT: &str = "ellbow-result";

fn usage(cause: impl Into<String>, remedy: impl Into<String>) -> JobError {
    JobError::Usage(Complaint::new(cause, remedy))
}

impl Source {
    /// Resolves what was typed; no file is opened.
    ///
    /// # Errors
    /// A missing or contradictory setting.
    pub fn new(typed: &Typed) -> Result<Self, JobError> {
        if typed.linearised_at.is_some() != typed.predicted.is_some() {
            return Err(usage(
                "--linearised-at and --predicted need each other",
                "give the model x_k and the data g(x_k) predicted at it",
            ));
        }
        let units = typed.units.as_ref();
        let text = |value: Option<&String>| value.cloned().unwrap_or_default();
        if let Some([low, high]) = units.and_then(|u| u.plausible)
            && low.partial_cmp(&high) != Some(std::cmp::Ordering::Less)
        {
            return Err(usage(
                format!("plausible = [{low}, {high}] is not a range"),
                "state the smaller value first",
            ));
        }
        Ok(Self {
            blocks: blocks(typed)?,
            reference: typed.reference.as_ref().map(reference),
            start: typed.start.clone(),
            rows: typed.rows.clone(),
            columns: typed.columns.clone(),
            missing: typed.missing,
            linearised_at: typed.linearised_at.clone(),
            predicted: typed.predicted.clone(),
            duplicates: typed.duplicates.unwrap_or(Duplicates::Sum),
            allow_nonfinite: typed.allow_nonfinite.unwrap_or(false),
            precision: typed.precision.unwrap_or(Precision::Double),
            grid: typed.grid.clone(),
            units: crate::system::Units {
                data: text(units.and_then(|u| u.data.as_ref())),
                model: text(units.and_then(|u| u.model.as_ref())),
                model_quantity: text(units.and_then(|u| u.model_quantity.as_ref())),
                plausible: units.and_then(|u| u.plausible).map(|[low, high]| (low, high)),
            },
            pass: typed.pass.unwrap_or(PassName::Auto),
        })
    }

    /// Whether every weight is 1/σ, so that squares of weighted residuals are in units of noise: σ
    /// is stated for all data, and no block is weighted on top of it.
    pub(crate) fn weights_are_noise(&self) -> bool {
        self.blocks.iter().all(|block| block.uncertainty.is_some() && block.weight == 1.0)
    }

    /// Every file the system is read from, each once, in a fixed order.
    pub fn files(&self) -> Vec<PathBuf> {
        let mut files = Vec::new();
        for block in &self.blocks {
            files.extend([block.matrix.clone(), block.data.clone()]);
            if let Some(UncertaintySource::File(path)) = &block.uncertainty {
                files.push(path.clone());
            }
        }
        if let Some(ReferenceSource::File(path)) = &self.reference {
            files.push(path.clone());
        }
        let single = [&self.start, &self.rows, &self.columns, &self.linearised_at, &self.predicted];
        files.extend(single.into_iter().flatten().cloned());
        files.extend(self.grid.iter().filter_map(|grid| grid.active.clone()));
        let mut seen = Vec::new();
        files.retain(|file| {
            let first = !seen.contains(file);
            seen.push(file.clone());
            first
        });
        files
    }
}

fn blocks(typed: &Typed) -> Result<Vec<BlockSource>, JobError> {
    match (&typed.data, &typed.matrix) {
        (Some(Data::File(data)), Some(matrix)) => Ok(vec![BlockSource {
            name: "data".into(),
            matrix: matrix.clone(),
            data: data.clone(),
            uncertainty: typed.uncertainty.as_ref().map(uncertainty).transpose()?,
            weight: 1.0,
        }]),
        (Some(Data::File(_)) | None, None) => Err(usage(
            "no matrix is named",
            "name it with --matrix FILE or matrix = \"FILE\" in a job file",
        )),
        (None, Some(_)) => Err(usage(
            "no data are named",
            "name them with --data FILE or data = \"FILE\" in a job file",
        )),
        (Some(Data::Blocks(_)), Some(_)) => Err(usage(
            "both `matrix` and [[data]] blocks are given",
            "name the matrix of each block inside it, and none beside them",
        )),
        (Some(Data::Blocks(blocks)), None) if blocks.is_empty() => Err(usage(
            "the list of data blocks is empty",
            "add a [[data]] block with its matrix and data",
        )),
        (Some(Data::Blocks(blocks)), None) => blocks
            .iter()
            .enumerate()
            .map(|(i, block)| {
                let sigma = block.uncertainty.as_ref().or(typed.uncertainty.as_ref());
                Ok(BlockSource {
                    name: block.name.clone().unwrap_or_else(|| format!("block {}", i + 1)),
                    matrix: block.matrix.clone(),
                    data: block.data.clone(),
                    uncertainty: sigma.map(uncertainty).transpose()?,
                    weight: block.weight.unwrap_or(1.0),
                })
            })
            .collect(),
    }
}

/// `0.5`, `2%`, `0.5+2%` or a file.
fn uncertainty(text: &NumberOrText) -> Result<UncertaintySource, JobError> {
    if let Some(absolute) = text.number() {
        return Ok(UncertaintySource::Formula { absolute, percent: 0.0 });
    }
    let Some(head) = text.0.trim().strip_suffix('%') else {
        return Ok(UncertaintySource::File(PathBuf::from(&text.0)));
    };
    let (absolute, percent) = head.split_once('+').unwrap_or(("0", head));
    match (absolute.trim().parse(), percent.trim().parse()) {
        (Ok(absolute), Ok(percent)) => Ok(UncertaintySource::Formula { absolute, percent }),
        _ => Err(JobError::Usage(
            Complaint::new(
                "the uncertainty is not understood",
                "write a number (0.5), a percentage of |b| (2%), both (0.5+2%), or a file",
            )
            .quoting(text.0.as_bytes()),
        )),
    }
}

fn reference(text: &NumberOrText) -> ReferenceSource {
    match text.number() {
        Some(number) => ReferenceSource::Number(number),
        None if text.0 == "fit" => ReferenceSource::Fit,
        None => ReferenceSource::File(PathBuf::from(&text.0)),
    }
}

impl Settings {
    /// Resolves what was typed for a command.
    ///
    /// # Errors
    /// A missing, contradictory or impossible setting (exit code 2).
    pub fn new(command: Command, typed: &Typed) -> Result<Self, JobError> {
        let settings = Self {
            command,
            source: Source::new(typed)?,
            strengths: strengths(command, typed)?,
            penalty: "size",
            method: typed.method.unwrap_or(MethodName::Lsqr),
            rule: typed.rule,
            column_scaling: typed.column_scaling.unwrap_or(ScalingName::Auto),
            max_iterations: typed.max_iterations,
            gradient_tolerance: typed.gradient_tolerance.unwrap_or(StopRules::GRADIENT_TOLERANCE),
            residual_tolerance: typed.residual_tolerance.unwrap_or(StopRules::RESIDUAL_TOLERANCE),
            noise_factor: typed.noise_factor,
            time_limit: typed.time_limit,
            seed: typed.seed.unwrap_or(1),
            out: typed.out.clone().unwrap_or_else(|| PathBuf::from(OUT_DEFAULT)),
            threads: typed.threads,
            force: typed.force.unwrap_or(false),
        };
        settings.check()?;
        Ok(settings)
    }

    /// The settings as a record shows them, for a system of this size: nothing is left to look up.
    pub fn resolved(&self, rows: usize, columns: usize) -> serde_json::Value {
        let limit =
            self.max_iterations.unwrap_or_else(|| StopRules::max_iterations_default(rows, columns));
        let all = Self { max_iterations: Some(limit), ..self.clone() };
        serde_json::to_value(all).expect("settings are plain values")
    }

    fn check(&self) -> Result<(), JobError> {
        for (name, value) in [
            ("--gradient-tolerance", Some(self.gradient_tolerance)),
            ("--residual-tolerance", Some(self.residual_tolerance)),
            ("--noise-factor", self.noise_factor),
        ] {
            if value.is_some_and(|value| !(value >= 0.0 && value.is_finite())) {
                return Err(usage(
                    format!("{name} is negative or not finite"),
                    "give a number from 0 up",
                ));
            }
        }
        if self.threads == Some(0) {
            return Err(usage("--threads 0", "give at least one thread, or leave the option out"));
        }
        if self.noise_factor.is_some() && !self.source.weights_are_noise() {
            return Err(usage(
                "--noise-factor needs to know the noise",
                "state the uncertainty of all data with --uncertainty, and give no block a weight",
            ));
        }
        if self.noise_factor.is_some() && self.strengths != StrengthsWanted::One(0.0) {
            return Err(usage(
                "--noise-factor stops an unregularised iteration, and the strength is not 0",
                "use it with --strength 0, or leave it out",
            ));
        }
        if self.residual_tolerance > 0.0 && self.strengths != StrengthsWanted::One(0.0) {
            return Err(usage(
                "--residual-tolerance stops an unregularised iteration, and the strength is not 0",
                "use it with --strength 0, or leave it out: at other strengths the gradient decides",
            ));
        }
        if self.method == MethodName::Direct && self.source.start.is_some() {
            return Err(usage(
                "--method direct has no start",
                "leave --start out: a decomposition does not iterate",
            ));
        }
        Ok(())
    }
}

fn strengths(command: Command, typed: &Typed) -> Result<StrengthsWanted, JobError> {
    let range = typed.strengths.is_some() || typed.strength_count.is_some();
    if typed.strength_count.is_some_and(|count| !(1..=STRENGTHS_MAX).contains(&count)) {
        return Err(usage(
            format!("--strength-count {}", typed.strength_count.unwrap_or(0)),
            format!("ask for at least one strength, and at most {STRENGTHS_MAX}"),
        ));
    }
    match command {
        Command::Sweep if typed.strength.is_some() || typed.strength_from.is_some() => Err(usage(
            "a sweep has a range of strengths, not one",
            "use `ellbow solve` for one strength, or --strengths FROM..TO",
        )),
        Command::Sweep
            if typed
                .strengths
                .is_some_and(|r| !(POSSIBLE.contains(&r.from) && POSSIBLE.contains(&r.to))) =>
        {
            Err(usage(
                "--strengths goes where squares are beyond double precision",
                "stay between 1e-150 and 1e150",
            ))
        }
        Command::Sweep => Ok(match typed.strengths {
            Some(range) => StrengthsWanted::Range { range, count: typed.strength_count },
            None => StrengthsWanted::Found { count: typed.strength_count },
        }),
        Command::Solve if range || typed.rule.is_some() => Err(usage(
            "a solve has one strength, not a range or a rule",
            "use `ellbow sweep` to look at many strengths and choose",
        )),
        Command::Solve => match (typed.strength, &typed.strength_from) {
            (Some(strength), None) if strength == 0.0 || POSSIBLE.contains(&strength) => {
                Ok(StrengthsWanted::One(strength))
            }
            (Some(strength), None) => Err(usage(
                format!(
                    "--strength {strength:e} is negative, or its square is beyond double precision"
                ),
                "give 0, or a number from 1e-150 to 1e150",
            )),
            (None, Some(run)) => Ok(StrengthsWanted::One(strength_of(run)?)),
            (Some(_), Some(_)) => Err(usage(
                "--strength and --strength-from say the same thing twice",
                "give one of them",
            )),
            (None, None) => Err(usage(
                "no strength is given",
                "state it with --strength λ (0 is allowed and must be said), or let `ellbow sweep` \
                 look at many and choose",
            )),
        },
    }
}

/// The strength of a finished run: a sweep's choice, or a solve's own.
fn strength_of(run: &Path) -> Result<f64, JobError> {
    let path = run.join("summary.json");
    let record = crate::files::record::read(&path)?;
    let chosen = record.pointer("/choice/strength").or_else(|| record.get("strength"));
    chosen.and_then(serde_json::Value::as_f64).ok_or_else(|| {
        JobError::BadInput(
            Complaint::new(
                "the record holds no strength",
                "name the folder of a finished solve or sweep",
            )
            .in_file(&path),
        )
    })
}

#[cfg(test)]
mod tests {
    use super::*;

    fn base() -> Typed {
        Typed {
            matrix: Some("a.mtx".into()),
            data: Some(Data::File("b.npy".into())),
            ..Typed::default()
        }
    }

    fn cause(result: Result<Settings, JobError>) -> String {
        result.unwrap_err().to_string()
    }

    #[test]
    fn a_solve_without_a_strength_points_to_sweep() {
        let message = cause(Settings::new(Command::Solve, &base()));
        assert!(message.contains("no strength is given") && message.contains("ellbow sweep"));
    }

    #[test]
    fn contradictions_are_refused() {
        let typed = Typed { strength: Some(1.0), ..base() };
        assert!(cause(Settings::new(Command::Sweep, &typed)).contains("not one"));
        let typed = Typed { strength: Some(-1.0), ..base() };
        assert!(cause(Settings::new(Command::Solve, &typed)).contains("negative"));
        let typed = Typed { linearised_at: Some("x".into()), ..base() };
        assert!(cause(Settings::new(Command::Sweep, &typed)).contains("need each other"));
        let typed = Typed { noise_factor: Some(1.0), strength: Some(0.0), ..base() };
        assert!(cause(Settings::new(Command::Solve, &typed)).contains("know the noise"));
        let typed = Typed { matrix: None, ..base() };
        assert!(cause(Settings::new(Command::Sweep, &typed)).contains("no matrix"));
    }

    #[test]
    fn uncertainties_in_every_form() {
        let of = |text: &str| uncertainty(&NumberOrText(text.into()));
        let formula = |absolute, percent| UncertaintySource::Formula { absolute, percent };
        assert_eq!(of("0.5").unwrap(), formula(0.5, 0.0));
        assert_eq!(of("2%").unwrap(), formula(0.0, 2.0));
        assert_eq!(of("0.5 + 2%").unwrap(), formula(0.5, 2.0));
        assert_eq!(of("s.npy").unwrap(), UncertaintySource::File("s.npy".into()));
        assert!(of("x%").is_err());
    }
}
