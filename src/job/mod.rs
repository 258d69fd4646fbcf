//! One job from settings to files: load, check, sweep, choose, appraise, write.

mod advice;
mod conduct;
pub(crate) mod demo;
mod forecast;
pub(crate) mod load;
mod quick_fit;
mod rerun;
pub(crate) mod settings;
pub mod typed;
mod words;
mod write;

pub use conduct::{Finished, conduct};
pub use forecast::forecast;
pub use quick_fit::quick_fit;
pub use settings::{Command, Settings, Source};
pub use typed::Typed;

use crate::base::Complaint;
use crate::files::FileError;
use crate::system::SystemError;

/// Why a job did not produce a result.
#[derive(Debug, thiserror::Error)]
pub enum JobError {
    /// The settings are at fault (exit code 2).
    #[error("{0}")]
    Usage(Complaint),
    /// A file is at fault, or the system that the files describe (exit code 65).
    #[error("{0}")]
    BadInput(Complaint),
    /// It would not fit (exit code 71).
    #[error("{0}")]
    TooLarge(Complaint),
    /// The system refused to read or write (exit code 74).
    #[error(transparent)]
    File(FileError),
    /// The computation broke down (exit code 4).
    #[error("{0}")]
    BrokeDown(Complaint),
}

impl From<FileError> for JobError {
    fn from(error: FileError) -> Self {
        match error {
            FileError::BadInput(complaint) => Self::BadInput(complaint),
            other => Self::File(other),
        }
    }
}

impl From<SystemError> for JobError {
    fn from(error: SystemError) -> Self {
        Self::BadInput(error.complaint().clone())
    }
}
