//! Whether the grid as stated makes sense of the rows.
//!
//! A ray crosses neighbouring cells, a smooth kernel varies little from cell to cell. Laid out on
//! the grid as stated and under each of a few alternatives (columns one up or down, sizes in
//! another order), a sample of rows is judged by one score (see `layout_score`). An alternative
//! is named only if it makes nearly all rows sound, repairs at least [`REPAIRED_MIN`] rows and
//! five in a hundred, and spoils at most a tenth as many as it repairs. A kernel of any other
//! kind is sound under no layout, so nothing is said about it; a system that is laid out well has
//! nothing to be repaired.
//!
//! Exchanged axes and a wrong fastest axis give the same cells to the same rows. They differ in
//! the spacing that belongs to each direction: where spacings differ and entries are lengths, the
//! row sums match the chords under one of the two only.

use super::layout_score::{Sample, Score};
use super::{Finding, Kind, Severity};
use crate::base::Grid;
use crate::system::System;

const SOUND_MIN: f64 = 0.95;
const REPAIRED_MIN: usize = 5;
const REPAIRED_SHARE_MIN: f64 = 0.05;
/// Chord and row sum of a straight ray differ by the half cells at its ends: for ten cells and
/// more by under a tenth.
const CHORD_MISFIT_MAX: f64 = 0.1;

/// Another way to read the column numbers.
#[derive(Debug, Clone, PartialEq, Eq)]
pub(super) enum Layout {
    /// Columns moved by so many; sizes as stated.
    Shift(i64),
    /// Numbers of cells from the fastest to the slowest direction.
    Sizes(Vec<usize>),
}

pub(super) fn find(system: &System) -> Option<Finding> {
    let grid = system.grid.as_ref()?;
    let sample = Sample::take(system, grid)?;
    let stated = sample.score(&Layout::Shift(0));
    let mut best: Option<(Layout, Score)> = None;
    for layout in alternatives(grid) {
        let score = sample.score(&layout);
        if repairs(&stated, &score)
            && best.as_ref().is_none_or(|(_, other)| score.better_than(other))
        {
            best = Some((layout, score));
        }
    }
    let (layout, score) = best?;
    let finding = match &layout {
        Layout::Shift(shift) => shifted(*shift),
        Layout::Sizes(sizes) => reordered(grid, sizes, &sample),
    };
    Some(
        finding
            .with("share of sampled rows that are sound as stated", stated.sound_share())
            .with("the same under the alternative", score.sound_share())
            .with("rows sampled", stated.rows() as f64),
    )
}

fn alternatives(grid: &Grid) -> Vec<Layout> {
    let stated: Vec<usize> = grid.order().iter().map(|&place| grid.axes[place].cells).collect();
    let mut orders = vec![];
    let mut permute = |order: &[usize]| {
        let sizes: Vec<usize> = order.iter().map(|&place| stated[place]).collect();
        if sizes != stated && !orders.contains(&sizes) {
            orders.push(sizes);
        }
    };
    match stated.len() {
        2 => permute(&[1, 0]),
        3 => [[2, 1, 0], [1, 0, 2], [0, 2, 1], [1, 2, 0], [2, 0, 1]]
            .iter()
            .for_each(|order| permute(order)),
        _ => {}
    }
    let shifts = [Layout::Shift(1), Layout::Shift(-1)];
    shifts.into_iter().chain(orders.into_iter().map(Layout::Sizes)).collect()
}

fn repairs(stated: &Score, other: &Score) -> bool {
    let (repaired, spoiled) = stated.changes_to(other);
    other.sound_share() >= SOUND_MIN
        && repaired >= REPAIRED_MIN
        && repaired as f64 >= REPAIRED_SHARE_MIN * stated.rows() as f64
        && 10 * spoiled <= repaired
}

fn shifted(shift: i64) -> Finding {
    let way = if shift < 0 { "high" } else { "low" };
    let sentence = format!(
        "The rows cross the grid in one piece only if every column number is moved by one: the matrix's column numbers look one too {way}."
    );
    let remedy = "check whether cells are counted from 0 or from 1 where the matrix is written";
    Finding::new(Kind::IndexShift, Severity::Fault, sentence, remedy)
}

fn reordered(grid: &Grid, sizes: &[usize], sample: &Sample) -> Finding {
    let order = grid.order();
    let stated: Vec<String> = order.iter().map(|&place| name_and_size(grid, place)).collect();
    let numbers: Vec<String> = sizes.iter().map(ToString::to_string).collect();
    let seen = format!(
        "The grid states {} from the fastest direction to the slowest, but the rows make sense with {} cells in that order",
        stated.join(", "),
        numbers.join(", ")
    );
    let mut reversed: Vec<usize> = order.iter().map(|&place| grid.axes[place].cells).collect();
    reversed.reverse();
    let slowest = &grid.axes[*order.last().expect("a grid has axes")].name;
    let shape = shape_of(grid, sizes);
    let swap = format!("correct the grid's shape to {shape}");
    let turn = format!("state the axis {slowest:?} as the fastest");
    if sizes != reversed {
        let sentence = format!("{seen}: the shape's numbers look exchanged.");
        return Finding::new(Kind::AxesSwapped, Severity::Fault, sentence, swap);
    }
    match cause_by_lengths(grid, sizes, sample) {
        Some(Kind::WrongFastestAxis) => {
            let sentence = format!("{seen}, and their lengths agree if {slowest:?} runs fastest.");
            Finding::new(Kind::WrongFastestAxis, Severity::Fault, sentence, turn)
        }
        Some(_) => {
            let sentence = format!("{seen}, and their lengths agree if the shape is {shape}.");
            Finding::new(Kind::AxesSwapped, Severity::Fault, sentence, swap)
        }
        None => {
            let sentence =
                format!("{seen}: either the axes are exchanged or another axis runs fastest.");
            let remedy = format!(
                "if the shape is right, {turn}; if it is not, {swap}. The matrix fits both equally well: ask where it was written"
            );
            Finding::new(Kind::GridOrder, Severity::Fault, sentence, remedy)
        }
    }
}

fn name_and_size(grid: &Grid, place: usize) -> String {
    format!("{} {}", crate::base::complaint::escape(&grid.axes[place].name), grid.axes[place].cells)
}

/// The shape in the order in which the user lists the axes, if `sizes` go fastest to slowest.
fn shape_of(grid: &Grid, sizes: &[usize]) -> String {
    let mut shape = vec![0; sizes.len()];
    for (&place, &size) in grid.order().iter().zip(sizes) {
        shape[place] = size;
    }
    format!("{shape:?}")
}

/// Which of two explanations fits the lengths of the rays; `None` if neither or both do.
fn cause_by_lengths(grid: &Grid, sizes: &[usize], sample: &Sample) -> Option<Kind> {
    let swapped: Vec<f64> = grid.order().iter().map(|&place| grid.axes[place].spacing).collect();
    let mut turned = swapped.clone();
    turned.reverse();
    let layout = Layout::Sizes(sizes.to_vec());
    let swapped = sample.chord_misfit(&layout, &swapped)?;
    let turned = sample.chord_misfit(&layout, &turned)?;
    if turned <= CHORD_MISFIT_MAX && swapped > 2.0 * turned {
        Some(Kind::WrongFastestAxis)
    } else if swapped <= CHORD_MISFIT_MAX && turned > 2.0 * swapped {
        Some(Kind::AxesSwapped)
    } else {
        None
    }
}
