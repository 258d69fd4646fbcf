//! Memory that reading a matrix takes, counted by the allocator: never a clock, and no mapped pages.
//!
//! All in one test, for the count is the whole process's.

use std::alloc::{GlobalAlloc, Layout, System};
use std::io::Write;
use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicUsize, Ordering::Relaxed};

use ellbow::base::random::Stream;
use ellbow::files::matrix::{self, ReadOptions};
use ellbow::files::vector::{self, NonFinite};

struct Counting;

static NOW: AtomicUsize = AtomicUsize::new(0);
static PEAK: AtomicUsize = AtomicUsize::new(0);

fn grow(bytes: usize) {
    PEAK.fetch_max(NOW.fetch_add(bytes, Relaxed) + bytes, Relaxed);
}

// Safety: every call is passed on to the system's allocator unchanged; only sizes are counted.
unsafe impl GlobalAlloc for Counting {
    unsafe fn alloc(&self, layout: Layout) -> *mut u8 {
        grow(layout.size());
        unsafe { System.alloc(layout) }
    }
    unsafe fn dealloc(&self, at: *mut u8, layout: Layout) {
        NOW.fetch_sub(layout.size(), Relaxed);
        unsafe { System.dealloc(at, layout) }
    }
    unsafe fn alloc_zeroed(&self, layout: Layout) -> *mut u8 {
        grow(layout.size());
        unsafe { System.alloc_zeroed(layout) }
    }
    unsafe fn realloc(&self, at: *mut u8, layout: Layout, size: usize) -> *mut u8 {
        // Counted as if both blocks existed for a moment, as they may.
        grow(size);
        NOW.fetch_sub(layout.size(), Relaxed);
        unsafe { System.realloc(at, layout, size) }
    }
}

#[global_allocator]
static ALLOCATOR: Counting = Counting;

/// Peak of allocated bytes while `run` runs, above what was allocated before.
fn peak<T>(run: impl FnOnce() -> T) -> (T, usize) {
    let before = NOW.load(Relaxed);
    PEAK.store(before, Relaxed);
    let result = run();
    (result, PEAK.load(Relaxed) - before)
}

const ROWS: u64 = 20_000;
const COLUMNS: u64 = 30_000;
const ENTRIES: u64 = 2_000_000;

/// Text of a matrix: rows in order or mixed, columns always mixed, no entry twice.
fn text(field: &str, mixed: bool) -> Vec<u8> {
    let stream = Stream::new(5, 0);
    let mut out = Vec::new();
    writeln!(out, "%%MatrixMarket matrix coordinate {field} general").unwrap();
    writeln!(out, "{ROWS} {COLUMNS} {ENTRIES}").unwrap();
    for k in 0..ENTRIES {
        // 7919 and 20,000 have no common factor, so this visits every row equally often.
        let row = if mixed { k * 7919 % ROWS } else { k * ROWS / ENTRIES };
        let turn = if mixed { k / ROWS } else { k % (ENTRIES / ROWS) };
        let column = (turn * 10_007 + row * 17) % COLUMNS;
        write!(out, "{} {}", row + 1, column + 1).unwrap();
        match field {
            "real" => writeln!(out, " {:.9}", stream.normal(k)).unwrap(),
            "integer" => writeln!(out, " {}", k % 100 + 1).unwrap(),
            _ => writeln!(out).unwrap(),
        }
    }
    out
}

fn gz(text: &[u8]) -> Vec<u8> {
    let mut out = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
    out.write_all(text).unwrap();
    out.finish().unwrap()
}

/// The bounds leave room for what is made of the matrix while it is still there: 24 bytes an entry
/// in all, 12 for a pattern.
fn check(path: &Path, storage: &str, bound: f64) {
    let (loaded, bytes) = peak(|| matrix::read(path, &ReadOptions::default()).unwrap());
    assert_eq!((loaded.value.storage_name(), loaded.value.entries()), (storage, ENTRIES as usize));
    let each = bytes as f64 / ENTRIES as f64;
    println!("{}: {each:.2} bytes an entry at the peak", path.display());
    assert!(each <= bound, "{}: {each} bytes an entry, at most {bound}", path.display());
}

fn data(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data").join(name)
}

#[test]
fn reading_keeps_within_its_bounds() {
    let home = tempfile::tempdir().unwrap();
    let file = |name: &str, content: &[u8]| {
        let path = home.path().join(name);
        std::fs::write(&path, content).unwrap();
        path
    };
    for mixed in [false, true] {
        let order = if mixed { "mixed" } else { "ordered" };
        check(&file(&format!("real_{order}.mtx"), &text("real", mixed)), "f64", 20.0);
        check(&file(&format!("pattern_{order}.mtx"), &text("pattern", mixed)), "pattern", 11.0);
    }
    check(&file("integer.mtx", &text("integer", true)), "f32", 20.0);
    check(&file("real.mtx.gz", &gz(&text("real", true))), "f64", 20.0);
    check(&file("pattern.mtx.gz", &gz(&text("pattern", false))), "pattern", 11.0);
    one_dense_row_out_of_order(&file);
    hostile_files_stay_small(&file);
    damaged_files_stay_small(&file);
}

/// The sort of a row needs memory for that row: all entries here.
fn one_dense_row_out_of_order(file: &dyn Fn(&str, &[u8]) -> PathBuf) {
    let mut out = Vec::new();
    writeln!(out, "%%MatrixMarket matrix coordinate real general\n1 {ENTRIES} {ENTRIES}").unwrap();
    (0..ENTRIES).for_each(|k| writeln!(out, "1 {} {}.1", ENTRIES - k, k % 10).unwrap());
    // 12 of the matrix and 8 of the keys it is sorted by; the rest does not grow with the entries.
    check(&file("row.mtx", &out), "f64", 20.0 + 4096.0 / ENTRIES as f64);
}

const MEBIBYTE: usize = 1 << 20;

/// Files that declare or unpack to far more than they hold.
fn hostile_files_stay_small(file: &dyn Fn(&str, &[u8]) -> PathBuf) {
    let banner = "%%MatrixMarket matrix coordinate real general\n";
    let zeros = gz(&vec![b'0'; 300 * MEBIBYTE]);
    let lines = gz(&[banner.as_bytes(), &b"%\n".repeat(8 * MEBIBYTE)].concat());
    for (name, content) in [
        ("entries", format!("{banner}9 9 18446744073709551615\n1 1 1\n").into_bytes()),
        ("rows", format!("{banner}4294967295 9 1\n1 1 1\n").into_bytes()),
        ("array", b"%%MatrixMarket matrix array real general\n4294967295 4294967295\n1\n".to_vec()),
        ("packed rows", gz(format!("{banner}4294967295 9 1\n1 1 1\n").as_bytes())),
        ("zeros", zeros),
        ("lines", lines),
        ("long line", vec![b'1'; 40 * MEBIBYTE]),
        ("npz rows", std::fs::read(data("shape_huge.npz")).unwrap()),
    ] {
        let path = file(name, &content);
        let (outcome, bytes) = peak(|| matrix::read(&path, &ReadOptions::default()).err());
        assert!(outcome.is_some_and(|error| error.is_user_fault()), "{name}");
        assert!(bytes < 50 * MEBIBYTE, "{name}: {bytes} bytes");
        let (_, bytes) = peak(|| vector::read(&path, NonFinite::Keep).err());
        assert!(bytes < 50 * MEBIBYTE, "{name} as a vector: {bytes} bytes");
    }
}

/// Flips bits of each byte of small files in turn: any outcome but a panic or a wild allocation will
/// do, and what is accepted must be a matrix.
fn damaged_files_stay_small(file: &dyn Fn(&str, &[u8]) -> PathBuf) {
    let text =
        b"%%MatrixMarket matrix coordinate real general\n% c\n3 4 3\n1 1 .5\n3 4 -1e3\n2 2 7\n";
    let mut samples = vec![text.to_vec(), gz(text)];
    for name in ["csr.npz", "csc.npz", "coo.npz", "big_endian_fortran.npy"] {
        samples.push(std::fs::read(data(name)).unwrap());
    }
    for (number, sample) in samples.iter().enumerate() {
        for place in 0..sample.len() {
            let mut damaged = sample.clone();
            damaged[place] ^= [0x01, 0x80, 0xff][place % 3];
            let path = file("damaged", &damaged);
            let (loaded, bytes) = peak(|| matrix::read(&path, &ReadOptions::default()));
            match loaded {
                Ok(loaded) => assert!(loaded.value.rows() > 0),
                Err(error) => assert!(error.is_user_fault(), "{error}"),
            }
            assert!(bytes < 50 * MEBIBYTE, "sample {number}, byte {place}: {bytes} bytes");
            let (_, bytes) = peak(|| vector::read(&path, NonFinite::Keep));
            assert!(bytes < 50 * MEBIBYTE, "sample {number}, byte {place}: {bytes} bytes");
        }
    }
}
