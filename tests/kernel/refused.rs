//! Every kind of wrong part is refused: the inner loops rely on it.

use ellbow::base::random::Stream;
use ellbow::kernel::pass::Plan;
use ellbow::kernel::tiles::{Cut, Parts};
use ellbow::kernel::{Factors, Lanes, Room, RowOrder, Tiles, Twin, Way};

use super::cases::{Case, Shape, Storage};

/// Sound parts with entries in every slice and tile.
fn sound() -> (Cut, Parts<f64>) {
    let stream = Stream::new(9, 9);
    let mut case = Case::new(Shape::EmptyRows, Storage::Double, 1, &stream);
    for (i, entries) in case.entries.iter_mut().enumerate() {
        *entries = (0..20).filter(|j| (i + j) % 3 > 0).map(|j| (j, 1.0 + j as f64)).collect();
    }
    (case.cut, case.parts(|a| a))
}

/// The message after `spoil` has been at sound parts.
fn refusal(spoil: impl FnOnce(&mut Cut, &mut Parts<f64>)) -> &'static str {
    let (mut cut, mut parts) = sound();
    assert!(Tiles::new(cut, parts.clone()).is_ok());
    spoil(&mut cut, &mut parts);
    Tiles::new(cut, parts).expect_err("spoiled")
}

#[test]
fn a_width_of_tiles_that_16_bits_cannot_number() {
    let message = "the width of tiles is no power of two of at most 65,536";
    for tile in [0, 3, 17, 65_535, 65_537, 1 << 17, usize::MAX] {
        assert_eq!(refusal(|cut, _| cut.tile = tile), message, "{tile}");
    }
}

#[test]
fn rows_of_a_slice_that_are_no_power_of_two() {
    let message = "the rows of slices are no power of two of at most 65,536";
    for slice in [0, 3, 65_537, 1 << 17, usize::MAX] {
        assert_eq!(refusal(|cut, _| cut.slice = slice), message, "{slice}");
    }
}

#[test]
fn bands_that_16_bits_cannot_number() {
    let message = "bands have no rows, or more than 65,536";
    for band in [0, 32_769, usize::MAX] {
        assert_eq!(refusal(|cut, _| cut.band = band), message, "{band}");
    }
}

#[test]
fn a_table_of_another_length() {
    let message = "the table has not one start per slice and tile, and an end";
    assert_eq!(refusal(|_, parts| parts.table.clear()), message);
    assert_eq!(refusal(|_, parts| parts.table.truncate(parts.table.len() - 1)), message);
    assert_eq!(refusal(|_, parts| parts.table.push(*parts.table.last().unwrap())), message);
    assert_eq!(refusal(|cut, _| cut.rows += 2), message);
    assert_eq!(refusal(|cut, _| cut.columns = 33), message);
    // As many slices and tiles as multiply to 2⁶⁴, which is not 0.
    let huge = |cut: &mut Cut, parts: &mut Parts<f64>| {
        *cut = Cut { rows: 1 << 32, columns: 1 << 32, tile: 1, slice: 1, band: 1 };
        parts.table.truncate(1);
    };
    assert_eq!(refusal(huge), message);
}

#[test]
fn a_table_that_does_not_begin_at_the_beginning() {
    let message = "the first slice does not begin at 0";
    assert_eq!(refusal(|_, parts| parts.table[0].entry = 1), message);
    assert_eq!(refusal(|_, parts| parts.table[0].segment = 1), message);
}

#[test]
fn arrays_of_another_length() {
    let message = "arrays are not as long as the table says";
    assert_eq!(refusal(|_, parts| parts.columns.truncate(parts.columns.len() - 1)), message);
    assert_eq!(refusal(|_, parts| parts.values.truncate(parts.values.len() - 1)), message);
    assert_eq!(refusal(|_, parts| parts.rows.truncate(parts.rows.len() - 1)), message);
    assert_eq!(refusal(|_, parts| parts.lengths.truncate(parts.lengths.len() - 1)), message);
    assert_eq!(refusal(|_, parts| parts.columns.push(0)), message);
    assert_eq!(refusal(|_, parts| parts.values.push(0.0)), message);
    assert_eq!(refusal(|_, parts| parts.table.last_mut().unwrap().entry += 1), message);
    assert_eq!(refusal(|_, parts| parts.table.last_mut().unwrap().segment -= 1), message);
}

#[test]
fn starts_that_go_back() {
    let message = "starts do not ascend";
    assert_eq!(refusal(|_, parts| parts.table[5].entry = parts.table[3].entry), message);
    assert_eq!(refusal(|_, parts| parts.table[5].segment = parts.table[3].segment), message);
    assert_eq!(refusal(|_, parts| parts.table[5].entry = usize::MAX), message);
}

#[test]
fn segments_that_are_longer_or_shorter_than_their_slice() {
    let message = "segments do not add up to the entries of their slice";
    assert_eq!(refusal(|_, parts| parts.lengths[4] += 1), message);
    assert_eq!(refusal(|_, parts| parts.lengths[4] = u16::MAX), message);
    assert_eq!(refusal(|_, parts| *parts.lengths.last_mut().unwrap() -= 1), message);
    // A start that ascends, but in the middle of a segment.
    assert_eq!(refusal(|_, parts| parts.table[5].entry += 1), message);
}

#[test]
fn rows_that_do_not_ascend() {
    let message = "rows do not ascend in a slice";
    assert_eq!(refusal(|_, parts| parts.rows.swap(0, 1)), message);
    assert_eq!(refusal(|_, parts| parts.rows[1] = parts.rows[0]), message);
}

#[test]
fn rows_outside_their_slice() {
    let message = "a segment of a row outside its slice";
    assert_eq!(refusal(|_, parts| parts.rows[1] = 2), message);
    assert_eq!(refusal(|_, parts| parts.rows[1] = u16::MAX), message);
    // The second slice of a band begins at its third row.
    assert_eq!(refusal(|_, parts| parts.rows[parts.table[1].segment] = 1), message);
    // The last slice has one row of its two.
    let short = |cut: &mut Cut, _: &mut Parts<f64>| cut.rows -= 1;
    assert_eq!(refusal(short), message);
}

#[test]
fn columns_outside_their_tile() {
    let message = "a column outside its tile";
    assert_eq!(refusal(|_, parts| parts.columns[3] = 16), message);
    assert_eq!(refusal(|_, parts| parts.columns[3] = u16::MAX), message);
    // The last tile has four of its sixteen columns.
    assert_eq!(refusal(|_, parts| *parts.columns.last_mut().unwrap() = 4), message);
    assert_eq!(refusal(|cut, _| cut.columns -= 1), message);
}

#[test]
fn orders_of_rows_that_are_no_permutation() {
    assert_eq!(RowOrder::new(vec![0, 2, 0]), Err("two inner rows stand for one row"));
    let beyond = Err("an inner row stands for a row that does not exist");
    assert_eq!(RowOrder::new(vec![0, 3, 1]), beyond);
    assert_eq!(RowOrder::new(vec![u32::MAX]), beyond);
    let order = RowOrder::new(vec![2, 0, 1]).unwrap();
    assert_eq!((order.row_at(), order.inner_of()), (&[2, 0, 1][..], &[1, 2, 0][..]));
}

/// Whether a pass with these blocks and this plan panics.
fn panics(
    change: impl FnOnce(&mut [Vec<f64>; 5], &mut Vec<std::ops::Range<usize>>) -> Option<RowOrder>,
) -> bool {
    let (cut, parts) = sound();
    let tiles = Tiles::new(cut, parts).unwrap();
    let mut blocks = [cut.columns * 2, 2, cut.rows * 2, cut.columns * 2, 2].map(|n| vec![0.0; n]);
    #[allow(clippy::single_range_in_vec_init)]
    let mut groups = vec![0..cut.slices()];
    let rows = change(&mut blocks, &mut groups);
    let [v, alpha, u, s, squares] = &mut blocks;
    let mut room = Room::new(&cut, groups.len(), 2);
    let plan =
        Plan { groups: &groups, rows: rows.as_ref(), way: Way::OnePass, twin: Twin::Portable };
    let factors = |_, _| Factors { dot: 1.0, scatter: 1.0, square: 1.0 };
    std::panic::catch_unwind(std::panic::AssertUnwindSafe(|| {
        let lanes = Lanes { count: 2, v, alpha, u, s, squares, room: &mut room };
        ellbow::kernel::pass(&tiles, &plan, &factors, lanes);
    }))
    .is_err()
}

#[test]
fn blocks_and_plans_that_do_not_fit_the_matrix() {
    assert!(!panics(|_, _| None));
    for place in 0..5 {
        let shorter = |blocks: &mut [Vec<f64>; 5], _: &mut Vec<_>| {
            blocks[place].pop();
            None
        };
        assert!(panics(shorter), "block {place}");
    }
    assert!(panics(|_, groups| {
        groups.clear();
        None
    }));
    assert!(panics(|_, groups| {
        groups[0].end -= 1;
        None
    }));
    assert!(panics(|_, groups| {
        groups.push(3..35);
        None
    }));
    assert!(panics(|_, _| Some(RowOrder::new(vec![0, 1]).unwrap())));
}
