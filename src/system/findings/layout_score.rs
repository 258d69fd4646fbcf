//! How sound a sample of rows looks under a layout of the grid.
//!
//! - *Sparse* rows (at most a quarter of the cells): sound if their cells hang together, corners
//!   included, which any ray, straight or bent, thin or fat, does.
//! - *Full* rows: R = Σ (aⱼ − aₖ)² / Σ (aⱼ² + aₖ²) over neighbouring cells is 1 minus the
//!   correlation of neighbours. Sound if R ≤ 0.1, i.e. a correlation of 0.9: the kernel is resolved
//!   by the cells. A row counts as repaired if R also falls by a fifth (a shift disturbs one
//!   layer of cells in many).

use super::layout::Layout;
use crate::base::Grid;
use crate::base::random::Stream;
use crate::system::System;
use crate::system::spread::middle;

const ROWS_MAX: usize = 400;
/// Bounds cells × rows of a sample of full rows, and entries of a sparse one.
const CELLS_MAX: usize = 20_000_000;
const SPARSE_ENTRIES_MAX: usize = 2000;
const ROUGHNESS_MAX: f64 = 0.1;
const ROUGHNESS_GAIN: f64 = 0.8;
/// Fewer rows than this prove nothing.
const ROWS_MIN: usize = 8;

/// Rows from all over the system, as (unknown of the grid, value).
pub(super) struct Sample<'a> {
    grid: &'a Grid,
    sizes: Vec<usize>,
    rows: Vec<Vec<(usize, f64)>>,
    sparse: bool,
}

/// What the rows look like: pieces of each sparse row, roughness of each full one.
pub(super) struct Score {
    values: Vec<f64>,
    sparse: bool,
}

impl Score {
    pub fn rows(&self) -> usize {
        self.values.len()
    }

    fn is_sound(&self, value: f64) -> bool {
        if self.sparse { value == 1.0 } else { value <= ROUGHNESS_MAX }
    }

    pub fn sound_share(&self) -> f64 {
        let sound = self.values.iter().filter(|&&value| self.is_sound(value)).count();
        sound as f64 / self.values.len() as f64
    }

    /// Rows that the other layout makes sound, and rows that it spoils.
    pub fn changes_to(&self, other: &Self) -> (usize, usize) {
        let gains = |a: &Self, b: &Self| {
            let pairs = a.values.iter().zip(&b.values);
            pairs
                .filter(|&(&from, &to)| {
                    b.is_sound(to) && if a.sparse { from > to } else { to <= ROUGHNESS_GAIN * from }
                })
                .count()
        };
        (gains(self, other), gains(other, self))
    }

    pub fn better_than(&self, other: &Self) -> bool {
        let total = |score: &Self| score.values.iter().sum::<f64>();
        total(self) < total(other)
    }
}

impl<'a> Sample<'a> {
    /// `None` if too few rows have three entries or more in the grid.
    pub fn take(system: &System, grid: &'a Grid) -> Option<Self> {
        let unknown = unknowns(system);
        let rows = system.matrix.rows();
        let rows_max = ROWS_MAX.min((CELLS_MAX / grid.cell_count().max(1)).max(ROWS_MIN));
        let step = rows.div_ceil(rows_max).max(1);
        let stream = Stream::new(0, 0);
        // One row of each stretch, at a hashed place: an even step could meet one detector only.
        let mut taken: Vec<Vec<(usize, f64)>> = (0..rows)
            .step_by(step)
            .map(|first| first + (stream.bits(first as u64) % step as u64) as usize)
            .filter(|&i| i < rows)
            .map(|i| {
                let entries = system.matrix.row(i).entries();
                entries
                    .filter(|&(_, a)| a != 0.0)
                    .filter_map(|(j, a)| unknown.as_ref().map_or(Some(j), |u| u[j]).map(|u| (u, a)))
                    .collect()
            })
            .filter(|row: &Vec<_>| row.len() >= 3)
            .collect();
        if taken.len() < ROWS_MIN {
            return None;
        }
        let mut counts: Vec<usize> = taken.iter().map(Vec::len).collect();
        counts.sort_unstable();
        let sparse = 4 * counts[counts.len() / 2] <= grid.unknowns();
        if sparse {
            taken.retain(|row| row.len() <= SPARSE_ENTRIES_MAX);
        }
        let sizes = grid.order().iter().map(|&place| grid.axes[place].cells).collect();
        (taken.len() >= ROWS_MIN).then_some(Self { grid, sizes, rows: taken, sparse })
    }

    pub fn score(&self, layout: &Layout) -> Score {
        let values = if self.sparse {
            self.rows.iter().map(|row| pieces(&self.places(row, layout)) as f64).collect()
        } else {
            let cells = self.cells(layout);
            self.rows.iter().map(|row| self.roughness(row, &cells, layout)).collect()
        };
        Score { values, sparse: self.sparse }
    }

    fn sizes<'b>(&'b self, layout: &'b Layout) -> &'b [usize] {
        match layout {
            Layout::Shift(_) => &self.sizes,
            Layout::Sizes(sizes) => sizes,
        }
    }

    /// Indices of an unknown from the fastest direction to the slowest.
    fn place(&self, unknown: usize, layout: &Layout) -> [usize; 3] {
        let unknown = match layout {
            Layout::Shift(shift) => {
                (unknown as i64 + shift).rem_euclid(self.grid.unknowns() as i64) as usize
            }
            Layout::Sizes(_) => unknown,
        };
        let mut rest = self.grid.cell(unknown);
        let mut place = [0; 3];
        for (index, size) in place.iter_mut().zip(self.sizes(layout)) {
            *index = rest % size;
            rest /= size;
        }
        place
    }

    fn places(&self, row: &[(usize, f64)], layout: &Layout) -> Vec<[usize; 3]> {
        let mut places: Vec<_> = row.iter().map(|&(u, _)| self.place(u, layout)).collect();
        places.sort_unstable();
        places
    }

    /// Cell of each unknown, numbered under the layout.
    fn cells(&self, layout: &Layout) -> Vec<usize> {
        let sizes = self.sizes(layout);
        let number = |place: [usize; 3]| {
            let cell = place.iter().zip(sizes).rev();
            cell.fold(0, |cell, (index, size)| cell * size + index)
        };
        (0..self.grid.unknowns()).map(|unknown| number(self.place(unknown, layout))).collect()
    }

    fn roughness(&self, row: &[(usize, f64)], cell_of: &[usize], layout: &Layout) -> f64 {
        let sizes = self.sizes(layout);
        let size = |direction: usize| sizes.get(direction).copied().unwrap_or(1);
        let strides = [1, size(0), size(0) * size(1)];
        // Cells without an unknown are no neighbours.
        let mut cells = vec![f64::NAN; self.grid.cell_count()];
        cell_of.iter().for_each(|&cell| cells[cell] = 0.0);
        row.iter().for_each(|&(unknown, a)| cells[cell_of[unknown]] = a);
        let (mut differences, mut squares) = (0.0, 0.0);
        for cell in 0..cells.len() {
            for (direction, stride) in strides.into_iter().enumerate() {
                if (cell / stride) % size(direction) + 1 == size(direction) {
                    continue;
                }
                let (a, b) = (cells[cell], cells[cell + stride]);
                if !a.is_nan() && !b.is_nan() {
                    differences += (a - b) * (a - b);
                    squares += a * a + b * b;
                }
            }
        }
        if squares > 0.0 { differences / squares } else { 1.0 }
    }

    /// Median |ln(row sum / chord)| of sparse rows, spacings from the fastest direction to the
    /// slowest; `None` for full rows.
    pub fn chord_misfit(&self, layout: &Layout, spacings: &[f64]) -> Option<f64> {
        if !self.sparse {
            return None;
        }
        let mut misfits: Vec<f64> = Vec::new();
        for row in &self.rows {
            let places = self.places(row, layout);
            let chord: f64 = (0..spacings.len())
                .map(|d| {
                    let along = places.iter().map(|place| place[d]);
                    let cells = along.clone().max().unwrap_or(0) - along.min().unwrap_or(0);
                    (cells as f64 * spacings[d]).powi(2)
                })
                .sum::<f64>()
                .sqrt();
            let sum: f64 = row.iter().map(|&(_, a)| a.abs()).sum();
            if chord > 0.0 {
                misfits.push((sum / chord).ln().abs());
            }
        }
        misfits.sort_unstable_by(f64::total_cmp);
        (!misfits.is_empty()).then(|| middle(&misfits))
    }
}

/// Place among the grid's unknowns of each column; `None` where each column is one.
fn unknowns(system: &System) -> Option<Vec<Option<usize>>> {
    system.columns.kinds.as_ref()?;
    let mut next = 0;
    let place = |j| {
        system.columns.is_cell(j).then(|| {
            next += 1;
            next - 1
        })
    };
    Some((0..system.matrix.columns()).map(place).collect())
}

/// Number of pieces in which sorted places hang together, corners included.
fn pieces(places: &[[usize; 3]]) -> usize {
    let mut parent: Vec<usize> = (0..places.len()).collect();
    let root = |parent: &mut Vec<usize>, mut at: usize| {
        while parent[at] != at {
            parent[at] = parent[parent[at]];
            at = parent[at];
        }
        at
    };
    let mut count = places.len();
    for (at, place) in places.iter().enumerate() {
        for neighbour in 0..27 {
            let step = [neighbour % 3, neighbour / 3 % 3, neighbour / 9];
            // A step of 1 in each direction is the cell itself; borders fall out of the search.
            let there: [usize; 3] = std::array::from_fn(|d| (place[d] + step[d]).wrapping_sub(1));
            if there <= *place {
                continue;
            }
            if let Ok(other) = places.binary_search(&there) {
                let (a, b) = (root(&mut parent, at), root(&mut parent, other));
                if a != b {
                    parent[a] = b;
                    count -= 1;
                }
            }
        }
    }
    count
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn pieces_join_at_sides_and_corners() {
        assert_eq!(pieces(&[[0, 0, 0], [1, 1, 0], [1, 2, 1]]), 1);
        assert_eq!(pieces(&[[0, 0, 0], [0, 2, 0], [1, 1, 0]]), 1);
        assert_eq!(pieces(&[[0, 0, 0], [2, 0, 0], [5, 5, 5]]), 3);
    }
}
