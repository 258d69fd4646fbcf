//! [W A; λ P] D with P = diag(p): a matrix over penalty rows; each lane has its own λ.
//!
//! Used where a start model or a column scaling rules out carrying λ as a shift.

use rayon::prelude::*;

use crate::base::sums::{self, PARALLEL_MIN, PIECE};
use crate::operator::{Frame, Operator, Pass, Scratch, Weighted};

/// Penalty rows of a piece of work.
const ROWS: usize = PIECE / 4;

/// [W A; λ P] D over a borrowed W A D: u has m + n rows, the last n in inner order. A pass costs one
/// of W A D and 40 bytes an unknown and lane.
pub struct Stacked<'a> {
    top: &'a Weighted<'a>,
    /// p in inner order, one factor per unknown; `None` means 1.
    penalty: Option<Vec<f64>>,
}

impl<'a> Stacked<'a> {
    /// Panics if `penalty` does not hold one value per column.
    pub fn new(top: &'a Weighted<'a>, penalty: Option<&'a [f64]>) -> Self {
        assert!(penalty.is_none_or(|p| p.len() == top.columns()), "one factor per column");
        let matrix = top.matrix();
        let penalty =
            penalty.map(|p| (0..p.len()).map(|place| p[matrix.unknown_at(place)]).collect());
        Self { top, penalty }
    }
}

impl Operator for Stacked<'_> {
    fn rows(&self) -> usize {
        self.top.rows() + self.top.columns()
    }

    fn columns(&self) -> usize {
        self.top.columns()
    }

    /// Panics on [`Frame::Certificate`]: results are certified on the matrix itself.
    fn pass(&self, pass: Pass<'_>) {
        let Pass { frame, sets, strengths, v, alpha, u, s, squares, scratch } = pass;
        assert!(frame != Frame::Certificate, "certificates are computed without penalty rows");
        let k = sets.len();
        let (data_rows, penalty_rows) = u.split_at_mut(self.top.rows() * k);
        self.top.pass(Pass {
            frame,
            sets,
            strengths,
            v,
            alpha,
            u: data_rows,
            s: &mut *s,
            squares: &mut *squares,
            scratch: &mut *scratch,
        });
        if k == 0 || self.columns() == 0 {
            return;
        }
        let pieces = self.columns().div_ceil(ROWS);
        let sums = &mut scratch.penalty_squares[..pieces * k];
        let piece = |place: usize, u: &mut [f64], s: &mut [f64], sums: &mut [f64]| {
            sums.fill(0.0);
            let rows = u.chunks_exact_mut(k).zip(s.chunks_exact_mut(k));
            for (j, (u, s)) in (place * ROWS..).zip(rows) {
                let scale = self.top.scale_at(j);
                let p = self.penalty.as_ref().map_or(1.0, |p| p[j]);
                let forward = if frame == Frame::Step { scale * p } else { p };
                for l in 0..k {
                    u[l] = strengths[l] * forward * v[j * k + l] - alpha[l] * u[l];
                    s[l] += strengths[l] * p * scale * u[l];
                    sums[l] += u[l] * u[l];
                }
            }
        };
        if penalty_rows.len() < PARALLEL_MIN {
            let blocks = penalty_rows.chunks_mut(ROWS * k).zip(s.chunks_mut(ROWS * k));
            let blocks = blocks.zip(sums.chunks_mut(k)).enumerate();
            blocks.for_each(|(place, ((u, s), sums))| piece(place, u, s, sums));
        } else {
            let blocks = penalty_rows.par_chunks_mut(ROWS * k).zip(s.par_chunks_mut(ROWS * k));
            let blocks = blocks.zip(sums.par_chunks_mut(k)).enumerate();
            blocks.for_each(|(place, ((u, s), sums))| piece(place, u, s, sums));
        }
        for (l, square) in squares.iter_mut().enumerate() {
            *square += sums::total(sums, k, l);
        }
    }

    fn scratch(&self, lanes: usize) -> Scratch {
        let penalty_squares = vec![0.0; self.columns().div_ceil(ROWS) * lanes];
        Scratch { penalty_squares, ..self.top.scratch(lanes) }
    }

    fn scratch_bytes(&self, lanes: usize) -> u64 {
        self.top.scratch_bytes(lanes) + 8 * (self.columns().div_ceil(ROWS) * lanes) as u64
    }

    fn bytes_per_pass(&self, lanes: usize) -> u64 {
        let penalty_rows = (self.columns() * lanes) as u64;
        self.top.bytes_per_pass(lanes) + 40 * penalty_rows
    }
}
