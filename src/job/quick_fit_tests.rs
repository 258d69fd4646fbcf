use ndarray::Array2;

use super::*;
use crate::operator::StoredRows;
use crate::solve::engine::Unwatched;
use crate::system::{BlockSpan, ColumnTable, RowTable, Units};

const NOISE: f64 = 0.05;

/// A smoothing kernel on 120 unknowns seen 240 times, σ = 0.05 right.
fn system() -> System {
    let (m, n) = (240usize, 120usize);
    let stream = Stream::new(11, 0);
    let kernel = |i: usize, j: usize| {
        let distance = (i as f64 / m as f64 - j as f64 / n as f64) / 0.02;
        (-0.5 * distance * distance).exp()
    };
    let dense: Vec<f64> = (0..m * n).map(|place| kernel(place / n, place % n)).collect();
    let truth = |j: usize| 1.0 + (0.15 * j as f64).sin();
    let data = Array2::from_shape_fn((m, 1), |(i, _)| {
        (0..n).map(|j| kernel(i, j) * truth(j)).sum::<f64>() + NOISE * stream.normal(i as u64)
    });
    System {
        matrix: StoredRows::from_dense(m, n, &dense),
        data,
        data_shift: None,
        absent: None,
        uncertainty: Some(Array2::from_elem((m, 1), NOISE)),
        weights: RowWeights::Shared(vec![1.0 / NOISE; m]),
        reference: None,
        rows: RowTable::default(),
        columns: ColumnTable::default(),
        blocks: vec![BlockSpan { name: String::new(), first_row: 0, rows: m, weight: 1.0 }],
        grid: None,
        units: Units::default(),
    }
}

#[test]
fn the_noise_of_a_right_sigma_is_one() {
    let system = system();
    let facts = system.facts();
    let fit = quick_fit(&system, &facts, 0, &Unwatched).unwrap();
    let noise = fit.trials[fit.chosen].noise(240);
    // Some 190 data to spare: a standard deviation of 1/√380 = 0.05, bound five of them.
    assert!((noise - 1.0).abs() < 0.26, "{noise}");
    let (low, high) = fit.noise_range(240);
    assert!(low <= noise && noise <= high);
}

#[test]
fn probes_agree_with_the_decomposition() {
    let system = system();
    let facts = system.facts();
    let case = Case::new(&system, &facts, 0);
    let exact = case.exactly().unwrap();
    let probed = case.by_probes(&Unwatched).unwrap();
    let deviation = (240.0 / (2.0 * PROBES as f64)).sqrt();
    assert!(probed.trials.len() > 10, "{}", probed.trials.len());
    for (a, b) in exact.trials.iter().zip(&probed.trials) {
        // The largest singular value comes from a process of many steps: nearly exact.
        assert!((a.strength / b.strength - 1.0).abs() < 1e-3);
        assert!((a.residual_norm / b.residual_norm - 1.0).abs() < 0.01);
        assert!((a.effective_parameters - b.effective_parameters).abs() < 4.0 * deviation);
    }
    let ratio = exact.trials[exact.chosen].noise(240) / probed.trials[probed.chosen].noise(240);
    assert!((ratio - 1.0).abs() < 0.1, "{ratio}");
}

#[test]
fn held_unknowns_keep_their_value_and_rows_left_out_do_not_count() {
    let mut system = system();
    let mut fixed = vec![f64::NAN; 120];
    fixed[7] = 3.0;
    system.columns.fixed = Some(fixed);
    let mut reference = Array2::ones((120, 1));
    reference[[7, 0]] = 3.0;
    system.reference = Some(reference);
    let mut weights = vec![1.0 / NOISE; 240];
    // Round unknown 7, held at a wrong value, nothing is measured.
    weights[..60].fill(0.0);
    system.weights = RowWeights::Shared(weights);
    let facts = system.facts();
    let case = Case::new(&system, &facts, 0);
    for fit in [case.exactly().unwrap(), case.by_probes(&Unwatched).unwrap()] {
        assert_eq!(fit.model[7], 3.0);
        let noise = fit.trials[fit.chosen].noise(180);
        assert!((noise - 1.0).abs() < 0.3, "{noise}");
    }
}

#[test]
fn data_of_zeros_have_no_fit() {
    let mut system = system();
    system.data.fill(0.0);
    let facts = system.facts();
    let case = Case::new(&system, &facts, 0);
    assert!(case.by_probes(&Unwatched).is_none());
}
