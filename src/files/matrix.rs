//! System matrices from files: the format is told by the content, never by the name.

use std::path::Path;

use super::source::{Kind, Source, kind_of};
use super::{FileError, Loaded, dense, matrix_market, npz};
use crate::base::{Complaint, Warning};
use crate::operator::settle::{Refused, Rules};
use crate::operator::{CompressedRows, Duplicates, Precision};

/// How a matrix is read.
#[derive(Debug, Clone, Copy, Default)]
pub struct ReadOptions {
    /// Entries at the same row and column are added, refused, or the last one counts.
    pub duplicates: Duplicates,
    /// NaN, infinite and overflowing values are kept rather than refused.
    pub allow_nonfinite: bool,
    /// `Double` keeps f32 where every value is exactly one; `Single` rounds.
    pub precision: Precision,
}

const ACCEPTED: &str = "a Matrix Market file (it begins with %%MatrixMarket; also gzip), a sparse \
    matrix saved by SciPy (.npz) or a two-dimensional array (.npy)";

/// Reads a matrix: Matrix Market coordinate or array (also gzip), SciPy's .npz (CSR, CSC, COO), or
/// a two-dimensional .npy, whose zeros are not kept.
///
/// Peak anonymous memory is at most 24 bytes an entry, 12 for a pattern; mapped pages not counted.
/// The result does not depend on the number of threads.
///
/// # Errors
/// The file cannot be read; it breaks its format; a value or an index is not acceptable.
pub fn read(path: &Path, options: &ReadOptions) -> Result<Loaded<CompressedRows>, FileError> {
    let source = Source::open(path)?;
    match kind_of(source.bytes()) {
        Kind::Npy => dense::read_matrix(&source, options),
        Kind::Zip => npz::read_matrix(&source, options),
        kind @ (Kind::Gzip | Kind::Other) => {
            recognise(&source, kind)?;
            matrix_market::read_matrix(&source, options)
        }
        kind @ Kind::Foreign(..) => Err(source.unreadable(kind, ACCEPTED)),
    }
}

/// Looks at the beginning of a text, which may be compressed.
fn recognise(source: &Source, kind: Kind) -> Result<(), FileError> {
    let mut text = source.text();
    match text.batch().map_err(|complaint| source.bad(complaint))? {
        Some(head) if matrix_market::recognise(head) => Ok(()),
        Some(head) if kind == Kind::Gzip => Err(source.bad(unknown_inside(head))),
        None => Err(source.bad(Complaint::new(
            "the compressed file is empty inside",
            "check how it was written or copied",
        ))),
        _ => Err(source.unreadable(kind, ACCEPTED)),
    }
}

/// Gzip around something that is not a Matrix Market file.
fn unknown_inside(head: &[u8]) -> Complaint {
    let line = head.split(|&b| b == b'\n').next().unwrap_or_default();
    match kind_of(head) {
        Kind::Other => Complaint::new(
            "what is compressed is not a Matrix Market file",
            format!("give {ACCEPTED}"),
        ),
        _ => Complaint::new(
            "what is compressed is itself an array or an archive",
            "decompress the file with gunzip first",
        ),
    }
    .at_line(1)
    .quoting(line.trim_ascii_end())
}

/// How repeated entries are merged, and what is said about them.
pub(super) struct Settling {
    pub rules: Rules,
}

impl Settling {
    pub fn of(options: &ReadOptions) -> Self {
        Self {
            rules: Rules {
                duplicates: options.duplicates,
                allow_nonfinite: options.allow_nonfinite,
                rounded: options.precision == Precision::Single,
            },
        }
    }

    /// Words a refusal; `lines` state the entry, where the file has lines.
    pub fn complaint(&self, refused: Refused, lines: Option<&[u64]>) -> Complaint {
        let place = |row: usize, column: usize| format!("row {}, column {}", row + 1, column + 1);
        let complaint = match refused {
            Refused::Repeated { row, column } => Complaint::new(
                format!("{} is given more than once{}", place(row, column), on_lines(lines)),
                "remove the repeats, or pass --duplicates sum or --duplicates last",
            ),
            Refused::SumOverflows { row, column } => Complaint::new(
                format!(
                    "the entries at {} add up to infinity{}",
                    place(row, column),
                    on_lines(lines)
                ),
                "correct the values, or pass --duplicates last",
            ),
            Refused::SumVanishes { row, column } => Complaint::new(
                format!(
                    "the entries at {} add up to a value that vanishes in single precision{}",
                    place(row, column),
                    on_lines(lines)
                ),
                "use --precision double",
            ),
            Refused::RowTooLong { row } => Complaint::new(
                format!("row {} has more than {} entries", row + 1, u32::MAX),
                "merge its repeated entries before giving it",
            ),
        };
        match lines.and_then(|lines| lines.last()) {
            Some(&line) => complaint.at_line(line),
            None => complaint,
        }
    }
}

/// ` (lines 3, 7)`, at most five of them.
fn on_lines(lines: Option<&[u64]>) -> String {
    let Some(lines) = lines.filter(|lines| !lines.is_empty()) else { return String::new() };
    let shown: Vec<String> = lines.iter().take(5).map(u64::to_string).collect();
    let more = if lines.len() > 5 { ", …" } else { "" };
    format!(" (lines {}{more})", shown.join(", "))
}

/// The warning about merged entries, if any were merged.
pub(super) fn repeated_warning(path: &Path, duplicates: u64, rule: Duplicates) -> Option<Warning> {
    (duplicates > 0).then(|| {
        let done = match rule {
            Duplicates::Last => "were replaced by a later one at",
            _ => "were added to another at",
        };
        Complaint::new(
            format!("{duplicates} entries {done} the same row and column"),
            "if that is not meant, look for a block given twice; --duplicates error names the first",
        )
        .in_file(path)
        .into()
    })
}
