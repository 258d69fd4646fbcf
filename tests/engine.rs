//! The engine against dense references, closed forms and its own promises.

use ellbow::base::random::Stream;
use ellbow::operator::{RowWeights, StoredRows, Weighted};
use ellbow::solve::direct::Dense;
use ellbow::solve::engine::Unwatched;
use ellbow::solve::{Lane, Method, Outcome, Problem, Scout, Stop, StopRules, run};
use ndarray::{Array2, ArrayView2};

const METHODS: [Method; 3] = [Method::Lsqr, Method::Lsmr, Method::Cgls];

fn rules(gradient_tolerance: f64) -> StopRules {
    StopRules {
        gradient_tolerance,
        residual_tolerance: 0.0,
        noise_factor: None,
        max_iterations: 5000,
        time_limit: None,
    }
}

/// A random sparse system with a few empty rows; about a third of the entries stored.
fn random_system(m: usize, n: usize, seed: u64) -> (StoredRows, Vec<f64>) {
    let stream = Stream::new(seed, 0);
    let dense: Vec<f64> = (0..m * n)
        .map(|i| {
            let keep = stream.uniform(10_000_000 + i as u64) < 0.3 && (i / n) % 17 != 5;
            if keep { stream.normal(i as u64) } else { 0.0 }
        })
        .collect();
    let data = (0..m).map(|i| stream.normal(5_000_000 + i as u64)).collect();
    (StoredRows::from_dense(m, n, &dense), data)
}

struct Case {
    matrix: StoredRows,
    weights: RowWeights,
    data: Array2<f64>,
    reference: Option<Array2<f64>>,
}

fn case(m: usize, n: usize, sets: usize, seed: u64) -> Case {
    let (matrix, _) = random_system(m, n, seed);
    let stream = Stream::new(seed, 9);
    let draw = |i: usize, j: usize, from: u64| stream.normal(from + (i * 64 + j) as u64);
    Case {
        matrix,
        weights: RowWeights::PerSet(Array2::from_shape_fn((m, sets), |(i, j)| {
            // One row in eleven is left out, another one in each set.
            if (i + j) % 11 == 3 { 0.0 } else { 0.5 + draw(i, j, 0).abs() }
        })),
        data: Array2::from_shape_fn((m, sets), |(i, j)| draw(i, j, 1_000_000)),
        reference: Some(Array2::from_shape_fn((n, sets), |(i, j)| draw(i, j, 2_000_000))),
    }
}

#[allow(clippy::too_many_arguments)] // One test case written out on one line each.
fn solve(
    case: &Case,
    scales: Option<&[f64]>,
    penalty: Option<&[f64]>,
    stacked: bool,
    start: Option<ArrayView2<'_, f64>>,
    lanes: Vec<Lane>,
    method: Method,
    tolerance: f64,
) -> Outcome {
    let matrix = Weighted::new(&case.matrix, &case.weights, scales);
    let problem = Problem {
        matrix: &matrix,
        penalty,
        stacked,
        data: case.data.view(),
        reference: case.reference.as_ref().map(|r| r.view()),
        start,
        lanes,
    };
    run(&problem, method, &rules(tolerance), None, &Unwatched)
}

/// argmin ‖W(Ax−b)‖² + λ²‖P(x−x_ref)‖² by dense SVD of the stacked system.
fn reference_solution(case: &Case, penalty: Option<&[f64]>, set: usize, strength: f64) -> Vec<f64> {
    let (m, n) = (case.matrix.rows(), case.matrix.columns());
    let mut dense = nalgebra::DMatrix::zeros(m + n, n);
    let mut right = nalgebra::DVector::zeros(m + n);
    for i in 0..m {
        let w = case.weights.at(i, set);
        right[i] = w * case.data[[i, set]];
        for (j, a) in case.matrix.row(i).entries() {
            dense[(i, j)] = w * a;
        }
    }
    for j in 0..n {
        let p = strength * penalty.map_or(1.0, |p| p[j]);
        dense[(m + j, j)] = p;
        right[m + j] = p * case.reference.as_ref().map_or(0.0, |r| r[[j, set]]);
    }
    dense.svd(true, true).solve(&right, 1e-14).unwrap().as_slice().to_vec()
}

fn distance(a: &[f64], b: &[f64]) -> f64 {
    let norm = |v: &mut dyn Iterator<Item = f64>| v.map(|x| x * x).sum::<f64>().sqrt();
    norm(&mut a.iter().zip(b).map(|(a, b)| a - b)) / norm(&mut b.iter().copied())
}

/// ‖x − x_λ‖ ≤ ‖gradient‖/(λ² + σ_min²): with these sizes and strengths σ² + λ² ≥ 0.01, norms of
/// order 10, so a relative gradient of 1e-13 leaves less than 1e-9.
const CLOSE: f64 = 1e-9;

#[test]
fn every_method_meets_the_dense_solution_with_weights_and_reference() {
    for (m, n) in [(60, 40), (40, 60), (50, 1), (1, 7)] {
        let case = case(m, n, 3, 11);
        for method in METHODS {
            for strength in [0.1, 1.0, 30.0] {
                let lanes = (0..3).map(|set| Lane { set, strengths: vec![strength] }).collect();
                let outcome = solve(&case, None, None, false, None, lanes, method, 1e-13);
                for (set, solved) in outcome.solved.iter().enumerate() {
                    let reference = reference_solution(&case, None, set, strength);
                    let error = distance(&solved.model, &reference);
                    assert!(error < CLOSE, "{method:?} {m}×{n} λ {strength}: {error:e}");
                    assert!(solved.stop.converged(), "{method:?} {m}x{n} {:?}", solved.stop);
                }
            }
        }
    }
}

#[test]
fn start_scaling_and_penalty_weights_change_nothing_but_the_way() {
    let case = case(60, 40, 2, 12);
    let stream = Stream::new(4, 4);
    let penalty: Vec<f64> =
        (0..40).map(|j| if j % 7 == 0 { 0.0 } else { stream.uniform(j) }).collect();
    let scales: Vec<f64> =
        (0..40).map(|j| 10f64.powf(2.0 * stream.uniform(100 + j) - 1.0)).collect();
    let start = Array2::from_shape_fn((40, 1), |(j, _)| stream.normal(300 + j as u64));
    for method in METHODS {
        let lanes =
            vec![Lane { set: 1, strengths: vec![2.0] }, Lane { set: 0, strengths: vec![0.5] }];
        let outcome = solve(
            &case,
            Some(&scales),
            Some(&penalty),
            true,
            Some(start.view()),
            lanes,
            method,
            1e-13,
        );
        for solved in &outcome.solved {
            let reference = reference_solution(&case, Some(&penalty), solved.set, solved.strength);
            let error = distance(&solved.model, &reference);
            assert!(error < CLOSE, "{method:?} λ {}: {error:e}", solved.strength);
        }
    }
}

#[test]
fn penalty_weights_as_a_change_of_variables_keep_the_fan() {
    let case = case(60, 40, 1, 13);
    let stream = Stream::new(5, 5);
    let penalty: Vec<f64> = (0..40).map(|j| 0.2 + stream.uniform(j)).collect();
    let scales: Vec<f64> = penalty.iter().map(|p| 1.0 / p).collect();
    let strengths = vec![10.0, 1.0, 0.3];
    for method in [Method::Lsqr, Method::Lsmr] {
        let lanes = vec![Lane { set: 0, strengths: strengths.clone() }];
        let outcome =
            solve(&case, Some(&scales), Some(&penalty), false, None, lanes, method, 1e-13);
        for solved in &outcome.solved {
            let reference = reference_solution(&case, Some(&penalty), 0, solved.strength);
            assert!(distance(&solved.model, &reference) < CLOSE);
            assert!((solved.relative_gradient) < 1e-11);
        }
    }
}

#[test]
fn a_fan_is_one_process_and_each_strength_equals_a_solve_of_its_own() {
    let case = case(80, 50, 2, 14);
    let strengths: Vec<f64> = (0..32).map(|i| 30.0 * 10f64.powf(-i as f64 / 10.0)).collect();
    for method in [Method::Lsqr, Method::Lsmr] {
        let lanes =
            (0..2).map(|set| Lane { set, strengths: strengths.clone() }).collect::<Vec<_>>();
        let fan = solve(&case, None, None, false, None, lanes, method, 1e-12);
        // 64 tracks: start, steps of the slowest, two certificate passes.
        assert_eq!(fan.passes, fan.iterations + 1 + 2);
        for solved in &fan.solved {
            let lanes = vec![Lane { set: solved.set, strengths: vec![solved.strength] }];
            let single = solve(&case, None, None, false, None, lanes, method, 1e-12);
            let single = &single.solved[0];
            assert_eq!(single.iterations, solved.iterations, "λ {}", solved.strength);
            // Lanes are summed in the same order at every width: the same bits.
            assert_eq!(single.model, solved.model, "λ {}", solved.strength);
        }
    }
}

#[test]
fn strengths_chosen_by_a_scout_equal_strengths_known_before() {
    let case = case(80, 50, 3, 15);
    let strengths = vec![20.0, 3.0, 0.4];
    let matrix = Weighted::new(&case.matrix, &case.weights, None);
    for method in [Method::Lsqr, Method::Lsmr] {
        let of = |strengths: Vec<f64>, scout: Option<Scout<'_>>| {
            let problem = Problem {
                matrix: &matrix,
                penalty: None,
                stacked: false,
                data: case.data.view(),
                reference: case.reference.as_ref().map(|r| r.view()),
                start: None,
                lanes: (0..3).map(|set| Lane { set, strengths: strengths.clone() }).collect(),
            };
            run(&problem, method, &rules(1e-12), scout, &Unwatched)
        };
        let before = of(strengths.clone(), None);
        let choose = |processes: &[&ellbow::solve::Process]| {
            let largest = processes[0].singular_values_extreme().unwrap().0;
            let exact = Dense::new(&matrix, 0).unwrap().singular_values[0];
            // After 12 steps the top Ritz value of these 80×50 systems has settled to three digits.
            assert!((largest / exact - 1.0).abs() < 1e-3, "{largest} {exact}");
            strengths.clone()
        };
        let later = of(vec![], Some(Scout { steps: 12, choose: &choose }));
        for (a, b) in before.solved.iter().zip(&later.solved) {
            assert_eq!((a.iterations, &a.model), (b.iterations, &b.model));
        }
        assert_eq!(before.passes, later.passes);
    }
}

#[test]
fn passes_are_iterations_and_two() {
    let case = case(60, 40, 1, 16);
    for method in [Method::Lsqr, Method::Lsmr] {
        let lanes = vec![Lane { set: 0, strengths: vec![1.0] }];
        let outcome = solve(&case, None, None, false, None, lanes, method, 1e-10);
        assert_eq!(outcome.passes, outcome.iterations + 2);
        assert!(outcome.iterations > 3);
    }
}

#[test]
fn tolerance_zero_ends_at_the_floor_without_diverging() {
    let case = case(60, 40, 1, 17);
    for method in METHODS {
        for strength in [0.0, 0.5] {
            let lanes = vec![Lane { set: 0, strengths: vec![strength] }];
            let outcome = solve(&case, None, None, false, None, lanes, method, 0.0);
            let solved = &outcome.solved[0];
            assert_eq!(solved.stop, Stop::Floor, "{method:?} λ {strength} {solved:?}");
            let reference = reference_solution(&case, None, 0, strength);
            assert!(distance(&solved.model, &reference) < CLOSE);
        }
    }
}

#[test]
fn zero_data_leaves_the_reference() {
    let mut case = case(30, 20, 1, 18);
    case.data.fill(0.0);
    case.reference = None;
    for method in METHODS {
        let lanes = vec![Lane { set: 0, strengths: vec![1.0] }];
        let outcome = solve(&case, None, None, false, None, lanes, method, 1e-8);
        assert_eq!(outcome.solved[0].stop, Stop::ZeroData);
        assert!(outcome.solved[0].model.iter().all(|x| *x == 0.0));
    }
}

#[test]
fn consistent_data_are_fitted_exactly() {
    let mut case = case(40, 60, 1, 19);
    case.reference = None;
    case.weights = RowWeights::Ones;
    for i in 0..40 {
        case.data[[i, 0]] = case.matrix.row(i).entries().map(|(j, a)| a * (j as f64).cos()).sum();
    }
    for method in METHODS {
        let lanes = vec![Lane { set: 0, strengths: vec![0.0] }];
        let outcome = solve(&case, None, None, false, None, lanes, method, 1e-12);
        assert_eq!(
            outcome.solved[0].stop,
            Stop::ExactFit,
            "{method:?}: {:?}",
            outcome.solved[0].residual_norm
        );
    }
}

#[test]
fn an_overflow_is_placed_within_one_iteration() {
    let mut case = case(30, 20, 2, 20);
    case.weights = RowWeights::Ones;
    case.reference = None;
    let row = (0..30).find(|&i| i > 7 && case.matrix.row(i).entries().count() > 1).unwrap();
    case.data[[row, 1]] = f64::INFINITY;
    for method in METHODS {
        let lanes = (0..2).map(|set| Lane { set, strengths: vec![1.0] }).collect();
        let outcome = solve(&case, None, None, false, None, lanes, method, 1e-10);
        assert_eq!(outcome.solved[0].stop, Stop::Gradient, "the other lane goes on");
        let Stop::NotFinite(ellbow::solve::Fault::Row(found)) = outcome.solved[1].stop else {
            panic!("{method:?}: {:?}", outcome.solved[1].stop)
        };
        assert_eq!((found, outcome.solved[1].iterations), (row, 0));
    }
}

#[test]
fn norms_from_scalars_equal_recomputed_ones() {
    let case = case(70, 45, 1, 21);
    let strengths: Vec<f64> = vec![10.0, 1.0, 0.2];
    for method in [Method::Lsqr, Method::Lsmr] {
        let lanes = vec![Lane { set: 0, strengths: strengths.clone() }];
        let outcome = solve(&case, None, None, false, None, lanes, method, 1e-12);
        for solved in &outcome.solved {
            let last = outcome.history.iter().rfind(|h| h.strength == solved.strength).unwrap();
            let near = |a: f64, b: f64| (a / b - 1.0).abs() < 1e-11;
            assert!(near(last.residual_norm, solved.residual_norm), "{method:?} {last:?}");
            assert!(near(last.penalty_norm, solved.penalty_norm), "{method:?} {last:?}");
            let point = outcome.processes[0].at(solved.strength);
            assert!(near(point.residual_norm, solved.residual_norm));
            assert!(near(point.penalty_norm, solved.penalty_norm));
        }
    }
}

#[test]
fn residual_of_lsqr_and_gradient_of_lsmr_fall_and_each_leads_in_its_own() {
    let case = case(90, 60, 1, 22);
    let of = |method| {
        let lanes = vec![Lane { set: 0, strengths: vec![0.0] }];
        solve(&case, None, None, false, None, lanes, method, 1e-10).history
    };
    let (lsqr, lsmr) = (of(Method::Lsqr), of(Method::Lsmr));
    let slack = 1.0 + 1e-12;
    for pair in lsqr.windows(2) {
        assert!(pair[1].residual_norm <= slack * pair[0].residual_norm);
    }
    for pair in lsmr.windows(2) {
        assert!(pair[1].gradient_norm <= slack * pair[0].gradient_norm);
    }
    for (q, m) in lsqr.iter().zip(&lsmr) {
        assert!(q.residual_norm <= slack * m.residual_norm);
        assert!(m.gradient_norm <= slack * q.gradient_norm);
    }
}

#[test]
fn same_bits_for_any_number_of_threads() {
    let case = case(700, 90, 3, 23);
    for method in METHODS {
        let of = |threads| {
            let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
            let lanes = (0..3).map(|set| Lane { set, strengths: vec![0.3] }).collect();
            pool.install(|| solve(&case, None, None, false, None, lanes, method, 1e-10))
        };
        let one = of(1);
        for threads in [2, 5] {
            for (a, b) in one.solved.iter().zip(&of(threads).solved) {
                assert_eq!((&a.model, &a.residual), (&b.model, &b.residual));
            }
        }
    }
}

/// An ill-conditioned 80×60 system: columns fade by ten over the width.
fn fading(sets: usize) -> Case {
    let mut case = case(80, 60, sets, 31);
    let (matrix, _) = random_system(80, 60, 31);
    let mut dense = vec![0.0; 80 * 60];
    for i in 0..80 {
        for (j, a) in matrix.row(i).entries() {
            dense[i * 60 + j] = a * 10f64.powf(-3.0 * j as f64 / 60.0);
        }
    }
    case.matrix = StoredRows::from_dense(80, 60, &dense);
    case
}

#[test]
fn a_lane_has_the_same_bits_alone_and_beside_others() {
    let case = fading(3);
    for method in METHODS {
        let of = |lanes: Vec<Lane>| solve(&case, None, None, false, None, lanes, method, 1e-9);
        let lane = |set: usize| Lane { set, strengths: vec![[1e-3, 0.3, 1e-2][set]] };
        let together = of((0..3).map(lane).collect());
        for set in 0..3 {
            let alone = of(vec![lane(set)]);
            let (a, b) = (&alone.solved[0], &together.solved[set]);
            assert_eq!((a.iterations, &a.model), (b.iterations, &b.model), "{method:?} {set}");
            assert!(a.stop.converged(), "{method:?} {set}: {:?}", a.stop);
        }
    }
}

#[test]
fn history_says_nothing_where_steps_are_not_the_model() {
    let case = case(60, 40, 1, 33);
    let scales = vec![2.0; 40];
    let start = Array2::from_elem((40, 1), 0.5);
    let lanes = || vec![Lane { set: 0, strengths: vec![0.0] }];
    let scaled = solve(&case, Some(&scales), None, false, None, lanes(), Method::Lsqr, 1e-10);
    let started = solve(&case, None, None, false, Some(start.view()), lanes(), Method::Lsqr, 1e-10);
    for outcome in [&scaled, &started] {
        let last = outcome.history.last().unwrap();
        assert!(last.penalty_norm.is_nan());
        let residual = outcome.solved[0].residual_norm;
        assert!((last.residual_norm / residual - 1.0).abs() < 1e-10, "{last:?}");
    }
    assert!(scaled.history.iter().all(|row| row.gradient_norm.is_nan()));
    assert!(started.history.iter().all(|row| row.gradient_norm.is_finite()));
}

#[test]
fn of_all_solutions_the_nearest_is_found_by_every_way() {
    // x₁ + 1000 x₂ = 1: the shortest is (1, 1000)/1000001.
    let matrix = StoredRows::from_dense(1, 2, &[1.0, 1000.0]);
    let data = Array2::from_elem((1, 1), 1.0);
    let weights = RowWeights::Ones;
    for (method, penalty) in METHODS.iter().flat_map(|&m| [(m, None), (m, Some([1.0, 10.0]))]) {
        let request = ellbow::sweep::Request {
            matrix: &matrix,
            weights: &weights,
            data: data.view(),
            reference: None,
            start: None,
            penalty: penalty.as_ref().map(|p| p.as_slice()),
            held: None,
            method,
            scaling: ellbow::sweep::Scaling::Auto,
            strengths: ellbow::sweep::Strengths::Given(vec![0.0]),
            rules: rules(1e-12),
        };
        let found = &ellbow::sweep::run(&request, &Unwatched).sets[0].solved[0].model;
        let exact = &ellbow::sweep::dense::run(&request).unwrap().sets[0].solved[0].model;
        // min x₁² + p²x₂²: x ∝ (1, 1000/p²).
        let p2 = penalty.map_or(1.0, |p| p[1] * p[1]);
        let scale = 1.0 / (1.0 + 1e6 / p2);
        let closed = [scale, scale * 1000.0 / p2];
        assert!(distance(found, &closed) < 1e-12, "{method:?} {penalty:?}: {found:?}");
        assert!(distance(exact, &closed) < 1e-12, "direct {penalty:?}: {exact:?}");
    }
}

#[test]
fn a_range_is_the_same_by_every_method() {
    let case = case(60, 40, 2, 34);
    let penalty: Vec<f64> = (0..40).map(|j| if j % 2 == 0 { 2.0 } else { 0.5 }).collect();
    let of = |method| {
        let request = ellbow::sweep::Request {
            matrix: &case.matrix,
            weights: &case.weights,
            data: case.data.view(),
            reference: case.reference.as_ref(),
            start: None,
            penalty: Some(&penalty),
            held: None,
            method,
            scaling: ellbow::sweep::Scaling::Auto,
            strengths: ellbow::sweep::Strengths::Found { count: Some(3) },
            rules: rules(1e-8),
        };
        ellbow::sweep::run(&request, &Unwatched).strengths
    };
    let (lsqr, cgls) = (of(Method::Lsqr), of(Method::Cgls));
    for (a, b) in lsqr.iter().zip(&cgls) {
        assert!((a / b - 1.0).abs() < 1e-12, "{lsqr:?} {cgls:?}");
    }
}
