//! What a run will cost, before anyone pays for it: memory from sizes, time from a short probe.

use std::time::Instant;

use crate::base::memory;
use crate::operator::{Operator, Weighted};
use crate::solve::certificate::{self, Frobenius};
use crate::solve::fan::{Fan, Rotations};
use crate::solve::lsqr::Lsqr;
use crate::solve::pieces::{self, TrackVectors};
use crate::solve::{Lane, Problem, Recurrence};
use crate::sweep::{LANES_MAX, Strengths, range};
use crate::system::System;
use crate::system::inspection::Forecast;

/// The probe stops after this long, once it has made a few steps.
const PROBE_SECONDS: f64 = 0.4;

/// Steps that a probe makes at least, and at most.
const STEPS: (usize, usize) = (3, 400);

/// Forecasts a solve and a default sweep with LSQR on the calling thread pool. To be called after
/// the system is loaded and its facts are known, and before anything else takes memory: what is
/// resident now is where a run starts.
pub fn forecast(system: &System) -> Forecast {
    let resident = memory::resident_bytes().unwrap_or(0);
    let already = memory::peak_bytes().unwrap_or(0);
    let sets = system.sets().min(LANES_MAX);
    let bare = Weighted::new(&system.matrix, &system.weights, None);
    let bytes_per_pass = bare.bytes_per_pass(sets);
    let seconds = seconds_per_step(system, sets);
    let peak = |strengths: usize| already.max(resident + run_bytes(&bare, system, strengths));
    Forecast {
        peak_bytes: peak(1),
        sweep_peak_bytes: peak(Strengths::Found { count: None }.count()),
        seconds_per_iteration: seconds,
        bytes_per_pass,
        bandwidth_bytes_per_second: bytes_per_pass as f64 / seconds,
    }
}

/// What facts, blocks, tracks and results take at the very least, from the sizes alone. Saturates.
pub fn least_bytes(rows: usize, columns: usize, sets: usize, strengths: usize) -> u64 {
    let of = |length: usize, vectors: usize| {
        8u64.saturating_mul(length as u64).saturating_mul(vectors as u64)
    };
    let lanes = sets.min(LANES_MAX);
    let tracks = strengths.saturating_mul(lanes);
    let models = sets.saturating_mul(strengths);
    // Facts keep three vectors of either length; u; v and s; two vectors a track, each in whole
    // pieces; all results.
    let padded = pieces::count(columns).saturating_mul(pieces::PIECE_ROWS);
    let iterating = of(rows, 3 + lanes)
        .saturating_add(of(columns, 3 + 2 * lanes))
        .saturating_add(of(padded, tracks.saturating_mul(Lsqr::VECTORS)));
    let results = of(rows, models).saturating_add(of(columns, models));
    iterating.max(results)
}

/// Bytes that a run of LSQR takes on top of the loaded system, at its peak.
fn run_bytes(matrix: &Weighted<'_>, system: &System, strengths: usize) -> u64 {
    let (m, n) = (matrix.rows(), matrix.columns());
    let lanes = system.sets().min(LANES_MAX);
    let tracks = lanes * strengths;
    let all_tracks = system.sets() * strengths;
    let number = |count: usize| 8 * count as u64;
    let models = number(n * all_tracks);
    let residuals = number(m * all_tracks);
    // u, v, s and the room of a pass; x and w of every track; the scouting vectors of a sweep.
    let scouted = if strengths > 1 { number(n * lanes * (range::SCOUT_STEPS + 1)) } else { 0 };
    let iterating = number((m + 2 * n) * lanes)
        + matrix.scratch_bytes(lanes)
        + TrackVectors::bytes(n, tracks, Lsqr::VECTORS);
    let opening = iterating + scouted;
    let reading = iterating + number(n * tracks);
    // Blocks of one pass of certificates, beside the models and residuals of all.
    let width = tracks.min(certificate::WIDTH_MAX);
    let certifying = models + residuals + number((m + 2 * n) * width) + matrix.scratch_bytes(width);
    // Models and their flat copy for models.npy.
    let writing = if strengths > 1 { 2 * models + residuals } else { models + residuals };
    opening.max(reading).max(certifying).max(writing)
}

/// Median seconds of a step of the process with all data sets as lanes.
fn seconds_per_step(system: &System, sets: usize) -> f64 {
    let operator = Weighted::new(&system.matrix, &system.weights, None);
    // Data of ones would end the process early on some systems; the matrix decides the time.
    let data = ndarray::Array2::from_shape_fn((operator.rows(), system.sets()), |(i, set)| {
        let stream = crate::base::random::Stream::new(1, set as u64);
        stream.sign(i as u64)
    });
    let problem = Problem {
        matrix: &operator,
        penalty: None,
        stacked: false,
        data: data.view(),
        reference: None,
        start: None,
        lanes: (0..sets).map(|set| Lane { set, strengths: vec![0.0] }).collect(),
    };
    // Only the level at which the process counts as ended depends on these norms.
    let frobenius = Frobenius::new(vec![vec![0.0; operator.columns()]], system.sets());
    let norms: Vec<f64> = (0..sets).map(|set| frobenius.in_model(&problem, set, 0.0)).collect();
    let mut fan = Fan::<Lsqr>::new(&problem, &norms, STEPS.1, None);
    fan.start();
    let begun = Instant::now();
    let mut seconds = Vec::with_capacity(STEPS.1);
    while seconds.len() < STEPS.1
        && (seconds.len() < STEPS.0 || begun.elapsed().as_secs_f64() < PROBE_SECONDS)
    {
        let step = Instant::now();
        fan.step();
        seconds.push(step.elapsed().as_secs_f64());
    }
    seconds.sort_by(f64::total_cmp);
    seconds[seconds.len() / 2]
}
