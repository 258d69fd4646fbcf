//! A system matrix, its text read in full once: entries that come row by row are appended; of
//! those in another order the row numbers are read first, to know where each belongs.

use std::marker::PhantomData;
use std::ops::ControlFlow;
use std::sync::Arc;

use super::super::complain::changed;
use super::super::matrix::{ReadOptions, Settling, repeated_warning};
use super::super::source::Source;
use super::super::{Facts, FileError, Loaded};
use super::header::{Field, Header, Layout, Symmetry};
use super::pass::{Collector, Entries, checked_header};
use super::walk::{Leniency, Tally};
use crate::base::{Complaint, Warning};
use crate::operator::build::{Order, Piece, Ranges, RowCounts, RunCounter, Store};
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
    let (tally, settled) = if header.field == Field::Pattern {
        build::<()>(&entries, options)
    } else {
        build::<f64>(&entries, options)
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

/// Reads entries whose values need the storage `W` on their way, and settles them.
fn build<W: Keep>(
    entries: &Entries<'_>,
    options: &ReadOptions,
) -> Result<(Tally, Settled), Complaint> {
    let (tally, store) = match by_row::<W>(entries)? {
        Some(read) => read,
        None => counted::<W>(entries)?,
    };
    let settling = Settling::of(options);
    let settled = store.finish::<W>(&settling.rules).map_err(|_| changed())?;
    let settled = settled.map_err(|refused| {
        let lines = refused.entry().and_then(|(row, column)| lines_of(entries, row, column));
        settling.complaint(refused, lines.as_deref())
    })?;
    Ok((tally, settled))
}

/// The cheap way, one reading of the text: entries that come row by row. `None` if they do not,
/// which mostly shows at once.
fn by_row<W: Keep>(entries: &Entries<'_>) -> Result<Option<(Tally, Store)>, Complaint> {
    let header = entries.header;
    if header.layout == Layout::Array || header.symmetry != Symmetry::General {
        return Ok(None);
    }
    let counts = Arc::new(RowCounts::new(header.rows));
    // Each entry takes at least four bytes of the file, or it was unpacked once to be sure of that.
    let order = Order::ByRow(Arc::clone(&counts), header.entries as usize);
    let store = Store::new(order, header.columns, entries.leniency.single);
    let mut appending = Appending::<W> { store, counts, last_row: 0, kind: PhantomData };
    let tally = entries.pass(&mut appending)?;
    Ok(tally.map(|tally| (tally, appending.store)))
}

/// The way for any order: the rows are counted first, by a reading that skips all but their
/// numbers.
fn counted<W: Keep>(entries: &Entries<'_>) -> Result<(Tally, Store), Complaint> {
    let header = entries.header;
    // A dense matrix keeps its non-zeros only.
    let drop_zeros = header.layout == Layout::Array;
    let quick = if drop_zeros { None } else { entries.count_rows()? };
    let counts = match quick {
        Some(counts) => counts,
        None => {
            let counts = RowCounts::new(header.rows);
            entries.pass(&mut Counting { counts: &counts, drop_zeros })?;
            counts
        }
    };
    let starts = counts.into_starts();
    let ranges = Arc::clone(&starts.ranges);
    let store = Store::new(Order::Counted(starts), header.columns, entries.leniency.single);
    let mut filling = Filling::<W> { store, ranges, drop_zeros, kind: PhantomData };
    let tally = entries.pass(&mut filling)?.unwrap_or_default();
    Ok((tally, filling.store))
}

/// Counts entries per row.
struct Counting<'a> {
    counts: &'a RowCounts,
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

    fn batch(&mut self, _: Vec<(u64, Self::Piece)>, _: bool) -> Result<ControlFlow<()>, Complaint> {
        Ok(ControlFlow::Continue(()))
    }
}

/// Puts entries at the end, as long as they come row by row.
struct Appending<W> {
    store: Store,
    counts: Arc<RowCounts>,
    last_row: u32,
    kind: PhantomData<W>,
}

/// Entries, and whether they come row by row.
struct Run<W> {
    piece: Piece<W>,
    in_order: bool,
}

impl<W: Keep> Collector for Appending<W> {
    type Piece = Run<W>;

    fn start(&self) -> Self::Piece {
        Run { piece: Piece::default(), in_order: true }
    }

    #[inline(always)]
    fn take(&self, run: &mut Self::Piece, _: u64, row: usize, column: u32, value: f64) {
        run.piece.push(row, column, value);
    }

    fn end(&self, run: &mut Self::Piece) {
        let entries = run.piece.entries();
        run.in_order = entries.is_sorted_by_key(|entry| entry.0);
        if run.in_order {
            let mut counter = RunCounter::new(&self.counts);
            entries.iter().for_each(|entry| counter.add(entry.0 as usize));
        }
    }

    fn batch(
        &mut self,
        pieces: Vec<(u64, Self::Piece)>,
        single: bool,
    ) -> Result<ControlFlow<()>, Complaint> {
        for (_, run) in &pieces {
            let entries = run.piece.entries();
            let follows = entries.first().is_none_or(|entry| entry.0 >= self.last_row);
            if !(run.in_order && follows) {
                return Ok(ControlFlow::Break(()));
            }
            self.last_row = entries.last().map_or(self.last_row, |entry| entry.0);
        }
        let pieces: Vec<_> = pieces.into_iter().map(|(_, run)| run.piece).collect();
        self.store.put(&pieces, single).map_err(|_| changed())?;
        Ok(ControlFlow::Continue(()))
    }
}

/// Puts entries in place.
struct Filling<W> {
    store: Store,
    ranges: Arc<Ranges>,
    drop_zeros: bool,
    kind: PhantomData<W>,
}

impl<W: Keep> Collector for Filling<W> {
    type Piece = Piece<W>;

    fn start(&self) -> Self::Piece {
        Piece::default()
    }

    #[inline(always)]
    fn take(&self, piece: &mut Self::Piece, _: u64, row: usize, column: u32, value: f64) {
        if !(self.drop_zeros && value == 0.0) {
            piece.push(row, column, value);
        }
    }

    fn end(&self, piece: &mut Self::Piece) {
        piece.sort(&self.ranges);
    }

    fn batch(
        &mut self,
        pieces: Vec<(u64, Self::Piece)>,
        single: bool,
    ) -> Result<ControlFlow<()>, Complaint> {
        let pieces: Vec<_> = pieces.into_iter().map(|(_, piece)| piece).collect();
        self.store.put(&pieces, single).map_err(|_| changed())?;
        Ok(ControlFlow::Continue(()))
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

    fn batch(
        &mut self,
        pieces: Vec<(u64, Vec<u64>)>,
        _: bool,
    ) -> Result<ControlFlow<()>, Complaint> {
        for (before, lines) in pieces {
            self.lines.extend(lines.into_iter().map(|line| before + line));
        }
        Ok(ControlFlow::Continue(()))
    }
}
