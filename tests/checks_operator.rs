//! Operators against a dense reference written here: the pass and the symmetry ⟨Av,u⟩ = ⟨v,Aᵀu⟩.

use ellbow::base::random::Stream;
use ellbow::operator::{
    CompressedRows, Frame, Operator, Pass, RowWeights, Stacked, StoredRows, Weighted,
};
use ndarray::Array2;
use proptest::prelude::*;
use sprs::CsMatI;

/// Numbers of lanes that meet every width of the kernel's inner blocks, alone and together.
const LANES: [usize; 5] = [1, 2, 3, 8, 17];

#[derive(Debug, Clone, Copy)]
enum Shape {
    EmptyRows,
    OneDenseRow,
    Wide,
    Tall,
    SingleColumn,
}

const SHAPES: [Shape; 5] =
    [Shape::EmptyRows, Shape::OneDenseRow, Shape::Wide, Shape::Tall, Shape::SingleColumn];

#[derive(Debug, Clone, Copy)]
enum Storage {
    Double,
    Single,
    Pattern,
}

const STORAGES: [Storage; 3] = [Storage::Double, Storage::Single, Storage::Pattern];

/// A matrix in both forms. Values are f32 where they are stored so, 1 in a pattern.
fn build(shape: Shape, storage: Storage, stream: &Stream) -> (StoredRows, Vec<Vec<f64>>) {
    let (m, n, share) = match shape {
        Shape::EmptyRows => (70, 20, 0.2),
        Shape::OneDenseRow => (40, 60, 0.02),
        Shape::Wide => (6, 150, 0.3),
        // Enough entries a column for several groups of rows.
        Shape::Tall => (600, 9, 0.6),
        Shape::SingleColumn => (90, 1, 0.7),
    };
    let mut dense = vec![vec![0.0; n]; m];
    let (mut pointers, mut columns) = (vec![0], Vec::new());
    let mut values = Vec::new();
    for (i, row) in dense.iter_mut().enumerate() {
        let empty = matches!(shape, Shape::EmptyRows) && i % 3 == 1;
        let full = matches!(shape, Shape::OneDenseRow) && i == 7;
        for (j, value) in row.iter_mut().enumerate() {
            let place = (i * n + j) as u64;
            if full || (!empty && stream.uniform(place) < share) {
                let number = stream.normal(1_000_000 + place);
                *value = match storage {
                    Storage::Double => number,
                    Storage::Single => f64::from(number as f32),
                    Storage::Pattern => 1.0,
                };
                columns.push(j as u32);
                values.push(*value);
            }
        }
        pointers.push(columns.len());
    }
    let stored = match storage {
        Storage::Double => StoredRows::from_compressed(m, n, pointers, columns, values),
        Storage::Single => {
            let values = values.iter().map(|&value| value as f32).collect();
            StoredRows::build(
                CompressedRows::Single(CsMatI::try_new((m, n), pointers, columns, values).unwrap()),
                None,
            )
        }
        Storage::Pattern => {
            let ones = vec![(); columns.len()];
            StoredRows::build(
                CompressedRows::Pattern(CsMatI::try_new((m, n), pointers, columns, ones).unwrap()),
                None,
            )
        }
    };
    (stored, dense)
}

/// Weights, scales, penalty and blocks of one pass.
struct Setting {
    weights: RowWeights,
    scales: Option<Vec<f64>>,
    penalty: Option<Vec<f64>>,
    strengths: Vec<f64>,
    sets: Vec<usize>,
    alpha: Vec<f64>,
}

impl Setting {
    /// `zero` makes every factor that may be zero so in some place.
    fn new(m: usize, n: usize, lanes: usize, zero: bool, stream: &Stream) -> Self {
        let drawn = |from: u64, i: usize| {
            let value = 0.5 + stream.uniform(from + i as u64);
            if zero && i % 5 == 2 { 0.0 } else { value }
        };
        let per_set = Array2::from_shape_fn((m, lanes), |(i, l)| drawn(10_000, 7 * i + l));
        Self {
            weights: match stream.uniform(1) {
                u if u < 0.3 => RowWeights::Ones,
                u if u < 0.6 => RowWeights::Shared((0..m).map(|i| drawn(20_000, i)).collect()),
                _ => RowWeights::PerSet(per_set),
            },
            scales: (stream.uniform(2) < 0.6).then(|| (0..n).map(|j| drawn(30_000, j)).collect()),
            penalty: (stream.uniform(3) < 0.5).then(|| (0..n).map(|j| drawn(40_000, j)).collect()),
            strengths: (0..lanes).map(|l| drawn(50_000, l)).collect(),
            sets: (0..lanes).rev().collect(),
            alpha: (0..lanes).map(|l| drawn(60_000, l) - 1.0).collect(),
        }
    }

    fn scale(&self, j: usize) -> f64 {
        self.scales.as_ref().map_or(1.0, |scales| scales[j])
    }

    fn penalty(&self, j: usize) -> f64 {
        self.penalty.as_ref().map_or(1.0, |penalty| penalty[j])
    }

    /// The factors of entry (i, j) in u ← Ã v and in s ← Ãᵀ u, as the frames define them.
    fn factors(&self, frame: Frame, i: usize, j: usize, lane: usize) -> (f64, f64) {
        let w = self.weights.at(i, self.sets[lane]);
        match frame {
            Frame::Step => (w * self.scale(j), w * self.scale(j)),
            Frame::Start => (w, w * self.scale(j)),
            Frame::Certificate => (1.0, w * w),
        }
    }
}

fn blocks(rows: usize, n: usize, lanes: usize, stream: &Stream) -> (Vec<f64>, Vec<f64>) {
    let block = |from: u64, size: usize| -> Vec<f64> {
        (0..size).map(|i| stream.normal(from + i as u64)).collect()
    };
    (block(2_000_000, n * lanes), block(3_000_000, rows * lanes))
}

fn pass(
    operator: &dyn Operator,
    frame: Frame,
    setting: &Setting,
    v: &[f64],
    alpha: &[f64],
    u: &mut [f64],
) -> (Vec<f64>, Vec<f64>) {
    let lanes = setting.sets.len();
    // What these hold before is no business of the pass.
    let mut s = vec![f64::NAN; operator.columns() * lanes];
    let mut squares = vec![f64::NAN; lanes];
    operator.pass(Pass {
        frame,
        sets: &setting.sets,
        strengths: &setting.strengths,
        v,
        alpha,
        u,
        s: &mut s,
        squares: &mut squares,
        scratch: &mut operator.scratch(lanes),
    });
    (s, squares)
}

/// |found − expected| ≤ terms · ε · Σ|terms|: a sum in any order, and a few factors a term.
fn near(found: f64, expected: f64, magnitude: f64, terms: usize) -> bool {
    (found - expected).abs() <= (terms + 8) as f64 * f64::EPSILON * magnitude
}

fn compare_pass(
    dense: &[Vec<f64>],
    matrix: &StoredRows,
    setting: &Setting,
    frame: Frame,
    stream: &Stream,
) {
    let (m, n, k) = (dense.len(), dense[0].len(), setting.sets.len());
    let weighted = Weighted::new(matrix, &setting.weights, setting.scales.as_deref());
    let (v, before) = blocks(m, n, k, stream);
    let mut u = before.clone();
    let (s, squares) = pass(&weighted, frame, setting, &v, &setting.alpha, &mut u);
    for l in 0..k {
        let mut sum = vec![(0.0, 0.0); n];
        for i in 0..m {
            let (mut dot, mut size) = (0.0, 0.0);
            for j in 0..n {
                let term = setting.factors(frame, i, j, l).0 * dense[i][j] * v[j * k + l];
                dot += term;
                size += term.abs();
            }
            let carried = setting.alpha[l] * before[i * k + l];
            let (new, size) = (dot - carried, size + carried.abs());
            assert!(near(u[i * k + l], new, size, n), "u of row {i}, lane {l}");
            for j in 0..n {
                let factor = setting.factors(frame, i, j, l).1 * dense[i][j];
                sum[j].0 += factor * new;
                sum[j].1 += factor.abs() * size;
            }
        }
        for (j, (expected, size)) in sum.iter().enumerate() {
            assert!(near(s[j * k + l], *expected, *size, m + n), "s of column {j}, lane {l}");
        }
        let found: f64 = (0..m)
            .map(|i| {
                let w = setting.weights.at(i, setting.sets[l]);
                let g = if frame == Frame::Certificate { w } else { 1.0 };
                (g * u[i * k + l]).powi(2)
            })
            .sum();
        assert!(near(squares[l], found, found, m), "squares of lane {l}");
    }
}

/// Ãᵀu alone: with v = 0 and α = −1 the pass leaves u as it is.
fn adjoint_symmetry(operator: &dyn Operator, setting: &Setting, stream: &Stream) {
    let (rows, n, k) = (operator.rows(), operator.columns(), setting.sets.len());
    let (v, u) = blocks(rows, n, k, stream);
    let mut image = vec![0.0; rows * k];
    pass(operator, Frame::Step, setting, &v, &vec![0.0; k], &mut image);
    let mut kept = u.clone();
    let (pulled, _) =
        pass(operator, Frame::Step, setting, &vec![0.0; n * k], &vec![-1.0; k], &mut kept);
    assert_eq!(kept, u, "u is left as it is");
    for l in 0..k {
        let along = |a: &[f64], b: &[f64]| -> (f64, f64) {
            let terms = a.iter().zip(b).skip(l).step_by(k).map(|(a, b)| a * b);
            terms.fold((0.0, 0.0), |(sum, size), term| (sum + term, size + f64::abs(term)))
        };
        let (left, left_size) = along(&image, &u);
        let (right, right_size) = along(&v, &pulled);
        let norm = |a: &[f64]| a.iter().skip(l).step_by(k).map(|x| x * x).sum::<f64>().sqrt();
        // Either product is off by ε Σ|ã||u||v| a term at most, and that is below ‖Ã‖_F‖u‖‖v‖ with
        // ‖Ã‖_F ≤ √(rows·n)·max|ã|: values stay below 6, two factors below 2 each.
        let size = left_size + right_size + 24.0 * ((rows * n) as f64).sqrt() * norm(&u) * norm(&v);
        assert!(near(left, right, size, rows + n), "lane {l}: {left} {right}");
    }
}

proptest! {
    #![proptest_config(ProptestConfig {
        cases: 60, failure_persistence: None, rng_seed: proptest::test_runner::RngSeed::Fixed(5),
        ..ProptestConfig::default()
    })]

    #[test]
    fn a_pass_equals_the_dense_reference(
        shape in 0..5usize, storage in 0..3usize, lanes in 0..5usize, zero: bool, seed in 0..1000u64,
    ) {
        let stream = Stream::new(seed, 1);
        let (matrix, dense) = build(SHAPES[shape], STORAGES[storage], &stream);
        let setting = Setting::new(dense.len(), dense[0].len(), LANES[lanes], zero, &stream);
        for frame in [Frame::Step, Frame::Start, Frame::Certificate] {
            compare_pass(&dense, &matrix, &setting, frame, &stream);
        }
    }
}

#[test]
fn every_shape_storage_and_width_equals_the_dense_reference() {
    for (number, shape) in SHAPES.into_iter().enumerate() {
        for storage in STORAGES {
            for lanes in LANES {
                for zero in [false, true] {
                    let stream = Stream::new(number as u64, lanes as u64);
                    let (matrix, dense) = build(shape, storage, &stream);
                    let setting = Setting::new(dense.len(), dense[0].len(), lanes, zero, &stream);
                    compare_pass(&dense, &matrix, &setting, Frame::Step, &stream);
                    let scales = setting.scales.as_deref();
                    let weighted = Weighted::new(&matrix, &setting.weights, scales);
                    adjoint_symmetry(&weighted, &setting, &stream);
                    let stacked = Stacked::new(&weighted, setting.penalty.as_deref());
                    adjoint_symmetry(&stacked, &setting, &stream);
                }
            }
        }
    }
}

/// Penalty rows against their definition: λ p_j d_j v_j below the matrix's rows.
#[test]
fn penalty_rows_are_what_they_are_called() {
    let stream = Stream::new(8, 8);
    let (matrix, dense) = build(Shape::EmptyRows, Storage::Double, &stream);
    let (m, n) = (dense.len(), dense[0].len());
    for lanes in LANES {
        let setting = Setting::new(m, n, lanes, true, &stream);
        let weighted = Weighted::new(&matrix, &setting.weights, setting.scales.as_deref());
        let stacked = Stacked::new(&weighted, setting.penalty.as_deref());
        for frame in [Frame::Step, Frame::Start] {
            let (v, before) = blocks(m + n, n, lanes, &stream);
            let mut u = before.clone();
            let (_, squares) = pass(&stacked, frame, &setting, &v, &setting.alpha, &mut u);
            for (l, square) in squares.iter().enumerate() {
                for j in 0..n {
                    let place = j * lanes + l;
                    let d = if frame == Frame::Step { setting.scale(j) } else { 1.0 };
                    let expected = setting.strengths[l] * setting.penalty(j) * d * v[place];
                    let carried = setting.alpha[l] * before[m * lanes + place];
                    let size = expected.abs() + carried.abs();
                    assert!(near(u[m * lanes + place], expected - carried, size, 4));
                }
                let total: f64 = u.iter().skip(l).step_by(lanes).map(|u| u * u).sum();
                assert!(near(*square, total, total, m + n));
            }
        }
    }
}
