//! The only room that touches the disk: what is read is checked, what is written is whole.
//!
//! A fault in a file is a [`FileError::BadInput`] that names file, line, offending text and remedy;
//! anything the system refuses is a [`FileError::Io`]. A size that a file declares never drives an
//! allocation that its own length cannot justify.

mod complain;
mod decimal;
mod dense;
mod dtype;
mod eight;
mod folder;
pub mod identity;
pub mod job_file;
pub mod matrix;
mod matrix_market;
mod npy;
mod npz;
mod number;
pub mod record;
mod source;
pub mod table;
mod text_columns;
pub mod vector;

use std::io;
use std::path::{Path, PathBuf};

use crate::base::complaint::show;
use crate::base::{Complaint, Warning};

pub use folder::Folder;
pub use identity::{Identity, identity};

/// Why a file could not be read or written.
#[derive(Debug, thiserror::Error)]
pub enum FileError {
    /// The user's file is at fault (exit code 65).
    #[error("{0}")]
    BadInput(Complaint),
    /// The system refused (exit code 74).
    #[error("{}: could not {doing}: {source}", show(.path))]
    Io {
        /// The file or folder.
        path: PathBuf,
        /// What was tried, to stand after "could not".
        doing: &'static str,
        /// The system's words.
        source: io::Error,
    },
}

impl FileError {
    /// `true` if mending the input helps, `false` if the system is in the way.
    pub fn is_user_fault(&self) -> bool {
        matches!(self, Self::BadInput(_))
    }

    fn io(path: &Path, doing: &'static str) -> impl FnOnce(io::Error) -> Self {
        let path = path.to_path_buf();
        move |source| Self::Io { path, doing, source }
    }

    /// A complaint about this file.
    fn bad(path: &Path) -> impl Fn(Complaint) -> Self {
        let path = path.to_path_buf();
        move |complaint| Self::BadInput(complaint.in_file(&path))
    }
}

/// What was read, and what should be known about it.
#[derive(Debug)]
pub struct Loaded<T> {
    /// The content.
    pub value: T,
    /// Each names the file.
    pub warnings: Vec<Warning>,
    /// Format, size and counts, for a record.
    pub facts: Facts,
}

/// What a reader noticed.
#[derive(Debug, Clone, Default, PartialEq, Eq, serde::Serialize)]
pub struct Facts {
    /// e.g. `Matrix Market coordinate real symmetric, gzip`.
    pub format: String,
    /// Length of the file.
    pub bytes: u64,
    /// Zeros that the file states as entries of a sparse matrix; they are kept.
    pub explicit_zeros: u64,
    /// Entries that were merged into another at the same row and column.
    pub duplicates: u64,
    /// Numbers too small for an f64, read as 0.
    pub underflows: u64,
    /// NaN and infinite values; 0 unless they were allowed.
    pub nonfinite: u64,
}

/// Reads a whole text file of at most `bytes_max` bytes, such as a job file or a record.
///
/// # Errors
/// The file cannot be read, is empty, is longer, or is not UTF-8.
pub fn read_text(path: &Path, bytes_max: u64) -> Result<String, FileError> {
    let source = source::Source::open(path)?;
    if source.len() > bytes_max {
        return Err(source.bad(Complaint::new(
            format!("the file is {} bytes long, more than {bytes_max}", source.len()),
            "check that this is the right file",
        )));
    }
    let bytes = source.bytes();
    let text = std::str::from_utf8(bytes).map_err(|error| {
        let before = &bytes[..error.valid_up_to()];
        let line = 1 + before.iter().filter(|&&b| b == b'\n').count() as u64;
        let start = before.iter().rposition(|&b| b == b'\n').map_or(0, |place| place + 1);
        let rest = bytes[start..].split(|&b| b == b'\n').next().unwrap_or_default();
        let complaint = Complaint::new("the text is not UTF-8", "save the file as UTF-8");
        source.bad(complaint.at_line(line).quoting(rest))
    })?;
    Ok(text.strip_prefix('\u{feff}').unwrap_or(text).to_string())
}
