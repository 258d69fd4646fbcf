//! A short run over strengths for `inspect`: how noisy the data are once a reasonable model is
//! taken out of them. Penalty `size` whatever the job asks for: the question is the noise.
//!
//! Small systems are decomposed: exact traces. Otherwise one run of at most
//! [`ITERATIONS_MAX`] passes carries the data and [`PROBES`] random vectors w ∈ {±1}ᵐ as lanes;
//! from their scalars follow, for every strength at once, ‖W(Ax − b)‖ and
//! wᵀHw = ‖w‖² − J,  ‖Hw‖² = wᵀHw − λ²‖x_λ(w)‖²,  J = ρ² + λ²η² of the lane with data w,
//! whose means are estimates of tr H and tr H² (Hutchinson 1990). A second run solves at the
//! strength that robust GCV chooses (γ = 0.1; Robinson & Moyeed 1989, Lukas 2006).

use ndarray::{Array2, Axis};

use crate::base::random::Stream;
use crate::operator::{RowWeights, Weighted};
use crate::solve::direct::{self, Dense};
use crate::solve::{self, Lane, Method, Problem, Process, Scout, StopRules, Watch};
use crate::sweep::range;
use crate::system::findings::{QuickFit, Trial};
use crate::system::{Facts, System};

/// Passes of either run.
pub const ITERATIONS_MAX: u64 = 60;

/// Random vectors for the traces. The variance of wᵀHw is 2(Σᵢⱼ Hᵢⱼ² − Σᵢ Hᵢᵢ²) ≤ 2(t − t²/m) ≤ m/2
/// with t = tr H, so the mean of these has a standard deviation of at most √(m/(2·PROBES)).
pub const PROBES: usize = 4;

/// Larger systems are not fitted: two runs of this many passes would cost minutes, which is what
/// `inspect` is there to save. Counted in entries, so that the answer does not depend on the
/// machine.
pub const ENTRIES_MAX: usize = 50_000_000;

/// γ of robust GCV.
const ROBUSTNESS: f64 = 0.1;

/// From s₁ down to this times s₁.
const SPAN: f64 = 1e-4;
const STRENGTHS: usize = 33;

/// A strength counts as reached when the gradient is below this part of s₁ times the total.
const REACHED: f64 = 1e-3;

/// Runs it for data set `set`. `None` if the matrix has more than 50 million entries, if the
/// data, less what the reference predicts, are 0, if numbers that are not finite come up, or if
/// `watch` asks for an end.
///
/// Memory: 3·(1 + PROBES) vectors of length n and 2·(1 + PROBES) of length m.
///
/// Panics if `set` is not a data set.
pub fn quick_fit(
    system: &System,
    facts: &Facts,
    set: usize,
    watch: &dyn Watch,
) -> Option<QuickFit> {
    if facts.entries > ENTRIES_MAX {
        return None;
    }
    let case = Case::new(system, facts, set);
    if direct::cheap(facts.rows, facts.columns) { case.exactly() } else { case.by_probes(watch) }
}

/// One data set with weights, scales and reference of its own.
struct Case<'a> {
    system: &'a System,
    set: usize,
    data: usize,
    weights: RowWeights,
    /// 0 for an unknown that is held.
    scales: Option<Vec<f64>>,
    /// n×1.
    reference: Array2<f64>,
}

impl<'a> Case<'a> {
    fn new(system: &'a System, facts: &Facts, set: usize) -> Self {
        let weights = match &system.weights {
            RowWeights::PerSet(weights) => {
                RowWeights::Shared(weights.index_axis(Axis(1), set).to_vec())
            }
            other => other.clone(),
        };
        let scales = system.columns.fixed.as_ref().map(|fixed| {
            fixed.iter().map(|value| if value.is_nan() { 1.0 } else { 0.0 }).collect()
        });
        let n = facts.columns;
        let constant = facts.sets[set].constant.filter(|fit| fit.share > 0.5);
        let reference = match (&system.reference, constant) {
            (Some(values), _) => {
                let column = if values.ncols() == 1 { 0 } else { set };
                values.index_axis(Axis(1), column).to_owned().insert_axis(Axis(1))
            }
            // A penalty towards 0 would fight a mean that the data know well.
            (None, Some(fit)) => Array2::from_elem((n, 1), fit.value),
            (None, None) => Array2::zeros((n, 1)),
        };
        Self { system, set, data: facts.sets[set].data, weights, scales, reference }
    }

    fn exactly(&self) -> Option<QuickFit> {
        let matrix = Weighted::new(&self.system.matrix, &self.weights, self.scales.as_deref());
        let dense = Dense::new(&matrix, 0)?;
        let largest = dense.singular_values.first().copied().filter(|s| *s > 0.0)?;
        let shifted = self.weighted_residual(&self.reference);
        let trial = |strength: f64| {
            let model = self.model(&dense.solve(&shifted, strength));
            let residual = self.weighted_residual(&model);
            let residual_norm = crate::base::sums::norm(&residual);
            let trace = dense.trace(strength);
            let trace_square = dense.singular_values[..dense.rank]
                .iter()
                .map(|sigma| (sigma / sigma.hypot(strength)).powi(4))
                .sum();
            Point {
                trial: Trial { strength, residual_norm, effective_parameters: trace },
                trace_square,
            }
        };
        let points: Vec<Point> = strengths(largest).into_iter().map(trial).collect();
        let chosen = choose(&points, self.data)?;
        let model = self.model(&dense.solve(&shifted, points[chosen].trial.strength));
        Some(self.finished(points, chosen, model.column(0).to_vec()))
    }

    /// x = x_ref + D y, n×1.
    fn model(&self, y: &[f64]) -> Array2<f64> {
        let mut model = self.reference.clone();
        for (j, value) in model.iter_mut().enumerate() {
            *value += self.scales.as_ref().map_or(1.0, |scales| scales[j]) * y[j];
        }
        model
    }

    fn residual(&self, model: &Array2<f64>) -> Vec<f64> {
        (0..self.system.matrix.rows())
            .map(|i| {
                let entries = self.system.matrix.row(i).entries();
                let product: f64 = entries.map(|(j, a)| a * model[[j, 0]]).sum();
                self.system.data[[i, self.set]] - product
            })
            .collect()
    }

    fn weighted_residual(&self, model: &Array2<f64>) -> Vec<f64> {
        let residual = self.residual(model).into_iter().enumerate();
        residual.map(|(i, r)| self.weights.at(i, 0) * r).collect()
    }

    fn by_probes(&self, watch: &dyn Watch) -> Option<QuickFit> {
        let (m, n) = (self.system.matrix.rows(), self.system.matrix.columns());
        let mut data = Array2::zeros((m, 1 + PROBES));
        let mut reference = Array2::zeros((n, 1 + PROBES));
        data.column_mut(0).assign(&self.system.data.column(self.set));
        reference.column_mut(0).assign(&self.reference.column(0));
        for probe in 0..PROBES {
            let stream = Stream::new(0, probe as u64);
            for i in 0..m {
                let w = self.weights.at(i, 0);
                // The weight is taken out again, so that W times the data is ±1 where it counts.
                data[[i, probe + 1]] = if w > 0.0 { stream.sign(i as u64) / w } else { 0.0 };
            }
        }
        let matrix = Weighted::new(&self.system.matrix, &self.weights, self.scales.as_deref());
        let lane = |set| Lane { set, strengths: Vec::new() };
        let problem = Problem {
            matrix: &matrix,
            penalty: None,
            stacked: false,
            data: data.view(),
            reference: Some(reference.view()),
            start: None,
            lanes: (0..=PROBES).map(lane).collect(),
        };
        // Only the scalars are wanted: one weak strength keeps the processes going.
        let weakest = |processes: &[&Process]| vec![SPAN * range::found(processes, Some(1))[0]];
        let scout = Scout { steps: range::SCOUT_STEPS, choose: &weakest };
        let rules = rules();
        let outcome = solve::run(&problem, Method::Lsqr, &rules, Some(scout), watch);
        if outcome.interrupted.is_some() {
            return None;
        }
        let points = self.points(&outcome.processes)?;
        let chosen = choose(&points, self.data)?;
        let lanes = vec![Lane { set: 0, strengths: vec![points[chosen].trial.strength] }];
        let problem = Problem { lanes, ..problem };
        let outcome = solve::run(&problem, Method::Lsqr, &rules, None, watch);
        let solved = outcome.solved.into_iter().next()?;
        Some(self.finished(points, chosen, solved.model))
    }

    /// The strengths that all processes have reached, from their scalars; the strongest always.
    fn points(&self, processes: &[Process]) -> Option<Vec<Point>> {
        let extremes = processes.iter().filter_map(Process::singular_values_extreme);
        let largest = extremes.map(|(largest, _)| largest).fold(0.0, f64::max);
        if !(largest > 0.0 && largest.is_finite() && processes[0].steps() > 0) {
            return None;
        }
        let mut points = Vec::new();
        for strength in strengths(largest) {
            let at: Vec<_> = processes.iter().map(|process| process.at(strength)).collect();
            let total =
                |p: &solve::process::CurvePoint| p.residual_norm.hypot(strength * p.penalty_norm);
            let reached = at.iter().all(|p| p.gradient_norm <= REACHED * largest * total(p));
            if !reached && !points.is_empty() {
                break;
            }
            let (mut trace, mut trace_square) = (0.0, 0.0);
            for probe in &at[1..] {
                let left = self.data as f64 - total(probe).powi(2);
                trace += left / PROBES as f64;
                trace_square += (left - (strength * probe.penalty_norm).powi(2)) / PROBES as f64;
            }
            let residual_norm = at[0].residual_norm;
            let trial = Trial { strength, residual_norm, effective_parameters: trace };
            points.push(Point { trial, trace_square });
        }
        Some(points)
    }

    fn finished(&self, points: Vec<Point>, chosen: usize, model: Vec<f64>) -> QuickFit {
        let column = Array2::from_shape_vec((model.len(), 1), model.clone()).expect("n values");
        QuickFit {
            data_set: self.set,
            trials: points.into_iter().map(|point| point.trial).collect(),
            chosen,
            residual: self.residual(&column),
            model,
        }
    }
}

struct Point {
    trial: Trial,
    /// tr H².
    trace_square: f64,
}

fn strengths(largest: f64) -> Vec<f64> {
    (0..STRENGTHS).map(|i| largest * SPAN.powf(i as f64 / (STRENGTHS - 1) as f64)).collect()
}

/// A tolerance as loose as the question: noise to a part in a hundred.
fn rules() -> StopRules {
    StopRules {
        gradient_tolerance: 1e-5,
        residual_tolerance: StopRules::RESIDUAL_TOLERANCE,
        noise_factor: None,
        max_iterations: ITERATIONS_MAX,
        time_limit: None,
    }
}

/// Least robust GCV; `None` if none is finite.
fn choose(points: &[Point], data: usize) -> Option<usize> {
    let robust = |point: &Point| {
        let guard = ROBUSTNESS + (1.0 - ROBUSTNESS) * point.trace_square / data as f64;
        point.trial.gcv(data) * guard
    };
    (0..points.len())
        .filter(|&place| robust(&points[place]).is_finite())
        .min_by(|&a, &b| robust(&points[a]).total_cmp(&robust(&points[b])))
}

#[cfg(test)]
#[path = "quick_fit_tests.rs"]
mod tests;
