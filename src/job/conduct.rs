//! Conducts one solve or sweep from settings to a finished folder.

use std::time::{Duration, Instant};

use serde_json::{Value, json};

use crate::appraise::misfit;
use crate::base::{Complaint, Warning};
use crate::choose::{self, Choice, Curve, Point, Rule};
use crate::files::Folder;
use crate::job::load::{self, Loaded};
use crate::job::rerun::{self, Standing};
use crate::job::settings::{Command, Settings, StrengthsWanted};
use crate::job::typed::{MethodName, RuleName, ScalingName};
use crate::job::{JobError, advice, write};
use crate::operator::{Operator, Weighted};
use crate::report::record::Summary;
use crate::solve::certificate;
use crate::solve::direct::{self, Dense};
use crate::solve::{Fault, Method, Solved, Stop, StopRules, Watch};
use crate::sweep::{self, Condition, Request, Scaling, SetSweep, Strengths};
use crate::system::{Facts, System};
use crate::team::Threads;

/// How a job ended.
pub enum Finished {
    /// It ran; the record of what was written.
    New(Box<Summary>),
    /// The folder held the finished result of the same command.
    Before(Box<Value>),
}

/// Everything known when the numbers are done; `write` turns it into files.
pub struct Run<'a> {
    pub settings: &'a Settings,
    pub system: &'a System,
    pub facts: &'a Facts,
    pub threads: &'a Threads,
    pub strengths: Vec<f64>,
    pub sets: Vec<SetSweep>,
    /// One per data set; empty for a solve.
    pub choices: Vec<Choice>,
    /// Per data set and strength, where a decomposition is at hand.
    pub traces: Option<Vec<Vec<f64>>>,
    pub condition: Option<Condition>,
    pub dense: Option<Dense>,
    pub history: Vec<crate::solve::HistoryRow>,
    pub passes: u64,
    /// Of the slowest track, added over groups that ran one after the other.
    pub iterations: u64,
    pub column_scaling: bool,
    /// Of the widest group.
    pub lanes: usize,
    pub bytes_per_pass: u64,
    pub workspace_bytes: u64,
    pub interrupted: bool,
    pub warnings: Vec<String>,
    pub load_seconds: f64,
    pub solve_seconds: f64,
    pub begun: Instant,
}

impl Run<'_> {
    /// Place in the sweep of the model handed over for a data set.
    pub fn chosen_place(&self, set: usize) -> usize {
        self.choices.get(set).map_or(0, |choice| choice.place)
    }

    pub fn chosen(&self, set: usize) -> &Solved {
        &self.sets[set].solved[self.chosen_place(set)]
    }
}

/// Loads, solves, chooses, appraises and writes.
///
/// # Errors
/// Bad input, a folder that holds another run, a decomposition that would not fit, a computation
/// that broke down in every data set, or a file that cannot be written.
pub fn conduct(
    settings: &Settings,
    threads: &Threads,
    watch: &dyn Watch,
) -> Result<Finished, JobError> {
    let begun = Instant::now();
    let inputs = load::identities(&settings.source)?;
    // Before anything is read that takes long, and before the folder is made.
    let earlier = Folder::at(&settings.out);
    if let Standing::Same(record) = rerun::standing(&earlier, settings, &inputs)? {
        return Ok(Finished::Before(record));
    }
    let Loaded { system, start, warnings } =
        load::load(&settings.source, strengths(settings).count())?;
    let facts = system.facts();
    refuse_underflow(&system, &facts)?;
    let load_seconds = begun.elapsed().as_secs_f64();
    let work = Work { settings, system: &system, facts: &facts, start, begun };
    work.refuse_direct()?;
    // From here a signal no longer ends the process at once.
    watch.interrupted();
    // A folder that cannot be written must show now, not after hours of work.
    let folder = Folder::create(&settings.out)?;
    write::log(&folder, json!({ "event": "started", "command": settings.command.word() }))?;
    let mut run = work.run(threads, watch).inspect_err(|error| {
        let event = json!({ "event": "failed", "cause": error.to_string() });
        // The error itself is what the user must see.
        let _ = write::log(&folder, event);
    })?;
    run.load_seconds = load_seconds;
    let read = warnings.iter().map(Warning::to_string);
    run.warnings = read.chain(std::mem::take(&mut run.warnings)).collect();
    Ok(Finished::New(Box::new(write::write(&folder, &run, inputs)?)))
}

/// Squares below this have lost digits, or all of them: the smallest f64 with all its digits is 2e-308.
const SQUARE_MIN: f64 = 1e-290;

/// Numbers so small that their squares vanish would pass for zeros, and zeros for a solution.
fn refuse_underflow(system: &System, facts: &Facts) -> Result<(), JobError> {
    let counts = |set: usize| {
        (0..facts.rows).any(|i| system.data[[i, set]] != 0.0 && system.included(i, set))
    };
    let vanishes = |square: f64, any: bool| any && square < SQUARE_MIN;
    let entries = facts.entries > facts.explicit_zeros;
    for (set, of) in facts.sets.iter().enumerate() {
        let what = if vanishes(of.weighted_data_square, counts(set)) {
            "the weighted data"
        } else if vanishes(of.weighted_matrix_square, entries) {
            "the weighted entries of the matrix"
        } else {
            continue;
        };
        return Err(JobError::BadInput(Complaint::new(
            format!("{what} are so small that their squares vanish in double precision"),
            "state data, uncertainty and matrix in units that bring them nearer to 1",
        )));
    }
    Ok(())
}

struct Work<'a> {
    settings: &'a Settings,
    system: &'a System,
    facts: &'a Facts,
    start: Option<ndarray::Array2<f64>>,
    begun: Instant,
}

impl<'a> Work<'a> {
    fn run(&self, threads: &'a Threads, watch: &dyn Watch) -> Result<Run<'a>, JobError> {
        let settings = self.settings;
        let solving = Instant::now();
        let held = held(self.system);
        let request = self.request(held.as_deref());
        let mut run = Run {
            settings,
            system: self.system,
            facts: self.facts,
            threads,
            strengths: Vec::new(),
            sets: Vec::new(),
            choices: Vec::new(),
            traces: None,
            condition: None,
            dense: None,
            history: Vec::new(),
            passes: 0,
            iterations: 0,
            column_scaling: false,
            lanes: 0,
            bytes_per_pass: 0,
            workspace_bytes: 0,
            interrupted: false,
            warnings: Vec::new(),
            load_seconds: 0.0,
            solve_seconds: 0.0,
            begun: self.begun,
        };
        let bare = Weighted::new(&self.system.matrix, &self.system.weights, None);
        if settings.method == MethodName::Direct {
            self.direct(&request, &mut run)?;
            // Its passes are certificates only.
            run.lanes = run.strengths.len().min(certificate::WIDTH_MAX);
        } else {
            self.iterate(&request, watch, &mut run);
            self.exact_trace(&request, &mut run);
        }
        run.bytes_per_pass = bare.bytes_per_pass(run.lanes);
        if let Some(complaint) = breakdown(self.system, &run.sets) {
            let broke = |s: &Solved| matches!(s.stop, Stop::NotFinite(_));
            if run.sets.iter().all(|set| set.solved.iter().all(broke)) {
                return Err(JobError::BrokeDown(complaint));
            }
            // What did come out is worth keeping.
            run.warnings.push(complaint.to_string());
        }
        if settings.command == Command::Sweep {
            run.choices = (0..run.sets.len())
                .map(|set| choice(&run.sets[set], settings.rule, self.known_noise(set)))
                .collect();
        }
        advice::add(&mut run);
        run.solve_seconds = solving.elapsed().as_secs_f64();
        Ok(run)
    }

    fn request<'r>(&'r self, held: Option<&'r [bool]>) -> Request<'r> {
        let system = self.system;
        let settings = self.settings;
        let (m, n) = (system.matrix.rows(), system.matrix.columns());
        Request {
            matrix: &system.matrix,
            weights: &system.weights,
            data: system.data.view(),
            reference: system.reference.as_ref(),
            start: self.start.as_ref(),
            penalty: system.columns.penalty_weights.as_deref(),
            held,
            method: match settings.method {
                MethodName::Lsmr => Method::Lsmr,
                MethodName::Cgls => Method::Cgls,
                MethodName::Lsqr | MethodName::Direct => Method::Lsqr,
            },
            scaling: match settings.column_scaling {
                ScalingName::Auto => Scaling::Auto,
                ScalingName::On => Scaling::On,
                ScalingName::Off => Scaling::Off,
            },
            strengths: strengths(settings),
            rules: StopRules {
                gradient_tolerance: settings.gradient_tolerance,
                residual_tolerance: settings.residual_tolerance,
                noise_factor: settings.noise_factor,
                max_iterations: settings
                    .max_iterations
                    .unwrap_or_else(|| StopRules::max_iterations_default(m, n)),
                // From the start of the command: a queue that grants an hour counts loading too.
                time_limit: settings
                    .time_limit
                    .map(|limit| self.begun + Duration::from_secs_f64(limit.seconds)),
            },
        }
    }

    fn iterate(&self, request: &Request<'_>, watch: &dyn Watch, run: &mut Run<'_>) {
        let sweep = sweep::run(request, watch);
        let process = sweep.sets[0].process.as_ref();
        run.condition = if sweep.plan.scaled && sweep.strengths.contains(&0.0) {
            let span = sweep::plan::span(&self.column_norms(request.held));
            Some(Condition::of_evened(span, process, request.matrix.columns()))
        } else {
            process.filter(|_| sweep.plan.scales.is_none()).and_then(Condition::of_process)
        };
        run.strengths = sweep.strengths;
        run.sets = sweep.sets;
        run.history = sweep.history;
        run.passes = sweep.passes;
        run.iterations = sweep.iterations;
        run.column_scaling = sweep.plan.scaled;
        run.lanes = sweep.lanes_max;
        run.workspace_bytes = sweep.workspace_bytes;
        run.interrupted = sweep.interrupted.is_some();
    }

    /// ‖W aⱼ‖ of the free unknowns, by the weights of the first data set.
    fn column_norms(&self, held: Option<&[bool]>) -> Vec<f64> {
        let squares = self.facts.column.weighted_square_sums[0].iter().enumerate();
        squares.filter(|(j, _)| !held.is_some_and(|h| h[*j])).map(|(_, s)| s.sqrt()).collect()
    }

    /// What `--method direct` cannot take.
    fn refuse_direct(&self) -> Result<(), JobError> {
        if self.settings.method != MethodName::Direct {
            return Ok(());
        }
        let (m, n) = (self.system.matrix.rows(), self.system.matrix.columns());
        if !direct::fits(m, n) {
            return Err(JobError::TooLarge(Complaint::new(
                format!("--method direct would decompose a dense {m}×{n} array"),
                format!(
                    "use --method lsqr; direct takes up to {} numbers (m·n)",
                    direct::DENSE_NUMBERS_MAX
                ),
            )));
        }
        let held = held(self.system);
        let free = |j: usize| !held.as_ref().is_some_and(|held| held[j]);
        let penalty = self.system.columns.penalty_weights.as_ref();
        if penalty.is_some_and(|p| p.iter().zip(0..).any(|(p, j)| *p == 0.0 && free(j))) {
            return Err(JobError::Usage(Complaint::new(
                "--method direct needs a penalty on every unknown, and some have penalty_weight 0",
                "use --method lsqr, or give them a small positive weight",
            )));
        }
        Ok(())
    }

    fn direct(&self, request: &Request<'_>, run: &mut Run<'_>) -> Result<(), JobError> {
        let dense = sweep::dense::run(request).ok_or_else(|| {
            JobError::BrokeDown(Complaint::new(
                "the singular value decomposition did not converge",
                "check the matrix for non-finite or enormous values with `ellbow inspect`",
            ))
        })?;
        let distinct = dense.decompositions.len();
        let trace = |set: usize, strength: f64| {
            dense.decompositions[if distinct == 1 { 0 } else { set }].trace(strength)
        };
        run.traces = Some(
            (0..dense.sets.len())
                .map(|set| dense.strengths.iter().map(|&s| trace(set, s)).collect())
                .collect(),
        );
        let mut decompositions = dense.decompositions;
        let first = decompositions.swap_remove(0);
        if request.penalty.is_none() && request.held.is_none() {
            run.condition = Some(Condition::exact(first.condition()));
        }
        run.dense = Some(first);
        run.strengths = dense.strengths;
        run.sets = dense.sets;
        run.passes = dense.passes;
        Ok(())
    }

    /// On a small system: exact effective parameters, and the exact condition.
    fn exact_trace(&self, request: &Request<'_>, run: &mut Run<'_>) {
        let (m, n) = (self.system.matrix.rows(), self.system.matrix.columns());
        let distinct = self.facts.column.weighted_square_sums.len();
        let invertible = request.penalty.is_none() && request.held.is_none();
        if !(direct::cheap(m, n) && distinct == 1 && invertible) {
            return;
        }
        let bare = Weighted::new(&self.system.matrix, &self.system.weights, None);
        if let Some(dense) = Dense::new(&bare, 0) {
            run.condition = Some(Condition::exact(dense.condition()));
            let traces: Vec<f64> = run.strengths.iter().map(|&s| dense.trace(s)).collect();
            run.traces = Some(vec![traces; run.sets.len()]);
        }
    }

    /// Number of data of a set, where every weight is 1/σ.
    fn known_noise(&self, set: usize) -> Option<usize> {
        let source = &self.settings.source;
        source.weights_are_noise().then_some(self.facts.sets[set].data)
    }
}

fn strengths(settings: &Settings) -> Strengths {
    match settings.strengths {
        StrengthsWanted::One(strength) => Strengths::Given(vec![strength]),
        StrengthsWanted::Range { range, count } => Strengths::between(range.from, range.to, count),
        StrengthsWanted::Found { count } => Strengths::Found { count },
    }
}

/// Unknowns that the columns table fixes; their value is in the reference.
fn held(system: &System) -> Option<Vec<bool>> {
    let fixed = system.columns.fixed.as_ref()?;
    let held: Vec<bool> = fixed.iter().map(|value| !value.is_nan()).collect();
    held.iter().any(|held| *held).then_some(held)
}

/// What broke down, where, in the data set that comes first; `None` if nothing did.
fn breakdown(system: &System, sets: &[SetSweep]) -> Option<Complaint> {
    let (solved, fault) = sets.iter().flat_map(|set| &set.solved).find_map(|s| match s.stop {
        Stop::NotFinite(fault) => Some((s, fault)),
        _ => None,
    })?;
    let place = match fault {
        Fault::Row(i) if i < system.matrix.rows() => system.row_name(i),
        Fault::Row(i) => format!("the penalty on {}", system.column_name(i - system.matrix.rows())),
        Fault::Column(j) => system.column_name(j),
        Fault::Norm => "a norm".into(),
    };
    let set =
        if sets.len() > 1 { format!(" of data set {}", solved.set + 1) } else { String::new() };
    Some(Complaint::new(
        format!(
            "a number{set} stopped being finite in iteration {} at strength {:e}: {place}",
            solved.iterations + 1,
            solved.strength
        ),
        "look at that place with `ellbow inspect`: values beyond 1e154 overflow when squared",
    ))
}

fn choice(set: &SetSweep, rule: Option<RuleName>, known_noise: Option<usize>) -> Choice {
    let points: Vec<Point> = set.solved.iter().map(Point::from).collect();
    let wanted = rule.map(|rule| match rule {
        RuleName::Corner => Rule::Corner,
        RuleName::CornerPruned => Rule::CornerPruned,
        RuleName::NoisePlain => Rule::NoisePlain,
    });
    let curve =
        Curve { points: &points, process: set.process.as_ref(), data_of_known_noise: known_noise };
    choose::choose(&curve, wanted)
}

/// χ² per degree of freedom of one track, where σ and the trace are known.
pub fn chi_square(run: &Run<'_>, set: usize, place: usize) -> Option<f64> {
    let trace = run.traces.as_ref()?[set][place];
    if !run.settings.source.weights_are_noise() {
        return None;
    }
    let solved = &run.sets[set].solved[place];
    misfit::chi_square_per_dof(solved.residual_norm, run.facts.sets[set].data, trace)
}
