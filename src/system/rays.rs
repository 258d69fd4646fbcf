//! Exact lengths of straight rays in the cells of a grid.
//!
//! The planes of each axis cut a ray at α = (plane − from) / (to − from), α from 0 to 1 along
//! the ray. The planes of all axes are visited in order of α, and the length in a cell is the
//! difference of two neighbouring α times the length of the ray
//! (Siddon, Medical Physics 12:252, 1985, <https://doi.org/10.1118/1.595715>).
//!
//! **Borders.** A cell owns its lower border along each axis and not its upper one, except that
//! the last cell owns the outer border of the grid too. So a ray that runs along a border counts
//! once: to the cell on the side of larger coordinates, or to the cell inside the grid.
//!
//! **Rounding.** End points within rounding of a border are taken to lie on it, and two planes
//! crossed within rounding of each other are crossed at once: a ray through a corner touches
//! only the cells that it enters. Lengths of a ray always add up to its chord.
//!
//! **Same bits.** Only +, −, ×, ÷ and square roots are used, each rays on its own, and a ray is
//! always walked from the same end: reversing it, another machine or another number of threads
//! change no bit.

use rayon::prelude::*;

use crate::base::{Complaint, Grid};
use crate::operator::CompressedRows;

mod walk;

use walk::Tracer;

/// Rays handed to a thread at a time; enough work to be worth it, and still many pieces.
const RAYS_PER_TASK: usize = 256;

/// A straight ray between two points, coordinates along the axes as the grid lists them, in the
/// grid's unit. Coordinates beyond the grid's axes are 0.
#[derive(Debug, Clone, Copy, PartialEq)]
pub struct Segment {
    /// Start; the direction does not matter.
    pub from: [f64; 3],
    /// End.
    pub to: [f64; 3],
}

impl Segment {
    /// A ray from as many coordinates as the grid has axes.
    ///
    /// Panics if a point has more than three coordinates.
    pub fn new(from: &[f64], to: &[f64]) -> Self {
        let fill = |point: &[f64]| {
            let mut full = [0.0; 3];
            full[..point.len()].copy_from_slice(point);
            full
        };
        Self { from: fill(from), to: fill(to) }
    }

    /// Distance between the end points.
    pub fn length(&self) -> f64 {
        self.squared_length().sqrt()
    }

    fn squared_length(&self) -> f64 {
        let [x, y, z] = [0, 1, 2].map(|axis| self.to[axis] - self.from[axis]);
        x * x + y * y + z * z
    }
}

/// Why a ray cannot be traced.
#[derive(Debug, Clone, Copy, PartialEq, Eq, thiserror::Error)]
pub enum RayFlaw {
    /// A coordinate is NaN or infinite.
    #[error("a coordinate is not a finite number")]
    NotFinite,
    /// Both ends are one point.
    #[error("it starts and ends at the same point")]
    ZeroLength,
    /// Lengths overflow.
    #[error("its coordinates are too large for arithmetic")]
    TooLarge,
    /// A coordinate other than 0 where the grid has no axis.
    #[error("it has a coordinate along an axis that the grid does not have")]
    BeyondAxes,
}

impl RayFlaw {
    fn remedy(self) -> &'static str {
        match self {
            Self::NotFinite => "give every coordinate of the end points",
            Self::ZeroLength => "give two different end points, or leave the ray out",
            Self::TooLarge => "state coordinates and grid in one unit that suits both",
            Self::BeyondAxes => "give one coordinate for each axis of the grid",
        }
    }
}

/// A ray that cannot be traced, and which one.
#[derive(Debug, Clone, Copy, PartialEq, thiserror::Error)]
#[error("ray {}: {flaw}", row + 1)]
pub struct RayFault {
    /// From 0; messages count from 1.
    pub row: usize,
    /// Why.
    pub flaw: RayFlaw,
    /// As given.
    pub segment: Segment,
}

impl From<RayFault> for Complaint {
    fn from(fault: RayFault) -> Self {
        let Segment { from, to } = fault.segment;
        Complaint::new(fault.to_string(), fault.flaw.remedy())
            .quoting(format!("from {from:?} to {to:?}"))
    }
}

/// What [`matrix`] builds.
#[derive(Debug, Clone, PartialEq)]
pub struct RayMatrix {
    /// Rays × unknowns: the length of ray i in the cell of unknown j, in the grid's unit.
    pub matrix: CompressedRows,
    /// Length of each ray inside the grid, inactive cells included; 0 for a ray that misses it.
    pub chords: Vec<f64>,
    /// How often a ray crossed a cell that is not an unknown. Those lengths are in no row.
    pub inactive_crossings: u64,
}

/// Lengths of one ray in the cells of `grid`, active or not.
///
/// Replaces what `out` holds by (cell number, length > 0), in order from `segment.from` to
/// `segment.to`, each cell at most once. Returns the length inside the grid, to which the entries
/// add up; 0 if the ray misses the grid or touches it in a point. Lengths are good to a few
/// rounding errors of the coordinates: about ε times the distance of the farther end point.
///
/// # Errors
/// A ray without length or with coordinates that are not finite, too large, or not 0 beyond the
/// grid's axes.
pub fn trace(grid: &Grid, segment: &Segment, out: &mut Vec<(u32, f64)>) -> Result<f64, RayFlaw> {
    Tracer::new(grid).trace(segment, out)
}

/// The system matrix of straight rays: one row a ray, one column an unknown, columns ascending.
///
/// Every ray is traced twice, first to count and then to fill, so that nothing but the matrix is
/// ever held: 12 bytes an entry. Runs on the current thread pool; the result does not depend on
/// its size.
///
/// # Errors
/// The first ray that [`trace`] refuses.
pub fn matrix(grid: &Grid, segments: &[Segment]) -> Result<RayMatrix, RayFault> {
    let builder = Builder { tracer: Tracer::new(grid), columns: columns_of_cells(grid) };
    let counts: Vec<Result<Count, RayFault>> = segments
        .par_chunks(RAYS_PER_TASK)
        .enumerate()
        .map(|(task, rays)| builder.count(task * RAYS_PER_TASK, rays))
        .collect();

    let mut pointers = Vec::with_capacity(segments.len() + 1);
    pointers.push(0);
    let mut chords = Vec::with_capacity(segments.len());
    let mut inactive_crossings = 0;
    let mut total = 0;
    for count in counts {
        let count = count?;
        for entries in count.entries {
            total += entries as usize;
            pointers.push(total);
        }
        chords.extend(count.chords);
        inactive_crossings += count.inactive_crossings;
    }

    let (indices, values) = builder.fill(segments, &pointers);
    let matrix =
        CompressedRows::from_compressed(segments.len(), grid.unknowns(), pointers, indices, values);
    Ok(RayMatrix { matrix, chords, inactive_crossings })
}

/// Column of each cell, [`NO_COLUMN`] for inactive ones; `None` where column j is cell j.
fn columns_of_cells(grid: &Grid) -> Option<Vec<u32>> {
    let active = grid.active.as_ref()?;
    let mut columns = vec![NO_COLUMN; grid.cell_count()];
    for (column, &cell) in active.iter().enumerate() {
        columns[cell as usize] = column as u32;
    }
    Some(columns)
}

/// No column has this number: a grid has fewer than 2³² cells, so columns end below it.
const NO_COLUMN: u32 = u32::MAX;

struct Builder {
    tracer: Tracer,
    columns: Option<Vec<u32>>,
}

/// What the first trace of one task's rays found.
struct Count {
    entries: Vec<u32>,
    chords: Vec<f64>,
    inactive_crossings: u64,
}

impl Builder {
    fn count(&self, first_row: usize, rays: &[Segment]) -> Result<Count, RayFault> {
        let mut count = Count {
            entries: Vec::with_capacity(rays.len()),
            chords: Vec::with_capacity(rays.len()),
            inactive_crossings: 0,
        };
        let mut row = Vec::new();
        for (place, segment) in rays.iter().enumerate() {
            let chord = self.tracer.trace(segment, &mut row).map_err(|flaw| RayFault {
                row: first_row + place,
                flaw,
                segment: *segment,
            })?;
            let crossed = row.len();
            self.keep_unknowns(&mut row);
            count.entries.push(row.len() as u32);
            count.chords.push(chord);
            count.inactive_crossings += (crossed - row.len()) as u64;
        }
        Ok(count)
    }

    /// Turns cell numbers into columns and drops the cells that have none.
    fn keep_unknowns(&self, row: &mut Vec<(u32, f64)>) {
        if let Some(columns) = &self.columns {
            row.retain_mut(|(cell, _)| {
                *cell = columns[*cell as usize];
                *cell != NO_COLUMN
            });
        }
    }

    /// Traces again, each task into its own slice of the final arrays.
    fn fill(&self, segments: &[Segment], pointers: &[usize]) -> (Vec<u32>, Vec<f64>) {
        let total = pointers[segments.len()];
        let (mut indices, mut values) = (vec![0u32; total], vec![0.0; total]);
        let mut tasks = Vec::with_capacity(segments.len().div_ceil(RAYS_PER_TASK));
        let (mut indices_left, mut values_left) = (&mut indices[..], &mut values[..]);
        for (task, rays) in segments.chunks(RAYS_PER_TASK).enumerate() {
            let first = task * RAYS_PER_TASK;
            let entries = pointers[first + rays.len()] - pointers[first];
            let (indices_mine, values_mine);
            (indices_mine, indices_left) = indices_left.split_at_mut(entries);
            (values_mine, values_left) = values_left.split_at_mut(entries);
            tasks.push((rays, indices_mine, values_mine));
        }
        tasks.into_par_iter().for_each(|(rays, indices, values)| {
            let mut row = Vec::new();
            let mut place = 0;
            for segment in rays {
                self.tracer.trace(segment, &mut row).expect("counting refused faulty rays");
                self.keep_unknowns(&mut row);
                row.sort_unstable_by_key(|&(column, _)| column);
                for &(column, length) in &row {
                    (indices[place], values[place]) = (column, length);
                    place += 1;
                }
            }
        });
        (indices, values)
    }
}
