//! Where the values of an array belong.

use super::header::{Header, Symmetry};

/// Row and column, from 1, of the values of an array, column by column.
pub struct ArrayPlaces {
    rows: u64,
    symmetry: Symmetry,
    row: u64,
    column: u64,
}

impl ArrayPlaces {
    /// Stands before value number `first`.
    pub fn from(header: &Header, first: u64) -> Self {
        let (rows, symmetry) = (header.rows as u64, header.symmetry);
        if symmetry == Symmetry::General {
            return Self { rows, symmetry, row: first % rows + 1, column: first / rows + 1 };
        }
        let below = u64::from(symmetry == Symmetry::Skew);
        // Values before column c (from 0) of the triangle; increasing up to c = rows.
        let before = |c: u64| {
            let (n, c) = (u128::from(rows - below), u128::from(c));
            n * c - c * c.saturating_sub(1) / 2
        };
        let (mut low, mut high) = (0, rows);
        while high - low > 1 {
            let middle = low + (high - low) / 2;
            if before(middle) <= u128::from(first) { low = middle } else { high = middle }
        }
        let row = low + below + (u128::from(first) - before(low)) as u64;
        Self { rows, symmetry, row: row + 1, column: low + 1 }
    }

    #[inline(always)]
    pub fn next(&mut self) -> (u64, u64) {
        let here = (self.row, self.column);
        self.row += 1;
        if self.row > self.rows {
            self.column += 1;
            self.row = match self.symmetry {
                Symmetry::General => 1,
                Symmetry::Symmetric => self.column,
                Symmetry::Skew => self.column + 1,
            };
        }
        here
    }
}

#[cfg(test)]
mod tests {
    use super::super::header::{Field, Layout};
    use super::*;

    #[test]
    fn places_of_an_array_are_the_same_wherever_a_piece_begins() {
        for symmetry in [Symmetry::General, Symmetry::Symmetric, Symmetry::Skew] {
            let header = Header {
                layout: Layout::Array,
                field: Field::Real,
                symmetry,
                rows: 7,
                columns: 7,
                entries: 0,
                lines: 2,
                bytes: 0,
                size_line: 2,
                forgiven: None,
            };
            let count = match symmetry {
                Symmetry::General => 49,
                Symmetry::Symmetric => 28,
                Symmetry::Skew => 21,
            };
            let mut wanted = Vec::new();
            for column in 1..=7u64 {
                let first = match symmetry {
                    Symmetry::General => 1,
                    Symmetry::Symmetric => column,
                    Symmetry::Skew => column + 1,
                };
                (first..=7).for_each(|row| wanted.push((row, column)));
            }
            assert_eq!(wanted.len(), count);
            for first in 0..count {
                let mut places = ArrayPlaces::from(&header, first as u64);
                for place in &wanted[first..] {
                    assert_eq!(places.next(), *place);
                }
            }
        }
    }
}
