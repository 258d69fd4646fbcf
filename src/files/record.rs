//! Reading the record of a run back.

use std::path::Path;

use serde_json::Value;

use super::FileError;
use crate::base::Complaint;

/// Reads a `summary.json`.
///
/// # Errors
/// The file cannot be read, or is not JSON.
pub fn read(path: &Path) -> Result<Value, FileError> {
    let content = std::fs::read(path).map_err(FileError::io(path, "read the record"))?;
    serde_json::from_slice(&content).map_err(|error| {
        let complaint =
            Complaint::new(format!("not a record: {error}"), "name the folder of a finished run");
        FileError::bad(path)(complaint.at_line(error.line() as u64))
    })
}
