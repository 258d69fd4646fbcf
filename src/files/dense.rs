//! A two-dimensional .npy array as a system matrix: its non-zeros are kept.

use super::complain::{changed, check_single, justify_shape, nonfinite};
use super::dtype::Dtype;
use super::matrix::{ReadOptions, Settling};
use super::npy::Header;
use super::source::Source;
use super::{Facts, FileError, Loaded};
use crate::base::Complaint;
use crate::operator::build::{Feeder, RowCounts, RunCounter};
use crate::operator::keep::Keep;
use crate::operator::{CompressedRows, Precision};

/// Elements decoded at once.
pub const BLOCK: usize = 1 << 14;

/// An array in a mapped file, its header checked against the file's length.
pub struct Array<'a> {
    pub header: Header,
    pub dtype: Dtype,
    raw: &'a [u8],
}

impl<'a> Array<'a> {
    /// # Errors
    /// Anything wrong with the header; elements that are no plain numbers; a wrong length.
    pub fn new(bytes: &'a [u8]) -> Result<Self, Complaint> {
        let header = Header::parse(bytes)?;
        let dtype = header.dtype()?;
        header.count_in(dtype, bytes.len())?;
        let raw = &bytes[header.length..];
        Ok(Self { header, dtype, raw })
    }

    /// Calls `take(place, value)` for each element in file order.
    pub fn each(
        &self,
        mut take: impl FnMut(usize, f64) -> Result<(), Complaint>,
    ) -> Result<(), Complaint> {
        let mut values = Vec::with_capacity(BLOCK);
        for (block, raw) in self.raw.chunks(BLOCK * self.dtype.bytes).enumerate() {
            values.clear();
            self.dtype.decode(raw, &mut values);
            for (place, &value) in values.iter().enumerate() {
                take(block * BLOCK + place, value)?;
            }
        }
        Ok(())
    }

    /// e.g. `npy f8 (3, 4), columns contiguous`.
    pub fn format(&self) -> String {
        let order = if self.header.fortran { ", columns contiguous" } else { "" };
        format!("npy {}{order}", self.header.shape_text())
    }
}

/// Reads a two-dimensional array as a matrix.
pub fn read_matrix(
    source: &Source,
    options: &ReadOptions,
) -> Result<Loaded<CompressedRows>, FileError> {
    let bad = |complaint| source.bad(complaint);
    let array = Array::new(source.bytes()).map_err(bad)?;
    let &[rows, columns] = array.header.shape.as_slice() else {
        return Err(bad(Complaint::new(
            format!("the array has shape {}, a matrix has two extents", array.header.shape_text()),
            "save a two-dimensional array: rows are data, columns are unknowns",
        )));
    };
    justify_shape(rows, columns).map_err(bad)?;
    let dense = Dense { array, rows: rows as usize, columns: columns as usize };
    let (counts, found) = dense.look(options).map_err(bad)?;
    let within = found.single || options.precision == Precision::Single;
    let value = if within {
        dense.fill::<f32>(counts, options)
    } else {
        dense.fill::<f64>(counts, options)
    }
    .map_err(bad)?;
    let facts = Facts {
        format: dense.array.format(),
        bytes: source.len(),
        nonfinite: found.nonfinite,
        ..Facts::default()
    };
    Ok(Loaded { value, warnings: Vec::new(), facts })
}

struct Dense<'a> {
    array: Array<'a>,
    rows: usize,
    columns: usize,
}

/// What the first look at all values finds.
pub struct Found {
    /// Every value is exactly an f32.
    pub single: bool,
    pub nonfinite: u64,
    pub zeros: u64,
}

impl Found {
    pub fn nothing() -> Self {
        Self { single: true, nonfinite: 0, zeros: 0 }
    }

    /// Looks at the value of an entry; row and column from 0.
    pub fn look(
        &mut self,
        options: &ReadOptions,
        row: usize,
        column: usize,
        value: f64,
    ) -> Result<(), Complaint> {
        let place = || format!("the value of row {}, column {}", row + 1, column + 1);
        if !value.is_finite() {
            if !options.allow_nonfinite {
                return Err(nonfinite(&format!("{}, {value},", place())));
            }
            self.nonfinite += 1;
        }
        if options.precision == Precision::Single {
            check_single(value, place)?;
        }
        self.zeros += u64::from(value == 0.0);
        self.single &= f32::keep_exactly(value).is_some();
        Ok(())
    }
}

impl Dense<'_> {
    fn place(&self, place: usize) -> (usize, usize) {
        if self.array.header.fortran {
            (place % self.rows, place / self.rows)
        } else {
            (place / self.columns, place % self.columns)
        }
    }

    fn look(&self, options: &ReadOptions) -> Result<(RowCounts, Found), Complaint> {
        let counts = RowCounts::new(self.rows);
        let mut found = Found::nothing();
        let mut counter = RunCounter::new(&counts);
        self.array.each(|place, value| {
            let (row, column) = self.place(place);
            found.look(options, row, column, value)?;
            if value != 0.0 {
                counter.add(row);
            }
            Ok(())
        })?;
        drop(counter);
        Ok((counts, found))
    }

    fn fill<V: Keep>(
        &self,
        counts: RowCounts,
        options: &ReadOptions,
    ) -> Result<CompressedRows, Complaint> {
        let mut feeder = Feeder::<V>::new(counts, self.columns);
        self.array.each(|place, value| {
            let (row, column) = self.place(place);
            if value == 0.0 {
                return Ok(());
            }
            feeder.push(row, column as u32, value).map_err(|_| changed())
        })?;
        let settling = Settling::of(options);
        let unsettled = feeder.finish().map_err(|_| changed())?;
        let settled = unsettled.settle(&settling.rules);
        settled.map(|settled| settled.matrix).map_err(|refused| settling.complaint(refused, None))
    }
}
