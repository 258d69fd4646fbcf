//! A system matrix: one pass checks and counts, a second puts every entry in its place.

use std::sync::Arc;

use super::super::complain::changed;
use super::super::matrix::{ReadOptions, Settling, repeated_warning};
use super::super::source::Source;
use super::super::{Facts, FileError, Loaded};
use super::header::{Field, Header, Layout};
use super::pass::{Collector, Entries, checked_header};
use super::walk::{Leniency, Tally};
use crate::base::{Complaint, Warning};
use crate::operator::build::{Buckets, RowCounts, RunCounter, Scatter};
use crate::operator::keep::Keep;
use crate::operator::settle::Settled;
use crate::operator::{CompressedRows, Duplicates, Precision};

/// Reads a Matrix Market file, plain or gzip, as a system matrix.
pub fn read_matrix(
    source: &Source,
    options: &ReadOptions,
) -> Result<Loaded<CompressedRows>, FileError> {
    let bad = |complaint| source.bad(complaint);
    let header = checked_header(source).map_err(bad)?;
    let leniency = Leniency {
        allow_nonfinite: options.allow_nonfinite,
        single: options.precision == Precision::Single,
    };
    let entries = Entries { source, header: &header, leniency };
    let drop_zeros = header.layout == Layout::Array;
    let counts = RowCounts::new(header.rows);
    let tally = entries.pass(&mut Counting { counts: &counts, drop_zeros }).map_err(bad)?;

    let settled = if header.field == Field::Pattern {
        fill::<()>(&entries, counts, options)
    } else if leniency.single || tally.not_single == 0 {
        fill::<f32>(&entries, counts, options)
    } else {
        fill::<f64>(&entries, counts, options)
    }
    .map_err(bad)?;
    Ok(report(source, &header, &tally, settled, options.duplicates))
}

fn report(
    source: &Source,
    header: &Header,
    tally: &Tally,
    settled: Settled,
    rule: Duplicates,
) -> Loaded<CompressedRows> {
    let packed = if source.text().is_packed() { ", gzip" } else { "" };
    let facts = Facts {
        format: header.format() + packed,
        bytes: source.len(),
        explicit_zeros: if header.layout == Layout::Array { 0 } else { tally.zeros },
        duplicates: settled.duplicates,
        underflows: tally.underflows,
        nonfinite: tally.nonfinite,
    };
    let mut warnings = banner_warnings(source, header);
    warnings.extend(repeated_warning(&source.path, settled.duplicates, rule));
    Loaded { value: settled.matrix, warnings, facts }
}

/// What was forgiven in the banner.
pub fn banner_warnings(source: &Source, header: &Header) -> Vec<Warning> {
    let warn = |(what, line): (&str, u64)| {
        Complaint::new(what, "read all the same; other programs may refuse the file")
            .in_file(&source.path)
            .at_line(line)
            .into()
    };
    header.forgiven.map(warn).into_iter().collect()
}

fn fill<V: Keep>(
    entries: &Entries<'_>,
    counts: RowCounts,
    options: &ReadOptions,
) -> Result<Settled, Complaint> {
    let scatter = Scatter::<V>::new(counts, entries.header.columns);
    let drop_zeros = entries.header.layout == Layout::Array;
    let mut filling = Filling { first_rows: scatter.first_rows(), scatter, drop_zeros };
    entries.pass(&mut filling)?;
    let unsettled = filling.scatter.finish().map_err(|_| changed())?;
    let settling = Settling::of(options);
    unsettled.settle(&settling.rules).map_err(|refused| {
        let lines = refused.entry().and_then(|(row, column)| lines_of(entries, row, column));
        settling.complaint(refused, lines.as_deref())
    })
}

/// Counts entries per row.
struct Counting<'a> {
    counts: &'a RowCounts,
    /// A dense matrix keeps its non-zeros only.
    drop_zeros: bool,
}

impl<'a> Collector for Counting<'a> {
    type Piece = RunCounter<'a>;

    fn start(&self) -> Self::Piece {
        RunCounter::new(self.counts)
    }

    #[inline(always)]
    fn take(&self, piece: &mut Self::Piece, _: u64, row: usize, _: u32, value: f64) {
        if !(self.drop_zeros && value == 0.0) {
            piece.add(row);
        }
    }

    fn batch(&mut self, _: Vec<(u64, Self::Piece)>) -> Result<(), Complaint> {
        Ok(())
    }
}

/// Puts entries in place.
struct Filling<V> {
    scatter: Scatter<V>,
    first_rows: Arc<[usize]>,
    drop_zeros: bool,
}

impl<V: Keep> Collector for Filling<V> {
    type Piece = Buckets<V>;

    fn start(&self) -> Self::Piece {
        Buckets::new(&self.first_rows)
    }

    #[inline(always)]
    fn take(&self, piece: &mut Self::Piece, _: u64, row: usize, column: u32, value: f64) {
        if !(self.drop_zeros && value == 0.0) {
            piece.push(row, column, value);
        }
    }

    fn batch(&mut self, pieces: Vec<(u64, Self::Piece)>) -> Result<(), Complaint> {
        let pieces: Vec<Buckets<V>> = pieces.into_iter().map(|(_, piece)| piece).collect();
        self.scatter.put(&pieces).map_err(|_| changed())
    }
}

/// The lines that state one entry; read again, for a message only. `None` if that fails.
fn lines_of(entries: &Entries<'_>, row: usize, column: usize) -> Option<Vec<u64>> {
    let mut finding = Finding { row, column: column as u32, lines: Vec::new() };
    entries.pass(&mut finding).ok()?;
    Some(finding.lines)
}

struct Finding {
    row: usize,
    column: u32,
    lines: Vec<u64>,
}

impl Collector for Finding {
    type Piece = Vec<u64>;

    fn start(&self) -> Vec<u64> {
        Vec::new()
    }

    fn take(&self, piece: &mut Vec<u64>, line: u64, row: usize, column: u32, _: f64) {
        if (row, column) == (self.row, self.column) {
            piece.push(line);
        }
    }

    fn batch(&mut self, pieces: Vec<(u64, Vec<u64>)>) -> Result<(), Complaint> {
        for (before, lines) in pieces {
            self.lines.extend(lines.into_iter().map(|line| before + line));
        }
        Ok(())
    }
}
