//! Vector work on pieces of fixed length, so that no sum depends on threads or on lanes.

use rayon::prelude::*;

use crate::base::sums::{PARALLEL_MIN, PIECE};
use crate::solve::stop::Fault;

/// Elements of a vector per piece. The largest thing a piece touches, 1024 × 16 lanes, fits L2.
pub const PIECE_ROWS: usize = 1024;

const _: () = assert!(PIECE.is_multiple_of(PIECE_ROWS));

/// Number of pieces of a vector of length `n`; at least one.
pub fn count(n: usize) -> usize {
    n.div_ceil(PIECE_ROWS).max(1)
}

/// Calls `work(target piece, source piece, sums of the piece)` for all pieces of two n×k blocks.
///
/// `sums` holds the same count of numbers for every piece, a multiple of k; each writes its own.
pub fn for_each(
    k: usize,
    target: &mut [f64],
    source: &[f64],
    sums: &mut [f64],
    work: impl Fn(&mut [f64], &[f64], &mut [f64]) + Sync,
) {
    assert_eq!(target.len(), source.len(), "blocks of one shape");
    let size = PIECE_ROWS * k;
    let per_piece = sums.len() / count(target.len() / k);
    if target.len() < PARALLEL_MIN {
        for ((t, s), q) in
            target.chunks_mut(size).zip(source.chunks(size)).zip(sums.chunks_mut(per_piece))
        {
            work(t, s, q);
        }
    } else {
        target
            .par_chunks_mut(size)
            .zip(source.par_chunks(size))
            .zip(sums.par_chunks_mut(per_piece))
            .for_each(|((t, s), q)| work(t, s, q));
    }
}

/// Four n×k blocks, two of them written.
pub struct Two<'a> {
    /// Written.
    pub a: &'a mut [f64],
    /// Written.
    pub b: &'a mut [f64],
    /// Read.
    pub c: &'a [f64],
    /// Read.
    pub d: &'a [f64],
}

/// As [`for_each`], over four blocks: `work(a, b, c, d, sums of the piece)`.
pub fn for_each_two(
    k: usize,
    blocks: Two<'_>,
    sums: &mut [f64],
    work: impl Fn(&mut [f64], &mut [f64], &[f64], &[f64], &mut [f64]) + Sync,
) {
    let Two { a, b, c, d } = blocks;
    let size = PIECE_ROWS * k;
    let per_piece = sums.len() / count(a.len() / k);
    if a.len() < PARALLEL_MIN {
        let sources = c.chunks(size).zip(d.chunks(size)).zip(sums.chunks_mut(per_piece));
        for ((a, b), ((c, d), q)) in a.chunks_mut(size).zip(b.chunks_mut(size)).zip(sources) {
            work(a, b, c, d, q);
        }
    } else {
        let sources =
            c.par_chunks(size).zip(d.par_chunks(size)).zip(sums.par_chunks_mut(per_piece));
        a.par_chunks_mut(size)
            .zip(b.par_chunks_mut(size))
            .zip(sources)
            .for_each(|((a, b), ((c, d), q))| work(a, b, c, d, q));
    }
}

/// Vectors of the tracks, laid out piece by piece: all vectors of all tracks for 1024 unknowns
/// lie together, so that one sweep updates every track while a piece of v is in L1.
pub struct TrackVectors {
    n: usize,
    tracks: usize,
    per_track: usize,
    data: Vec<f64>,
}

impl TrackVectors {
    /// `per_track` vectors of length `n` for each track, all zero.
    pub fn new(n: usize, tracks: usize, per_track: usize) -> Self {
        let data = vec![0.0; Self::numbers(n, tracks, per_track)];
        Self { n, tracks, per_track, data }
    }

    fn numbers(n: usize, tracks: usize, per_track: usize) -> usize {
        count(n) * tracks * per_track * PIECE_ROWS
    }

    /// What [`TrackVectors::new`] allocates: whole pieces, so up to 8 KiB a vector over 8n.
    pub fn bytes(n: usize, tracks: usize, per_track: usize) -> u64 {
        8 * Self::numbers(n, tracks, per_track) as u64
    }

    /// Calls `work(v piece (rows×k), the piece's vectors)`; vector `i` of track `t` is at
    /// `(t·per_track + i)·PIECE_ROWS` and as long as the piece has rows. `sums` gets one number
    /// per piece and track, piece-major.
    pub fn sweep(
        &mut self,
        v: &[f64],
        k: usize,
        sums: &mut [f64],
        work: impl Fn(&[f64], &mut [f64], &mut [f64]) + Sync,
    ) {
        assert_eq!(v.len(), self.n * k, "v is n×k");
        if self.tracks == 0 || self.n == 0 {
            return;
        }
        let size = self.tracks * self.per_track * PIECE_ROWS;
        let v_size = PIECE_ROWS * k;
        if self.data.len() < PARALLEL_MIN {
            for ((d, v), q) in
                self.data.chunks_mut(size).zip(v.chunks(v_size)).zip(sums.chunks_mut(self.tracks))
            {
                work(v, d, q);
            }
        } else {
            self.data
                .par_chunks_mut(size)
                .zip(v.par_chunks(v_size))
                .zip(sums.par_chunks_mut(self.tracks))
                .for_each(|((d, v), q)| work(v, d, q));
        }
    }

    /// Copies vector `i` of track `t` out.
    pub fn read(&self, track: usize, i: usize, out: &mut [f64]) {
        assert_eq!(out.len(), self.n, "a vector of length n");
        let size = self.tracks * self.per_track * PIECE_ROWS;
        for (out, piece) in out.chunks_mut(PIECE_ROWS).zip(self.data.chunks(size)) {
            let from = (track * self.per_track + i) * PIECE_ROWS;
            out.copy_from_slice(&piece[from..from + out.len()]);
        }
    }
}

/// Lane `l` of a piece of an n×k block, contiguous.
pub fn lane_of(block: &[f64], k: usize, l: usize, out: &mut [f64; PIECE_ROWS]) -> usize {
    if k == 1 {
        out[..block.len()].copy_from_slice(block);
        return block.len();
    }
    let rows = block.len() / k;
    for (out, row) in out.iter_mut().zip(block.chunks_exact(k)) {
        *out = row[l];
    }
    rows
}

/// Where lane `l` of an m×k block u, or else of the n×k block Ãᵀu, first holds what is not finite;
/// a column in inner order.
pub fn locate(u: &[f64], s: &[f64], k: usize, l: usize) -> Fault {
    let first = |block: &[f64]| block.chunks(k).position(|row| !row[l].is_finite());
    match (first(u), first(s)) {
        (Some(row), _) => Fault::Row(row),
        (None, Some(column)) => Fault::Column(column),
        (None, None) => Fault::Norm,
    }
}

/// Moves the lanes at `kept` (ascending) of a rows×k block together, in place; returns what is left
/// of its length.
#[must_use]
pub fn pack(block: &mut [f64], k: usize, kept: &[usize]) -> usize {
    let rows = block.len() / k;
    let width = kept.len();
    for i in 0..rows {
        for (to, &from) in kept.iter().enumerate() {
            block[i * width + to] = block[i * k + from];
        }
    }
    rows * width
}
