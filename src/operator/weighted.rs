//! Ã = W A D: the stored matrix with row weights and column scales as vectors beside it.

use std::ops::Range;

use rayon::prelude::*;

use crate::base::sums::{PARALLEL_MIN, PIECE};
use crate::kernel::{self, Block, Factors, Room, Twin, Way};
use crate::operator::rows::each_storage;
use crate::operator::{Frame, Operator, Pass, RowWeights, Scratch, StoredRows};

/// Units that the scatter of a pass is to have: tiles times groups.
const UNITS: usize = 64;

/// Entries that a group must hold for each column before its partial s is worth adding up.
const ENTRIES_PER_COLUMN_MIN: usize = 8;

/// W A D over a borrowed matrix, never copied.
pub struct Weighted<'a> {
    matrix: &'a StoredRows,
    weights: &'a RowWeights,
    /// D in file order; `None` means 1. A zero holds its unknown at the start model.
    scales: Option<&'a [f64]>,
    /// D in inner order.
    inner_scales: Option<Vec<f64>>,
    groups: Vec<Range<usize>>,
    twin: Twin,
}

impl<'a> Weighted<'a> {
    /// Panics if `scales` does not hold one value per column.
    pub fn new(matrix: &'a StoredRows, weights: &'a RowWeights, scales: Option<&'a [f64]>) -> Self {
        assert!(scales.is_none_or(|d| d.len() == matrix.columns()), "one scale per column");
        let inner_scales =
            scales.map(|d| (0..d.len()).map(|place| d[matrix.unknown_at(place)]).collect());
        let twin = Twin::current();
        Self { matrix, weights, scales, inner_scales, groups: groups(matrix), twin }
    }

    /// The same with the inner loops of one twin, whatever the environment asks for.
    ///
    /// Panics if this processor cannot run it.
    pub fn with_twin(self, twin: Twin) -> Self {
        assert!(twin.is_available(), "a twin that this processor can run");
        Self { twin, ..self }
    }

    /// A, as stored.
    pub fn matrix(&self) -> &'a StoredRows {
        self.matrix
    }

    /// W.
    pub fn weights(&self) -> &'a RowWeights {
        self.weights
    }

    /// D of unknown `j`.
    pub fn scale(&self, j: usize) -> f64 {
        self.scales.map_or(1.0, |d| d[j])
    }

    /// Σᵢ wᵢ² aᵢⱼ² for every column j of the unscaled matrix, with the weights of data set `set`.
    /// One visit of the rows (not a pass: nothing is multiplied with).
    pub fn column_squares(&self, set: usize) -> Vec<f64> {
        self.matrix.column_squares(|i| self.weights.at(i, set))
    }

    /// D of the unknown at a place of v and s.
    pub(super) fn scale_at(&self, place: usize) -> f64 {
        self.inner_scales.as_ref().map_or(1.0, |d| d[place])
    }
}

/// out ← D v, or out ← D out where there is no v.
fn scale(d: &[f64], k: usize, v: Option<&[f64]>, out: &mut [f64]) {
    if k == 0 {
        return;
    }
    let rows = PIECE / 4;
    let piece = |(place, out): (usize, &mut [f64])| {
        let from = place * rows;
        for (i, out) in out.chunks_exact_mut(k).enumerate() {
            let d = d[from + i];
            match v {
                Some(v) => {
                    let v = &v[(from + i) * k..][..k];
                    out.iter_mut().zip(v).for_each(|(out, v)| *out = d * v);
                }
                None => out.iter_mut().for_each(|out| *out *= d),
            }
        }
    };
    if out.len() < PARALLEL_MIN {
        out.chunks_mut(rows * k).enumerate().for_each(piece);
    } else {
        out.par_chunks_mut(rows * k).enumerate().for_each(piece);
    }
}

/// Contiguous groups of slices with about equal entries. From the matrix alone, so that the order
/// of sums is too. One where the tiles are units enough.
fn groups(matrix: &StoredRows) -> Vec<Range<usize>> {
    let (cut, entries) = (matrix.cut(), matrix.entries());
    let worth = entries / (ENTRIES_PER_COLUMN_MIN * cut.columns.max(1));
    let wanted = UNITS.div_ceil(cut.tiles().max(1)).min(worth).clamp(1, cut.slices().max(1));
    let before = matrix.entries_before_slices();
    let bound = |group: usize| match group {
        group if group == wanted => cut.slices(),
        group => {
            before.partition_point(|&entries_before| entries_before < entries / wanted * group)
        }
    };
    (0..wanted).map(|group| bound(group)..bound(group + 1)).collect()
}

impl Operator for Weighted<'_> {
    fn rows(&self) -> usize {
        self.matrix.rows()
    }

    fn columns(&self) -> usize {
        self.matrix.columns()
    }

    fn pass(&self, pass: Pass<'_>) {
        let Pass { frame, sets, v, alpha, u, s, squares, scratch, .. } = pass;
        let k = sets.len();
        let n_k = self.columns() * k;
        assert!(v.len() == n_k && s.len() == n_k, "v and s are n×k");
        assert!(u.len() == self.rows() * k, "u is m×k");
        let Scratch { scaled, room, .. } = scratch;
        let v = match &self.inner_scales {
            Some(d) if frame == Frame::Step => {
                let scaled = &mut scaled[..n_k];
                scale(d, k, Some(v), scaled);
                &*scaled
            }
            _ => v,
        };
        let certificate = frame == Frame::Certificate;
        let factors = |i: usize, l: usize| {
            let w = self.weights.at(i, sets[l]);
            if certificate {
                Factors { dot: 1.0, scatter: w * w, square: w }
            } else {
                Factors { dot: w, scatter: w, square: 1.0 }
            }
        };
        let lanes = kernel::Lanes { count: k, v, alpha, u, s: &mut *s, squares, room };
        let plan = kernel::pass::Plan {
            groups: &self.groups,
            rows: self.matrix.order.rows.as_ref(),
            way: self.matrix.way(k),
            twin: self.twin,
        };
        each_storage!(self.matrix, tiles => kernel::pass(tiles, &plan, &factors, lanes));
        if !certificate && let Some(d) = &self.inner_scales {
            scale(d, k, None, s);
        }
    }

    fn scratch(&self, lanes: usize) -> Scratch {
        let scaled = if self.scales.is_some() { self.columns() * lanes } else { 0 };
        Scratch {
            scaled: Block::zeros(scaled),
            room: Room::new(self.matrix.cut(), self.groups.len(), lanes),
            penalty_squares: Vec::new(),
        }
    }

    fn scratch_bytes(&self, lanes: usize) -> u64 {
        let scaled = if self.scales.is_some() { self.columns() * lanes } else { 0 };
        Block::bytes(scaled) + Room::bytes(self.matrix.cut(), self.groups.len(), lanes)
    }

    fn bytes_per_pass(&self, lanes: usize) -> u64 {
        let (m, n, k) = (self.rows() as u64, self.columns() as u64, lanes as u64);
        let groups = self.groups.len() as u64;
        let partials = if groups > 1 { 24 * groups * n * k } else { 16 * n * k };
        let traversals = match self.matrix.way(lanes) {
            Way::OnePass => 1,
            Way::TwoPhase => 2,
        };
        // What caches keep of v, s and a partial s is the machine's affair; each is counted once.
        traversals * self.matrix.bytes() + 32 * m * k + 8 * n * k + partials
    }
}
