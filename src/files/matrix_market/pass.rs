//! One pass over all entries, in parallel pieces whose results come in file order.

use std::ops::ControlFlow;

use rayon::prelude::*;

use super::super::complain::{changed, justify_rows};
use super::super::source::{Source, Text, pieces};
use super::header::{Header, Layout};
use super::rows;
use super::walk::{Leniency, Tally, Walk};
use crate::base::Complaint;
use crate::operator::build::{RowCounts, RunCounter};

/// What each piece of a pass does with its entries.
pub trait Collector: Send + Sync {
    /// What one piece collects.
    type Piece: Send;
    fn start(&self) -> Self::Piece;
    /// One entry: line in the piece from 1; row, column from 0; value.
    fn take(&self, piece: &mut Self::Piece, line: u64, row: usize, column: u32, value: f64);
    /// After a piece's last entry, while other pieces may still be read.
    fn end(&self, _: &mut Self::Piece) {}
    /// The pieces of one batch, in order, each with the number of lines before it; `single` if f32
    /// holds each value of the batch exactly. Breaking off ends the pass.
    fn batch(
        &mut self,
        pieces: Vec<(u64, Self::Piece)>,
        single: bool,
    ) -> Result<ControlFlow<()>, Complaint>;
}

/// A file under its header.
pub struct Entries<'a> {
    pub source: &'a Source,
    pub header: &'a Header,
    pub leniency: Leniency,
}

impl Entries<'_> {
    /// Goes through the file once. The tally covers the whole file and holds no fault; there is
    /// none if the collector broke off.
    ///
    /// # Errors
    /// The first fault in the file; too few or too many entries.
    pub fn pass<C: Collector>(&self, collector: &mut C) -> Result<Option<Tally>, Complaint> {
        let mut total = Tally { lines: self.header.lines, ..Tally::default() };
        let flow = self.text()?.each(|batch| self.batch(batch, &mut total, collector))?;
        if flow.is_break() {
            return Ok(None);
        }
        if total.entries < self.header.entries {
            return Err(Complaint::new(
                format!(
                    "the file holds {} entries, but line {} declares {}",
                    total.entries, self.header.size_line, self.header.entries
                ),
                "correct the size line, or give the whole file",
            )
            .at_line(total.lines));
        }
        Ok(Some(total))
    }

    /// The text after the header.
    fn text(&self) -> Result<Text<'_>, Complaint> {
        let mut text = self.source.text();
        match Header::read(&mut text)? == *self.header {
            true => Ok(text),
            false => Err(changed()),
        }
    }

    /// Counts the entries of each row by the row numbers alone: nothing else in a line is read,
    /// nor is anything found wrong. `None` where that cannot be told so easily.
    ///
    /// # Errors
    /// Those of the compressed stream.
    pub fn count_rows(&self) -> Result<Option<RowCounts>, Complaint> {
        let counts = RowCounts::new(self.header.rows);
        let flow = self.text()?.each(|batch| {
            let counted = pieces(batch)
                .par_iter()
                .all(|piece| rows::each(piece, self.header, RunCounter::new(&counts)).is_some());
            Ok(if counted { ControlFlow::Continue(()) } else { ControlFlow::Break(()) })
        })?;
        Ok(flow.is_continue().then_some(counts))
    }

    fn batch<C: Collector>(
        &self,
        batch: &[u8],
        total: &mut Tally,
        collector: &mut C,
    ) -> Result<ControlFlow<()>, Complaint> {
        let walk = Walk { header: self.header, leniency: self.leniency };
        let pieces = pieces(batch);
        let firsts = self.first_values(&pieces, total.entries, &walk);
        let shared = &*collector;
        let walked: Vec<(Tally, C::Piece)> = pieces
            .par_iter()
            .zip(&firsts)
            .map(|(piece, &first)| {
                let mut kept = shared.start();
                // An array's places are only defined up to its last value.
                let limit = self.header.entries.saturating_sub(first);
                let tally = walk.piece(piece, first, limit, |line, i, j, value| {
                    shared.take(&mut kept, line, i, j, value);
                });
                shared.end(&mut kept);
                (tally, kept)
            })
            .collect();
        let mut results = Vec::with_capacity(walked.len());
        let not_single = total.not_single;
        for ((mut tally, kept), piece) in walked.into_iter().zip(pieces) {
            let left = self.header.entries - total.entries;
            if tally.entries > left {
                // Only now is it known how many this piece may hold: find the first too many.
                tally = walk.piece(piece, 0, left, |_, _, _, _| {});
            }
            if let Some(fault) = tally.fault {
                let line = total.lines + fault.line.unwrap_or(0);
                return Err(fault.at_line(line));
            }
            results.push((total.lines, kept));
            total.add(&tally);
        }
        collector.batch(results, total.not_single == not_single)
    }

    /// Number of values before each piece; only an array's places depend on it.
    fn first_values(&self, pieces: &[&[u8]], before: u64, walk: &Walk<'_>) -> Vec<u64> {
        if self.header.layout == Layout::Coordinate {
            return vec![0; pieces.len()];
        }
        let counts: Vec<u64> = pieces.par_iter().map(|piece| walk.count_values(piece)).collect();
        let running = counts.iter().scan(before, |sum, count| {
            let first = *sum;
            *sum += count;
            Some(first)
        });
        running.collect()
    }
}

impl Tally {
    fn add(&mut self, piece: &Self) {
        self.lines += piece.lines;
        self.entries += piece.entries;
        self.zeros += piece.zeros;
        self.underflows += piece.underflows;
        self.nonfinite += piece.nonfinite;
        self.not_single += piece.not_single;
    }
}

/// A header, once it is clear that the file can hold what it declares.
///
/// # Errors
/// Anything wrong with the header; more entries or rows than the file's length allows.
pub fn checked_header(source: &Source) -> Result<Header, Complaint> {
    let mut text = source.text();
    let header = Header::read(&mut text)?;
    let place = |fault: Complaint| fault.at_line(header.size_line);
    let rows = header.rows as u64;
    // The smallest entry is "1 1" and a line end, the last without one; the smallest value "1".
    let entry_bytes = if header.layout == Layout::Array { 2 } else { 4 };
    let fits = |bytes: u64| {
        let left = bytes.saturating_sub(header.bytes);
        left.saturating_add(1) / entry_bytes >= header.entries && justify_rows(rows, bytes).is_ok()
    };
    if fits(source.len()) {
        return Ok(header);
    }
    // Compressed text is longer than the file; how much longer is only known by looking.
    let bytes = if text.is_packed() { Text::measure(source.bytes())? } else { source.len() };
    if fits(bytes) {
        return Ok(header);
    }
    justify_rows(rows, bytes).map_err(place)?;
    let left = bytes.saturating_sub(header.bytes);
    Err(place(Complaint::new(
        format!(
            "{} entries are declared, but the {left} bytes after the size line hold at most {}",
            header.entries,
            left.saturating_add(1) / entry_bytes
        ),
        "correct the size line, or give the whole file",
    )))
}
