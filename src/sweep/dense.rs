//! A sweep of a small system by one dense decomposition: all strengths at once, exactly.

use crate::operator::{RowWeights, Weighted};
use crate::solve::certificate::{self, Candidate, Frobenius};
use crate::solve::direct::Dense;
use crate::solve::{Fault, Lane, Problem, Solved, Stop};
use crate::sweep::run::{Request, SetSweep};
use crate::sweep::{Strengths, range};

/// What a decomposition tells besides the models.
pub struct DenseSweep {
    /// λ, descending; of [`Strengths::Found`], from the first decomposition.
    pub strengths: Vec<f64>,
    /// One per data set, without a process.
    pub sets: Vec<SetSweep>,
    /// One per data set where weights differ between them, else one.
    pub decompositions: Vec<Dense>,
    /// Certificates only: one per [`certificate::WIDTH_MAX`] strengths of a data set.
    pub passes: u64,
}

/// Solves every data set at every strength. `None` if the decomposition fails.
///
/// Penalty factors of 0 are not a change of variables: the caller uses an iterative method for
/// them. Panics on one.
pub fn run(request: &Request<'_>) -> Option<DenseSweep> {
    let n = request.matrix.columns();
    let scales: Option<Vec<f64>> =
        (request.penalty.is_some() || request.held.is_some()).then(|| {
            (0..n)
                .map(|j| {
                    let p = request.penalty.map_or(1.0, |p| p[j]);
                    let held = request.held.is_some_and(|h| h[j]);
                    assert!(held || p > 0.0, "positive penalty factors");
                    if held { 0.0 } else { 1.0 / p }
                })
                .collect()
        });
    let matrix = Weighted::new(request.matrix, request.weights, scales.as_deref());
    let sets = request.data.ncols();
    let distinct = if matches!(request.weights, RowWeights::PerSet(_)) { sets } else { 1 };
    let decompositions: Vec<Dense> =
        (0..distinct).map(|set| Dense::new(&matrix, set)).collect::<Option<_>>()?;
    let strengths = match &request.strengths {
        Strengths::Given(list) => list.clone(),
        Strengths::Found { count } => {
            let largest = decompositions[0].singular_values.first().copied().unwrap_or(0.0);
            if largest > 0.0 {
                let Strengths::Given(list) =
                    Strengths::between(largest, range::SPAN * largest, *count)
                else {
                    unreachable!("an explicit range")
                };
                list
            } else {
                vec![1.0]
            }
        }
    };
    let problem = Problem {
        matrix: &matrix,
        penalty: request.penalty,
        stacked: false,
        data: request.data.view(),
        reference: request.reference.map(|r| r.view()),
        start: None,
        lanes: (0..sets).map(|set| Lane { set, strengths: strengths.clone() }).collect(),
    };
    let frobenius = Frobenius::of(&problem);
    let mut passes = 0;
    let sets = (0..sets)
        .map(|set| {
            let dense = &decompositions[if distinct == 1 { 0 } else { set }];
            let solved = certified(&problem, &frobenius, dense, set, &strengths, &mut passes);
            SetSweep { solved, process: None }
        })
        .collect();
    Some(DenseSweep { strengths, sets, decompositions, passes })
}

fn certified(
    problem: &Problem<'_>,
    frobenius: &Frobenius,
    dense: &Dense,
    set: usize,
    strengths: &[f64],
    passes: &mut u64,
) -> Vec<Solved> {
    let shifted = shifted_data(problem, set);
    let mut solved = Vec::with_capacity(strengths.len());
    for group in strengths.chunks(certificate::WIDTH_MAX) {
        let candidates = group
            .iter()
            .map(|&strength| {
                let y = dense.solve(&shifted, strength);
                let model = (0..y.len())
                    .map(|j| problem.reference_at(j, set) + problem.matrix.scale(j) * y[j])
                    .collect();
                Candidate { set, strength, model, iterations: 0 }
            })
            .collect();
        *passes += 1;
        let certified = certificate::certify(problem, frobenius, candidates);
        solved.extend(certified.into_iter().map(|c| {
            let finite = c.solved.is_finite();
            let stop = if finite { Stop::Direct } else { Stop::NotFinite(Fault::Norm) };
            Solved { stop, ..c.solved }
        }));
    }
    solved
}

/// W(b − A x_ref), one visit of the rows.
fn shifted_data(problem: &Problem<'_>, set: usize) -> Vec<f64> {
    let matrix = problem.matrix.matrix();
    (0..matrix.rows())
        .map(|i| {
            let predicted: f64 = match problem.reference {
                Some(_) => {
                    matrix.row(i).entries().map(|(j, a)| a * problem.reference_at(j, set)).sum()
                }
                None => 0.0,
            };
            problem.matrix.weights().at(i, set) * (problem.data[[i, set]] - predicted)
        })
        .collect()
}
