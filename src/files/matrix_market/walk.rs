//! The entries of one piece of text.
//!
//! A quick way takes lines that hold exactly what is usual; whatever it does not like goes to a
//! slow way that alone decides what is accepted and words the complaints. Where the quick way gives
//! an answer it is that of the slow way (tested at the end).

use super::super::complain::{LINE_BYTES_MAX, check_single, nonfinite};
use super::super::number::{Whole, real, whole};
use super::super::source::first_line;
use super::header::{Field, Header, Layout, Symmetry, too_long};
use super::places::ArrayPlaces;
use super::quick::{
    blanks, line_end, quick_count, quick_entry, quick_one, quick_signed, quick_value,
};
use crate::base::Complaint;
use crate::base::complaint::quote;

/// What is accepted beyond the format.
#[derive(Debug, Clone, Copy, Default)]
pub struct Leniency {
    pub allow_nonfinite: bool,
    /// Refuse values that f32 cannot hold.
    pub single: bool,
}

/// What was found in a piece.
#[derive(Debug, Default)]
pub struct Tally {
    pub lines: u64,
    /// Lines of entries.
    pub entries: u64,
    pub zeros: u64,
    pub underflows: u64,
    pub nonfinite: u64,
    /// Values that are not exactly an f32.
    pub not_single: u64,
    /// The first fault: its line in the piece from 1, and what it is. Nothing after it was read.
    pub fault: Option<Complaint>,
}

/// Reads pieces under a header.
pub struct Walk<'a> {
    pub header: &'a Header,
    pub leniency: Leniency,
}

/// One entry as the file states it; row and column from 1.
pub type Entry = (u64, u64, f64);

impl Walk<'_> {
    /// Calls `sink(line, row, column, value)` for each matrix entry of the piece, mirrored ones
    /// included; the line counts from 1 in the piece, row and column from 0.
    ///
    /// Of an array, `first` is the number of values before this piece. More than `limit` lines of
    /// entries are a fault.
    pub fn piece(
        &self,
        piece: &[u8],
        first: u64,
        limit: u64,
        sink: impl FnMut(u64, usize, u32, f64),
    ) -> Tally {
        match (self.header.layout, self.header.field) {
            (Layout::Array, _) => self.array(piece, first, limit, sink),
            (_, Field::Pattern) => self.lines(piece, limit, quick_entry(quick_one), sink),
            (_, Field::Real) => self.lines(piece, limit, quick_entry(quick_value), sink),
            (_, Field::Integer) => self.lines(piece, limit, quick_entry(quick_signed), sink),
            (_, Field::Unsigned) => self.lines(piece, limit, quick_entry(quick_count), sink),
        }
    }

    /// Lines that hold something other than a comment.
    pub fn count_values(&self, piece: &[u8]) -> u64 {
        let holds = |line: &&[u8]| line.trim_ascii_start().first().is_some_and(|&b| b != b'%');
        piece.split(|&b| b == b'\n').filter(holds).count() as u64
    }

    fn array(
        &self,
        piece: &[u8],
        first: u64,
        limit: u64,
        sink: impl FnMut(u64, usize, u32, f64),
    ) -> Tally {
        let whole = self.header.field != Field::Real;
        let mut places = ArrayPlaces::from(self.header, first);
        let quick = |bytes: &[u8]| {
            let at = blanks(bytes, 0);
            let (value, length) = if whole { quick_count } else { quick_value }(&bytes[at..])?;
            // The line's own place is filled in by `lines`, which asks `places` only once the
            // line is known to hold an entry.
            Some(((0, 0, value), line_end(bytes, at + length)?))
        };
        self.lines_at(piece, limit, quick, || places.next(), sink)
    }

    fn lines(
        &self,
        piece: &[u8],
        limit: u64,
        quick: impl Fn(&[u8]) -> Option<(Entry, usize)>,
        sink: impl FnMut(u64, usize, u32, f64),
    ) -> Tally {
        self.lines_at(piece, limit, quick, || (0, 0), sink)
    }

    #[inline(always)]
    fn lines_at(
        &self,
        piece: &[u8],
        limit: u64,
        quick: impl Fn(&[u8]) -> Option<(Entry, usize)>,
        mut array_place: impl FnMut() -> (u64, u64),
        mut sink: impl FnMut(u64, usize, u32, f64),
    ) -> Tally {
        let array = self.header.layout == Layout::Array;
        let mut tally = Tally::default();
        let mut at = 0;
        while at < piece.len() {
            let rest = &piece[at..];
            let usual = quick(rest)
                .filter(|&(entry, length)| length <= LINE_BYTES_MAX && self.is_usual(entry, array));
            tally.lines += 1;
            let (mut entry, length) = match usual {
                Some(found) => found,
                None => {
                    let (line, length) = first_line(rest);
                    match self.entry_of(line, &mut tally) {
                        Ok(Some(entry)) => (entry, length),
                        Ok(None) => {
                            at += length;
                            continue;
                        }
                        Err(fault) => {
                            tally.fault = Some(placed(fault, tally.lines, line));
                            return tally;
                        }
                    }
                }
            };
            at += length;
            if tally.entries == limit {
                let (line, _) = first_line(rest);
                tally.fault = Some(placed(self.too_many(), tally.lines, line));
                return tally;
            }
            tally.entries += 1;
            let single = f64::from(entry.2 as f32) == entry.2 || entry.2.is_nan();
            tally.not_single += u64::from(!single);
            if array {
                (entry.0, entry.1) = array_place();
            }
            self.emit(entry, tally.lines, &mut sink);
        }
        tally
    }

    /// Hands over an entry and its mirror image.
    #[inline(always)]
    fn emit(&self, entry: Entry, line: u64, sink: &mut impl FnMut(u64, usize, u32, f64)) {
        // Both are below 2³²: the header was checked, and the entry against it.
        let (row, column, value) = (entry.0 as usize - 1, entry.1 as usize - 1, entry.2);
        sink(line, row, column as u32, value);
        if row != column {
            match self.header.symmetry {
                Symmetry::General => {}
                Symmetry::Symmetric => sink(line, column, row as u32, value),
                Symmetry::Skew => sink(line, column, row as u32, -value),
            }
        }
    }

    /// Whether an entry raises no question at all; the others go the slow way.
    #[inline(always)]
    fn is_usual(&self, (row, column, value): Entry, array: bool) -> bool {
        let Header { rows, columns, symmetry, .. } = self.header;
        let placed = array
            || (row.wrapping_sub(1) < *rows as u64
                && column.wrapping_sub(1) < *columns as u64
                && (*symmetry == Symmetry::General || column < row));
        let kept = if self.leniency.single { f64::from(value as f32) } else { value };
        placed && kept.is_finite() && kept != 0.0
    }

    /// The slow way: the entry of a line, if it holds one.
    fn entry_of(&self, line: &[u8], tally: &mut Tally) -> Result<Option<Entry>, Complaint> {
        if line.len() > LINE_BYTES_MAX {
            return Err(too_long());
        }
        let line = line.trim_ascii();
        if line.is_empty() || line[0] == b'%' {
            return Ok(None);
        }
        let words: Vec<&[u8]> =
            line.split(|&b| b == b' ' || b == b'\t').filter(|word| !word.is_empty()).collect();
        let array = self.header.layout == Layout::Array;
        let (row, column, text) = match (array, self.header.field, words.as_slice()) {
            (true, _, [value]) => (1, 1, Some(*value)),
            (false, Field::Pattern, [row, column]) => {
                (self.index(row, "row")?, self.index(column, "column")?, None)
            }
            (false, field, [row, column, value]) if field != Field::Pattern => {
                (self.index(row, "row")?, self.index(column, "column")?, Some(*value))
            }
            _ => return Err(self.wrong_columns(&words)),
        };
        let place = |what: &str| match array {
            true => what.to_string(),
            false => format!("{what} of row {row}, column {column}"),
        };
        let value = text.map_or(Ok(1.0), |text| self.value(text, tally, place))?;
        self.check_symmetry(row, column, value)?;
        Ok(Some((row, column, value)))
    }

    fn index(&self, word: &[u8], what: &str) -> Result<u64, Complaint> {
        let bound = if what == "row" { self.header.rows } else { self.header.columns } as u64;
        let wrong = |why: String, remedy: String| Err(Complaint::new(why, remedy));
        let shown = quote(word);
        let remedy = format!("{what} numbers run from 1 to {bound} in this file");
        match whole(word) {
            Whole::Is(0) => wrong(
                format!("the {what} number is 0, but the first {what} is 1"),
                format!("{remedy}; add 1 to every index if yours begin at 0"),
            ),
            Whole::Is(value) if value <= bound => Ok(value),
            Whole::Is(value) => {
                wrong(format!("{what} {value} is beyond the {bound} {what}s declared"), remedy)
            }
            Whole::Negative => wrong(format!("the {what} number {shown} is negative"), remedy),
            Whole::TooLarge => wrong(
                format!("{what} {shown} is beyond 2^64, and {bound} {what}s are declared"),
                remedy,
            ),
            Whole::NotOne => {
                wrong(format!("the {what} number \"{shown}\" is not a whole number"), remedy)
            }
        }
    }

    fn value(
        &self,
        word: &[u8],
        tally: &mut Tally,
        place: impl Fn(&str) -> String,
    ) -> Result<f64, Complaint> {
        let shown = || quote(word);
        let field = self.header.field;
        if field != Field::Real {
            check_integer(word, field)?;
        }
        let Some(read) = real(word) else { return Err(not_a_number(word)) };
        if !read.value.is_finite() {
            if !self.leniency.allow_nonfinite {
                let mut fault = nonfinite(&place(&format!("the value {}", shown())));
                if read.overflow {
                    fault.cause += ": it is beyond the range of double precision";
                }
                return Err(fault);
            }
            tally.nonfinite += 1;
        }
        tally.underflows += u64::from(read.underflow);
        tally.zeros += u64::from(read.value == 0.0);
        if self.leniency.single {
            check_single(read.value, || place("the value"))?;
        }
        Ok(read.value)
    }

    fn check_symmetry(&self, row: u64, column: u64, value: f64) -> Result<(), Complaint> {
        if self.header.layout == Layout::Array || self.header.symmetry == Symmetry::General {
            return Ok(());
        }
        if column > row {
            return Err(Complaint::new(
                format!("row {row}, column {column} is above the diagonal of a symmetric matrix"),
                "give the lower triangle only, or declare the matrix general: with both triangles \
                 every entry would count twice",
            ));
        }
        if self.header.symmetry == Symmetry::Skew && row == column && value != 0.0 {
            return Err(Complaint::new(
                format!("row {row}, column {column} of a skew-symmetric matrix is {value}, not 0"),
                "leave out the diagonal, or declare the matrix general",
            ));
        }
        Ok(())
    }

    fn wrong_columns(&self, words: &[&[u8]]) -> Complaint {
        let wanted = match (self.header.layout, self.header.field) {
            (Layout::Array, _) => "one value",
            (_, Field::Pattern) => "row and column (a pattern has no values)",
            _ => "row, column and value",
        };
        let (got, s) = (words.len(), if words.len() == 1 { "" } else { "s" });
        Complaint::new(
            format!("the line has {got} column{s}, expected {wanted}"),
            format!("write exactly {wanted}, separated by blanks"),
        )
    }

    fn too_many(&self) -> Complaint {
        Complaint::new(
            format!(
                "line {} declares {} entries, but there are more; this is the first too many",
                self.header.size_line, self.header.entries
            ),
            "correct the size line, or remove what does not belong to the matrix",
        )
    }
}

fn placed(fault: Complaint, line_number: u64, line: &[u8]) -> Complaint {
    fault.at_line(line_number).quoting(line.trim_ascii())
}

pub fn not_a_number(word: &[u8]) -> Complaint {
    let remedy = if word.contains(&b',') {
        "write a point, not a comma, before the decimals"
    } else {
        "write numbers such as 1.5, -2e-3 or 1.5D+02"
    };
    Complaint::new(format!("\"{}\" is not a number", quote(word)), remedy)
}

fn check_integer(word: &[u8], field: Field) -> Result<(), Complaint> {
    match whole(word) {
        Whole::Negative if field == Field::Unsigned => Err(Complaint::new(
            format!("the value {} in an unsigned-integer file is negative", quote(word)),
            "correct the value, or declare the field integer",
        )),
        Whole::NotOne if real(word).is_some() => Err(Complaint::new(
            format!("the value {} in an integer file is not a whole number", quote(word)),
            "correct the value, or declare the field real",
        )),
        Whole::NotOne => Err(not_a_number(word)),
        _ => Ok(()),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use proptest::prelude::*;

    fn header(field: Field, symmetry: Symmetry) -> Header {
        Header {
            layout: Layout::Coordinate,
            field,
            symmetry,
            rows: 30,
            columns: 30,
            entries: 1000,
            lines: 2,
            bytes: 0,
            size_line: 2,
            forgiven: None,
        }
    }

    fn entries(walk: &Walk<'_>, piece: &[u8], first: u64) -> (Vec<(usize, u32, f64)>, Tally) {
        let mut list = Vec::new();
        let tally = walk.piece(piece, first, 1000, |_, i, j, value| list.push((i, j, value)));
        (list, tally)
    }

    proptest! {
        /// Where the quick way answers, the slow way gives the same entry.
        #[test]
        fn quick_and_slow_agree(line in "[ \t]{0,2}[+-]?[0-9]{1,3}[ \t]{0,2}[0-9]{0,3}[ \t]{0,2}[-+0-9.eEdDinfa]{0,8}[ \t\r]{0,2}") {
            for field in [Field::Real, Field::Integer, Field::Unsigned, Field::Pattern] {
                for symmetry in [Symmetry::General, Symmetry::Symmetric] {
                    let header = header(field, symmetry);
                    let walk = Walk { header: &header, leniency: Leniency::default() };
                    let (list, tally) = entries(&walk, line.as_bytes(), 0);
                    match walk.entry_of(line.as_bytes(), &mut Tally::default()) {
                        Ok(entry) => {
                            prop_assert!(tally.fault.is_none());
                            let first = list.first().map(|&(i, j, v)| (i as u64 + 1, u64::from(j) + 1, v));
                            prop_assert_eq!(first, entry);
                        }
                        Err(fault) => {
                            prop_assert_eq!(tally.fault.unwrap().cause, fault.cause);
                        }
                    }
                }
            }
        }
    }
}
