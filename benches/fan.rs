//! What carrying many strengths costs on top of one:
//!
//! ```text
//! cargo bench --bench fan -- [--system FILE.npz | --scenario NAME [--scale F]] [--grid X,Y[,Z]]
//!                            [--strengths 32] [--method lsqr|lsmr] [--threads N] [--rounds R] [--json FILE]
//! ```
//!
//! Two processes on the same matrix take steps in turn, one with a single strength, one with many
//! from there to 10⁵ times more; medians. The track that both have must have the same bits at the end.

use std::error::Error;
use std::path::PathBuf;
use std::process::ExitCode;
use std::time::Instant;

use ellbow::base::random::Stream;
use ellbow::operator::{Precision, RowWeights, StoredRows, Weighted};
use ellbow::solve::fan::{Fan, Rotations};
use ellbow::solve::lsmr::Lsmr;
use ellbow::solve::lsqr::Lsqr;
use ellbow::solve::{Lane, Problem, Recurrence};
use rayon::prelude::*;
use serde_json::json;

#[path = "systems/load.rs"]
mod load;
#[path = "systems/scenarios.rs"]
mod scenarios;

struct Request {
    source: load::Source,
    strengths: usize,
    lsmr: bool,
    threads: Option<usize>,
    rounds: usize,
    json: Option<PathBuf>,
}

fn main() -> ExitCode {
    match parse().and_then(|request| run(&request)) {
        Ok(()) => ExitCode::SUCCESS,
        Err(error) => {
            eprintln!("{error}");
            ExitCode::FAILURE
        }
    }
}

fn parse() -> Result<Request, Box<dyn Error>> {
    let mut request = Request {
        source: load::Source::small(),
        strengths: 32,
        lsmr: false,
        threads: None,
        rounds: 15,
        json: None,
    };
    // Cargo adds `--bench` of its own.
    let mut arguments = std::env::args().skip(1).filter(|argument| argument != "--bench");
    while let Some(name) = arguments.next() {
        let value = arguments.next().ok_or_else(|| format!("{name} needs a value"))?;
        if request.source.take(&name, &value)? {
            continue;
        }
        match name.as_str() {
            "--strengths" => request.strengths = value.parse()?,
            "--threads" => request.threads = Some(value.parse()?),
            "--rounds" => request.rounds = value.parse()?,
            "--json" => request.json = Some(value.into()),
            "--method" if value == "lsqr" => request.lsmr = false,
            "--method" if value == "lsmr" => request.lsmr = true,
            _ => return Err(format!("{name} {value}: see the head of benches/fan.rs").into()),
        }
    }
    Ok(request)
}

fn run(request: &Request) -> Result<(), Box<dyn Error>> {
    if let Some(threads) = request.threads {
        rayon::ThreadPoolBuilder::new().num_threads(threads).build_global()?;
    }
    let (rows, grid) = request.source.load(Precision::Double)?;
    let stored = StoredRows::build(rows, grid.as_ref());
    if request.lsmr { measure::<Lsmr>(request, &stored) } else { measure::<Lsqr>(request, &stored) }
}

fn measure<R: Rotations>(request: &Request, stored: &StoredRows) -> Result<(), Box<dyn Error>> {
    let weights = RowWeights::Ones;
    let operator = Weighted::new(stored, &weights, None);
    let truth = Stream::new(3, 0);
    let truth: Vec<f64> = (0..stored.columns() as u64).map(|j| truth.normal(j)).collect();
    let noise = Stream::new(4, 0);
    let data: Vec<f64> = (0..stored.rows())
        .into_par_iter()
        .map(|i| {
            stored.row(i).entries().map(|(j, a)| a * truth[j]).sum::<f64>() + noise.normal(i as u64)
        })
        .collect();
    let data = ndarray::Array2::from_shape_vec((stored.rows(), 1), data)?;
    // The scale of A is that of its longest row: a strength well below it leaves the process free.
    let longest = (0..stored.rows())
        .into_par_iter()
        .map(|i| stored.row(i).entries().map(|(_, a)| a * a).sum::<f64>().sqrt())
        .reduce(|| 0.0, f64::max);
    let smallest = 1e-3 * longest;
    let many: Vec<f64> = (0..request.strengths)
        .map(|i| smallest * 10f64.powf(5.0 * i as f64 / request.strengths.max(2) as f64))
        .collect();
    let problem = |strengths: &[f64]| Problem {
        matrix: &operator,
        penalty: None,
        stacked: false,
        data: data.view(),
        reference: None,
        start: None,
        lanes: vec![Lane { set: 0, strengths: strengths.to_vec() }],
    };
    let (one, all) = (problem(&many[..1]), problem(&many));
    let mut fans = [&one, &all].map(|problem| Fan::<R>::new(problem, &[0.0], 100_000, None));
    let mut seconds = [Vec::new(), Vec::new()];
    fans.iter_mut().for_each(Recurrence::start);
    for _ in 0..request.rounds {
        for (fan, seconds) in fans.iter_mut().zip(&mut seconds) {
            let start = Instant::now();
            fan.step();
            seconds.push(start.elapsed().as_secs_f64());
        }
    }
    let models: Vec<Vec<f64>> = fans
        .iter()
        .map(|fan| {
            let mut model = vec![0.0; stored.columns()];
            fan.model(0, &mut model);
            model
        })
        .collect();
    assert!(models[0] == models[1], "the smallest strength has the same bits alone and in the fan");
    let [single, fan] = seconds.map(|mut seconds| {
        seconds.sort_by(f64::total_cmp);
        seconds[seconds.len() / 2]
    });
    println!(
        "{} entries, {} unknowns: one strength {:.2} ms, {} strengths {:.2} ms an iteration: {:.3}",
        stored.entries(),
        stored.columns(),
        1e3 * single,
        request.strengths,
        1e3 * fan,
        fan / single,
    );
    if let Some(path) = &request.json {
        let record = json!({
            "entries": stored.entries(), "columns": stored.columns(), "strengths": request.strengths,
            "seconds_one": single, "seconds_fan": fan, "ratio": fan / single,
        });
        std::fs::write(path, serde_json::to_vec_pretty(&record)?)?;
    }
    Ok(())
}
