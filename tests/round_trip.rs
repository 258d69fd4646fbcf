//! Random matrices, written by plain code in every form, come back bit for bit, for any number of
//! threads.

use std::io::Write;
use std::path::Path;

use ellbow::files::matrix::{self, ReadOptions};
use ellbow::files::vector::{self, NonFinite};
use ellbow::files::{Folder, Loaded};
use ellbow::operator::CompressedRows;
use proptest::prelude::*;

/// A dense matrix by rows, most entries zero.
#[derive(Debug, Clone)]
struct Dense {
    rows: usize,
    columns: usize,
    values: Vec<f64>,
}

impl Dense {
    fn at(&self, i: usize, j: usize) -> f64 {
        self.values[i * self.columns + j]
    }

    /// (row, column, value) of the non-zeros, column by column: not the order they are stored in.
    fn entries(&self) -> Vec<(usize, usize, f64)> {
        let places = (0..self.columns).flat_map(|j| (0..self.rows).map(move |i| (i, j)));
        places.map(|(i, j)| (i, j, self.at(i, j))).filter(|entry| entry.2 != 0.0).collect()
    }
}

fn number() -> impl Strategy<Value = f64> {
    prop_oneof![
        6 => Just(0.0),
        2 => prop::num::f64::NORMAL | prop::num::f64::SUBNORMAL,
        1 => prop::num::f32::NORMAL.prop_map(f64::from),
        1 => (-1000i32..1000).prop_map(f64::from),
    ]
}

fn dense() -> impl Strategy<Value = Dense> {
    (1usize..12, 1usize..12).prop_flat_map(|(rows, columns)| {
        prop::collection::vec(number(), rows * columns).prop_map(move |values| Dense {
            rows,
            columns,
            values,
        })
    })
}

/// Mirrors the lower triangle, with a sign; a negative one clears the diagonal.
fn mirrored(a: &Dense, sign: f64) -> Dense {
    let n = a.rows.min(a.columns);
    let value = |i: usize, j: usize| match i.cmp(&j) {
        std::cmp::Ordering::Greater => a.at(i, j),
        std::cmp::Ordering::Less => sign * a.at(j, i),
        std::cmp::Ordering::Equal if sign < 0.0 => 0.0,
        std::cmp::Ordering::Equal => a.at(i, i),
    };
    let values = (0..n * n).map(|place| value(place / n, place % n)).collect();
    Dense { rows: n, columns: n, values }
}

fn load(folder: &Path, name: &str, content: &[u8]) -> Loaded<CompressedRows> {
    let path = folder.join(name);
    std::fs::write(&path, content).unwrap();
    matrix::read(&path, &ReadOptions::default()).unwrap()
}

/// Compares bits of every entry, and that nothing else is stored.
fn check(loaded: &CompressedRows, wanted: &Dense) -> Result<(), TestCaseError> {
    prop_assert_eq!((loaded.rows(), loaded.columns()), (wanted.rows, wanted.columns));
    for i in 0..wanted.rows {
        let found: Vec<(usize, u64)> =
            loaded.row(i).entries().map(|(j, v)| (j, v.to_bits())).collect();
        let row = (0..wanted.columns).map(|j| (j, wanted.at(i, j)));
        let stored: Vec<(usize, u64)> =
            row.filter(|(_, v)| *v != 0.0).map(|(j, v)| (j, v.to_bits())).collect();
        prop_assert_eq!(found, stored);
    }
    Ok(())
}

fn coordinate(a: &Dense, field: &str, symmetry: &str) -> String {
    let lower = symmetry != "general";
    let entries: Vec<_> = a.entries().into_iter().filter(|&(i, j, _)| !lower || i >= j).collect();
    let mut text = format!("%%MatrixMarket matrix coordinate {field} {symmetry}\n");
    text += &format!("{} {} {}\n", a.rows, a.columns, entries.len());
    for (i, j, value) in entries {
        text += &match field {
            "pattern" => format!("{} {}\n", i + 1, j + 1),
            _ => format!("{} {} {value:e}\n", i + 1, j + 1),
        };
    }
    text
}

fn array(a: &Dense, symmetry: &str) -> String {
    let mut text =
        format!("%%MatrixMarket matrix array real {symmetry}\n{} {}\n", a.rows, a.columns);
    for j in 0..a.columns {
        let first = match symmetry {
            "general" => 0,
            "symmetric" => j,
            _ => j + 1,
        };
        (first..a.rows).for_each(|i| text += &format!("{}\n", a.at(i, j)));
    }
    text
}

fn npy(descr: &str, fortran: bool, shape: &str, raw: &[u8]) -> Vec<u8> {
    let order = if fortran { "True" } else { "False" };
    let header = format!("{{'descr': '{descr}', 'fortran_order': {order}, 'shape': {shape}, }}\n");
    let mut out = b"\x93NUMPY\x01\x00".to_vec();
    out.extend((header.len() as u16).to_le_bytes());
    out.extend(header.as_bytes());
    out.extend(raw);
    out
}

/// One-dimensional member of 64-bit little-endian numbers.
fn member(descr: &str, numbers: impl Iterator<Item = [u8; 8]>) -> Vec<u8> {
    let raw: Vec<u8> = numbers.flatten().collect();
    npy(descr, false, &format!("({},)", raw.len() / 8), &raw)
}

/// An archive as SciPy writes it; `format` is csr, csc or coo.
fn npz(a: &Dense, format: &str, deflate: bool) -> Vec<u8> {
    let whole = |list: &[usize]| member("<i8", list.iter().map(|&i| (i as i64).to_le_bytes()));
    let mut entries = a.entries();
    if format == "csr" {
        entries.sort_by_key(|&(i, j, _)| (i, std::cmp::Reverse(j)));
    }
    let rows: Vec<usize> = entries.iter().map(|entry| entry.0).collect();
    let columns: Vec<usize> = entries.iter().map(|entry| entry.1).collect();
    let pointers = |lines: &[usize], count: usize| -> Vec<usize> {
        (0..=count).map(|line| lines.iter().filter(|&&other| other < line).count()).collect()
    };
    let mut members = vec![
        ("format.npy", npy("|S3", false, "()", format.as_bytes())),
        ("shape.npy", whole(&[a.rows, a.columns])),
        ("data.npy", member("<f8", entries.iter().map(|entry| entry.2.to_le_bytes()))),
    ];
    members.extend(match format {
        "csr" => {
            [("indices.npy", whole(&columns)), ("indptr.npy", whole(&pointers(&rows, a.rows)))]
        }
        "csc" => {
            [("indices.npy", whole(&rows)), ("indptr.npy", whole(&pointers(&columns, a.columns)))]
        }
        _ => [("row.npy", whole(&rows)), ("col.npy", whole(&columns))],
    });
    let method =
        if deflate { zip::CompressionMethod::Deflated } else { zip::CompressionMethod::Stored };
    let options = zip::write::SimpleFileOptions::default().compression_method(method);
    let mut archive = zip::ZipWriter::new(std::io::Cursor::new(Vec::new()));
    for (name, content) in members {
        archive.start_file(name, options).unwrap();
        archive.write_all(&content).unwrap();
    }
    archive.finish().unwrap().into_inner()
}

proptest! {
    #![proptest_config(ProptestConfig::with_cases(64))]

    #[test]
    fn matrix_market_text(a in dense()) {
        let home = tempfile::tempdir().unwrap();
        check(&load(home.path(), "a", coordinate(&a, "real", "general").as_bytes()).value, &a)?;
        check(&load(home.path(), "a", array(&a, "general").as_bytes()).value, &a)?;
        for (symmetry, sign) in [("symmetric", 1.0), ("skew-symmetric", -1.0)] {
            let b = mirrored(&a, sign);
            check(&load(home.path(), "a", coordinate(&b, "real", symmetry).as_bytes()).value, &b)?;
            check(&load(home.path(), "a", array(&b, symmetry).as_bytes()).value, &b)?;
        }
        let mut ones = a.clone();
        ones.values.iter_mut().for_each(|value| *value = f64::from(u8::from(*value != 0.0)));
        let loaded = load(home.path(), "a", coordinate(&ones, "pattern", "general").as_bytes()).value;
        prop_assert_eq!(loaded.storage_name(), "pattern");
        check(&loaded, &ones)?;
    }

    #[test]
    fn scipy_archives(a in dense(), deflate: bool) {
        let home = tempfile::tempdir().unwrap();
        for format in ["csr", "csc", "coo"] {
            check(&load(home.path(), "a", &npz(&a, format, deflate)).value, &a)?;
        }
    }

    #[test]
    fn numpy_arrays(a in dense()) {
        let home = tempfile::tempdir().unwrap();
        let shape = format!("({}, {})", a.rows, a.columns);
        let by_column: Vec<f64> =
            (0..a.columns).flat_map(|j| (0..a.rows).map(move |i| (i, j))).map(|(i, j)| a.at(i, j)).collect();
        let little = |list: &[f64]| list.iter().flat_map(|v| v.to_le_bytes()).collect::<Vec<u8>>();
        let big: Vec<u8> = a.values.iter().flat_map(|v| v.to_be_bytes()).collect();
        for content in [
            npy("<f8", false, &shape, &little(&a.values)),
            npy(">f8", false, &shape, &big),
            npy("<f8", true, &shape, &little(&by_column)),
        ] {
            check(&load(home.path(), "a", &content).value, &a)?;
            let dense = vector::read(&home.path().join("a"), NonFinite::Refuse).unwrap().value;
            prop_assert_eq!(dense.as_slice().unwrap(), a.values.as_slice());
        }
        let folder = Folder::create(home.path()).unwrap();
        folder.write_npy("b.npy", &[a.rows, a.columns], &a.values).unwrap();
        let again = vector::read(&home.path().join("b.npy"), NonFinite::Refuse).unwrap().value;
        prop_assert_eq!(again.dim(), (a.rows, a.columns));
        prop_assert_eq!(again.as_slice().unwrap(), a.values.as_slice());
    }
}

/// Large enough for several batches and many pieces, with repeats whose sum depends on their order.
#[test]
fn any_number_of_threads_gives_the_same_bits() {
    let stream = ellbow::base::random::Stream::new(9, 9);
    let count = 400_000;
    let mut text = format!("%%MatrixMarket matrix coordinate real general\n300 200 {count}\n");
    let mut wanted = vec![0.0; 300 * 200];
    for k in 0..count {
        let (i, j) = (
            (stream.uniform(3 * k) * 300.0) as usize,
            (stream.uniform(3 * k + 1) * 200.0) as usize,
        );
        let value = (stream.normal(3 * k + 2) * 20.0).exp();
        text += &format!("{} {} {value}\n", i + 1, j + 1);
        wanted[i * 200 + j] += value;
    }
    let home = tempfile::tempdir().unwrap();
    let path = home.path().join("a.mtx");
    std::fs::write(&path, &text).unwrap();
    for threads in [1, 2, 5] {
        let pool = rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap();
        let loaded = pool.install(|| matrix::read(&path, &ReadOptions::default())).unwrap();
        let a = loaded.value;
        let mut found = vec![0.0; 300 * 200];
        for i in 0..300 {
            a.row(i).entries().for_each(|(j, value)| found[i * 200 + j] = value);
        }
        assert!(found == wanted, "{threads} threads");
        assert_eq!(loaded.facts.duplicates, count - a.entries() as u64);
    }
}
