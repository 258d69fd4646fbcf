//! Demo problems: small invented systems that the program carries with it.

use std::fmt::Write as _;
use std::path::{Path, PathBuf};

use crate::base::Complaint;
use crate::base::complaint::{quote, show};
use crate::base::sums::norm;
use crate::files::Folder;
use crate::files::vector::{self, NonFinite};
use crate::job::{JobError, Settings};

/// One problem and its files.
pub struct Problem {
    /// What `ellbow demo` is given.
    pub name: &'static str,
    /// What is measured, in one line.
    pub about: &'static str,
    /// What a reader must be told wherever the result is shown.
    pub caution: &'static str,
    files: &'static [(&'static str, &'static [u8])],
}

/// The files of a folder below `demo-problems/`.
macro_rules! files_of {
    ($problem:literal: $($file:literal),+ $(,)?) => {
        &[$(($file, include_bytes!(concat!("../../demo-problems/", $problem, "/", $file)))),+]
    };
}

/// All problems, by name.
pub const PROBLEMS: [Problem; 1] = [Problem {
    name: "embankment",
    about: "travel times between two boreholes through an earth embankment",
    caution: "A demonstration on invented data. In earnest an indication is confirmed by drilling \
              and judged by a licensed engineer; local codes prevail.",
    files: files_of!(
        "embankment": "README.md", "job.toml", "rays.mtx.gz", "times.npy", "truth.npy", "rows.csv"
    ),
}];

/// The problem of that name.
///
/// # Errors
/// There is no problem of that name; the message lists those there are.
pub fn find(name: &str) -> Result<&'static Problem, JobError> {
    PROBLEMS.iter().find(|problem| problem.name == name).ok_or_else(|| {
        let known: Vec<String> = PROBLEMS
            .iter()
            .map(|problem| format!("{} ({})", problem.name, problem.about))
            .collect();
        JobError::Usage(Complaint::new(
            format!("there is no demo called \"{}\"", quote(name.as_bytes())),
            format!("choose one of: {}", known.join(", ")),
        ))
    })
}

/// Writes the problem's files and returns the place of its job file.
///
/// # Errors
/// A file cannot be written; one of its name is there with other content and `force` is not set.
pub fn write(problem: &Problem, place: &Path, force: bool) -> Result<PathBuf, JobError> {
    let folder = Folder::create(place)?;
    let mut missing = Vec::new();
    for (name, content) in problem.files {
        match folder.read(name)? {
            Some(there) if there == *content => {}
            Some(_) if !force => {
                return Err(JobError::Usage(
                    Complaint::new(
                        format!("the folder holds another {name}"),
                        "name another folder with --out, or replace what is there with --force",
                    )
                    .in_file(place),
                ));
            }
            _ => missing.push((name, content)),
        }
    }
    for (name, content) in missing {
        folder.write(name, content)?;
    }
    Ok(folder.place("job.toml"))
}

/// What to open next, and how far the model is from the known truth.
///
/// # Errors
/// The files of the run cannot be read.
pub fn where_to_look(
    problem: &Problem,
    place: &Path,
    settings: &Settings,
) -> Result<String, JobError> {
    let read = |path: PathBuf| -> Result<Vec<f64>, JobError> {
        Ok(vector::read(&path, NonFinite::Refuse)?.value.into_iter().collect())
    };
    let truth = read(place.join("truth.npy"))?;
    let model = read(settings.out.join("model.npy"))?;
    let mean = truth.iter().sum::<f64>() / truth.len() as f64;
    let from =
        |values: &[f64]| -> Vec<f64> { values.iter().zip(&truth).map(|(a, b)| a - b).collect() };
    let error = norm(&from(&model)) / norm(&from(&vec![mean; truth.len()]));
    let mut out = String::from("\nWhere to look:\n");
    let mut line = |path: PathBuf, what: &str| {
        let _ = writeln!(out, "  {}\n      {what}", show(&path));
    };
    line(place.join("README.md"), "the scenario and what to expect");
    line(settings.out.join("model_grid.npy"), "the chosen model as an array of cells");
    line(settings.out.join("sweep.csv"), "the trade-off curve: one line per strength");
    line(settings.out.join("summary.json"), "the record: settings, norms, choice, checksums");
    let _ = writeln!(
        out,
        "\nThe truth is known here (truth.npy). Distance of the model from it, as a share of\n\
         the truth's own variation about its mean: {error:.3}."
    );
    let mut caution = String::new();
    crate::report::page::wrap(&mut caution, "", problem.caution);
    let _ = write!(out, "\n{caution}");
    Ok(out)
}
