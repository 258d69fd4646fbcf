//! Sparse matrices saved by SciPy: a zip archive of .npy members.
//!
//! Members are streamed, twice: the first run checks every index and value and counts the entries
//! of each row, the second puts them in place. Nothing is ever unpacked to disk or unpickled.

use std::io::Cursor;

use zip::ZipArchive;

use super::complain::{changed, justify_rows, justify_shape};
use super::dense::Found;
use super::matrix::{ReadOptions, Settling, repeated_warning};
use super::source::Source;
use super::{Facts, FileError, Loaded};
use crate::base::Complaint;
use crate::operator::build::{Feeder, RowCounts, RunCounter};
use crate::operator::keep::Keep;
use crate::operator::settle::Settled;
use crate::operator::{CompressedRows, Precision};

mod member;

use member::{Member, check_names, damaged};

type Archive<'a> = ZipArchive<Cursor<&'a [u8]>>;

/// Rows per byte of the file that are believed: pointers of empty rows compress well.
const ROWS_PER_BYTE: u64 = 8;

/// Entries read at once.
const BLOCK: u64 = 1 << 14;

/// Reads a CSR, CSC or COO matrix.
pub fn read_matrix(
    source: &Source,
    options: &ReadOptions,
) -> Result<Loaded<CompressedRows>, FileError> {
    let bad = |complaint| source.bad(complaint);
    let mut archive = ZipArchive::new(Cursor::new(source.bytes())).map_err(|e| bad(damaged(&e)))?;
    check_names(source.bytes(), &archive).map_err(bad)?;
    let sparse = Sparse::open(&mut archive, source.len()).map_err(bad)?;
    let (counts, found) = sparse.look(options).map_err(bad)?;
    let settled = if found.ones {
        sparse.fill::<()>(counts, options)
    } else if found.values.single || options.precision == Precision::Single {
        sparse.fill::<f32>(counts, options)
    } else {
        sparse.fill::<f64>(counts, options)
    }
    .map_err(bad)?;
    let Settled { matrix: value, duplicates } = settled;
    let facts = Facts {
        format: format!("npz {}", sparse.layout.name()),
        bytes: source.len(),
        explicit_zeros: found.values.zeros,
        duplicates,
        nonfinite: found.values.nonfinite,
        ..Facts::default()
    };
    let warning = repeated_warning(&source.path, duplicates, options.duplicates);
    Ok(Loaded { value, warnings: warning.into_iter().collect(), facts })
}

/// How the places of entries are stated.
enum Layout {
    /// Pointers of the rows; `indices` are columns.
    Rows(Vec<u64>),
    /// Pointers of the columns; `indices` are rows.
    Columns(Vec<u64>),
    /// Members `row` and `col`.
    Pairs,
}

impl Layout {
    fn name(&self) -> &'static str {
        match self {
            Self::Rows(_) => "csr",
            Self::Columns(_) => "csc",
            Self::Pairs => "coo",
        }
    }
}

struct Sparse<'a> {
    archive: Archive<'a>,
    layout: Layout,
    rows: usize,
    columns: usize,
    entries: u64,
}

struct Look {
    values: Found,
    /// The values are booleans, all true.
    ones: bool,
}

impl<'a> Sparse<'a> {
    fn open(archive: &mut Archive<'a>, file_bytes: u64) -> Result<Self, Complaint> {
        let names: Vec<&str> = archive.file_names().collect();
        if !["format.npy", "shape.npy", "data.npy"].iter().all(|name| names.contains(name)) {
            let shown: Vec<&str> = names.into_iter().take(8).collect();
            return Err(Complaint::new(
                "the archive is not a sparse matrix saved by SciPy",
                "write it with scipy.sparse.save_npz; save a dense array as .npy",
            )
            .quoting(format!("members: {}", shown.join(", "))));
        }
        let format = Member::open(archive, "format.npy")?.text()?;
        let shape = Member::open(archive, "shape.npy")?.small_whole(2)?;
        let (rows, columns) = (shape[0], shape[1]);
        justify_shape(rows, columns)?;
        justify_rows(rows, file_bytes.saturating_mul(ROWS_PER_BYTE))?;
        if !matches!(format.as_str(), "csr" | "csc" | "coo") {
            return Err(Complaint::new(
                "the sparse format is not csr, csc or coo",
                "convert it before saving: scipy.sparse.save_npz(file, matrix.tocsr())",
            )
            .quoting(format));
        }
        let entries = Member::open(archive, "data.npy")?.extent()?;
        let layout = match format.as_str() {
            "csr" => Layout::Rows(pointers(archive, rows, entries)?),
            "csc" => {
                justify_rows(columns, file_bytes.saturating_mul(ROWS_PER_BYTE))?;
                Layout::Columns(pointers(archive, columns, entries)?)
            }
            _ => Layout::Pairs,
        };
        let (rows, columns) = (rows as usize, columns as usize);
        Ok(Self { archive: archive.clone(), layout, rows, columns, entries })
    }

    /// Calls `take(row, column, value)` for each entry in file order, every index checked.
    fn each(
        &self,
        mut take: impl FnMut(usize, u32, f64) -> Result<(), Complaint>,
    ) -> Result<(), Complaint> {
        let mut archives = [self.archive.clone(), self.archive.clone(), self.archive.clone()];
        let [first, second, third] = &mut archives;
        let mut data = Member::open(first, "data.npy")?;
        let (rows, columns) = (self.rows as u64, self.columns as u64);
        let mut places = match &self.layout {
            Layout::Rows(pointers) => Places {
                pointed: Some(Pointed { pointers, line: 0 }),
                indices: Member::sized(second, "indices.npy", self.entries)?,
                bound: ("column", columns),
                others: None,
            },
            Layout::Columns(pointers) => Places {
                pointed: Some(Pointed { pointers, line: 0 }),
                indices: Member::sized(second, "indices.npy", self.entries)?,
                bound: ("row", rows),
                others: None,
            },
            Layout::Pairs => Places {
                pointed: None,
                indices: Member::sized(second, "col.npy", self.entries)?,
                bound: ("column", columns),
                others: Some((Member::sized(third, "row.npy", self.entries)?, ("row", rows))),
            },
        };
        let by_column = matches!(self.layout, Layout::Columns(_));
        let (mut values, mut minor, mut major) = (Vec::new(), Vec::new(), Vec::new());
        let mut done = 0;
        while done < self.entries {
            let count = BLOCK.min(self.entries - done);
            data.values(count, &mut values)?;
            places.block(done, count, &mut minor, &mut major)?;
            for ((&minor, &major), &value) in minor.iter().zip(&major).zip(&values) {
                let (row, column) = if by_column { (minor, major) } else { (major, minor) };
                take(row as usize, column, value)?;
            }
            done += count;
        }
        data.ended()?;
        places.ended()
    }

    fn look(&self, options: &ReadOptions) -> Result<(RowCounts, Look), Complaint> {
        let counts = RowCounts::new(self.rows);
        let mut found = Found::nothing();
        let mut counter = RunCounter::new(&counts);
        self.each(|row, column, value| {
            counter.add(row);
            found.look(options, row, column as usize, value)
        })?;
        drop(counter);
        let boolean = Member::open(&mut self.archive.clone(), "data.npy")?.is_boolean();
        let ones = boolean && found.zeros == 0;
        Ok((counts, Look { values: found, ones }))
    }

    fn fill<V: Keep>(
        &self,
        counts: RowCounts,
        options: &ReadOptions,
    ) -> Result<Settled, Complaint> {
        let mut feeder = Feeder::<V>::new(counts, self.columns);
        self.each(|row, column, value| feeder.push(row, column, value).map_err(|_| changed()))?;
        let settling = Settling::of(options);
        let unsettled = feeder.finish().map_err(|_| changed())?;
        unsettled.settle(&settling.rules).map_err(|refused| settling.complaint(refused, None))
    }
}

/// Reads and checks the pointers of `lines` rows or columns.
fn pointers(archive: &mut Archive<'_>, lines: u64, entries: u64) -> Result<Vec<u64>, Complaint> {
    let wrong = |cause: String| Err(Complaint::new(cause, "save the matrix again"));
    let mut member = Member::sized(archive, "indptr.npy", lines + 1)?;
    let mut list: Vec<u64> = Vec::new();
    let mut block = Vec::new();
    while (list.len() as u64) <= lines {
        let done = list.len() as u64;
        member.indices(done, BLOCK.min(lines + 1 - done), ("pointer", entries + 1), &mut block)?;
        list.extend(&block);
    }
    member.ended()?;
    if list[0] != 0 {
        return wrong(format!("the first pointer in indptr.npy is {}, not 0", list[0]));
    }
    if let Some(line) = list.windows(2).position(|pair| pair[1] < pair[0]) {
        return wrong(format!(
            "pointer {} in indptr.npy is {}, less than the {} before it",
            line + 1,
            list[line + 1],
            list[line]
        ));
    }
    if list[lines as usize] != entries {
        return wrong(format!(
            "the last pointer in indptr.npy is {}, but data.npy holds {entries} values",
            list[lines as usize]
        ));
    }
    Ok(list)
}

/// The row or column that a running entry belongs to, by pointers.
struct Pointed<'a> {
    pointers: &'a [u64],
    line: usize,
}

/// Places of entries, block by block.
struct Places<'m, 'a> {
    pointed: Option<Pointed<'m>>,
    indices: Member<'m, 'a>,
    bound: (&'static str, u64),
    others: Option<(Member<'m, 'a>, (&'static str, u64))>,
}

impl Places<'_, '_> {
    /// Indices of `count` entries from number `first`: within the line, and of the line.
    fn block(
        &mut self,
        first: u64,
        count: u64,
        minor: &mut Vec<u32>,
        major: &mut Vec<u32>,
    ) -> Result<(), Complaint> {
        self.indices.indices(first, count, self.bound, minor)?;
        if let Some((member, bound)) = &mut self.others {
            return member.indices(first, count, *bound, major);
        }
        major.clear();
        if let Some(Pointed { pointers, line }) = &mut self.pointed {
            for entry in first..first + count {
                while pointers[*line + 1] <= entry {
                    *line += 1;
                }
                major.push(*line as u32);
            }
        }
        Ok(())
    }

    fn ended(self) -> Result<(), Complaint> {
        self.indices.ended()?;
        self.others.map_or(Ok(()), |(member, _)| member.ended())
    }
}
