//! The row numbers of a piece of entries, everything else skipped.

use super::super::eight::line_feed;
use super::super::number::quick_whole;
use super::super::source::first_line;
use super::header::{Header, Symmetry};
use super::quick::blanks;
use crate::operator::build::RunCounter;

/// Counts the row of each entry of a coordinate file, and that of its mirror image.
///
/// A piece whose lines all hold what they should is counted as the full reading will find it.
/// `None` where a row number is not written as usual or out of range: what is wrong, if anything, is
/// for the full reading to say.
pub fn each(piece: &[u8], header: &Header, mut counter: RunCounter<'_>) -> Option<()> {
    let mirrored = header.symmetry != Symmetry::General;
    let mut at = 0;
    while at < piece.len() {
        let start = blanks(piece, at);
        let Some((row, length)) = quick_whole(&piece[start..]) else {
            at += empty_line(&piece[at..])?;
            continue;
        };
        let end = start + length;
        if row.wrapping_sub(1) >= header.rows as u64 {
            return None;
        }
        counter.add(row as usize - 1);
        if mirrored {
            let (column, _) = quick_whole(&piece[blanks(piece, end)..])?;
            if column.wrapping_sub(1) >= header.columns as u64 {
                return None;
            }
            if column != row {
                counter.add(column as usize - 1);
            }
        }
        at = line_feed(piece, end).map_or(piece.len(), |place| place + 1);
    }
    Some(())
}

/// Length of a line that holds no entry; `None` if it may hold one.
fn empty_line(rest: &[u8]) -> Option<usize> {
    let (line, length) = first_line(rest);
    let holds_nothing = line.trim_ascii().first().is_none_or(|&byte| byte == b'%');
    holds_nothing.then_some(length)
}

#[cfg(test)]
mod tests {
    use super::super::header::{Field, Layout};
    use super::*;
    use crate::operator::build::RowCounts;

    fn counts(symmetry: Symmetry, piece: &str) -> Option<Vec<usize>> {
        let header = Header {
            layout: Layout::Coordinate,
            field: Field::Real,
            symmetry,
            rows: 3,
            columns: 3,
            entries: 9,
            lines: 2,
            bytes: 0,
            size_line: 2,
            forgiven: None,
        };
        let counts = RowCounts::new(3);
        each(piece.as_bytes(), &header, RunCounter::new(&counts))?;
        Some(counts.into_pointers())
    }

    #[test]
    fn rows_are_counted_past_comments_and_line_ends() {
        let piece = "1 1 5\r\n\n \t\r\n % 2 2 2\n\t3  2 x y z\n3 1";
        assert_eq!(counts(Symmetry::General, piece), Some(vec![0, 1, 1, 3]));
        assert_eq!(counts(Symmetry::Symmetric, piece), Some(vec![0, 2, 3, 5]));
        assert_eq!(counts(Symmetry::Skew, ""), Some(vec![0, 0, 0, 0]));
    }

    #[test]
    fn what_is_unusual_is_left_to_the_full_reading() {
        for piece in ["0 1 1", "4 1 1", "+1 1 1", "-1 1 1", "x", "1234567890123456 1 1"] {
            assert_eq!(counts(Symmetry::General, piece), None, "{piece}");
        }
        for piece in ["1 4 1", "1", "1 0 1"] {
            assert_eq!(counts(Symmetry::Symmetric, piece), None, "{piece}");
        }
    }
}
