//! Columns of numbers in text, separated by commas, semicolons, tabs or blanks.

use ndarray::Array2;

use super::complain::LINE_BYTES_MAX;
use super::number::real;
use super::source::{Source, first_line};
use super::{Facts, FileError, Loaded};
use crate::base::Complaint;
use crate::base::complaint::quote;

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
enum Separator {
    Comma,
    Semicolon,
    Tab,
    Blanks,
}

impl Separator {
    /// The separator that a line of values uses.
    fn of(line: &[u8]) -> Self {
        if line.contains(&b';') {
            Self::Semicolon
        } else if line.contains(&b'\t') {
            Self::Tab
        } else if line.contains(&b',') {
            Self::Comma
        } else {
            Self::Blanks
        }
    }

    fn split(self, line: &[u8]) -> Vec<&[u8]> {
        let mark = match self {
            Self::Comma => b',',
            Self::Semicolon => b';',
            Self::Tab => b'\t',
            Self::Blanks => {
                let words = line.split(u8::is_ascii_whitespace);
                return words.filter(|word| !word.is_empty()).map(unquoted).collect();
            }
        };
        line.split(|&b| b == mark).map(|cell| unquoted(cell.trim_ascii())).collect()
    }

    fn name(self) -> &'static str {
        match self {
            Self::Comma => "commas",
            Self::Semicolon => "semicolons",
            Self::Tab => "tabs",
            Self::Blanks => "blanks",
        }
    }
}

fn unquoted(cell: &[u8]) -> &[u8] {
    match cell {
        [b'"', inner @ .., b'"'] => inner.trim_ascii(),
        _ => cell,
    }
}

/// Reads columns of numbers as values × columns. Lines that begin with # are comments, the first
/// other line may be a heading; an empty cell or `nan` is NaN if `keep_nonfinite`, else an error.
pub fn read_columns(
    source: &Source,
    keep_nonfinite: bool,
) -> Result<Loaded<Array2<f64>>, FileError> {
    let mut reader = Reader { keep_nonfinite, ..Reader::default() };
    let mut text = source.text();
    let mut number = 0;
    while let Some(batch) = text.batch().map_err(|fault| source.bad(fault))? {
        let mut at = 0;
        while at < batch.len() {
            let (line, length) = first_line(&batch[at..]);
            at += length;
            number += 1;
            reader.take(line, number).map_err(|fault| {
                let known = fault.line.unwrap_or(number);
                let fault = fault.at_line(known);
                source.bad(if known == number { fault.quoting(line.trim_ascii()) } else { fault })
            })?;
        }
        text.consume(at);
    }
    let packed = if text.is_packed() { ", gzip" } else { "" };
    reader.finish(source, packed)
}

#[derive(Default)]
struct Reader {
    keep_nonfinite: bool,
    separator: Option<Separator>,
    heading: Option<(u64, Vec<u8>)>,
    /// An empty line that values may still follow.
    gap: Option<u64>,
    columns: usize,
    values: Vec<f64>,
    nonfinite: u64,
    underflows: u64,
}

impl Reader {
    fn take(&mut self, line: &[u8], number: u64) -> Result<(), Complaint> {
        if line.len() > LINE_BYTES_MAX {
            return Err(Complaint::new(
                format!("the line is longer than {LINE_BYTES_MAX} bytes"),
                "write one datum a line; check that lines end in LF",
            ));
        }
        let mark = if number == 1 { &b"\xef\xbb\xbf"[..] } else { b"" };
        let line = line.strip_prefix(mark).unwrap_or(line);
        let line = line.strip_suffix(b"\r").unwrap_or(line);
        if line.trim_ascii_start().starts_with(b"#") {
            return Ok(());
        }
        if line.trim_ascii().is_empty() {
            if !self.values.is_empty() {
                self.gap.get_or_insert(number);
            }
            return Ok(());
        }
        if let Some(gap) = self.gap {
            return Err(Complaint::new(
                "there is an empty line between values",
                "remove it; write nan for a missing value",
            )
            .at_line(gap));
        }
        if line.contains(&b'\r') {
            return Err(Complaint::new(
                "the lines end in CR alone",
                "convert the line ends, for example with: tr '\\r' '\\n'",
            ));
        }
        if self.values.is_empty() && self.heading.is_none() && is_heading(line) {
            self.heading = Some((number, line.to_vec()));
            return Ok(());
        }
        self.read_values(line)
    }

    fn read_values(&mut self, line: &[u8]) -> Result<(), Complaint> {
        let separator = match self.separator {
            Some(separator) => separator,
            None => self.begin(line)?,
        };
        let cells = separator.split(line);
        if cells.len() != self.columns {
            return Err(Complaint::new(
                format!(
                    "the line has {} cells separated by {}, but those before have {}",
                    cells.len(),
                    separator.name(),
                    self.columns
                ),
                "give every line as many values; write a point, not a comma, before decimals",
            ));
        }
        for (place, cell) in cells.into_iter().enumerate() {
            let value = self.value(cell, place)?;
            self.values.push(value);
        }
        Ok(())
    }

    /// Learns separator and number of columns from the first line of values.
    fn begin(&mut self, line: &[u8]) -> Result<Separator, Complaint> {
        let separator = Separator::of(line);
        self.separator = Some(separator);
        self.columns = separator.split(line).len();
        if let Some((number, heading)) = &self.heading {
            let headings = Separator::of(heading).split(heading).len();
            // Blanks may belong to a heading of several words, unless values are not set apart by them.
            let words =
                Separator::of(heading) == Separator::Blanks && separator == Separator::Blanks;
            if !words && headings != self.columns {
                return Err(Complaint::new(
                    format!("there are {headings} headings, but {} columns", self.columns),
                    "give each column one heading, or none of them; write decimals with a point",
                )
                .at_line(*number));
            }
        }
        Ok(separator)
    }

    fn value(&mut self, cell: &[u8], place: usize) -> Result<f64, Complaint> {
        let column =
            if self.columns > 1 { format!(" in column {}", place + 1) } else { String::new() };
        let refuse = |what: String| {
            Complaint::new(what, "correct it; pass --missing nan to leave out data that are NaN")
        };
        if cell.is_empty() {
            if !self.keep_nonfinite {
                return Err(refuse(format!("the cell{column} is empty")));
            }
            self.nonfinite += 1;
            return Ok(f64::NAN);
        }
        let Some(read) = real(cell) else { return Err(not_a_number(cell, &column)) };
        if !read.value.is_finite() {
            if !self.keep_nonfinite {
                let beyond = if read.overflow { " beyond double precision" } else { "" };
                let shown = quote(cell);
                return Err(refuse(format!("the value {shown}{column} is not finite{beyond}")));
            }
            self.nonfinite += 1;
        }
        self.underflows += u64::from(read.underflow);
        Ok(read.value)
    }

    fn finish(self, source: &Source, packed: &str) -> Result<Loaded<Array2<f64>>, FileError> {
        if self.values.is_empty() {
            return Err(source.bad(Complaint::new(
                "the file holds no numbers",
                "give one value a line, or one column a data set",
            )));
        }
        let rows = self.values.len() / self.columns;
        let separator = self.separator.unwrap_or(Separator::Blanks);
        let heading = if self.heading.is_some() { ", heading" } else { "" };
        let format = match self.columns {
            1 => format!("text column{heading}{packed}"),
            k => format!("text, {k} columns separated by {}{heading}{packed}", separator.name()),
        };
        let value = Array2::from_shape_vec((rows, self.columns), self.values)
            .expect("every line has as many values");
        let facts = Facts {
            format,
            bytes: source.len(),
            underflows: self.underflows,
            nonfinite: self.nonfinite,
            ..Facts::default()
        };
        // A column of numbers beside the data, or decimals written with a comma, look just like this.
        let warnings = match self.columns {
            1 => Vec::new(),
            k => vec![
                source
                    .name(Complaint::new(
                        format!("read as {k} data sets: every line has {k} values"),
                        "none needed if so; else keep one column, and write decimals with a point",
                    ))
                    .into(),
            ],
        };
        Ok(Loaded { value, warnings, facts })
    }
}

/// A heading has a word in every cell, and no cell that could be meant as a number.
fn is_heading(line: &[u8]) -> bool {
    let mut cells = Separator::of(line).split(line).into_iter();
    cells.all(|cell| {
        let word =
            cell.first().is_some_and(|b| b.is_ascii_alphabetic() || *b == b'_' || *b >= 0x80);
        let missing = [&b"na"[..], b"n/a", b"null", b"none", b"missing"];
        word && real(cell).is_none() && !missing.iter().any(|m| cell.eq_ignore_ascii_case(m))
    })
}

fn not_a_number(cell: &[u8], column: &str) -> Complaint {
    let remedy = if cell.contains(&b',') {
        "write a point, not a comma, before the decimals"
    } else {
        "write numbers such as 1.5 or -2e-3, and nan for a missing value"
    };
    Complaint::new(format!("\"{}\"{column} is not a number", quote(cell)), remedy)
}
