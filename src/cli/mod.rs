//! The command line: what can be typed, what is printed, and the exit code.

mod demo;
mod inspect;
mod job;
mod progress;
mod terminal;

use std::ffi::OsString;
use std::path::{Path, PathBuf};

use clap::{CommandFactory, FromArgMatches, Parser, Subcommand};

use crate::cli::terminal::{print, print_json, say};
use crate::job::{JobError, Typed};
use crate::kernel::Twin;
use crate::{files, team};

/// Exit codes, as the guide lists them.
mod exit {
    pub const CONVERGED: u8 = 0;
    pub const USAGE: u8 = 2;
    pub const NOT_CONVERGED: u8 = 3;
    pub const BROKE_DOWN: u8 = 4;
    pub const BAD_INPUT: u8 = 65;
    pub const TOO_LARGE: u8 = 71;
    pub const FILE_ERROR: u8 = 74;
}

const AFTER_HELP: &str = "\
Exit codes:
   0  converged (a sweep: its chosen strength did)
   2  usage
   3  stopped at a limit or by a signal before convergence; the result is usable
   4  broke down: a number stopped being finite
  65  bad input
  71  would not fit
  74  a file could not be read or written

Environment:
  ELLBOW_SIMD  inner loops: portable, avx2 or avx512 [default: the most that the
               processor has]
  RAYON_NUM_THREADS, OMP_NUM_THREADS, SLURM_CPUS_PER_TASK
               threads where --threads is not given; the first that is set
  NO_COLOR     no colours";

/// Turns indirect measurements into a model: solves the regularised sparse
/// least-squares problem
///
///   minimise  Σ (aᵢx − bᵢ)²/σᵢ²  +  λ² ‖x − x_ref‖²
///
/// at one strength λ or at many, marks where the trade-off bends, and keeps a
/// record of everything.
#[derive(Parser)]
#[command(name = "ellbow", version, max_term_width = 80, after_help = AFTER_HELP)]
struct Arguments {
    #[command(subcommand)]
    command: Command,
}

#[derive(Subcommand)]
enum Command {
    /// Look at a system before anyone pays for a solve: shape, coverage, scaling,
    /// suspicious rows and columns, a one-value fit, memory and time
    Inspect(JobArguments),
    /// One reconstruction at one strength
    Solve(JobArguments),
    /// A family of strengths, the rules that choose among them, and the chosen model
    Sweep(JobArguments),
    /// Write a demo problem to a folder and run it end to end
    Demo(demo::DemoArguments),
}

/// What every command on a system takes.
#[derive(clap::Args)]
struct JobArguments {
    /// Job file (TOML) with the same settings as the options; options win
    #[arg(value_name = "JOB.toml")]
    job: Option<PathBuf>,

    #[command(flatten)]
    typed: Typed,

    #[command(flatten)]
    show: Show,
}

#[derive(clap::Args, Clone, Copy)]
struct Show {
    /// Print the record as JSON instead of a page
    #[arg(long, help_heading = "Running")]
    json: bool,

    /// No progress and no messages, only results and errors
    #[arg(long, help_heading = "Running")]
    quiet: bool,
}

/// Options that a command has no use for: refused when given, and not shown.
const NOT_FOR_SOLVE: [&str; 3] = ["strengths", "strength_count", "rule"];
const NOT_FOR_SWEEP: [&str; 4] =
    ["strength", "strength_from", "noise_factor", "residual_tolerance"];
const NOT_FOR_INSPECT: [&str; 17] = [
    "start",
    "strength",
    "strength_from",
    "strengths",
    "strength_count",
    "rule",
    "method",
    "column_scaling",
    "max_iterations",
    "gradient_tolerance",
    "residual_tolerance",
    "noise_factor",
    "time_limit",
    "out",
    "seed",
    "force",
    "quiet",
];

/// Parses, runs, prints; returns the exit code.
pub fn main(arguments: impl IntoIterator<Item = OsString>) -> u8 {
    let words: Vec<OsString> = arguments.into_iter().collect();
    let parse = |words: Vec<OsString>| {
        let matches = command().try_get_matches_from(words)?;
        Arguments::from_arg_matches(&matches)
    };
    let arguments = match parse(words.clone()) {
        Ok(arguments) => arguments,
        Err(error) => {
            terminal::print_parsed(&error, &words, |quoted| parse(quoted).map(|_| ()));
            // Help and version are asked for; the rest is a fault in usage.
            return if error.use_stderr() { exit::USAGE } else { exit::CONVERGED };
        }
    };
    let result =
        refuse_several().and_then(|()| refuse_simd()).and_then(|()| match arguments.command {
            Command::Inspect(arguments) => inspect::run(arguments),
            Command::Solve(arguments) => job::run(crate::job::Command::Solve, arguments),
            Command::Sweep(arguments) => job::run(crate::job::Command::Sweep, arguments),
            Command::Demo(arguments) => demo::run(&arguments),
        });
    result.unwrap_or_else(|error| {
        say(&format!("error: {error}"));
        exit_code(&error)
    })
}

fn command() -> clap::Command {
    let hide = |command: clap::Command, names: &'static [&'static str]| {
        command.mut_args(move |argument| {
            let hidden = names.contains(&argument.get_id().as_str());
            argument.hide(hidden)
        })
    };
    Arguments::command()
        .mut_subcommand("inspect", |command| hide(command, &NOT_FOR_INSPECT))
        .mut_subcommand("solve", |command| hide(command, &NOT_FOR_SOLVE))
        .mut_subcommand("sweep", |command| hide(command, &NOT_FOR_SWEEP))
}

fn exit_code(error: &JobError) -> u8 {
    match error {
        JobError::Usage(_) => exit::USAGE,
        JobError::BadInput(_) => exit::BAD_INPUT,
        JobError::TooLarge(_) => exit::TOO_LARGE,
        JobError::File(_) => exit::FILE_ERROR,
        JobError::BrokeDown(_) => exit::BROKE_DOWN,
    }
}

/// Several processes of one launcher would write the same folder.
fn refuse_several() -> Result<(), JobError> {
    match team::started_as_several() {
        None => Ok(()),
        Some((variable, count)) => Err(JobError::Usage(crate::base::Complaint::new(
            format!("started as {count} processes ({variable}), but this build works in one"),
            "start it once, without the parallel launcher; it uses the threads of one machine",
        ))),
    }
}

/// A name that the environment states and this processor cannot serve must not be passed over.
fn refuse_simd() -> Result<(), JobError> {
    Twin::chosen().map(|_| ()).map_err(JobError::Usage)
}

/// The settings of a job file, if one is named, with the options winning.
fn typed(job: Option<&Path>, flags: Typed) -> Result<Typed, JobError> {
    let Some(path) = job else {
        return Ok(flags);
    };
    let read: Typed = files::job_file::read(path)?;
    let folder = path.parent().unwrap_or(Path::new(""));
    Ok(read.rebased(folder).overridden_by(flags))
}
