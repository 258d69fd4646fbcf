//! What the checks against the outside share: files, solves, distances.

// Every test binary compiles this module and uses a part of it.
#![allow(dead_code)]

use std::path::{Path, PathBuf};

use ellbow::files::{self, matrix::ReadOptions, vector::NonFinite};
use ellbow::job::{Command, Finished, Settings, Typed, conduct};
use ellbow::operator::{RowWeights, StoredRows, Weighted};
use ellbow::report::record::Summary;
use ellbow::solve::direct::Dense;
use ellbow::solve::engine::Unwatched;
use ellbow::solve::{Method, Solved, StopRules};
use ellbow::sweep::{self, Request, Scaling, Strengths, Sweep};
use ellbow::team::Threads;
use ndarray::Array2;

pub const METHODS: [Method; 3] = [Method::Lsqr, Method::Lsmr, Method::Cgls];

pub fn data_path(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data").join(name)
}

pub fn matrix(name: &str) -> StoredRows {
    let read = files::matrix::read(&data_path(name), &ReadOptions::default()).unwrap();
    StoredRows::build(read.value, None)
}

pub fn vector(name: &str) -> Array2<f64> {
    files::vector::read(&data_path(name), NonFinite::Refuse).unwrap().value
}

/// A system and how it is to be solved; fields are changed where a check needs it.
pub struct Case {
    pub matrix: StoredRows,
    pub weights: RowWeights,
    pub data: Array2<f64>,
    pub reference: Option<Array2<f64>>,
    pub penalty: Option<Vec<f64>>,
    pub method: Method,
    pub scaling: Scaling,
    pub gradient_tolerance: f64,
    pub max_iterations: u64,
}

impl Case {
    /// Unweighted, LSQR, to rounding level.
    pub fn new(matrix: StoredRows, data: Vec<f64>) -> Self {
        let data = Array2::from_shape_vec((data.len(), 1), data).unwrap();
        Self {
            matrix,
            weights: RowWeights::Ones,
            data,
            reference: None,
            penalty: None,
            method: Method::Lsqr,
            scaling: Scaling::Auto,
            gradient_tolerance: 0.0,
            max_iterations: 20_000,
        }
    }

    pub fn from_files(matrix_name: &str, data_name: &str) -> Self {
        let data = vector(data_name).into_raw_vec_and_offset().0;
        Self::new(matrix(matrix_name), data)
    }

    pub fn dense(rows: usize, columns: usize, a: &[f64], data: Vec<f64>) -> Self {
        Self::new(StoredRows::from_dense(rows, columns, a), data)
    }

    pub fn request(&self, strengths: &[f64]) -> Request<'_> {
        Request {
            matrix: &self.matrix,
            weights: &self.weights,
            data: self.data.view(),
            reference: self.reference.as_ref(),
            start: None,
            penalty: self.penalty.as_deref(),
            held: None,
            method: self.method,
            scaling: self.scaling,
            strengths: Strengths::Given(strengths.to_vec()),
            rules: StopRules {
                gradient_tolerance: self.gradient_tolerance,
                residual_tolerance: 0.0,
                noise_factor: None,
                max_iterations: self.max_iterations,
                time_limit: None,
            },
        }
    }

    pub fn sweep(&self, strengths: &[f64]) -> Sweep {
        sweep::run(&self.request(strengths), &Unwatched)
    }

    pub fn solve(&self, strength: f64) -> Solved {
        self.sweep(&[strength]).sets.remove(0).solved.remove(0)
    }

    pub fn decompose(&self) -> Dense {
        Dense::new(&Weighted::new(&self.matrix, &self.weights, None), 0).unwrap()
    }
}

pub fn norm(values: &[f64]) -> f64 {
    values.iter().map(|v| v * v).sum::<f64>().sqrt()
}

/// ‖a − b‖/‖b‖.
pub fn distance(a: &[f64], b: &[f64]) -> f64 {
    assert_eq!(a.len(), b.len());
    let difference: Vec<f64> = a.iter().zip(b).map(|(a, b)| a - b).collect();
    norm(&difference) / norm(b)
}

/// Fails unless |found − expected| ≤ relative·|expected|; prints the figures either way.
#[track_caller]
pub fn check(what: &str, found: f64, expected: f64, relative: f64) {
    let error = (found - expected).abs() / expected.abs();
    println!("{what}: {found:.14e}, expected {expected:.14e}, relative error {error:.1e}");
    assert!(
        error <= relative,
        "{what}: {found:e} instead of {expected:e}, {error:e} > {relative:e}"
    );
}

/// Half a unit in the last of the decimals that a source prints.
pub fn half_unit(decimals: i32) -> f64 {
    0.5 * 10f64.powi(-decimals)
}

/// Fails unless the figure, rounded as its source prints it, is what the source prints.
#[track_caller]
pub fn check_printed(what: &str, found: f64, printed: f64, decimals: i32) {
    let error = (found - printed).abs();
    println!("{what}: {found:.14e}, printed {printed}, difference {error:.1e}");
    // A source may have rounded a figure that ends near a half either way: a part in a thousand.
    assert!(error <= 1.001 * half_unit(decimals), "{what}: {found} is not {printed}");
}

/// A job in a folder of its own, from files to its record.
pub struct JobFolder {
    pub folder: tempfile::TempDir,
}

impl JobFolder {
    pub fn new() -> Self {
        Self { folder: tempfile::tempdir().unwrap() }
    }

    pub fn write(&self, name: &str, text: &str) -> PathBuf {
        let path = self.folder.path().join(name);
        std::fs::write(&path, text).unwrap();
        path
    }

    /// Writes a matrix with all its digits, as Matrix Market coordinates.
    pub fn write_matrix(&self, name: &str, matrix: &StoredRows) -> PathBuf {
        use std::fmt::Write as _;
        let (m, n, entries) = (matrix.rows(), matrix.columns(), matrix.entries());
        let mut text =
            format!("%%MatrixMarket matrix coordinate real general\n{m} {n} {entries}\n");
        for i in 0..m {
            for (j, a) in matrix.row(i).entries() {
                writeln!(text, "{} {} {a:e}", i + 1, j + 1).unwrap();
            }
        }
        self.write(name, &text)
    }

    pub fn write_values(&self, name: &str, values: &[f64]) -> PathBuf {
        let lines: Vec<String> = values.iter().map(|v| format!("{v:e}\n")).collect();
        self.write(name, &lines.concat())
    }

    pub fn solve(&self, typed: Typed, out: &str) -> Summary {
        let typed = Typed { out: Some(self.folder.path().join(out)), ..typed };
        let settings = Settings::new(Command::Solve, &typed).unwrap();
        let threads = Threads::resolve(Some(2));
        match conduct(&settings, &threads, &Unwatched).unwrap() {
            Finished::New(summary) => *summary,
            Finished::Before(_) => panic!("the folder is new"),
        }
    }

    pub fn model(&self, out: &str) -> Vec<f64> {
        let path = self.folder.path().join(out).join("model.npy");
        let read = files::vector::read(&path, NonFinite::Refuse).unwrap();
        read.value.into_raw_vec_and_offset().0
    }
}
