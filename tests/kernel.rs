//! The fast pass against the plain one and against its definition, on shapes made to break it.
//!
//! Everything here also runs in an interpreter that watches every access, at smaller sizes: see
//! DEVELOPERS.md.

#[path = "kernel/cases.rs"]
mod cases;
#[path = "kernel/refused.rs"]
mod refused;
#[path = "kernel/stored.rs"]
mod stored;
#[path = "kernel/truth.rs"]
mod truth;

use cases::{Blocks, Case, SHAPES, STORAGES, Shape, Storage, ZEROS, Zeros};
use ellbow::base::random::Stream;
use ellbow::kernel::pass::Plan;
use ellbow::kernel::plain;
use ellbow::kernel::tiles::Cut;
use ellbow::kernel::{Lanes, Room, Tiles, Twin, Value, Way};
use proptest::prelude::*;
use proptest::test_runner::RngSeed;
use truth::{Outcome, Truth};

/// Numbers of lanes that meet every width of the inner loops, alone and together.
const LANES: &[usize] = if cfg!(miri) { &[1, 7, 8] } else { &[1, 2, 3, 8, 17] };

const WAYS: [Way; 2] = [Way::OnePass, Way::TwoPhase];

fn twins() -> impl Iterator<Item = Twin> {
    Twin::ALL.into_iter().filter(|twin| twin.is_available())
}

/// What the blocks hold before is no business of the pass.
fn unset(case: &Case, blocks: &Blocks) -> Outcome {
    Outcome {
        u: blocks.u.clone(),
        s: vec![f64::NAN; case.cut.columns * blocks.count],
        squares: vec![f64::NAN; blocks.count],
    }
}

fn plain<V: Value>(case: &Case, tiles: &Tiles<V>, blocks: &Blocks) -> Outcome {
    let mut out = unset(case, blocks);
    let factors = |row: usize, l: usize| blocks.factors(row, l);
    let Outcome { u, s, squares } = &mut out;
    let (v, alpha) = (&blocks.v, &blocks.alpha);
    let lanes = plain::Blocks { count: blocks.count, v, alpha, u, s, squares };
    plain::pass(tiles, &case.groups, case.rows.as_ref(), &factors, lanes);
    out
}

fn fast<V: Value>(
    case: &Case,
    tiles: &Tiles<V>,
    blocks: &Blocks,
    (twin, way): (Twin, Way),
    room: &mut Room,
) -> Outcome {
    let mut out = unset(case, blocks);
    let plan = Plan { groups: &case.groups, rows: case.rows.as_ref(), way, twin };
    let factors = |row: usize, l: usize| blocks.factors(row, l);
    let Outcome { u, s, squares } = &mut out;
    let (v, alpha) = (&blocks.v, &blocks.alpha);
    let lanes = Lanes { count: blocks.count, v, alpha, u, s, squares, room };
    ellbow::kernel::pass(tiles, &plan, &factors, lanes);
    out
}

fn room(case: &Case, lanes: usize) -> Room {
    Room::new(&case.cut, case.groups.len(), lanes)
}

/// The plain pass is near its definition; the portable twin has its bits; the others are near it and
/// have each other's bits; no bit depends on the way.
fn compare<V: Value>(case: &Case, tiles: &Tiles<V>, blocks: &Blocks, what: &str) {
    let truth = Truth::new(case, blocks);
    let plain = plain(case, tiles, blocks);
    truth.assert_near(&plain, &truth.is, &format!("{what}, plain"));
    // A room for more lanes, used again: nothing of a pass is left to the next.
    let mut room = room(case, blocks.count + 2);
    let mut fused: Option<Outcome> = None;
    for twin in twins() {
        for way in WAYS {
            let found = fast(case, tiles, blocks, (twin, way), &mut room);
            let what = format!("{what}, {} {}", twin.word(), way.word());
            if twin == Twin::Portable {
                assert_eq!(found.bits(), plain.bits(), "{what}");
                continue;
            }
            truth.assert_near(&found, &plain, &what);
            let first = fused.get_or_insert_with(|| found.clone());
            assert_eq!(found.bits(), first.bits(), "{what}");
        }
    }
}

/// Calls `$run` with the case's tiles, whatever they keep.
macro_rules! with_tiles {
    ($case:expr, $storage:expr, $tiles:ident => $run:expr) => {
        match $storage {
            Storage::Double => {
                let $tiles = &$case.tiles(|a| a);
                $run
            }
            Storage::Single => {
                let $tiles = &$case.tiles(|a| a as f32);
                $run
            }
            Storage::Pattern => {
                let $tiles = &$case.tiles(|_| ());
                $run
            }
        }
    };
}

#[test]
fn every_shape_storage_and_width_equals_the_plain_pass() {
    for (number, shape) in SHAPES.into_iter().enumerate() {
        for (turn, storage) in STORAGES.into_iter().enumerate() {
            for &lanes in LANES {
                let stream = Stream::new(number as u64, (10 * lanes + turn) as u64);
                let case = Case::new(shape, storage, 1 + (lanes + turn) % 4, &stream);
                for zeros in ZEROS {
                    // Of what is large, or interpreted, each storage sees some of the zeros.
                    let large = matches!(shape, Shape::MoreThanATile | Shape::Large);
                    if (cfg!(miri) || large) && zeros as usize != (lanes + turn) % 4 {
                        continue;
                    }
                    let blocks = Blocks::new(&case.cut, lanes, zeros, &stream);
                    let what = format!("{shape:?} {storage:?}, {lanes} lanes, zero: {zeros:?}");
                    with_tiles!(case, storage, tiles => compare(&case, tiles, &blocks, &what));
                }
            }
        }
    }
}

proptest! {
    #![proptest_config(ProptestConfig {
        cases: if cfg!(miri) { 6 } else { 400 },
        failure_persistence: None,
        rng_seed: RngSeed::Fixed(17),
        ..ProptestConfig::default()
    })]

    /// However small the pieces are, and however many groups there are.
    #[test]
    fn every_cut_equals_the_plain_pass(
        shape in 0..5usize, storage in 0..3usize, zeros in 0..4usize, lanes in 0..20usize,
        (tile, slice) in (0..8u32, 0..6u32), band in 1..7usize, groups in 1..6usize,
        seed in 0..1000u64,
    ) {
        let stream = Stream::new(seed, 3);
        let (shape, storage) = (SHAPES[shape], STORAGES[storage]);
        let cut = Cut { tile: 1 << tile, slice: 1 << slice, band, ..shape.cut() };
        let case = Case::with_cut(shape, storage, cut, groups, &stream);
        let blocks = Blocks::new(&cut, lanes, ZEROS[zeros], &stream);
        let what = format!("{shape:?} {storage:?}, {lanes} lanes");
        with_tiles!(case, storage, tiles => compare(&case, tiles, &blocks, &what));
    }
}

#[test]
fn a_lane_that_has_stopped_stays_zero() {
    let stream = Stream::new(4, 4);
    let case = Case::new(Shape::Tall, Storage::Double, 2, &stream);
    let tiles = case.tiles(|a| a);
    let blocks = Blocks::new(&case.cut, 3, Zeros::Lanes, &stream);
    for (twin, way) in twins().flat_map(|twin| WAYS.map(|way| (twin, way))) {
        let found = fast(&case, &tiles, &blocks, (twin, way), &mut room(&case, 3));
        for l in [0, 2] {
            let lane = found.lane(l, 3);
            assert!([lane.u, lane.s, lane.squares].iter().flatten().all(|x| *x == 0.0));
        }
        assert!(found.lane(1, 3).squares[0] > 0.0);
    }
}

/// A lane has the bits that it has alone, also beside lanes that hold no numbers.
#[test]
fn a_lane_knows_nothing_of_the_others() {
    let shapes = [Shape::EmptyRows, Shape::OneDenseRow, Shape::Wide, Shape::Tall, Shape::Large];
    for (number, shape) in shapes.into_iter().enumerate() {
        for (turn, storage) in STORAGES.into_iter().enumerate() {
            if cfg!(miri) && (turn != number || shape == Shape::Large) {
                continue;
            }
            let stream = Stream::new(5, turn as u64);
            let case = Case::new(shape, storage, 1 + turn, &stream);
            for &lanes in if cfg!(miri) { &[3] } else { LANES } {
                let blocks = Blocks::new(&case.cut, lanes, Zeros::None, &stream);
                with_tiles!(case, storage, tiles => {
                    for (twin, way) in twins().flat_map(|twin| WAYS.map(|way| (twin, way))) {
                        alone_and_beside(&case, tiles, &blocks, (twin, way));
                    }
                });
            }
        }
    }
}

fn alone_and_beside<V: Value>(case: &Case, tiles: &Tiles<V>, blocks: &Blocks, how: (Twin, Way)) {
    let k = blocks.count;
    let together = fast(case, tiles, blocks, how, &mut room(case, k));
    let mut spoiled = blocks.clone();
    let ill = [f64::NAN, f64::INFINITY];
    for block in [&mut spoiled.v, &mut spoiled.alpha, &mut spoiled.u] {
        for (place, number) in block.iter_mut().enumerate().filter(|(place, _)| place % k % 2 == 1)
        {
            *number = ill[place % 2];
        }
    }
    let beside = fast(case, tiles, &spoiled, how, &mut room(case, k));
    for l in 0..k {
        let alone = fast(case, tiles, &blocks.lane(l), how, &mut room(case, 1));
        assert_eq!(together.lane(l, k).bits(), alone.bits(), "lane {l} of {k}, {how:?}");
        if l % 2 == 0 {
            assert_eq!(beside.lane(l, k).bits(), alone.bits(), "lane {l} of {k}, {how:?}");
        }
    }
}

/// Runs `work` in a pool of so many threads.
pub fn on_threads<T: Send>(threads: usize, work: impl FnOnce() -> T + Send) -> T {
    rayon::ThreadPoolBuilder::new().num_threads(threads).build().unwrap().install(work)
}

#[test]
fn any_number_of_threads_gives_the_same_bits() {
    let pools: &[usize] = if cfg!(miri) { &[3] } else { &[2, 3, 7] };
    for groups in [1, 3] {
        for (turn, storage) in STORAGES.into_iter().enumerate() {
            if cfg!(miri) && turn != groups % 3 {
                continue;
            }
            let stream = Stream::new(6, turn as u64);
            let case = Case::new(Shape::Large, storage, groups, &stream);
            for &lanes in if cfg!(miri) { &[3] } else { LANES } {
                let blocks = Blocks::new(&case.cut, lanes, Zeros::Scalars, &stream);
                with_tiles!(case, storage, tiles => {
                    on_threads(3, || compare(&case, tiles, &blocks, "three threads"));
                    for (twin, way) in twins().flat_map(|twin| WAYS.map(|way| (twin, way))) {
                        let of = |threads: usize| {
                            let how = (twin, way);
                            let run = || fast(&case, tiles, &blocks, how, &mut room(&case, lanes));
                            on_threads(threads, run).bits()
                        };
                        let one = of(1);
                        assert!(pools.iter().all(|&threads| of(threads) == one), "{twin:?}");
                    }
                });
            }
        }
    }
}

/// A panic on one thread ends the pass on all: nobody waits for the work of a thread that is gone.
#[test]
fn a_panic_of_the_caller_ends_the_pass() {
    let stream = Stream::new(7, 0);
    let case = Case::new(Shape::Large, Storage::Double, 2, &stream);
    let tiles = case.tiles(|a| a);
    let blocks = Blocks::new(&case.cut, 8, Zeros::None, &stream);
    for (threads, way) in [(1, Way::OnePass), (3, Way::OnePass), (3, Way::TwoPhase)] {
        let ended = on_threads(threads, || {
            let mut out = unset(&case, &blocks);
            let plan =
                Plan { groups: &case.groups, rows: case.rows.as_ref(), way, twin: Twin::Portable };
            let factors = |row: usize, l: usize| {
                assert!(row != 23, "row 23");
                blocks.factors(row, l)
            };
            let run = std::panic::AssertUnwindSafe(|| {
                let lanes = Lanes {
                    count: 8,
                    v: &blocks.v,
                    alpha: &blocks.alpha,
                    u: &mut out.u,
                    s: &mut out.s,
                    squares: &mut out.squares,
                    room: &mut room(&case, 8),
                };
                ellbow::kernel::pass(&tiles, &plan, &factors, lanes);
            });
            std::panic::catch_unwind(run).is_err()
        });
        assert!(ended, "{threads} threads, {way:?}");
    }
}
