//! From settings to a checked system.

use std::path::Path;

use ndarray::Array2;

use crate::base::grid::{Axis, Grid};
use crate::base::{Complaint, Warning, memory};
use crate::files::vector::NonFinite;
use crate::files::{self, matrix::ReadOptions};
use crate::job::settings::{ReferenceSource, Source, UncertaintySource};
use crate::job::typed::{Duplicates, GridTable, Missing, PassName, Precision};
use crate::job::{JobError, forecast};
use crate::kernel::Way;
use crate::operator;
use crate::report::record::InputRecord;
use crate::system::{BlockPart, Linearisation, Parts, Reference, System, Uncertainty};

/// A system as the settings describe it.
pub struct Loaded {
    pub system: System,
    /// n×1 or n×k.
    pub start: Option<Array2<f64>>,
    pub warnings: Vec<Warning>,
}

/// Reads and checks everything the settings name, for a run at this many strengths.
///
/// # Errors
/// A file that cannot be read or is at fault; parts that do not fit each other; vectors that
/// would not fit in memory.
pub fn load(source: &Source, strengths: usize) -> Result<Loaded, JobError> {
    let mut reader = Reader { source, warnings: Vec::new() };
    let blocks = reader.blocks()?;
    refuse_too_large(&blocks, source.grid.as_ref(), strengths)?;
    let rows: usize = blocks.iter().map(|block| block.matrix.rows()).sum();
    let columns = blocks[0].matrix.columns();
    let row_table = match &source.rows {
        Some(path) => Some((files::table::read_rows(path, rows)?, path.clone())),
        None => None,
    };
    let column_table = match &source.columns {
        Some(path) => Some((files::table::read_columns(path, columns)?, path.clone())),
        None => None,
    };
    let reference = match &source.reference {
        None => None,
        Some(ReferenceSource::Number(number)) => Some(Reference::Number(*number)),
        Some(ReferenceSource::Fit) => Some(Reference::Fit),
        Some(ReferenceSource::File(path)) => Some(Reference::Values {
            values: reader.vector(path, NonFinite::Refuse)?,
            path: path.clone(),
        }),
    };
    let linearisation = match (&source.linearised_at, &source.predicted) {
        (Some(at), Some(predicted)) => Some(Linearisation {
            model: reader.single(at)?,
            model_path: at.clone(),
            predicted: reader.single(predicted)?,
            predicted_path: predicted.clone(),
        }),
        _ => None,
    };
    let start = match &source.start {
        Some(path) => {
            Some(checked_start(reader.vector(path, NonFinite::Refuse)?, path, columns, &blocks)?)
        }
        None => None,
    };
    let grid = source.grid.as_ref().map(|table| reader.grid(table)).transpose()?;
    let parts = Parts {
        blocks,
        rows: row_table,
        columns: column_table,
        reference,
        missing_nan: source.missing == Some(Missing::Nan),
        linearisation,
        grid,
        units: source.units.clone(),
    };
    let (mut system, warnings) = System::assemble(parts)?;
    match source.pass {
        PassName::Auto => {}
        PassName::One => system.matrix.go(Way::OnePass),
        PassName::TwoPhase => system.matrix.go(Way::TwoPhase),
    }
    reader.warnings.extend(warnings);
    let start = start.map(|values| hold(values, system.columns.fixed.as_deref()));
    Ok(Loaded { system, start, warnings: reader.warnings })
}

/// A held unknown never moves, so it starts where it is held whatever the start model says.
fn hold(mut start: Array2<f64>, fixed: Option<&[f64]>) -> Array2<f64> {
    for (mut values, held) in start.rows_mut().into_iter().zip(fixed.unwrap_or_default()) {
        if !held.is_nan() {
            values.fill(*held);
        }
    }
    start
}

/// Length and checksum of every file the system is read from.
///
/// # Errors
/// A file cannot be read.
pub fn identities(source: &Source) -> Result<Vec<InputRecord>, JobError> {
    source
        .files()
        .iter()
        .map(|path| {
            let identity = files::identity(path)?;
            Ok(InputRecord {
                path: path.to_string_lossy().into_owned(),
                bytes: identity.bytes,
                checksum: identity.checksum,
            })
        })
        .collect()
}

/// A small file can declare billions of unknowns: better refused now than ended by the system.
fn refuse_too_large(
    blocks: &[BlockPart],
    grid: Option<&GridTable>,
    strengths: usize,
) -> Result<(), JobError> {
    let rows: usize = blocks.iter().map(|block| block.matrix.rows()).sum();
    let columns = blocks[0].matrix.columns();
    let sets = blocks[0].data.ncols();
    // A mark for every cell while the active ones are checked, and model_grid.npy of every set.
    let cells =
        grid.map_or(0, |g| g.shape.iter().fold(1, |all: u64, n| all.saturating_mul(*n as u64)));
    let gridded = cells.saturating_mul(8 * sets as u64 + 8);
    let needed = forecast::least_bytes(rows, columns, sets, strengths).saturating_add(gridded);
    match memory::available_bytes() {
        Some(available) if needed > available => {
            let gigabytes = |bytes: u64| format!("{:.1} GB", bytes as f64 / 1e9);
            Err(JobError::TooLarge(
                Complaint::new(
                    format!(
                        "vectors for {rows} data and {columns} unknowns at {strengths} strengths need at \
                         least {} and {} are free",
                        gigabytes(needed),
                        gigabytes(available)
                    ),
                    "check the size that the matrix declares; ask for fewer strengths \
                     (--strength-count) or fewer data sets at a time, or use a larger machine",
                )
                .in_file(&blocks[0].matrix_path),
            ))
        }
        _ => Ok(()),
    }
}

fn checked_start(
    values: Array2<f64>,
    path: &Path,
    columns: usize,
    blocks: &[BlockPart],
) -> Result<Array2<f64>, JobError> {
    let sets = blocks[0].data.ncols();
    if values.nrows() == columns && (values.ncols() == 1 || values.ncols() == sets) {
        return Ok(values);
    }
    Err(JobError::BadInput(
        Complaint::new(
            format!(
                "the start has shape {}×{}, but the model has {columns} unknowns and there are {sets} data sets",
                values.nrows(),
                values.ncols()
            ),
            "give one value per unknown, in one column or one per data set",
        )
        .in_file(path),
    ))
}

struct Reader<'a> {
    source: &'a Source,
    warnings: Vec<Warning>,
}

impl Reader<'_> {
    fn kept<T>(&mut self, loaded: files::Loaded<T>) -> T {
        self.warnings.extend(loaded.warnings);
        loaded.value
    }

    fn blocks(&mut self) -> Result<Vec<BlockPart>, JobError> {
        let options = ReadOptions {
            duplicates: match self.source.duplicates {
                Duplicates::Sum => operator::Duplicates::Sum,
                Duplicates::Error => operator::Duplicates::Error,
                Duplicates::Last => operator::Duplicates::Last,
            },
            allow_nonfinite: self.source.allow_nonfinite,
            precision: match self.source.precision {
                Precision::Double => operator::Precision::Double,
                Precision::Single => operator::Precision::Single,
            },
        };
        // Whether a NaN datum is missing or a fault is for the system to say, by row.
        let source = self.source;
        source
            .blocks
            .iter()
            .map(|block| {
                let uncertainty = match &block.uncertainty {
                    None => None,
                    Some(UncertaintySource::Formula { absolute, percent }) => {
                        Some(Uncertainty::Formula { absolute: *absolute, percent: *percent })
                    }
                    Some(UncertaintySource::File(path)) => Some(Uncertainty::Values {
                        values: self.vector(path, NonFinite::Keep)?,
                        path: path.clone(),
                    }),
                };
                Ok(BlockPart {
                    name: block.name.clone(),
                    matrix: {
                        let read = files::matrix::read(&block.matrix, &options)?;
                        self.kept(read)
                    },
                    matrix_path: block.matrix.clone(),
                    data: self.vector(&block.data, NonFinite::Keep)?,
                    data_path: block.data.clone(),
                    uncertainty,
                    weight: block.weight,
                })
            })
            .collect()
    }

    fn vector(&mut self, path: &Path, nonfinite: NonFinite) -> Result<Array2<f64>, JobError> {
        let read = files::vector::read(path, nonfinite)?;
        Ok(self.kept(read))
    }

    /// A vector of one column.
    fn single(&mut self, path: &Path) -> Result<Vec<f64>, JobError> {
        let values = self.vector(path, NonFinite::Refuse)?;
        if values.ncols() == 1 {
            return Ok(values.into_iter().collect());
        }
        Err(JobError::BadInput(
            Complaint::new(
                format!("{} columns where one is expected", values.ncols()),
                "give a single column of numbers",
            )
            .in_file(path),
        ))
    }

    fn grid(&mut self, table: &GridTable) -> Result<Grid, JobError> {
        let count = table.axes.len();
        for (key, length) in [
            ("shape", table.shape.len()),
            ("spacing", table.spacing.len()),
            ("origin", table.origin.len()),
        ] {
            if length != count {
                return Err(JobError::BadInput(Complaint::new(
                    format!("[grid] names {count} axes, but {key} has {length} values"),
                    "give one value per axis, in the order of `axes`",
                )));
            }
        }
        let axes: Vec<Axis> = (0..count)
            .map(|i| Axis {
                name: table.axes[i].clone(),
                cells: table.shape[i],
                spacing: table.spacing[i],
                origin: table.origin[i],
            })
            .collect();
        let bare = Grid::new(axes.clone(), table.unit.clone(), &table.fastest, None)
            .map_err(JobError::BadInput)?;
        let Some(path) = &table.active else {
            return Ok(bare);
        };
        let active = files::vector::read_active(path, bare.cell_count())?;
        Grid::new(axes, table.unit.clone(), &table.fastest, Some(active))
            .map_err(|complaint| JobError::BadInput(complaint.in_file(path)))
    }
}
