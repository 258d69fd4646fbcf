//! Speed of the pass and of an iteration on one system:
//!
//! ```text
//! cargo bench --bench pass -- [--system FILE.npz | --scenario NAME [--scale F]] [options]
//! ```
//!
//! | option | meaning |
//! |---|---|
//! | `--lanes 1,8,16` | numbers of lanes |
//! | `--grid 512,512` | cells along each axis, fastest first: lets the unknowns follow a curve through it |
//! | `--precision single` | values as f32 |
//! | `--threads N` | default: all cores, or RAYON_NUM_THREADS |
//! | `--way one`, `--way two-phase` | only this way (default: both, and which the count of bytes picks) |
//! | `--twin NAME` | only these inner loops (default: all that the processor has) |
//! | `--rounds R` | passes of each kind, taken in turn (default 9) |
//! | `--json FILE` | a record beside the table |
//! | `--on-request` | serves `benches/libraries.py`: iterations of LSQR on request |
//!
//! Every product is checked against rows taken one by one before it is timed. Medians; bandwidth is
//! that of reading a large array with the same threads in the same run.

use std::error::Error;
use std::io::{BufRead, Write};
use std::path::PathBuf;
use std::process::ExitCode;
use std::time::Instant;

use ellbow::base::random::Stream;
use ellbow::kernel::{Twin, Way};
use ellbow::operator::{Frame, Operator, Pass, Precision, RowWeights, StoredRows, Weighted};
use ellbow::solve::fan::Fan;
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
    precision: Precision,
    lanes: Vec<usize>,
    threads: Option<usize>,
    ways: Vec<Way>,
    twins: Vec<Twin>,
    rounds: usize,
    json: Option<PathBuf>,
    on_request: bool,
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
        precision: Precision::Double,
        lanes: vec![1, 2, 4, 8, 16],
        threads: None,
        ways: vec![Way::OnePass, Way::TwoPhase],
        twins: Twin::ALL.into_iter().filter(|twin| twin.is_available()).collect(),
        rounds: 9,
        json: None,
        on_request: false,
    };
    // Cargo adds `--bench` of its own.
    let mut arguments = std::env::args().skip(1).filter(|argument| argument != "--bench");
    while let Some(name) = arguments.next() {
        if name == "--on-request" {
            request.on_request = true;
            continue;
        }
        let value = arguments.next().ok_or_else(|| format!("{name} needs a value"))?;
        if request.source.take(&name, &value)? {
            continue;
        }
        let numbers = || value.split(',').map(str::parse).collect::<Result<Vec<usize>, _>>();
        match name.as_str() {
            "--lanes" => request.lanes = numbers()?,
            "--threads" => request.threads = Some(value.parse()?),
            "--rounds" => request.rounds = value.parse()?,
            "--json" => request.json = Some(value.into()),
            "--precision" if value == "single" => request.precision = Precision::Single,
            "--precision" if value == "double" => request.precision = Precision::Double,
            "--way" => request.ways.retain(|way| way.word() == value),
            "--twin" => request.twins.retain(|twin| twin.word() == value),
            _ => return Err(format!("{name} {value}: see the head of benches/pass.rs").into()),
        }
    }
    if request.ways.is_empty() || request.twins.is_empty() {
        return Err("no such way, or no such twin on this processor".into());
    }
    Ok(request)
}

fn run(request: &Request) -> Result<(), Box<dyn Error>> {
    if let Some(threads) = request.threads {
        rayon::ThreadPoolBuilder::new().num_threads(threads).build_global()?;
    }
    let (rows, grid) = request.source.load(request.precision)?;
    let start = Instant::now();
    let stored = StoredRows::build(rows, grid.as_ref());
    let seconds = start.elapsed().as_secs_f64();
    if request.on_request { serve(request, &stored) } else { measure(request, stored, seconds) }
}

/// Data that no model explains, so that a process goes on for as long as it is asked to.
fn invented_data(rows: usize, lanes: usize) -> ndarray::Array2<f64> {
    ndarray::Array2::from_shape_fn((rows, lanes), |(i, l)| {
        Stream::new(1, l as u64).normal(i as u64)
    })
}

fn serve(request: &Request, stored: &StoredRows) -> Result<(), Box<dyn Error>> {
    let lanes = request.lanes[0];
    let weights = RowWeights::Ones;
    let operator =
        Weighted::new(stored, &weights, None).with_twin(request.twins[request.twins.len() - 1]);
    let data = invented_data(stored.rows(), lanes);
    let problem = Problem {
        matrix: &operator,
        penalty: None,
        stacked: false,
        data: data.view(),
        reference: None,
        start: None,
        lanes: (0..lanes).map(|set| Lane { set, strengths: vec![0.0] }).collect(),
    };
    let mut fan = Fan::<Lsqr>::new(&problem, &vec![0.0; lanes], 100_000, None);
    fan.start();
    let mut out = std::io::stdout().lock();
    let ready = json!({
        "ready": true, "rows": stored.rows(), "columns": stored.columns(),
        "entries": stored.entries(), "storage": stored.storage_name(),
        "resident_bytes": ellbow::base::memory::resident_bytes(),
        "way": stored.way(lanes).word(), "twin": request.twins[request.twins.len() - 1].word(),
        "tile": stored.cut().tile, "slice": stored.cut().slice,
    });
    writeln!(out, "{ready}")?;
    out.flush()?;
    for line in std::io::stdin().lock().lines() {
        let count: usize = line?.trim().parse()?;
        let start = Instant::now();
        (0..count).for_each(|_| {
            fan.step();
        });
        let answer = json!({ "iterations": count, "seconds": start.elapsed().as_secs_f64() });
        writeln!(out, "{answer}")?;
        out.flush()?;
    }
    Ok(())
}

/// Blocks of a pass with k lanes.
struct Blocks {
    v: ellbow::kernel::Block,
    u: ellbow::kernel::Block,
    s: ellbow::kernel::Block,
}

fn measure(request: &Request, mut stored: StoredRows, built: f64) -> Result<(), Box<dyn Error>> {
    let cut = *stored.cut();
    let entries = stored.entries() as f64;
    println!(
        "{} × {}, {} entries as {}: {:.2} bytes an entry, tiles of {}, slices of {} rows, bands of {}; \
         tiled in {built:.2} s",
        stored.rows(),
        stored.columns(),
        stored.entries(),
        stored.storage_name(),
        stored.bytes() as f64 / entries,
        cut.tile,
        cut.slice,
        cut.band * cut.slice,
    );
    let threads = rayon::current_num_threads();
    println!(
        "{threads} threads, the count of bytes picks {} for one lane and {} for many",
        stored.way(1).word(),
        stored.way(8).word()
    );
    let mut records = Vec::new();
    println!(
        "{:>5} {:>9} {:>9} {:>9} {:>9} {:>8} {:>8} {:>7}",
        "lanes", "way", "twin", "ms", "ms/lane", "MB", "GB/s", "share"
    );
    for &lanes in &request.lanes {
        let weights = RowWeights::Ones;
        let mut blocks = blocks(&stored, lanes);
        let kinds: Vec<(Way, Twin)> = request
            .ways
            .iter()
            .flat_map(|&way| request.twins.iter().map(move |&twin| (way, twin)))
            .collect();
        let mut seconds = vec![Vec::new(); kinds.len()];
        let mut bandwidths = Vec::new();
        for round in 0..=request.rounds {
            for (kind, &(way, twin)) in kinds.iter().enumerate() {
                stored.go(way);
                let operator = Weighted::new(&stored, &weights, None).with_twin(twin);
                let mut scratch = operator.scratch(lanes);
                // The first pass touches the scratch.
                one_pass(&operator, lanes, &mut blocks, &mut scratch);
                if round == 0 {
                    check(&stored, lanes, &mut blocks, &operator, &mut scratch);
                    continue;
                }
                let start = Instant::now();
                one_pass(&operator, lanes, &mut blocks, &mut scratch);
                seconds[kind].push(start.elapsed().as_secs_f64());
            }
            bandwidths.push(read_bandwidth());
        }
        let bandwidth = median(&mut bandwidths);
        for (&(way, twin), seconds) in kinds.iter().zip(&mut seconds) {
            stored.go(way);
            let bytes = Weighted::new(&stored, &weights, None).bytes_per_pass(lanes) as f64;
            let time = median(seconds);
            println!(
                "{lanes:>5} {:>9} {:>9} {:>9.2} {:>9.2} {:>8.0} {:>8.1} {:>6.0}%",
                way.word(),
                twin.word(),
                time * 1e3,
                time * 1e3 / lanes as f64,
                bytes / 1e6,
                bytes / time / 1e9,
                100.0 * bytes / time / bandwidth,
            );
            records.push(json!({
                "lanes": lanes, "way": way.word(), "twin": twin.word(), "seconds": time,
                "bytes": bytes, "read_bandwidth": bandwidth,
            }));
        }
    }
    if let Some(path) = &request.json {
        let record = json!({
            "rows": stored.rows(), "columns": stored.columns(), "entries": stored.entries(),
            "storage": stored.storage_name(), "stored_bytes": stored.bytes(), "threads": threads,
            "tile": cut.tile, "slice": cut.slice, "band": cut.band, "tiling_seconds": built,
            "passes": records,
        });
        std::fs::write(path, serde_json::to_vec_pretty(&record)?)?;
    }
    Ok(())
}

fn blocks(stored: &StoredRows, lanes: usize) -> Blocks {
    let zeros = ellbow::kernel::Block::zeros;
    let mut blocks = Blocks {
        v: zeros(stored.columns() * lanes),
        u: zeros(stored.rows() * lanes),
        s: zeros(stored.columns() * lanes),
    };
    let random = Stream::new(7, 0);
    blocks.v.par_iter_mut().enumerate().for_each(|(i, v)| *v = random.normal(i as u64));
    blocks
}

fn one_pass(
    operator: &Weighted<'_>,
    lanes: usize,
    blocks: &mut Blocks,
    scratch: &mut ellbow::operator::Scratch,
) {
    operator.pass(Pass {
        frame: Frame::Step,
        sets: &vec![0; lanes],
        strengths: &[],
        v: &blocks.v,
        alpha: &vec![0.5; lanes],
        u: &mut blocks.u,
        s: &mut blocks.s,
        squares: &mut vec![0.0; lanes],
        scratch,
    });
}

/// Every product of a few hundred rows and the sums of every column against rows taken one by
/// one; panics where they differ by more than rounding.
fn check(
    stored: &StoredRows,
    lanes: usize,
    blocks: &mut Blocks,
    operator: &Weighted<'_>,
    scratch: &mut ellbow::operator::Scratch,
) {
    blocks.u.fill(0.0);
    one_pass(operator, lanes, blocks, scratch);
    let stride = stored.rows().div_ceil(300).max(1);
    for i in (0..stored.rows()).step_by(stride) {
        for l in 0..lanes {
            let (mut sum, mut size, mut count) = (0.0, 0.0, 0.0);
            for (j, a) in stored.row(i).entries() {
                let term = a * blocks.v[stored.place_of(j) * lanes + l];
                (sum, size, count) = (sum + term, size + term.abs(), count + 1.0);
            }
            // Two orders of adding `count` rounded products differ by less than this.
            let limit = 2.0 * (count + 2.0) * f64::EPSILON * size;
            let found = blocks.u[i * lanes + l];
            assert!((found - sum).abs() <= limit, "row {i}, lane {l}: {found} not {sum}");
        }
    }
    // vᵀ(Aᵀu) = ‖u‖² for u = A v: one number for all columns.
    for l in 0..lanes {
        let of = |a: &[f64], b: &[f64]| -> f64 {
            a.iter()
                .skip(l)
                .step_by(lanes)
                .zip(b.iter().skip(l).step_by(lanes))
                .map(|(a, b)| a * b)
                .sum()
        };
        let (left, right) = (of(&blocks.v, &blocks.s), of(&blocks.u, &blocks.u));
        assert!((left - right).abs() <= 1e-9 * right, "lane {l}: {left} not {right}");
    }
}

/// Bytes a second at which all threads read 256 MB.
fn read_bandwidth() -> f64 {
    static NUMBERS: std::sync::OnceLock<Vec<u64>> = std::sync::OnceLock::new();
    let numbers = NUMBERS.get_or_init(|| {
        let mut numbers = ellbow::kernel::block::zeros::<u64>(32 << 20);
        numbers.par_iter_mut().enumerate().for_each(|(i, number)| *number = i as u64);
        numbers
    });
    let start = Instant::now();
    let sum = numbers
        .par_chunks(1 << 20)
        .map(|piece| piece.iter().fold(0, |a: u64, b| a.wrapping_add(*b)));
    let sum = sum.reduce(|| 0, u64::wrapping_add);
    let count = numbers.len() as u64;
    assert_eq!(sum, count * (count - 1) / 2);
    8.0 * count as f64 / start.elapsed().as_secs_f64()
}

fn median(seconds: &mut [f64]) -> f64 {
    seconds.sort_by(f64::total_cmp);
    seconds[seconds.len() / 2]
}
