//! The only room that touches the disk: what is read is checked, what is written is whole.
//!
//! A fault in a file is a [`FileError::BadInput`] that names file, line, offending text and remedy;
//! anything the system refuses is a [`FileError::Io`]. A size that a file declares never drives an
//! allocation that its own length cannot justify.

mod complain;
mod dense;
mod dtype;
pub mod folder;
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
    Io { path: PathBuf, doing: &'static str, source: io::Error },
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
    pub value: T,
    /// Each names the file.
    pub warnings: Vec<Warning>,
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
