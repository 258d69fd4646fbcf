//! One shape for everything the tool says about a user's input: where it is,
//! what is wrong, the text that offended, and what to do about it.

use std::fmt;
use std::path::{Path, PathBuf};

/// Longest piece of a user's text that a message repeats, in characters.
pub const QUOTE_CHARACTERS_MAX: usize = 200;

/// A fault in what the user supplied.
///
/// Displays as `path, line N: cause`, followed by the offending text (control
/// characters escaped, cut at [`QUOTE_CHARACTERS_MAX`]) and the remedy, each on a
/// line of its own.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Complaint {
    /// File at fault, if it is one.
    pub path: Option<PathBuf>,
    /// Line in the file, from 1.
    pub line: Option<u64>,
    /// What is wrong.
    pub cause: String,
    /// Offending text, escaped and cut.
    pub text: Option<String>,
    /// What to do about it.
    pub remedy: String,
}

impl Complaint {
    /// Without file, line and text.
    pub fn new(cause: impl Into<String>, remedy: impl Into<String>) -> Self {
        Self { path: None, line: None, cause: cause.into(), text: None, remedy: remedy.into() }
    }

    /// Names the file, in place of one named before.
    pub fn in_file(mut self, path: impl AsRef<Path>) -> Self {
        self.path = Some(path.as_ref().to_path_buf());
        self
    }

    /// Names the line, from 1.
    pub fn at_line(mut self, line: u64) -> Self {
        self.line = Some(line);
        self
    }

    /// Attaches the offending text; bytes that are not UTF-8 are shown as �.
    pub fn quoting(mut self, text: impl AsRef<[u8]>) -> Self {
        self.text = Some(quote(text.as_ref()));
        self
    }
}

impl fmt::Display for Complaint {
    fn fmt(&self, out: &mut fmt::Formatter<'_>) -> fmt::Result {
        match (&self.path, self.line) {
            (Some(path), Some(line)) => write!(out, "{}, line {line}: ", show(path))?,
            (Some(path), None) => write!(out, "{}: ", show(path))?,
            (None, Some(line)) => write!(out, "line {line}: ")?,
            (None, None) => {}
        }
        write!(out, "{}", self.cause)?;
        if let Some(text) = &self.text {
            write!(out, "\n  text: {text}")?;
        }
        write!(out, "\n  remedy: {}", self.remedy)
    }
}

impl std::error::Error for Complaint {}

/// Something the user should know that stops nothing. Displays like a [`Complaint`].
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Warning(pub Complaint);

impl fmt::Display for Warning {
    fn fmt(&self, out: &mut fmt::Formatter<'_>) -> fmt::Result {
        self.0.fmt(out)
    }
}

impl From<Complaint> for Warning {
    fn from(complaint: Complaint) -> Self {
        Self(complaint)
    }
}

/// A path for a message, control characters escaped.
pub fn show(path: &Path) -> String {
    escape(&path.to_string_lossy())
}

/// Escapes control characters (also those that steer a terminal or reorder text).
pub fn escape(text: &str) -> String {
    let steers = |c: char| {
        c.is_control()
            || matches!(c, '\u{200e}' | '\u{200f}' | '\u{2028}'..='\u{202e}' | '\u{2066}'..='\u{2069}')
    };
    let mut out = String::with_capacity(text.len());
    for c in text.chars() {
        if steers(c) { out.extend(c.escape_default()) } else { out.push(c) }
    }
    out
}

/// The start of a user's text as a message shows it.
pub fn quote(bytes: &[u8]) -> String {
    // Four bytes hold any character, so the cut never needs more than this.
    let head = &bytes[..bytes.len().min(4 * QUOTE_CHARACTERS_MAX + 4)];
    let text = String::from_utf8_lossy(head);
    let mut shown: String = text.chars().take(QUOTE_CHARACTERS_MAX).collect();
    if shown.len() < text.len() || head.len() < bytes.len() {
        shown.push('…');
    }
    escape(&shown)
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn message_names_place_cause_text_and_remedy() {
        let complaint = Complaint::new("not a number", "write a number")
            .in_file("a.mtx")
            .at_line(7)
            .quoting(b"1.5\x1b[31mabc");
        assert_eq!(
            complaint.to_string(),
            "a.mtx, line 7: not a number\n  text: 1.5\\u{1b}[31mabc\n  remedy: write a number"
        );
    }

    #[test]
    fn long_text_is_cut_at_two_hundred_characters() {
        assert_eq!(quote("é".repeat(300).as_bytes()), "é".repeat(200) + "…");
        assert_eq!(quote("é".repeat(200).as_bytes()), "é".repeat(200));
    }
}
