//! Memory of the stored matrix, counted by the allocator: what building takes at its peak, and what
//! is left. All in one test, for the count is the whole process's.

use std::alloc::{GlobalAlloc, Layout, System};
use std::sync::atomic::{AtomicUsize, Ordering::Relaxed};

use ellbow::base::Grid;
use ellbow::operator::{CompressedRows, StoredRows};
use ellbow::system::rays::{self, Segment};
use sprs::CsMatI;

#[path = "support/grids.rs"]
mod grids;

struct Counting;

static NOW: AtomicUsize = AtomicUsize::new(0);
static PEAK: AtomicUsize = AtomicUsize::new(0);

fn grow(bytes: usize) {
    PEAK.fetch_max(NOW.fetch_add(bytes, Relaxed) + bytes, Relaxed);
}

// SAFETY: every call is passed on to the system's allocator unchanged; only sizes are counted.
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

const SIDE: usize = 128;
const VIEWS: usize = 90;
const RAYS: usize = 182;

/// Parallel rays one cell apart from all sides.
fn system(grid: &Grid) -> CompressedRows {
    let half = SIDE as f64 / 2.0;
    let ray = |i: usize| {
        let (sin, cos) =
            (std::f64::consts::PI * ((i / RAYS) as f64 + 0.25) / VIEWS as f64).sin_cos();
        let across = (i % RAYS) as f64 - RAYS as f64 / 2.0 + 0.5;
        let end =
            |along: f64| [half + across * cos - along * sin, half + across * sin + along * cos];
        Segment::new(&end(-2.0 * half), &end(2.0 * half))
    };
    let segments: Vec<Segment> = (0..VIEWS * RAYS).map(ray).collect();
    rays::matrix(grid, &segments).unwrap().matrix
}

/// The same matrix with its values kept as `keep` makes them.
fn kept<V>(matrix: CompressedRows, keep: impl Fn(f64) -> V) -> CsMatI<V, u32, usize> {
    let CompressedRows::Double(matrix) = matrix else { panic!("rays are f64") };
    let shape = matrix.shape();
    let (pointers, indices, values) = matrix.into_raw_storage();
    let values = values.into_iter().map(keep).collect();
    CsMatI::try_new(shape, pointers, indices, values).map_err(|(.., error)| error).unwrap()
}

/// Bytes an entry at the peak, compressed rows included, and of what is left.
fn bytes(make: impl FnOnce() -> CompressedRows, grid: Option<&Grid>) -> (f64, f64) {
    let before = NOW.load(Relaxed);
    let matrix = make();
    PEAK.store(NOW.load(Relaxed), Relaxed);
    let stored = StoredRows::build(matrix, grid);
    let entries = stored.entries() as f64;
    assert!(entries > 1.5e6);
    let each = |bytes: usize| (bytes - before) as f64 / entries;
    let (peak, left) = (each(PEAK.load(Relaxed)), each(NOW.load(Relaxed)));
    println!("{}, {:?}: {peak:.2} {left:.2}", stored.storage_name(), stored.cut());
    (peak, left)
}

#[test]
fn a_stored_matrix_keeps_within_its_bounds() {
    let grid = grids::grid(&[(SIDE, 1.0, 0.0), (SIDE, 1.0, 0.0)]);
    // The pool's own memory is there before anything is counted.
    drop(StoredRows::build(system(&grid), None));
    for grid_known in [Some(&grid), None] {
        for (make, peak_max, left_max) in [
            (&(|| system(&grid)) as &dyn Fn() -> CompressedRows, 24.0, 10.5),
            (&|| CompressedRows::Single(kept(system(&grid), |a| a as f32)), 16.0, 6.5),
            (&|| CompressedRows::Pattern(kept(system(&grid), |_| ())), 12.0, 2.5),
        ] {
            let (peak, left) = bytes(make, grid_known);
            assert!(peak <= peak_max, "{peak} bytes an entry at the peak, at most {peak_max}");
            assert!(left <= left_max, "{left} bytes an entry, at most {left_max}");
        }
    }
}
