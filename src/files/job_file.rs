//! Job files: TOML, every key known.

use std::path::Path;

use serde::de::DeserializeOwned;

use super::FileError;
use crate::base::Complaint;
use crate::base::complaint::escape;

/// Reads a job file into the caller's typed settings.
///
/// # Errors
/// The file cannot be read, is not TOML, holds an unknown key or a value of the wrong kind; the
/// message names line, text and key.
pub fn read<T: DeserializeOwned>(path: &Path) -> Result<T, FileError> {
    let content = std::fs::read(path).map_err(FileError::io(path, "read the job file"))?;
    let bad = FileError::bad(path);
    let text = std::str::from_utf8(&content).map_err(|error| {
        let line = 1 + content[..error.valid_up_to()].iter().filter(|b| **b == b'\n').count();
        bad(Complaint::new("the job file is not UTF-8 text", "save it as UTF-8")
            .at_line(line as u64))
    })?;
    let remedy =
        "keys are the names of the command-line options, with _ for -; see `ellbow sweep --help`";
    let at = |offset: usize, complaint: Complaint| {
        let before = &text[..offset.min(text.len())];
        let line = before.matches('\n').count();
        let quoted = text.lines().nth(line).unwrap_or_default();
        bad(complaint.at_line(line as u64 + 1).quoting(quoted.trim()))
    };
    let deserializer = toml::de::Deserializer::parse(text).map_err(|error| {
        let offset = error.span().map_or(0, |span| span.start);
        at(offset, Complaint::new(format!("not TOML: {}", short(error.message())), remedy))
    })?;
    serde_path_to_error::deserialize(deserializer).map_err(|error| {
        let key = error.path().to_string();
        let inner = error.into_inner();
        let offset = inner.span().map_or(0, |span| span.start);
        let whose = if key == "." { String::new() } else { format!("{}: ", short(&key)) };
        at(offset, Complaint::new(format!("{whose}{}", short(inner.message())), remedy))
    })
}

/// A message of the parser, which may repeat keys and values of the user's: these can be of any
/// length and hold control characters. What the parser says itself comes last and is kept.
fn short(message: &str) -> String {
    const HEAD: usize = 200;
    const TAIL: usize = 600;
    let characters = message.chars().count();
    if characters <= HEAD + TAIL {
        return escape(message);
    }
    let head: String = message.chars().take(HEAD).collect();
    let tail: String = message.chars().skip(characters - TAIL).collect();
    format!("{}…{}", escape(&head), escape(&tail))
}
