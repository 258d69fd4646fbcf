//! Compressed rows: what a matrix is between its file and [`super::StoredRows`], with values held as
//! f64, as f32, or not at all.
//!
//! | values | bytes an entry | when |
//! |---|---|---|
//! | f64 | 12 | default |
//! | f32 | 8 | the user asks, or every value is exactly an f32 |
//! | none | 4 | a pattern matrix: every entry is 1 |
//!
//! plus 8 bytes a row.

use sprs::CsMatI;

/// How values are kept when the matrix is not a pattern.
#[derive(Debug, Clone, Copy, PartialEq, Eq, Default)]
pub enum Precision {
    /// f64, or f32 where every value is exactly an f32.
    #[default]
    Double,
    /// f32: values are rounded; one that would overflow or vanish is refused.
    Single,
}

/// An m×n sparse matrix in rows. Column indices ascend within a row and do not repeat.
#[derive(Debug, Clone, PartialEq)]
pub enum CompressedRows {
    /// 12 bytes an entry.
    Double(CsMatI<f64, u32, usize>),
    /// 8 bytes an entry; each value stands for the f64 of the same number.
    Single(CsMatI<f32, u32, usize>),
    /// Every stored entry is 1; `()` takes no memory.
    Pattern(CsMatI<(), u32, usize>),
}

/// The same expression for each way of keeping values.
macro_rules! each_compressed {
    ($stored:expr, $matrix:ident => $body:expr) => {
        match $stored {
            $crate::operator::CompressedRows::Double($matrix) => $body,
            $crate::operator::CompressedRows::Single($matrix) => $body,
            $crate::operator::CompressedRows::Pattern($matrix) => $body,
        }
    };
}

/// One row's entries, columns ascending.
#[derive(Clone, Copy)]
pub struct Row<'a> {
    /// Column of each stored entry, ascending.
    pub columns: &'a [u32],
    values: RowValues<'a>,
}

#[derive(Clone, Copy)]
enum RowValues<'a> {
    Double(&'a [f64]),
    Single(&'a [f32]),
    Ones,
}

impl<'a> Row<'a> {
    /// The entry at `place` of `columns`, as f64. Panics if there is none.
    fn value(&self, place: usize) -> f64 {
        match self.values {
            RowValues::Double(values) => values[place],
            RowValues::Single(values) => f64::from(values[place]),
            RowValues::Ones => 1.0,
        }
    }

    /// (column, value) of each stored entry; explicit zeros included.
    pub fn entries(self) -> impl ExactSizeIterator<Item = (usize, f64)> + 'a {
        (0..self.columns.len()).map(move |place| (self.columns[place] as usize, self.value(place)))
    }
}

impl CompressedRows {
    /// m.
    pub fn rows(&self) -> usize {
        each_compressed!(self, a => a.rows())
    }

    /// n.
    pub fn columns(&self) -> usize {
        each_compressed!(self, a => a.cols())
    }

    /// Stored entries, explicit zeros included.
    pub fn entries(&self) -> usize {
        each_compressed!(self, a => a.nnz())
    }

    /// Word for the way values are kept: `f64`, `f32` or `pattern`.
    pub fn storage_name(&self) -> &'static str {
        match self {
            Self::Double(_) => "f64",
            Self::Single(_) => "f32",
            Self::Pattern(_) => "pattern",
        }
    }

    /// Place of the first entry of each row, and one past the last: length m + 1.
    pub fn pointers(&self) -> &[usize] {
        each_compressed!(self, a => a.indptr().into_raw_storage())
    }

    /// Column of each entry, row after row.
    pub fn indices(&self) -> &[u32] {
        each_compressed!(self, a => a.indices())
    }

    /// Row `i`, borrowed. Panics if `i` ≥ m.
    pub fn row(&self, i: usize) -> Row<'_> {
        let range = self.pointers()[i]..self.pointers()[i + 1];
        match self {
            Self::Double(a) => Row {
                columns: &a.indices()[range.clone()],
                values: RowValues::Double(&a.data()[range]),
            },
            Self::Single(a) => Row {
                columns: &a.indices()[range.clone()],
                values: RowValues::Single(&a.data()[range]),
            },
            Self::Pattern(a) => Row { columns: &a.indices()[range], values: RowValues::Ones },
        }
    }

    /// Builds from compressed rows; for tests, small systems and sizes known to be right.
    ///
    /// Panics if the arrays are not a valid compressed-row matrix with ascending columns.
    pub fn from_compressed(
        rows: usize,
        columns: usize,
        pointers: Vec<usize>,
        indices: Vec<u32>,
        values: Vec<f64>,
    ) -> Self {
        Self::Double(
            CsMatI::try_new((rows, columns), pointers, indices, values)
                .map_err(|(.., error)| error)
                .expect("valid compressed rows"),
        )
    }

    /// Builds from a dense row-major array, keeping only non-zeros; for tests and small systems.
    pub fn from_dense(rows: usize, columns: usize, dense: &[f64]) -> Self {
        assert_eq!(dense.len(), rows * columns, "one value per cell");
        let mut pointers = vec![0];
        let (mut indices, mut values) = (Vec::new(), Vec::new());
        for row in dense.chunks(columns.max(1)).take(rows) {
            for (j, &value) in row.iter().enumerate().filter(|(_, value)| **value != 0.0) {
                indices.push(j as u32);
                values.push(value);
            }
            pointers.push(values.len());
        }
        Self::from_compressed(rows, columns, pointers, indices, values)
    }
}
