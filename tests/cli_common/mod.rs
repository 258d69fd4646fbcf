//! What the tests of the program share: a place for files, small systems, a dense truth.
#![allow(dead_code)] // Each test program uses its own part.

use std::fmt::Write as _;
use std::fs;
use std::path::{Path, PathBuf};

use assert_cmd::Command;
use ellbow::base::random::Stream;
use nalgebra::{DMatrix, DVector};
use ndarray::{Array2, ArrayD};
use ndarray_npy::{ReadNpyExt, write_npy};
use serde_json::Value;

/// The program, without what the environment says of threads and colours.
pub fn ellbow() -> Command {
    let mut command = Command::new(assert_cmd::cargo::cargo_bin!("ellbow"));
    for name in [
        "RAYON_NUM_THREADS",
        "OMP_NUM_THREADS",
        "SLURM_CPUS_PER_TASK",
        "NO_COLOR",
        "CLICOLOR_FORCE",
        "COLUMNS",
    ] {
        command.env_remove(name);
    }
    command
}

/// A committed file of the LSQ set.
pub fn lsq(name: &str) -> String {
    format!("{}/tests/data/lsq/{name}", env!("CARGO_MANIFEST_DIR"))
}

/// What a run of the program left behind.
pub struct Ran {
    pub code: i32,
    pub out: String,
    pub err: String,
}

/// A folder that the test writes and the program works in.
pub struct Place {
    folder: tempfile::TempDir,
}

impl Place {
    pub fn new() -> Self {
        Self { folder: tempfile::tempdir().unwrap() }
    }

    pub fn path(&self, name: impl AsRef<Path>) -> PathBuf {
        self.folder.path().join(name)
    }

    /// Runs the program here. `arguments` are split at blanks, so that a test reads like a shell.
    pub fn run(&self, arguments: &str) -> Ran {
        self.run_list(&arguments.split_whitespace().collect::<Vec<_>>())
    }

    pub fn run_list(&self, arguments: &[&str]) -> Ran {
        let output = ellbow().current_dir(self.folder.path()).args(arguments).output().unwrap();
        Ran {
            code: output.status.code().expect("an exit code"),
            out: String::from_utf8(output.stdout).unwrap(),
            err: String::from_utf8(output.stderr).unwrap(),
        }
    }

    /// Runs the program here; it must end with this code.
    #[track_caller]
    pub fn expect(&self, code: i32, arguments: &str) -> Ran {
        let ran = self.run(arguments);
        assert_eq!(ran.code, code, "{arguments}\n{}{}", ran.out, ran.err);
        ran
    }

    pub fn write(&self, name: &str, content: impl AsRef<[u8]>) {
        fs::write(self.path(name), content).unwrap();
    }

    pub fn read(&self, name: impl AsRef<Path>) -> String {
        fs::read_to_string(self.path(name)).unwrap()
    }

    pub fn bytes(&self, name: impl AsRef<Path>) -> Vec<u8> {
        fs::read(self.path(name)).unwrap()
    }

    /// As a Matrix Market file; zeros are not stored.
    pub fn matrix(&self, name: &str, matrix: &DMatrix<f64>) {
        let mut entries = String::new();
        let mut count = 0;
        for i in 0..matrix.nrows() {
            for j in 0..matrix.ncols() {
                if matrix[(i, j)] != 0.0 {
                    let _ = writeln!(entries, "{} {} {:e}", i + 1, j + 1, matrix[(i, j)]);
                    count += 1;
                }
            }
        }
        let head = "%%MatrixMarket matrix coordinate real general";
        let (m, n) = matrix.shape();
        self.write(name, format!("{head}\n{m} {n} {count}\n{entries}"));
    }

    pub fn vector(&self, name: &str, values: &[f64]) {
        write_npy(self.path(name), &ndarray::Array1::from(values.to_vec())).unwrap();
    }

    pub fn block(&self, name: &str, values: &Array2<f64>) {
        write_npy(self.path(name), values).unwrap();
    }

    pub fn array(&self, name: impl AsRef<Path>) -> ArrayD<f64> {
        ArrayD::<f64>::read_npy(fs::File::open(self.path(name)).unwrap()).unwrap()
    }

    /// The numbers of an array in file order.
    pub fn numbers(&self, name: impl AsRef<Path>) -> Vec<f64> {
        self.array(name).into_iter().collect()
    }

    pub fn summary(&self, folder: &str) -> Value {
        serde_json::from_str(&self.read(Path::new(folder).join("summary.json"))).unwrap()
    }
}

/// A number of a record, by JSON pointer.
#[track_caller]
pub fn number(record: &Value, pointer: &str) -> f64 {
    record
        .pointer(pointer)
        .and_then(Value::as_f64)
        .unwrap_or_else(|| panic!("{pointer} is no number"))
}

#[track_caller]
pub fn word<'a>(record: &'a Value, pointer: &str) -> &'a str {
    record
        .pointer(pointer)
        .and_then(Value::as_str)
        .unwrap_or_else(|| panic!("{pointer} is no text"))
}

/// A random sparse matrix of full column rank (its first n rows are near a multiple of I).
pub fn sparse(m: usize, n: usize, seed: u64) -> DMatrix<f64> {
    let stream = Stream::new(seed, 0);
    DMatrix::from_fn(m, n, |i, j| {
        let place = (i * n + j) as u64;
        if i == j {
            3.0 + stream.uniform(place)
        } else if stream.uniform(1_000_000 + place) < 0.3 {
            stream.normal(2_000_000 + place)
        } else {
            0.0
        }
    })
}

pub fn normals(count: usize, seed: u64) -> Vec<f64> {
    let stream = Stream::new(seed, 1);
    (0..count as u64).map(|i| stream.normal(i)).collect()
}

/// argmin ‖W(Ax − b)‖² + λ²‖P(x − x_ref)‖² by dense SVD of the stacked system.
pub fn truth(
    a: &DMatrix<f64>,
    b: &[f64],
    weights: &[f64],
    strength: f64,
    penalty: &[f64],
    reference: &[f64],
) -> Vec<f64> {
    let (m, n) = a.shape();
    let stacked = DMatrix::from_fn(m + n, n, |i, j| match i.checked_sub(m) {
        None => weights[i] * a[(i, j)],
        Some(k) if k == j => strength * penalty[j],
        Some(_) => 0.0,
    });
    let right = DVector::from_fn(m + n, |i, _| match i.checked_sub(m) {
        None => weights[i] * b[i],
        Some(j) => strength * penalty[j] * reference[j],
    });
    stacked.svd(true, true).solve(&right, 0.0).unwrap().as_slice().to_vec()
}

/// [`truth`] with weights 1, penalty 1 and reference 0.
pub fn plain_truth(a: &DMatrix<f64>, b: &[f64], strength: f64) -> Vec<f64> {
    let (m, n) = a.shape();
    truth(a, b, &vec![1.0; m], strength, &vec![1.0; n], &vec![0.0; n])
}

/// ‖a − b‖ / ‖b‖.
#[track_caller]
pub fn distance(a: &[f64], b: &[f64]) -> f64 {
    assert_eq!(a.len(), b.len(), "as many values");
    let norm = |values: &mut dyn Iterator<Item = f64>| values.map(|v| v * v).sum::<f64>().sqrt();
    norm(&mut a.iter().zip(b).map(|(a, b)| a - b)) / norm(&mut b.iter().copied())
}

pub fn product(a: &DMatrix<f64>, x: &[f64]) -> Vec<f64> {
    (a * DVector::from_column_slice(x)).as_slice().to_vec()
}

pub fn norm(values: &[f64]) -> f64 {
    values.iter().map(|v| v * v).sum::<f64>().sqrt()
}

pub fn row(array: &ArrayD<f64>, i: usize) -> Vec<f64> {
    array.index_axis(ndarray::Axis(0), i).iter().copied().collect()
}

/// Lines of a csv file, split at commas; heading first.
pub fn csv(text: &str) -> Vec<Vec<String>> {
    text.lines().map(|line| line.split(',').map(str::to_owned).collect()).collect()
}
