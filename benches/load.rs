//! Speed of reading a matrix from text, beside what reading the same bytes once from memory takes.
//!
//! `cargo bench --bench load [-- MEGABYTES]` writes files of that size (200 unless said) and reads
//! each three times, checking what it gets.
//!
//! `cargo bench --bench load -- --file MATRIX.mtx --json` reads a file of yours once and prints a
//! line of JSON: seconds, bytes of the file, entries of the matrix, and the two divided.
//!
//! The number of threads is that of `RAYON_NUM_THREADS`, or of the processors.

use std::io::Write;
use std::path::Path;
use std::time::Instant;

use ellbow::base::random::Stream;
use ellbow::files::matrix::{self, ReadOptions};

const ROWS: u64 = 100_000;
const COLUMNS: u64 = 200_000;

/// How each kind of file states its values.
const KINDS: [(&str, &str, bool); 4] = [
    ("17 digits, by row", "real", false),
    ("17 digits, mixed", "real", true),
    ("integer, by row", "integer", false),
    ("pattern, by row", "pattern", false),
];

fn main() {
    let words: Vec<String> = std::env::args().skip(1).collect();
    let file = words.iter().position(|word| word == "--file");
    if let Some(place) = file {
        let path = words.get(place + 1).expect("--file is followed by a path");
        return once(Path::new(path), words.iter().any(|word| word == "--json"));
    }
    generated(words.iter().filter_map(|word| word.parse().ok()).next().unwrap_or(200));
}

/// Reads a file once: no second reading that would find it in a warmer machine.
fn once(path: &Path, json: bool) {
    let bytes = std::fs::metadata(path).expect("the file is there").len();
    let start = Instant::now();
    let loaded = matrix::read(path, &ReadOptions::default());
    let seconds = start.elapsed().as_secs_f64();
    let entries = loaded.unwrap_or_else(|error| panic!("{error}")).value.entries();
    let speed = bytes as f64 / seconds / 1e6;
    if json {
        let record = serde_json::json!({
            "seconds": seconds, "bytes": bytes, "entries": entries, "megabytes_per_second": speed,
        });
        println!("{record}");
    } else {
        println!("{seconds:.3} s, {speed:.1} MB/s, {entries} entries");
    }
}

fn generated(megabytes: u64) {
    let home = tempfile::tempdir().expect("a temporary folder");
    println!("{} threads", rayon::current_num_threads());
    for (name, field, mixed) in KINDS {
        let path = home.path().join("a.mtx");
        let (entries, sum) = write(&path, field, mixed, megabytes * 1_000_000);
        let bytes = std::fs::metadata(&path).expect("the file is there").len();
        let touch = seconds(|| touched(&path));
        let mut loaded = None;
        let load = seconds(|| {
            loaded = None;
            loaded = Some(matrix::read(&path, &ReadOptions::default()).expect("a good file"));
        });
        let a = loaded.expect("it was read").value;
        assert_eq!(a.entries() as u64, entries);
        let found: f64 =
            (0..a.rows()).flat_map(|i| a.row(i).entries()).map(|(j, v)| v * j as f64).sum();
        // Columns times values are added in another order than while writing.
        assert!(
            (found - sum).abs() <= 1e-9 * sum.abs().max(entries as f64 * COLUMNS as f64),
            "{found} {sum}"
        );
        println!(
            "{name:20} {:6.1} MB/s ({:5.1} M entries/s, {:.1} bytes an entry in the file); bytes alone {:6.0} MB/s",
            bytes as f64 / load / 1e6,
            entries as f64 / load / 1e6,
            bytes as f64 / entries as f64,
            bytes as f64 / touch / 1e6,
        );
    }
}

/// Best of three.
fn seconds(mut run: impl FnMut()) -> f64 {
    (0..3)
        .map(|_| {
            let start = Instant::now();
            run();
            start.elapsed().as_secs_f64()
        })
        .fold(f64::INFINITY, f64::min)
}

fn touched(path: &Path) {
    let content = std::fs::read(path).expect("the file is there");
    std::hint::black_box(content.iter().fold(0u8, |sum, byte| sum ^ byte));
}

/// Writes about so many bytes; the number of entries, and Σ column · value.
fn write(path: &Path, field: &str, mixed: bool, bytes: u64) -> (u64, f64) {
    let stream = Stream::new(5, 0);
    let value = |k: u64| match field {
        "real" => stream.normal(k),
        "integer" => (k % 100 + 1) as f64,
        _ => 1.0,
    };
    let entry = |k: u64, entries: u64| {
        let row = if mixed { k * 7919 % ROWS } else { k * ROWS / entries };
        // 10,007 has no factor in common with the columns, so no entry comes twice.
        let turn = if mixed { k / ROWS } else { k };
        (row, (turn * 10_007 + row * 17) % COLUMNS)
    };
    let line = |k: u64, entries: u64| {
        let (row, column) = entry(k, entries);
        match field {
            "pattern" => format!("{} {}\n", row + 1, column + 1),
            _ => format!("{} {} {}\n", row + 1, column + 1, value(k)),
        }
    };
    let sample: usize = (0..1000).map(|k| line(k * 7, 7000).len()).sum();
    let entries = bytes * 1000 / sample as u64;
    let mut out = std::io::BufWriter::new(std::fs::File::create(path).expect("a new file"));
    let head =
        format!("%%MatrixMarket matrix coordinate {field} general\n{ROWS} {COLUMNS} {entries}\n");
    out.write_all(head.as_bytes()).expect("room on the disk");
    let mut sum = 0.0;
    for k in 0..entries {
        out.write_all(line(k, entries).as_bytes()).expect("room on the disk");
        sum += entry(k, entries).1 as f64 * value(k);
    }
    out.flush().expect("room on the disk");
    (entries, sum)
}
