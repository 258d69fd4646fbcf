//! Writes large invented systems to measure with:
//!
//! ```text
//! cargo bench --bench systems -- SCENARIO DIR [--scale F]
//! ```
//!
//! | scenario | unknowns | rows | entries at scale 1 |
//! |---|---|---|---|
//! | `parallel-512` | 512×512 cells | 360 parallel views of 728 rays | 120 million |
//! | `crosswell-3d` | 100×100×60 cells | 400,000 rays between two planes, in random order | 61 million |
//! | `hostile` | 1,000,000 | 2,000,000 with power-law columns and lengths | 27 million |
//!
//! `--scale F` keeps the kind of the problem and makes about F times the entries: lengths, views and
//! rays shrink together, so the share of rows to unknowns stays. At 0.125 the first has 15 million.
//!
//! DIR receives `SCENARIO.npz` (compressed rows as SciPy's `save_npz` names them, 32-bit indices),
//! `SCENARIO-data.npy` (A times truth, with 1 % noise) and `SCENARIO-truth.npy`. The same scenario
//! and scale give the same bytes on the same platform.

use std::error::Error;
use std::fs::{self, File};
use std::path::{Path, PathBuf};
use std::process::ExitCode;
use std::time::Instant;

use ellbow::base::random::Stream;
use ellbow::base::sums;
use ndarray::ArrayView1;
use ndarray_npy::WriteNpyExt;
use rayon::prelude::*;

#[path = "systems/npz.rs"]
mod npz;
#[path = "systems/scenarios.rs"]
mod scenarios;

use scenarios::Made;

const USAGE: &str = "usage: cargo bench --bench systems -- SCENARIO DIR [--scale F]
  SCENARIO  parallel-512, crosswell-3d or hostile
  DIR       folder to write to
  --scale F share of the full number of entries, above 0 and at most 1 (default 1)";

struct Request {
    scenario: String,
    folder: PathBuf,
    scale: f64,
}

fn main() -> ExitCode {
    match parse(std::env::args().skip(1)) {
        // A plain `cargo bench` runs every bench without arguments: say how to use this one.
        Ok(None) => println!("{USAGE}"),
        Ok(Some(request)) => {
            if let Err(error) = run(&request) {
                eprintln!("{error}");
                return ExitCode::FAILURE;
            }
        }
        Err(error) => {
            eprintln!("{error}\n{USAGE}");
            return ExitCode::FAILURE;
        }
    }
    ExitCode::SUCCESS
}

fn run(request: &Request) -> Result<(), Box<dyn Error>> {
    let start = Instant::now();
    let made = match request.scenario.as_str() {
        "parallel-512" => scenarios::parallel(request.scale),
        "crosswell-3d" => scenarios::crosswell(request.scale),
        "hostile" => scenarios::hostile(request.scale),
        other => return Err(format!("no scenario {other:?}").into()),
    };
    let seconds_build = start.elapsed().as_secs_f64();
    check(&made);

    let start = Instant::now();
    let data = noisy_data(&made);
    fs::create_dir_all(&request.folder)?;
    let path = |end: &str| request.folder.join(format!("{}{end}", request.scenario));
    npz::write(&path(".npz"), &made.matrix)?;
    write_vector(&path("-data.npy"), &data)?;
    write_vector(&path("-truth.npy"), &made.truth)?;
    let seconds_write = start.elapsed().as_secs_f64();

    let (m, n, entries) = (made.matrix.rows(), made.matrix.columns(), made.matrix.entries());
    println!("{} at scale {}: {m} × {n}, {entries} entries", request.scenario, request.scale);
    println!(
        "built in {seconds_build:.2} s ({:.1} million entries a second), data and files in \
         {seconds_write:.2} s, {:.1} MB",
        entries as f64 / seconds_build / 1e6,
        fs::metadata(path(".npz"))?.len() as f64 / 1e6,
    );
    Ok(())
}

fn parse(arguments: impl Iterator<Item = String>) -> Result<Option<Request>, Box<dyn Error>> {
    let mut scale = 1.0;
    let mut places = Vec::new();
    // Cargo adds `--bench` of its own.
    let mut arguments = arguments.filter(|argument| argument != "--bench");
    while let Some(argument) = arguments.next() {
        if argument == "--scale" {
            let text = arguments.next().ok_or("--scale needs a number")?;
            scale = text.parse().map_err(|error| format!("--scale {text:?}: {error}"))?;
        } else {
            places.push(argument);
        }
    }
    if !(scale > 0.0 && scale <= 1.0) {
        return Err(format!("--scale {scale} is not above 0 and at most 1").into());
    }
    match places.as_slice() {
        [] => Ok(None),
        [scenario, folder] => {
            Ok(Some(Request { scenario: scenario.clone(), folder: folder.into(), scale }))
        }
        _ => Err("one scenario and one folder are needed".into()),
    }
}

/// Panics if a row does not add up to its known sum or columns do not ascend: a bench that runs
/// on a wrong system measures nothing.
fn check(made: &Made) {
    (0..made.matrix.rows()).into_par_iter().for_each(|i| {
        let row = made.matrix.row(i);
        assert!(row.columns.is_sorted_by(|a, b| a < b), "columns of row {i} ascend");
        if let Some(sums) = &made.row_sums {
            let sum: f64 = row.entries().map(|entry| entry.1).sum();
            assert!((sum - sums[i]).abs() <= 1e-12 * sums[i], "row {i}: {sum} not {}", sums[i]);
        }
    });
}

/// b = A·truth + noise, σ one hundredth of the root mean square of A·truth.
fn noisy_data(made: &Made) -> Vec<f64> {
    let exact: Vec<f64> = (0..made.matrix.rows())
        .into_par_iter()
        .map(|i| made.matrix.row(i).entries().map(|(j, value)| value * made.truth[j]).sum())
        .collect();
    let sigma = 0.01 * sums::norm(&exact) / (exact.len() as f64).sqrt();
    let noise = Stream::new(scenarios::SEED, u64::MAX);
    exact.iter().zip(0..).map(|(value, i)| value + sigma * noise.normal(i)).collect()
}

fn write_vector(path: &Path, values: &[f64]) -> Result<(), Box<dyn Error>> {
    Ok(ArrayView1::from(values).write_npy(std::io::BufWriter::new(File::create(path)?))?)
}
