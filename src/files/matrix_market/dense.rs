//! Vectors and data sets: an array, or a coordinate file of one column; what is missing is 0.

use std::ops::ControlFlow;

use ndarray::Array2;

use super::super::source::Source;
use super::super::{Facts, FileError, Loaded};
use super::header::Layout;
use super::load::banner_warnings;
use super::pass::{Collector, Entries, checked_header};
use super::walk::Leniency;
use crate::base::Complaint;

/// Reads a Matrix Market array, or an n×1 coordinate file, as values × data sets.
pub fn read_dense(
    source: &Source,
    allow_nonfinite: bool,
) -> Result<Loaded<Array2<f64>>, FileError> {
    let bad = |complaint| source.bad(complaint);
    let header = checked_header(source).map_err(bad)?;
    if header.layout == Layout::Coordinate && header.columns != 1 {
        return Err(bad(Complaint::new(
            format!("a sparse file of {} columns stands where a vector is needed", header.columns),
            "give an array, or a coordinate file of one column",
        )
        .at_line(header.size_line)));
    }
    let leniency = Leniency { allow_nonfinite, single: false };
    let entries = Entries { source, header: &header, leniency };
    let seen = match header.layout {
        Layout::Coordinate => vec![false; header.rows],
        Layout::Array => Vec::new(),
    };
    let values = Array2::zeros((header.rows, header.columns));
    let mut placing = Placing { values, seen };
    let tally = entries.pass(&mut placing).map_err(bad)?.unwrap_or_default();
    let packed = if source.text().is_packed() { ", gzip" } else { "" };
    let facts = Facts {
        format: header.format() + packed,
        bytes: source.len(),
        underflows: tally.underflows,
        nonfinite: tally.nonfinite,
        ..Facts::default()
    };
    Ok(Loaded { value: placing.values, warnings: banner_warnings(source, &header), facts })
}

struct Placing {
    values: Array2<f64>,
    /// Of a coordinate file: which rows have their value.
    seen: Vec<bool>,
}

impl Collector for Placing {
    type Piece = Vec<(u64, usize, u32, f64)>;

    fn start(&self) -> Self::Piece {
        Vec::new()
    }

    fn take(&self, piece: &mut Self::Piece, line: u64, row: usize, column: u32, value: f64) {
        piece.push((line, row, column, value));
    }

    fn batch(
        &mut self,
        pieces: Vec<(u64, Self::Piece)>,
        _: bool,
    ) -> Result<ControlFlow<()>, Complaint> {
        for (before, piece) in pieces {
            for (line, row, column, value) in piece {
                if self.seen.get_mut(row).is_some_and(|seen| std::mem::replace(seen, true)) {
                    return Err(Complaint::new(
                        format!("value {} is given twice", row + 1),
                        "give each value once: a datum has no parts to be added",
                    )
                    .at_line(before + line));
                }
                self.values[[row, column as usize]] = value;
            }
        }
        Ok(ControlFlow::Continue(()))
    }
}
