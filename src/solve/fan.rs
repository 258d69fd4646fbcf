//! A fan: one Golub–Kahan process per lane carries any number of strengths.
//!
//! Each track turns the lane's α and β with scalars of its own ([`Rotations`]); only its few
//! vectors cost memory, and one sweep updates those of all tracks.
//! Shifts share one Krylov space: Frommer & Maass, SISC 20:1831, 1999; van den Eshof & Sleijpen,
//! ANM 49:17, 2004.

use crate::base::sums;
use crate::solve::golub_kahan::GolubKahan;
use crate::solve::pieces::{self, PIECE_ROWS, TrackVectors, lane_of};
use crate::solve::problem::Problem;
use crate::solve::process::Process;
use crate::solve::stop::Fault;
use crate::solve::{Estimate, Recurrence, Stepped};

/// How one method turns the scalars of the process into a model.
pub trait Rotations: Sized + Send + Sync {
    /// Vectors per track; the model is vector 0.
    const VECTORS: usize;
    /// Coefficients of one update of the vectors.
    type Update: Copy + Send + Sync;

    /// From β₁ and α₁, with damping λ.
    fn new(damping: f64, beta: f64, alpha: f64) -> Self;

    /// λ of the rotations; 0 where a stacked operator carries it.
    fn damping(&self) -> f64;

    /// Takes β_{k+1} and α_{k+1}.
    fn turn(&mut self, beta: f64, alpha: f64) -> Self::Update;

    /// The vectors at the start, from v₁. `vectors` holds [`Self::VECTORS`] pieces of
    /// `PIECE_ROWS`; only the first `v.len()` of each are in use.
    fn begin(v: &[f64], vectors: &mut [f64]);

    /// Updates the vectors with v_{k+1}; returns Σ y² over the piece where the method needs it.
    fn apply(update: Self::Update, v: &[f64], vectors: &mut [f64]) -> f64;

    /// Takes ‖y‖² from the sweep; methods that know it from scalars ignore it.
    fn set_model_norm_squared(&mut self, _squared: f64) {}

    /// Norms after the last turn. Trust, end and floor are for [`Fan`] to fill in.
    fn estimate(&self) -> Estimate;
}

struct Track<R> {
    lane: usize,
    rotations: R,
    live: bool,
    /// Steps of the process this track has taken.
    steps: usize,
}

/// The first vectors of the process, kept so that strengths chosen later can be caught up.
struct Scouted {
    /// v₁, v₂, … each n×k; room for all of them is made before the first step.
    vectors: Vec<Vec<f64>>,
    /// How many of them are filled.
    kept: usize,
    opened: bool,
}

/// Golub–Kahan processes of all lanes with the tracks they carry. Memory: blocks u, v, s and
/// [`Rotations::VECTORS`] vectors of length n a track; with a scout, one more block v a step.
pub struct Fan<'a, R: Rotations> {
    process: GolubKahan<'a>,
    tracks: Vec<Track<R>>,
    vectors: TrackVectors,
    /// Update of each track in the step being made, with the lane's place in the blocks.
    updates: Vec<Option<(usize, R::Update)>>,
    sums: Vec<f64>,
    stacked: bool,
    /// Steps of the process that live tracks still have to catch up.
    replayed: usize,
    scouted: Option<Scouted>,
    unknowns: usize,
}

impl<'a, R: Rotations> Fan<'a, R> {
    /// `scout_steps`: keep that many vectors and wait for [`Recurrence::open`].
    pub fn new(
        problem: &'a Problem<'a>,
        frobenius: &[f64],
        steps_max: usize,
        scout_steps: Option<usize>,
    ) -> Self {
        let process = GolubKahan::new(problem, frobenius, steps_max);
        let unknowns = problem.unknowns();
        let block = unknowns * problem.lanes.len();
        let scouted = scout_steps.map(|steps| Scouted {
            vectors: (0..=steps).map(|_| vec![0.0; block]).collect(),
            kept: 0,
            opened: false,
        });
        let strengths: Vec<(usize, f64)> = problem
            .lanes
            .iter()
            .enumerate()
            .flat_map(|(lane, l)| l.strengths.iter().map(move |&strength| (lane, strength)))
            .collect();
        let mut fan = Self {
            process,
            tracks: Vec::new(),
            vectors: TrackVectors::new(unknowns, 0, R::VECTORS),
            updates: Vec::new(),
            sums: Vec::new(),
            stacked: problem.stacked,
            replayed: 0,
            scouted,
            unknowns,
        };
        fan.make_tracks(&strengths);
        fan
    }

    fn make_tracks(&mut self, strengths: &[(usize, f64)]) {
        self.tracks = strengths
            .iter()
            .map(|&(lane, strength)| Track {
                lane,
                // Real scalars come with the start; a stacked operator carries λ itself.
                rotations: R::new(if self.stacked { 0.0 } else { strength }, 0.0, 0.0),
                live: true,
                steps: 0,
            })
            .collect();
        let count = self.tracks.len();
        self.vectors = TrackVectors::new(self.unknowns, count, R::VECTORS);
        self.updates = vec![None; count];
        self.sums = vec![0.0; pieces::count(self.unknowns) * count];
    }

    /// Sets scalars and vectors of every track to their start, from β₁, α₁ and v₁.
    fn begin_tracks(&mut self, v: Option<&[f64]>) {
        for track in &mut self.tracks {
            let process = &self.process.lanes[track.lane].process;
            let damping = track.rotations.damping();
            track.rotations = R::new(damping, process.beta_first, process.alphas[0]);
        }
        let width = self.process.width();
        let places = places_of(&self.process.live, self.process.lanes.len());
        let lanes: Vec<usize> = self.tracks.iter().map(|t| places[t.lane].expect("live")).collect();
        let v = v.unwrap_or(&self.process.v);
        self.vectors.sweep(v, width, &mut self.sums, |v, vectors, _| {
            let mut buffer = [0.0; PIECE_ROWS];
            for (lane, vectors) in lanes.iter().zip(vectors.chunks_mut(R::VECTORS * PIECE_ROWS)) {
                let rows = lane_of(v, width, *lane, &mut buffer);
                R::begin(&buffer[..rows], vectors);
            }
        });
    }

    /// Turns the scalars of every live track that has taken `steps` steps.
    fn turn_tracks(&mut self, steps: usize) {
        for (track, update) in self.tracks.iter_mut().zip(&mut self.updates) {
            *update = None;
            let lane = &self.process.lanes[track.lane];
            let place = self.process.live.binary_search(&track.lane);
            let known = lane.process.steps() > steps && lane.fault.is_none();
            if let (true, true, Ok(place)) = (track.live, known, place) {
                let (beta, alpha) = (lane.process.betas[steps], lane.process.alphas[steps + 1]);
                *update = Some((place, track.rotations.turn(beta, alpha)));
                track.steps = steps + 1;
            }
        }
    }

    /// Moves, per live track, its vectors read and written once and v once for all of them.
    fn update_vectors(&mut self, replay: Option<usize>) {
        let width = self.process.width();
        let updates = &self.updates;
        let tracks = updates.len();
        let v = match (replay, &self.scouted) {
            (Some(step), Some(scouted)) => scouted.vectors[step].as_slice(),
            _ => &*self.process.v,
        };
        self.vectors.sweep(v, width, &mut self.sums, |v, vectors, sums| {
            let mut buffer = [0.0; PIECE_ROWS];
            let (mut held, mut rows) = (usize::MAX, 0);
            let chunks = vectors.chunks_mut(R::VECTORS * PIECE_ROWS);
            for ((update, vectors), sum) in updates.iter().zip(chunks).zip(sums) {
                if let Some((place, update)) = *update {
                    if held != place {
                        rows = lane_of(v, width, place, &mut buffer);
                        held = place;
                    }
                    *sum = R::apply(update, &buffer[..rows], vectors);
                }
            }
        });
        for (place, track) in self.tracks.iter_mut().enumerate() {
            if self.updates[place].is_some() {
                track.rotations.set_model_norm_squared(sums::total(&self.sums, tracks, place));
            }
        }
    }

    fn replay_pending(&self) -> bool {
        self.scouted.as_ref().is_some_and(|s| s.opened && self.replayed + 1 < s.kept)
    }

    fn keep_vector(&mut self) {
        if let Some(scouted) = &mut self.scouted
            && !scouted.opened
            && let Some(room) = scouted.vectors.get_mut(scouted.kept)
        {
            room.copy_from_slice(&self.process.v);
            scouted.kept += 1;
        }
    }
}

/// Place in the blocks of each lane.
fn places_of(live: &[usize], lanes: usize) -> Vec<Option<usize>> {
    let mut places = vec![None; lanes];
    for (place, &lane) in live.iter().enumerate() {
        places[lane] = Some(place);
    }
    places
}

impl<R: Rotations> Recurrence for Fan<'_, R> {
    fn start(&mut self) {
        self.process.start();
        self.keep_vector();
        self.begin_tracks(None);
    }

    fn step(&mut self) -> Stepped {
        if self.replay_pending() {
            self.turn_tracks(self.replayed);
            self.replayed += 1;
            self.update_vectors(Some(self.replayed));
            if !self.replay_pending() {
                self.scouted = None;
            }
            return Stepped::Replay;
        }
        let steps = self.process.lanes.iter().map(|l| l.process.steps()).max().unwrap_or(0);
        self.process.step();
        self.keep_vector();
        self.turn_tracks(steps);
        self.update_vectors(None);
        Stepped::Iteration
    }

    fn tracks(&self) -> usize {
        self.tracks.len()
    }

    fn lane(&self, track: usize) -> usize {
        self.tracks[track].lane
    }

    fn estimate(&self, track: usize) -> Estimate {
        let track = &self.tracks[track];
        let lane = &self.process.lanes[track.lane];
        let ended = lane.ended && track.steps == lane.process.steps();
        Estimate { ended, trusted: true, ..track.rotations.estimate() }
    }

    fn lane_ended(&self, lane: usize) -> bool {
        !self.process.lanes[lane].running()
    }

    fn fault(&self, lane: usize) -> Option<Fault> {
        self.process.lanes[lane].fault
    }

    fn freeze(&mut self, track: usize) {
        self.tracks[track].live = false;
    }

    fn pack(&mut self) {
        // Kept vectors have the old width until the replay is over.
        if self.scouted.is_some() {
            return;
        }
        let tracks = &self.tracks;
        self.process.pack(|lane| tracks.iter().any(|track| track.live && track.lane == lane));
    }

    fn open(&mut self, strengths: &[f64]) {
        let scouted = self.scouted.as_mut().expect("a method made with a scout");
        scouted.opened = true;
        let first = scouted.vectors[0].clone();
        let lanes = self.process.lanes.len();
        let pairs: Vec<(usize, f64)> =
            (0..lanes).flat_map(|lane| strengths.iter().map(move |&s| (lane, s))).collect();
        self.make_tracks(&pairs);
        self.begin_tracks(Some(&first));
    }

    fn model(&self, track: usize, y: &mut [f64]) {
        self.vectors.read(track, 0, y);
    }

    fn process(&self, lane: usize) -> Option<&Process> {
        Some(&self.process.lanes[lane].process)
    }

    fn workspace_bytes(&self) -> u64 {
        let kept = self
            .scouted
            .as_ref()
            .map_or(0, |s| s.vectors.iter().map(|v| 8 * v.len() as u64).sum::<u64>());
        self.process.bytes()
            + TrackVectors::bytes(self.unknowns, self.tracks.len(), R::VECTORS)
            + 8 * self.sums.len() as u64
            + kept
    }
}
