//! Banner and size line.

use super::super::complain::{LINE_BYTES_MAX, justify_shape};
use super::super::number::{Whole, whole};
use super::super::source::{Text, first_line};
use crate::base::Complaint;
use crate::base::complaint::quote;

pub const BYTE_ORDER_MARK: &[u8] = b"\xef\xbb\xbf";
pub const NAME: &[u8] = b"MatrixMarket";

const BANNER: &str = "%%MatrixMarket matrix coordinate real general";

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Layout {
    Coordinate,
    /// Every value, column by column.
    Array,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Field {
    Real,
    Integer,
    Unsigned,
    Pattern,
}

#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Symmetry {
    General,
    Symmetric,
    Skew,
}

/// What stands before the entries.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Header {
    pub layout: Layout,
    pub field: Field,
    pub symmetry: Symmetry,
    pub rows: usize,
    pub columns: usize,
    /// Lines of entries that must follow.
    pub entries: u64,
    /// Lines read up to the size line.
    pub lines: u64,
    /// Length of those lines.
    pub bytes: u64,
    /// Line of the size.
    pub size_line: u64,
    /// What was wrong with the banner and forgiven; its line.
    pub forgiven: Option<(&'static str, u64)>,
}

impl Header {
    /// As in the file, e.g. `Matrix Market coordinate real general`.
    pub fn format(&self) -> String {
        let layout = match self.layout {
            Layout::Coordinate => "coordinate",
            Layout::Array => "array",
        };
        let field = match self.field {
            Field::Real => "real",
            Field::Integer => "integer",
            Field::Unsigned => "unsigned-integer",
            Field::Pattern => "pattern",
        };
        let symmetry = match self.symmetry {
            Symmetry::General => "general",
            Symmetry::Symmetric => "symmetric",
            Symmetry::Skew => "skew-symmetric",
        };
        format!("Matrix Market {layout} {field} {symmetry}")
    }

    /// Reads up to the size line and leaves the text at the first line after it.
    ///
    /// # Errors
    /// Everything that makes banner or size unusable, with its line.
    pub fn read(text: &mut Text<'_>) -> Result<Self, Complaint> {
        let mut reader = Reader::default();
        loop {
            let Some(batch) = text.batch()? else { return Err(reader.ended()) };
            let mut at = 0;
            while at < batch.len() {
                let (line, length) = first_line(&batch[at..]);
                at += length;
                reader.lines += 1;
                reader.bytes += length as u64;
                let found = reader.take(line).map_err(|fault| place(fault, reader.lines, line))?;
                if let Some(header) = found {
                    text.consume(at);
                    return Ok(header);
                }
            }
            text.consume(at);
        }
    }
}

/// A complaint with its line; a line too long to be one is not repeated whole.
fn place(fault: Complaint, number: u64, line: &[u8]) -> Complaint {
    fault.at_line(number).quoting(line.trim_ascii_end())
}

/// Banner words, once read.
#[derive(Clone, Copy)]
struct Banner {
    layout: Layout,
    field: Field,
    symmetry: Symmetry,
}

#[derive(Default)]
struct Reader {
    lines: u64,
    bytes: u64,
    banner: Option<Banner>,
    blanks: bool,
    forgiven: Option<(&'static str, u64)>,
}

impl Reader {
    fn take(&mut self, line: &[u8]) -> Result<Option<Header>, Complaint> {
        if line.len() > LINE_BYTES_MAX {
            return Err(too_long());
        }
        let first = self.lines == 1;
        let unmarked = if first { line.strip_prefix(BYTE_ORDER_MARK) } else { None };
        let trimmed = unmarked.unwrap_or(line).trim_ascii();
        if unmarked.is_some() {
            self.forgiven = Some(("the file begins with a byte order mark", 1));
        }
        if trimmed.is_empty() {
            self.blanks |= self.banner.is_none();
            return Ok(None);
        }
        let Some(banner) = self.banner else {
            let indented = !unmarked.unwrap_or(line).starts_with(b"%");
            self.banner = Some(self.read_banner(trimmed, indented)?);
            return Ok(None);
        };
        if trimmed.starts_with(b"%") {
            return Ok(None);
        }
        self.read_size(trimmed, banner).map(Some)
    }

    fn read_banner(&mut self, line: &[u8], indented: bool) -> Result<Banner, Complaint> {
        if line.contains(&b'\r') {
            return Err(Complaint::new(
                "the lines end in CR alone",
                "convert the line ends, for example with: tr '\\r' '\\n'",
            ));
        }
        let rest = line.strip_prefix(b"%").unwrap_or(line);
        let rest = match rest.strip_prefix(b"%") {
            Some(rest) => rest,
            None => {
                self.forgive("the banner begins with one % instead of two");
                rest
            }
        };
        if self.blanks || indented {
            self.forgive("there is blank space before the banner");
        }
        let words: Vec<String> = rest
            .split(u8::is_ascii_whitespace)
            .filter(|word| !word.is_empty())
            .map(|word| String::from_utf8_lossy(word).to_ascii_lowercase())
            .collect();
        let [_, object, layout, field, symmetry] = words.as_slice() else {
            return Err(Complaint::new(
                format!("the banner has {} words instead of five", words.len()),
                format!("write the first line as: {BANNER}"),
            ));
        };
        if object != "matrix" {
            return Err(unknown("object", object, "matrix"));
        }
        let banner = Banner {
            layout: layout_of(layout)?,
            field: field_of(field)?,
            symmetry: symmetry_of(symmetry)?,
        };
        match banner {
            Banner { layout: Layout::Array, field: Field::Pattern, .. } => {
                Err(contradiction("an array has values, so it cannot be a pattern"))
            }
            Banner {
                symmetry: Symmetry::Skew, field: Field::Pattern | Field::Unsigned, ..
            } => Err(contradiction("a skew-symmetric matrix needs negative values")),
            _ => Ok(banner),
        }
    }

    fn forgive(&mut self, what: &'static str) {
        self.forgiven.get_or_insert((what, self.lines));
    }

    fn read_size(&self, line: &[u8], banner: Banner) -> Result<Header, Complaint> {
        let words: Vec<&[u8]> =
            line.split(u8::is_ascii_whitespace).filter(|word| !word.is_empty()).collect();
        let (rows, columns, stated) = match (banner.layout, words.as_slice()) {
            (Layout::Coordinate, [rows, columns, entries]) => {
                (size(rows)?, size(columns)?, Some(size(entries)?))
            }
            (Layout::Array, [rows, columns]) => (size(rows)?, size(columns)?, None),
            (layout, _) => {
                let wanted = match layout {
                    Layout::Coordinate => "three numbers: rows, columns, entries",
                    Layout::Array => "two numbers: rows, columns",
                };
                return Err(Complaint::new("this is not a size line", format!("write {wanted}")));
            }
        };
        justify_shape(rows, columns)?;
        if banner.symmetry != Symmetry::General && rows != columns {
            return Err(Complaint::new(
                format!("the matrix is declared symmetric but is {rows} by {columns}"),
                "correct the size, or declare it general",
            ));
        }
        // Rows and columns are below 2³², so these products are below 2⁶⁴.
        let entries = stated.unwrap_or(match banner.symmetry {
            Symmetry::General => rows * columns,
            Symmetry::Symmetric => (rows * rows - rows) / 2 + rows,
            Symmetry::Skew => (rows * rows - rows) / 2,
        });
        Ok(Header {
            layout: banner.layout,
            field: banner.field,
            symmetry: banner.symmetry,
            rows: rows as usize,
            columns: columns as usize,
            entries,
            lines: self.lines,
            bytes: self.bytes,
            size_line: self.lines,
            forgiven: self.forgiven,
        })
    }

    /// The text ended before the size line.
    fn ended(&self) -> Complaint {
        let cause = match self.banner {
            None => "the file holds nothing but blank space",
            Some(_) => "the file ends before its size line",
        };
        Complaint::new(cause, "check how the file was written or copied").at_line(self.lines.max(1))
    }
}

pub fn too_long() -> Complaint {
    Complaint::new(
        format!("the line is longer than {LINE_BYTES_MAX} bytes"),
        "check that this is the right file and that its lines end in LF",
    )
}

fn layout_of(word: &str) -> Result<Layout, Complaint> {
    match word {
        "coordinate" => Ok(Layout::Coordinate),
        "array" => Ok(Layout::Array),
        _ => Err(unknown("layout", word, "coordinate or array")),
    }
}

fn field_of(word: &str) -> Result<Field, Complaint> {
    match word {
        "real" | "double" => Ok(Field::Real),
        "integer" => Ok(Field::Integer),
        "unsigned-integer" => Ok(Field::Unsigned),
        "pattern" => Ok(Field::Pattern),
        "complex" => Err(Complaint::new(
            "complex matrices are not supported",
            "split each equation into its real and its imaginary part, as two rows",
        )),
        _ => Err(unknown("field", word, "real, integer or pattern")),
    }
}

fn symmetry_of(word: &str) -> Result<Symmetry, Complaint> {
    match word {
        "general" => Ok(Symmetry::General),
        "symmetric" => Ok(Symmetry::Symmetric),
        "skew-symmetric" => Ok(Symmetry::Skew),
        "hermitian" => Err(Complaint::new(
            "hermitian matrices are not supported",
            "declare a real matrix symmetric; split a complex one into real and imaginary parts",
        )),
        _ => Err(unknown("symmetry", word, "general, symmetric or skew-symmetric")),
    }
}

fn unknown(what: &str, word: &str, known: &str) -> Complaint {
    Complaint::new(
        format!("the {what} {:?} is not known", quote(word.as_bytes())),
        format!("write {known}, as in: {BANNER}"),
    )
}

fn contradiction(why: &str) -> Complaint {
    Complaint::new(format!("the banner contradicts itself: {why}"), "correct the banner")
}

fn size(word: &[u8]) -> Result<u64, Complaint> {
    let wrong = |why: &str| {
        Err(Complaint::new(
            format!("the size \"{}\" {why}", quote(word)),
            "write whole numbers, not negative, in the size line",
        ))
    };
    match whole(word) {
        Whole::Is(value) => Ok(value),
        Whole::Negative => wrong("is negative"),
        Whole::TooLarge => wrong("is beyond 2^64"),
        Whole::NotOne => wrong("is not a whole number"),
    }
}
