//! Small matrices cut into many slices, bands, tiles and groups, and the blocks of a pass.

use std::ops::Range;

use ellbow::base::random::Stream;
use ellbow::kernel::tiles::{Cut, Parts, Start};
use ellbow::kernel::{Factors, RowOrder, Tiles, Value};

/// The widest tile, and a width with which an interpreter ends in time.
const WIDEST: usize = if cfg!(miri) { 256 } else { 65_536 };

#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Shape {
    EmptyRows,
    OneDenseRow,
    Wide,
    Tall,
    SingleColumn,
    /// One column more than 16 bits can number, and a row that has them all.
    MoreThanATile,
    NoRows,
    NoColumns,
    AllRowsEmpty,
    /// Enough products for a pass to be shared among threads.
    Large,
}

pub const SHAPES: [Shape; 10] = [
    Shape::EmptyRows,
    Shape::OneDenseRow,
    Shape::Wide,
    Shape::Tall,
    Shape::SingleColumn,
    Shape::MoreThanATile,
    Shape::NoRows,
    Shape::NoColumns,
    Shape::AllRowsEmpty,
    Shape::Large,
];

impl Shape {
    /// Rows, columns, share of entries that are stored.
    fn size(self) -> (usize, usize, f64) {
        match self {
            Self::EmptyRows => (70, 20, 0.2),
            Self::OneDenseRow => (40, 60, 0.02),
            Self::Wide => (6, 150, 0.3),
            Self::Tall if cfg!(miri) => (50, 9, 0.6),
            Self::Tall => (600, 9, 0.6),
            Self::SingleColumn => (90, 1, 0.7),
            Self::MoreThanATile => (11, WIDEST + 1, 3e-4),
            Self::NoRows => (0, 5, 1.0),
            Self::NoColumns => (7, 0, 1.0),
            Self::AllRowsEmpty => (30, 12, 0.0),
            Self::Large if cfg!(miri) => (60, 40, 0.15),
            Self::Large => (700, 300, 0.35),
        }
    }

    /// A cut with which the shape has several of everything that it can have several of.
    pub fn cut(self) -> Cut {
        let (rows, columns, _) = self.size();
        let (tile, slice, band) = match self {
            Self::Tall => (4, 8, 4),
            Self::SingleColumn => (1, 8, 2),
            Self::MoreThanATile => (WIDEST, 2, 2),
            Self::Large if cfg!(miri) => (16, 4, 3),
            Self::Large => (64, 8, 5),
            _ => (16, 2, 3),
        };
        Cut { rows, columns, tile, slice, band }
    }
}

#[derive(Debug, Clone, Copy)]
pub enum Storage {
    Double,
    Single,
    Pattern,
}

pub const STORAGES: [Storage; 3] = [Storage::Double, Storage::Single, Storage::Pattern];

/// A matrix by its inner rows and columns, and what a pass needs to know besides.
#[derive(Debug)]
pub struct Case {
    pub cut: Cut,
    /// (inner column, value) of each inner row's entries, columns in any order.
    pub entries: Vec<Vec<(usize, f64)>>,
    pub rows: Option<RowOrder>,
    pub groups: Vec<Range<usize>>,
}

/// 0..count in an order drawn by lot.
pub fn shuffled(count: usize, stream: &Stream) -> Vec<u32> {
    let mut order: Vec<u32> = (0..count as u32).collect();
    order.sort_by_key(|&i| stream.bits(u64::from(i)));
    order
}

impl Case {
    pub fn new(shape: Shape, storage: Storage, groups: usize, stream: &Stream) -> Self {
        Self::with_cut(shape, storage, shape.cut(), groups, stream)
    }

    pub fn with_cut(
        shape: Shape,
        storage: Storage,
        cut: Cut,
        groups: usize,
        stream: &Stream,
    ) -> Self {
        let (m, n, share) = shape.size();
        let entry = |i: usize, j: usize| {
            let place = (i * n + j) as u64;
            let empty = shape == Shape::EmptyRows && i % 3 == 1;
            let full = matches!(shape, Shape::OneDenseRow | Shape::MoreThanATile) && i == 4;
            // The borders of the tiles are always there.
            let border = shape == Shape::MoreThanATile && i == 1 && (j + 1 >= n - 1 || j == 0);
            let stored = full || border || (!empty && stream.uniform(place) < share);
            stored.then(|| (j, value(storage, place, stream)))
        };
        let entries = (0..m)
            .map(|i| {
                let mut row: Vec<_> = (0..n).filter_map(|j| entry(i, j)).collect();
                // An order of columns is a fact of the matrix, not of the kernel.
                if i % 2 == 1 {
                    row.reverse();
                }
                row
            })
            .collect();
        let rows = (stream.uniform(1 << 40) < 0.5)
            .then(|| RowOrder::new(shuffled(m, &Stream::new(stream.bits(7), 7))).unwrap());
        Self { cut, entries, rows, groups: split(cut.slices(), groups, stream) }
    }

    /// The tiles, laid out as the kernel documents.
    pub fn tiles<V: Value>(&self, keep: impl Fn(f64) -> V) -> Tiles<V> {
        Tiles::new(self.cut, self.parts(keep)).unwrap()
    }

    pub fn parts<V>(&self, keep: impl Fn(f64) -> V) -> Parts<V> {
        let cut = &self.cut;
        let mut parts = Parts {
            table: vec![Start::default()],
            rows: vec![],
            lengths: vec![],
            columns: vec![],
            values: vec![],
        };
        for band in 0..cut.bands() {
            let slices = cut.slices_of(band);
            for tile in 0..cut.tiles() {
                for slice in slices.clone() {
                    for row in cut.rows_of(slice) {
                        let before = parts.columns.len();
                        for &(j, a) in self.entries[row].iter().filter(|e| e.0 / cut.tile == tile) {
                            parts.columns.push((j % cut.tile) as u16);
                            parts.values.push(keep(a));
                        }
                        let count = parts.columns.len() - before;
                        if count > 0 {
                            parts.rows.push((row - slices.start * cut.slice) as u16);
                            parts.lengths.push((count - 1) as u16);
                        }
                    }
                    let start = Start { entry: parts.columns.len(), segment: parts.rows.len() };
                    parts.table.push(start);
                }
            }
        }
        parts
    }

    /// The file row of an inner row.
    pub fn row_at(&self, inner: usize) -> usize {
        self.rows.as_ref().map_or(inner, |rows| rows.row_at()[inner] as usize)
    }
}

/// One entry in seven is a zero that is stored.
fn value(storage: Storage, place: u64, stream: &Stream) -> f64 {
    let number = if place % 7 == 3 { 0.0 } else { stream.normal((1 << 41) + place) };
    match storage {
        Storage::Double => number,
        Storage::Single => f64::from(number as f32),
        Storage::Pattern => 1.0,
    }
}

/// So many groups of slices, some of them without a slice.
fn split(slices: usize, groups: usize, stream: &Stream) -> Vec<Range<usize>> {
    let mut bounds: Vec<usize> =
        (1..groups).map(|g| stream.bits(g as u64) as usize % (slices + 1)).collect();
    bounds.extend([0, slices]);
    bounds.sort_unstable();
    bounds.windows(2).map(|b| b[0]..b[1]).collect()
}

/// What is zero in a pass.
#[derive(Debug, Clone, Copy, PartialEq)]
pub enum Zeros {
    None,
    /// α, f, h and g here and there.
    Scalars,
    /// All scalars of every other lane, as where a lane has stopped.
    Lanes,
    /// v.
    Vector,
}

pub const ZEROS: [Zeros; 4] = [Zeros::None, Zeros::Scalars, Zeros::Lanes, Zeros::Vector];

/// v, α and u of a pass, and its factors.
#[derive(Debug, Clone)]
pub struct Blocks {
    pub count: usize,
    pub v: Vec<f64>,
    pub alpha: Vec<f64>,
    pub u: Vec<f64>,
    pub factors: Vec<[f64; 3]>,
}

impl Blocks {
    pub fn new(cut: &Cut, count: usize, zeros: Zeros, stream: &Stream) -> Self {
        let stopped = |l: usize| zeros == Zeros::Lanes && l.is_multiple_of(2);
        let scalar = |from: u64, i: usize, l: usize| {
            let number = stream.normal(from + (i * count + l) as u64);
            let zero = stopped(l) || zeros == Zeros::Scalars && (i + l) % 3 == 1;
            if zero { 0.0 } else { number }
        };
        let block = |from: u64, rows: usize| -> Vec<f64> {
            (0..rows * count).map(|i| stream.normal(from + i as u64)).collect()
        };
        Self {
            count,
            v: match zeros {
                Zeros::Vector => vec![0.0; cut.columns * count],
                _ => block(1 << 42, cut.columns),
            },
            alpha: (0..count).map(|l| scalar(1 << 43, 0, l)).collect(),
            u: block(1 << 44, cut.rows),
            factors: (0..cut.rows * count)
                .map(|i| [45, 46, 47].map(|bit| scalar(1 << bit, i / count, i % count)))
                .collect(),
        }
    }

    /// f, h, g of a file row in a lane.
    pub fn factors(&self, row: usize, l: usize) -> Factors {
        let [dot, scatter, square] = self.factors[row * self.count + l];
        Factors { dot, scatter, square }
    }

    /// One lane alone.
    pub fn lane(&self, l: usize) -> Self {
        let pick = |block: &[f64]| block.iter().skip(l).step_by(self.count).copied().collect();
        Self {
            count: 1,
            v: pick(&self.v),
            alpha: vec![self.alpha[l]],
            u: pick(&self.u),
            factors: self.factors.iter().skip(l).step_by(self.count).copied().collect(),
        }
    }
}
