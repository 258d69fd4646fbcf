//! What `StoredRows::build` makes of compressed rows: the same matrix, in an order that costs less.

use ellbow::base::random::Stream;
use ellbow::base::{Axis, Grid};
use ellbow::kernel::{Twin, Way};
use ellbow::operator::{CompressedRows, Frame, Operator, Pass, RowWeights, StoredRows, Weighted};
use ellbow::system::rays::{self, Segment};
use proptest::prelude::*;
use proptest::test_runner::RngSeed;
use sprs::CsMatI;

use super::cases::{Blocks, Case, STORAGES, Storage, Zeros, shuffled};
use super::truth::{Outcome, Truth};
use super::{WAYS, on_threads, twins};

/// Compressed rows from (column, value) lists; values suit the storage.
fn compressed(columns: usize, rows: &[Vec<(usize, f64)>], storage: Storage) -> CompressedRows {
    let mut pointers = vec![0];
    let (mut indices, mut values) = (vec![], vec![]);
    for row in rows {
        let mut row = row.clone();
        row.sort_unstable_by_key(|entry| entry.0);
        indices.extend(row.iter().map(|&(j, _)| j as u32));
        values.extend(row.iter().map(|&(_, a)| a));
        pointers.push(indices.len());
    }
    let shape = (rows.len(), columns);
    match storage {
        Storage::Double => {
            CompressedRows::Double(CsMatI::try_new(shape, pointers, indices, values).unwrap())
        }
        Storage::Single => {
            let values = values.into_iter().map(|a| a as f32).collect();
            CompressedRows::Single(CsMatI::try_new(shape, pointers, indices, values).unwrap())
        }
        Storage::Pattern => {
            let ones = vec![(); indices.len()];
            CompressedRows::Pattern(CsMatI::try_new(shape, pointers, indices, ones).unwrap())
        }
    }
}

fn lists(matrix: &CompressedRows) -> Vec<Vec<(usize, f64)>> {
    (0..matrix.rows()).map(|i| matrix.row(i).entries().collect()).collect()
}

/// Builds, and reads everything back.
fn built(matrix: &CompressedRows, grid: Option<&Grid>) -> StoredRows {
    let stored = StoredRows::build(matrix.clone(), grid);
    assert_eq!((stored.rows(), stored.columns()), (matrix.rows(), matrix.columns()));
    assert_eq!(stored.entries(), matrix.entries());
    assert_eq!(stored.storage_name(), matrix.storage_name());
    for i in 0..stored.rows() {
        let mut found: Vec<_> = stored.row(i).entries().collect();
        found.sort_unstable_by_key(|entry| entry.0);
        assert!(found.into_iter().eq(matrix.row(i).entries()), "row {i}");
    }
    for j in 0..stored.columns() {
        assert!(stored.place_of(j) < stored.columns());
        assert_eq!(stored.unknown_at(stored.place_of(j)), j);
    }
    stored
}

/// What rows have in the tiles of a width, where unknowns stand at these places.
fn segments(matrix: &CompressedRows, tile: usize, place_of: impl Fn(usize) -> usize) -> usize {
    let of_row = |i: usize| {
        let mut tiles: Vec<usize> =
            matrix.row(i).columns.iter().map(|&j| place_of(j as usize) / tile).collect();
        tiles.sort_unstable();
        tiles.dedup();
        tiles.len()
    };
    (0..matrix.rows()).map(of_row).sum()
}

/// Segments of the order that was chosen, and of the natural order in tiles as wide. All rows are
/// in the sample that decides.
fn chosen_and_natural(matrix: &CompressedRows, stored: &StoredRows) -> (usize, usize) {
    assert!(matrix.rows() <= 4096);
    let tile = stored.cut().tile;
    (segments(matrix, tile, |j| stored.place_of(j)), segments(matrix, tile, |j| j))
}

fn is_natural(stored: &StoredRows) -> bool {
    (0..stored.columns()).all(|j| stored.place_of(j) == j)
}

/// A pass in all ways, with all twins, on one and on three threads, against the definition.
fn compare_pass(matrix: &CompressedRows, stored: &mut StoredRows, lanes: usize) {
    let (m, n) = (stored.rows(), stored.columns());
    let case = Case { cut: *stored.cut(), entries: lists(matrix), rows: None, groups: vec![] };
    let mut blocks = Blocks::new(&case.cut, lanes, Zeros::None, &Stream::new(3, 3));
    let weights: Vec<f64> = blocks.factors.iter().step_by(lanes).map(|f| f[0]).collect();
    let of_row = |i: usize| [weights[i / lanes], weights[i / lanes], 1.0];
    blocks.factors = (0..m * lanes).map(of_row).collect();
    let truth = Truth::new(&case, &blocks);
    let weights = RowWeights::Shared(weights);
    for twin in twins() {
        let mut first: Option<Outcome> = None;
        for (way, threads) in WAYS.into_iter().flat_map(|way| [(way, 1), (way, 3)]) {
            stored.go(way);
            let found = on_threads(threads, || pass(stored, &weights, &blocks, twin));
            truth.assert_near(&found, &truth.is, twin.word());
            let first = first.get_or_insert_with(|| found.clone());
            assert_eq!(first.bits(), found.bits(), "{n} columns, {way:?}, {threads} threads");
        }
    }
}

/// A pass, with s in the order of the unknowns.
fn pass(stored: &StoredRows, weights: &RowWeights, blocks: &Blocks, twin: Twin) -> Outcome {
    let (n, k) = (stored.columns(), blocks.count);
    let operator = Weighted::new(stored, weights, None).with_twin(twin);
    let at = |place: usize| stored.unknown_at(place / k) * k + place % k;
    let v: Vec<f64> = (0..n * k).map(|place| blocks.v[at(place)]).collect();
    let mut out = Outcome { u: blocks.u.clone(), s: vec![0.0; n * k], squares: vec![f64::NAN; k] };
    let mut s = vec![f64::NAN; n * k];
    operator.pass(Pass {
        frame: Frame::Step,
        sets: &vec![0; k],
        strengths: &vec![0.0; k],
        v: &v,
        alpha: &blocks.alpha,
        u: &mut out.u,
        s: &mut s,
        squares: &mut out.squares,
        scratch: &mut operator.scratch(k),
    });
    (0..n * k).for_each(|place| out.s[at(place)] = s[place]);
    out
}

/// A square grid of unit cells; the first axis is the fastest.
fn square(side: usize, active: Option<Vec<u32>>) -> Grid {
    let axis = |name: &str| Axis { name: name.into(), cells: side, spacing: 1.0, origin: 0.0 };
    Grid::new(vec![axis("x"), axis("y")], "m".into(), "x", active).unwrap()
}

/// Rays between points of opposite sides, drawn by lot.
fn crossing(side: usize, count: usize) -> Vec<Segment> {
    let (stream, side) = (Stream::new(12, 0), side as f64);
    let ray = |i: u64| {
        let [a, b] = [2 * i, 2 * i + 1].map(|i| stream.uniform(i) * side);
        match i % 2 {
            0 => Segment::new(&[0.0, a], &[side, b]),
            _ => Segment::new(&[a, 0.0], &[b, side]),
        }
    };
    (0..count as u64).map(ray).collect()
}

/// Whether cell a comes before cell b where the bits of their indices are interleaved, y above x:
/// the axis of the highest bit in which they differ decides.
fn along_the_curve(a: [usize; 2], b: [usize; 2]) -> std::cmp::Ordering {
    let [x, y] = [a[0] ^ b[0], a[1] ^ b[1]];
    let axis = if y == 0 || (x > 0 && x.ilog2() > y.ilog2()) { 0 } else { 1 };
    a[axis].cmp(&b[axis])
}

#[test]
#[cfg_attr(miri, ignore = "too large for an interpreter")]
fn unknowns_of_a_grid_follow_a_curve() {
    const SIDE: usize = 150;
    // All cells; and some cells, in an order of the user's own.
    let some = shuffled(SIDE * SIDE, &Stream::new(2, 2)).into_iter().filter(|cell| cell % 5 > 0);
    for active in [None, Some(some.collect())] {
        let grid = square(SIDE, active);
        let matrix = rays::matrix(&grid, &crossing(SIDE, 900)).unwrap().matrix;
        let mut stored = built(&matrix, Some(&grid));
        assert!(stored.cut().tiles() > 2 && stored.cut().slices() > 2);
        let cell = |place: usize| {
            let indices = grid.indices(grid.cell(stored.unknown_at(place)));
            [indices[0], indices[1]]
        };
        for place in 1..stored.columns() {
            assert!(along_the_curve(cell(place - 1), cell(place)).is_lt(), "place {place}");
        }
        let (chosen, natural) = chosen_and_natural(&matrix, &stored);
        assert!(chosen < natural, "{chosen} {natural}");
        [1, 3].into_iter().for_each(|lanes| compare_pass(&matrix, &mut stored, lanes));
    }
}

/// Neighbouring rows use neighbouring columns, which then are shuffled.
fn shuffled_band(storage: Storage, shuffle: bool) -> CompressedRows {
    const COLUMNS: usize = 20_000;
    let stream = Stream::new(13, 1);
    let column_at = shuffled(COLUMNS, &stream);
    let rows: Vec<Vec<_>> = (0..COLUMNS / 10 - 4)
        .map(|i| {
            let entry = |j: usize| {
                let place = if shuffle { column_at[j] as usize } else { j };
                let value = stream.normal((40 * i + j) as u64);
                (place, if matches!(storage, Storage::Pattern) { 1.0 } else { value })
            };
            (10 * i..10 * i + 40).map(entry).map(|(j, a)| (j, f64::from(a as f32))).collect()
        })
        .collect();
    compressed(COLUMNS, &rows, storage)
}

#[test]
#[cfg_attr(miri, ignore = "too large for an interpreter")]
fn a_shuffle_of_the_unknowns_is_undone_where_neighbouring_rows_touch() {
    for storage in STORAGES {
        let matrix = shuffled_band(storage, true);
        // A grid that does not belong to the matrix says nothing about its order.
        for grid in [None, Some(square(7, None))] {
            let mut stored = built(&matrix, grid.as_ref());
            let first = matrix.row(0).columns;
            assert!(first.iter().all(|&j| stored.place_of(j as usize) < first.len()));
            let (chosen, natural) = chosen_and_natural(&matrix, &stored);
            // Rows of 40 columns touch all tiles before, and one or two after.
            assert!(2 * chosen < natural, "{chosen} {natural}");
            compare_pass(&matrix, &mut stored, 2);
        }
        let mut stored = built(&shuffled_band(storage, false), None);
        assert!(is_natural(&stored), "nothing is gained by another order");
        compare_pass(&shuffled_band(storage, false), &mut stored, 8);
    }
}

/// A hundred columns far apart are in most rows, and first met one at a time among many others.
#[test]
#[cfg_attr(miri, ignore = "too large for an interpreter")]
fn columns_of_many_entries_lie_together() {
    const COLUMNS: usize = 70_000;
    let stream = Stream::new(14, 1);
    let busy = |b: usize| b * 700;
    let value = |i: usize, j: usize| stream.normal((i * COLUMNS + j) as u64);
    let rows: Vec<Vec<_>> = (0..2500)
        .map(|i| match i {
            0..100 => {
                let others = (1..600).map(|e| (i + e * 100) % COLUMNS).filter(|j| j % 700 != 0);
                std::iter::once(busy(i)).chain(others).map(|j| (j, value(i, j))).collect()
            }
            _ => (0..100).filter(|b| (b + i) % 5 > 1).map(|b| (busy(b), value(i, b))).collect(),
        })
        .collect();
    let matrix = compressed(COLUMNS, &rows, Storage::Double);
    let mut stored = built(&matrix, None);
    assert!((0..100).all(|b| stored.place_of(busy(b)) < 100));
    let (chosen, natural) = chosen_and_natural(&matrix, &stored);
    assert!(chosen < natural, "{chosen} {natural}");
    compare_pass(&matrix, &mut stored, 2);
}

/// Rows in random order are stored by the tiles they begin and end in, and read by their number.
#[test]
#[cfg_attr(miri, ignore = "too large for an interpreter")]
fn rows_keep_their_numbers_in_whatever_order_they_are_stored() {
    let matrix = shuffled_band(Storage::Double, false);
    let order = shuffled(matrix.rows(), &Stream::new(15, 0));
    let lists = lists(&matrix);
    // Every seventh row is empty.
    let rows: Vec<_> = order
        .iter()
        .map(|&i| if i % 7 == 0 { vec![] } else { lists[i as usize].clone() })
        .collect();
    let mixed = compressed(matrix.columns(), &rows, Storage::Double);
    let mut stored = built(&mixed, None);
    compare_pass(&mixed, &mut stored, 3);
    // Four bytes a row are for its number: the rows did move.
    let arrays = 10 * stored.entries()
        + 4 * segments(&mixed, stored.cut().tile, |j| stored.place_of(j))
        + 16 * (stored.cut().slices() * stored.cut().tiles() + 1);
    assert_eq!(stored.bytes() as usize, arrays + 4 * stored.rows());
}

#[test]
fn matrices_without_rows_columns_or_entries() {
    let sizes = [(0, 0), (0, 5), (5, 0), (5, 7), (0, 5000), (300, 5000)];
    for (m, n) in sizes.into_iter().take(if cfg!(miri) { 4 } else { 6 }) {
        for storage in STORAGES {
            let matrix = compressed(n, &vec![vec![]; m], storage);
            let mut stored = built(&matrix, None);
            assert!(is_natural(&stored));
            [1, 3].into_iter().for_each(|lanes| compare_pass(&matrix, &mut stored, lanes));
        }
    }
}

/// The widest rows that a segment can count.
#[test]
#[cfg_attr(miri, ignore = "too large for an interpreter")]
fn a_dense_row_wider_than_a_tile() {
    const COLUMNS: usize = 65_537;
    let value = |j: usize| f64::from((j % 1000) as u32) - 499.5;
    let rows = [vec![], (0..COLUMNS).map(|j| (j, value(j))).collect(), vec![(COLUMNS - 1, 2.5)]];
    let matrix = compressed(COLUMNS, &rows, Storage::Single);
    let mut stored = built(&matrix, None);
    compare_pass(&matrix, &mut stored, 3);
}

proptest! {
    #![proptest_config(ProptestConfig {
        cases: if cfg!(miri) { 0 } else { 40 },
        failure_persistence: None,
        rng_seed: RngSeed::Fixed(18),
        ..ProptestConfig::default()
    })]

    /// Whatever the matrix is like.
    #[test]
    fn no_order_has_more_segments_than_the_natural_one(
        n in 4000..40_000usize, m in 1..400usize, per_row in 0..60usize, spread in 1..5000usize,
        stride in 1..9000usize, lone in 0..3usize, seed in 0..1000u64,
    ) {
        let stream = Stream::new(seed, 4);
        let rows: Vec<Vec<_>> = (0..m)
            .map(|i| {
                let draw = |e: usize| stream.uniform((i * 64 + e) as u64);
                let near = (0..per_row).map(|e| i * stride + (draw(e) * spread as f64) as usize);
                let far = (0..lone).map(|e| (draw(60 + e) * n as f64) as usize);
                let mut columns: Vec<usize> = near.chain(far).map(|j| j % n).collect();
                columns.sort_unstable();
                columns.dedup();
                columns.into_iter().map(|j| (j, 1.0)).collect()
            })
            .collect();
        let matrix = compressed(n, &rows, STORAGES[m % 3]);
        let stored = built(&matrix, None);
        let (chosen, natural) = chosen_and_natural(&matrix, &stored);
        prop_assert!(chosen <= natural, "{chosen} {natural}");
        prop_assert!(is_natural(&stored) || chosen < natural);
        let threes = on_threads(3, || StoredRows::build(matrix.clone(), None));
        prop_assert!(threes == on_threads(1, || StoredRows::build(matrix, None)));
    }
}

/// What is forced is what is gone, and the count has an opinion for each number of lanes.
#[test]
fn a_way_is_what_it_was_made() {
    let mut stored = StoredRows::from_dense(2, 2, &[1.0, 0.0, 2.0, 3.0]);
    assert_eq!(stored.way(1), Way::TwoPhase, "a small matrix stays in the shared cache");
    for way in WAYS {
        stored.go(way);
        assert_eq!([1, 2, 17].map(|lanes| stored.way(lanes)), [way; 3]);
    }
}
