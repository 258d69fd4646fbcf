//! One traversal of the tiles, by all threads of the pool it is called in.
//!
//! Bytes moved to and from memory in a pass with k lanes: the matrix, once where its slices stay
//! in the caches between dots and scatter ([`Way::OnePass`]) or twice ([`Way::TwoPhase`]); u read and
//! written and the push written and read, 32·m·k; v and s, once for every time that rows far apart
//! use them ([`super::pass::Way`] is chosen in `operator` by counting that).

use std::ops::Range;
use std::sync::atomic::{AtomicBool, AtomicUsize, Ordering};

use rayon::prelude::*;

use super::block::Block;
use super::row_order::RowOrder;
use super::schedule::{Schedule, Unit};
use super::tiles::{Cut, Tiles};
use super::twins::{Twin, loops, widths};
use super::value::Value;
use crate::base::sums::{self, PARALLEL_MIN, PIECE};

/// How a pass goes through the matrix. The bits are the same.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Way {
    /// Dots, then scatter, of a few slices at a time: the matrix is read from memory once.
    OnePass,
    /// Dots of all slices, then the scatter of all: the matrix is read twice, v and s as seldom
    /// as can be.
    TwoPhase,
}

impl Way {
    /// The word in settings and records.
    pub fn word(self) -> &'static str {
        match self {
            Self::OnePass => "one",
            Self::TwoPhase => "two-phase",
        }
    }
}

/// Products below which a pass stays on the calling thread: handing out work costs more. An
/// interpreter that looks for data races sees threads at sizes that it can bear.
const ALONE_MAX: usize = if cfg!(miri) { 1 << 8 } else { 1 << 16 };

/// Rows of a dot unit at most in two phases: with more, the rows' products leave the cache.
pub(crate) const UNIT_ROWS: usize = 1 << 14;

/// Dot units for each thread at least, so that none is left waiting for the last.
const UNITS_PER_THREAD: usize = 8;

/// The factors f (dot), h (scatter) and g (squares) of a row in a lane.
#[derive(Clone, Copy)]
pub struct Factors {
    /// f: multiplies aᵢᵀv.
    pub dot: f64,
    /// h: multiplies u before it goes into s.
    pub scatter: f64,
    /// g: multiplies u before it is squared.
    pub square: f64,
}

/// The blocks of one pass: row-major, lanes contiguous. Rows of u are those of the file, rows of v
/// and s the columns in inner order.
pub struct Lanes<'a> {
    /// k.
    pub count: usize,
    /// n×k.
    pub v: &'a [f64],
    /// k.
    pub alpha: &'a [f64],
    /// m×k.
    pub u: &'a mut [f64],
    /// n×k; overwritten.
    pub s: &'a mut [f64],
    /// k; overwritten.
    pub squares: &'a mut [f64],
    /// For the same matrix and at least k lanes.
    pub room: &'a mut Room,
}

/// Memory of a pass besides the blocks; made once, before the first.
#[derive(Debug, Default)]
pub struct Room {
    /// h·u in inner order of rows, m×k: what is scattered.
    push: Block,
    /// s of each group of bands, groups×n×k, where there is more than one.
    partial: Block,
    /// Squares of each slice, slices×k.
    squares: Vec<f64>,
    counters: Vec<AtomicUsize>,
}

impl Room {
    /// For passes of up to `lanes` lanes.
    pub fn new(cut: &Cut, groups: usize, lanes: usize) -> Self {
        let [push, partial, squares, counters] = Self::sizes(cut, groups, lanes);
        Self {
            push: Block::zeros(push),
            partial: Block::zeros(partial),
            squares: vec![0.0; squares],
            counters: (0..counters).map(|_| AtomicUsize::new(0)).collect(),
        }
    }

    /// What [`Room::new`] allocates.
    pub fn bytes(cut: &Cut, groups: usize, lanes: usize) -> u64 {
        let [push, partial, squares, counters] = Self::sizes(cut, groups, lanes);
        Block::bytes(push) + Block::bytes(partial) + 8 * (squares + counters) as u64
    }

    fn sizes(cut: &Cut, groups: usize, lanes: usize) -> [usize; 4] {
        let partials = if groups > 1 { groups } else { 0 };
        [
            cut.rows * lanes,
            partials * cut.columns * lanes,
            cut.slices() * lanes,
            Schedule::counters(cut, groups),
        ]
    }
}

/// How a pass is done.
pub struct Plan<'a> {
    /// Slices of each group with a partial s of its own; together all slices, in order.
    pub groups: &'a [Range<usize>],
    /// Which file row each inner row is; `None` if it is the same.
    pub rows: Option<&'a RowOrder>,
    /// Changes no bit.
    pub way: Way,
    /// Whose inner loops.
    pub twin: Twin,
}

/// One traversal. `factors(row, lane)` gives f, h, g of a file row.
///
/// Panics if a block is not of its documented shape, if groups are not the slices in order, if the
/// plan orders another number of rows, or if the processor cannot run the twin.
pub fn pass<V: Value>(
    tiles: &Tiles<V>,
    plan: &Plan<'_>,
    factors: &(impl Fn(usize, usize) -> Factors + Sync),
    lanes: Lanes<'_>,
) {
    let Lanes { count: k, v, alpha, u, s, squares, room } = lanes;
    let cut = tiles.cut();
    assert!(v.len() == cut.columns * k && s.len() == cut.columns * k, "v and s are n×k");
    assert!(u.len() == cut.rows * k && alpha.len() == k && squares.len() == k, "u is m×k");
    assert!(plan.rows.is_none_or(|rows| rows.row_at().len() == cut.rows), "one row per row");
    check_groups(cut, plan.groups);
    let [push, partial, slice_squares, counters] = Room::sizes(cut, plan.groups.len(), k);
    if k == 0 || cut.rows == 0 {
        // Without a slice there is no round, so nothing would begin the sums.
        s.fill(0.0);
        return squares.fill(0.0);
    }
    let alone = tiles.entries().saturating_mul(k) < ALONE_MAX;
    let threads = if alone { 1 } else { rayon::current_num_threads() };
    let schedule = schedule(cut, plan, threads);
    let counters = &mut room.counters[..counters];
    counters.iter_mut().for_each(|counter| *counter.get_mut() = 0);
    let several = plan.groups.len() > 1;
    let task = Task {
        tiles,
        plan,
        factors,
        k,
        v,
        alpha,
        u: Shared::new(u),
        push: Shared::new(&mut room.push[..push]),
        squares: Shared::new(&mut room.squares[..slice_squares]),
        s: Shared::new(if several { &mut room.partial[..partial] } else { &mut *s }),
    };
    let abandoned = AtomicBool::new(false);
    let counters = &*counters;
    // Units are disjoint and in order of their dependences: see `schedule`.
    on_threads(threads, &|| schedule.work(counters, &abandoned, &|unit| task.run(unit)));
    assert!(!abandoned.load(Ordering::Relaxed), "a thread of the pass panicked");
    if several {
        add_groups(&room.partial[..partial], s);
    }
    for (l, square) in squares.iter_mut().enumerate() {
        *square = sums::total(&room.squares[..slice_squares], k, l);
    }
}

fn check_groups(cut: &Cut, groups: &[Range<usize>]) {
    let mut next = 0;
    for group in groups {
        assert!(group.start == next && group.end >= next, "groups are the slices in order");
        next = group.end;
    }
    assert!(next == cut.slices(), "groups are all slices");
}

fn schedule<'a>(cut: &Cut, plan: &'a Plan<'_>, threads: usize) -> Schedule<'a> {
    let groups = plan.groups.len();
    match plan.way {
        // One slice is multiplied while the one before it is scattered: two are under way for
        // every two threads.
        Way::OnePass => Schedule::new(cut, plan.groups, threads.div_ceil(2 * groups), 1),
        Way::TwoPhase => {
            let share = cut.slices() / (threads * UNITS_PER_THREAD);
            let unit = share.min(UNIT_ROWS / cut.slice);
            Schedule::new(cut, plan.groups, usize::MAX, unit)
        }
    }
}

/// Runs `work` once on up to so many threads of the pool; halving needs no list, so a pass
/// allocates nothing. A thread that comes late finds no work left.
fn on_threads(threads: usize, work: &(impl Fn() + Sync)) {
    if threads <= 1 {
        return work();
    }
    let half = threads / 2;
    rayon::join(|| on_threads(threads - half, work), || on_threads(half, work));
}

/// s ← partial₀ + partial₁ + …, in group order for every element.
fn add_groups(partial: &[f64], s: &mut [f64]) {
    let n_k = s.len();
    let add = |(piece, s): (usize, &mut [f64])| {
        let from = piece * PIECE;
        s.copy_from_slice(&partial[from..from + s.len()]);
        for group in partial.chunks(n_k).skip(1) {
            for (s, p) in s.iter_mut().zip(&group[from..]) {
                *s += p;
            }
        }
    };
    if n_k < PARALLEL_MIN {
        s.chunks_mut(PIECE).enumerate().for_each(add);
    } else {
        s.par_chunks_mut(PIECE).enumerate().for_each(add);
    }
}

/// Numbers that several threads write, each its own part.
struct Shared<'a> {
    start: *mut f64,
    length: usize,
    owner: std::marker::PhantomData<&'a mut [f64]>,
}

// SAFETY: parts are handed out by `part`, whose callers promise that no two overlap in time.
#[allow(unsafe_code)]
unsafe impl Sync for Shared<'_> {}

impl<'a> Shared<'a> {
    fn new(numbers: &'a mut [f64]) -> Self {
        let (start, length) = (numbers.as_mut_ptr(), numbers.len());
        Self { start, length, owner: std::marker::PhantomData }
    }

    /// # Safety
    /// While the part is in use, no other thread may use a part that overlaps it.
    #[allow(unsafe_code, clippy::mut_from_ref)]
    unsafe fn part(&self, range: Range<usize>) -> &mut [f64] {
        assert!(range.start <= range.end && range.end <= self.length, "a part of the block");
        // SAFETY: in bounds, and not shared by the caller's promise.
        unsafe { std::slice::from_raw_parts_mut(self.start.add(range.start), range.len()) }
    }

    /// Where number `place` is: for parts that several threads only read.
    fn pointer(&self, place: usize) -> *const f64 {
        assert!(place <= self.length, "a place in the block");
        self.start.wrapping_add(place)
    }
}

struct Task<'a, V, F> {
    tiles: &'a Tiles<V>,
    plan: &'a Plan<'a>,
    factors: &'a F,
    k: usize,
    v: &'a [f64],
    alpha: &'a [f64],
    u: Shared<'a>,
    push: Shared<'a>,
    squares: Shared<'a>,
    s: Shared<'a>,
}

#[allow(unsafe_code)]
impl<V: Value, F: Fn(usize, usize) -> Factors + Sync> Task<'_, V, F> {
    fn run(&self, unit: Unit) {
        match unit {
            Unit::Dots { slices } if slices.is_empty() => {}
            Unit::Dots { slices } => {
                self.dots(slices.clone());
                slices.for_each(|slice| self.update(slice));
            }
            Unit::Scatter { group, tile, slices, first } => {
                self.scatter(group, tile, slices, first);
            }
        }
    }

    /// Slices of one band each: what a tile keeps together.
    fn by_band(&self, slices: Range<usize>) -> impl Iterator<Item = Range<usize>> + use<V, F> {
        let band = self.tiles.cut().band;
        let bands = slices.start / band..slices.end.div_ceil(band);
        bands.map(move |b| slices.start.max(b * band)..slices.end.min((b + 1) * band))
    }

    fn first_row(&self, slice: usize) -> usize {
        let cut = self.tiles.cut();
        slice / cut.band * cut.band * cut.slice
    }

    /// The columns of a tile in a block of n×k.
    fn columns(&self, tile: usize) -> Range<usize> {
        let cut = self.tiles.cut();
        let first = tile * cut.tile;
        first * self.k..(first + cut.tile).min(cut.columns) * self.k
    }

    /// push ← A v in these slices.
    fn dots(&self, slices: Range<usize>) {
        let (cut, k) = (self.tiles.cut(), self.k);
        let rows = cut.rows_of(slices.start).start..cut.rows_of(slices.end - 1).end;
        // SAFETY: slices belong to one dot unit, and their rows of the push are scattered only
        // after it is done.
        let push = unsafe { self.push.part(rows.start * k..rows.end * k) };
        push.fill(0.0);
        for tile in 0..cut.tiles() {
            let v = &self.v[self.columns(tile)];
            for (first, width) in widths(self.plan.twin, k) {
                let loops = loops::<V>(self.plan.twin, width);
                for part in self.by_band(slices.clone()) {
                    // The first row of a band may lie before the unit's: segments name rows of
                    // the band, and only rows of the unit's slices occur.
                    let ahead = self.first_row(part.start) as isize - rows.start as isize;
                    let t = push.as_mut_ptr().wrapping_offset(ahead * k as isize);
                    let segments = self.tiles.segments(part, tile);
                    // SAFETY: `Tiles::new` checked that columns are in the tile, that rows are in
                    // their slices, and that lengths add up; lanes end at `first + width` ≤ k.
                    unsafe {
                        (loops.dots)(segments, k, v.as_ptr().add(first), t.wrapping_add(first));
                    }
                }
            }
        }
    }

    /// u, push and squares of a slice whose products are in the push.
    fn update(&self, slice: usize) {
        let k = self.k;
        let rows = self.tiles.cut().rows_of(slice);
        // SAFETY: the slice belongs to one dot unit; its squares, its rows of the push, and the
        // rows of u that they stand for (a `RowOrder` is one to one) are nobody else's meanwhile.
        let (push, squares) = unsafe {
            (
                self.push.part(rows.start * k..rows.end * k),
                self.squares.part(slice * k..(slice + 1) * k),
            )
        };
        squares.fill(0.0);
        for (inner, push) in rows.zip(push.chunks_exact_mut(k)) {
            let row = self.plan.rows.map_or(inner, |rows| rows.row_at()[inner] as usize);
            // SAFETY: as above.
            let u = unsafe { self.u.part(row * k..(row + 1) * k) };
            for l in 0..k {
                let f = (self.factors)(row, l);
                let new = f.dot * push[l] - self.alpha[l] * u[l];
                u[l] = new;
                push[l] = f.scatter * new;
                let weighted = f.square * new;
                squares[l] += weighted * weighted;
            }
        }
    }

    /// s of a tile, or the group's partial s, over these slices.
    fn scatter(&self, group: usize, tile: usize, slices: Range<usize>, first: bool) {
        let (cut, k) = (self.tiles.cut(), self.k);
        let columns = self.columns(tile);
        let offset = group * cut.columns * k;
        // SAFETY: one scatter unit at a time has this tile of this group.
        let s = unsafe { self.s.part(offset + columns.start..offset + columns.end) };
        if first {
            s.fill(0.0);
        }
        if slices.is_empty() {
            return;
        }
        let rows = cut.rows_of(slices.start).start..cut.rows_of(slices.end - 1).end;
        for part in self.by_band(slices) {
            let segments = self.tiles.segments(part.clone(), tile);
            let ahead = self.first_row(part.start) as isize - rows.start as isize;
            for (first, width) in widths(self.plan.twin, k) {
                let loops = loops::<V>(self.plan.twin, width);
                let p = self.push.pointer(rows.start * k).wrapping_offset(ahead * k as isize);
                // SAFETY: as for dots; the dot units of these rows are done, and nobody writes
                // their push any more.
                unsafe {
                    (loops.scatter)(segments, k, p.wrapping_add(first), s.as_mut_ptr().add(first));
                }
            }
        }
    }
}
