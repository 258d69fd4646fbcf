//! Tables that name the rows and columns of a system: comma-separated text with a heading
//! (RFC 4180), one line per datum or unknown in the order of the matrix.

use std::collections::HashMap;
use std::path::Path;

use csv::ByteRecord;

use super::source::{Kind, Source, kind_of};
use super::{FileError, number};
use crate::base::Complaint;
use crate::base::complaint::quote;
use crate::system::{ColumnTable, RowTable};

/// Reads the table of `rows` data: `id`, `group`, `order`, `use`, and any other columns as text.
///
/// # Errors
/// The file cannot be read or is no table; it has another number of lines; an id is empty or
/// repeats; `order` is not a finite number; `use` is not yes or no.
pub fn read_rows(path: &Path, rows: usize) -> Result<RowTable, FileError> {
    let table = Table::read(path, rows, "rows")?;
    let mut result = RowTable::default();
    for column in &table.columns {
        match column.heading.to_ascii_lowercase().as_str() {
            "id" => result.ids = Some(table.names(column)?),
            "group" => {
                let (groups, names) = table.groups(column);
                (result.groups, result.group_names) = (Some(groups), names);
            }
            "order" => result.order = Some(table.each(column, |cell| finite(cell, "order"))?),
            "use" => result.used = Some(table.each(column, yes_or_no)?),
            _ => result.others.push((column.heading.clone(), table.texts(column))),
        }
    }
    Ok(result)
}

/// Reads the table of `columns` unknowns: `name`, `kind`, `penalty_weight`, `fixed`. `lower` and
/// `upper` may stand there but must be empty.
///
/// # Errors
/// The file cannot be read or is no table; it has another number of lines or an unknown heading; a
/// name is empty or repeats; a penalty weight is negative; a number is not finite; it has bounds.
pub fn read_columns(path: &Path, columns: usize) -> Result<ColumnTable, FileError> {
    let table = Table::read(path, columns, "columns")?;
    let mut result = ColumnTable::default();
    for column in &table.columns {
        match column.heading.to_ascii_lowercase().as_str() {
            "name" => result.names = Some(table.names(column)?),
            "kind" => result.kinds = Some(table.texts(column)),
            "penalty_weight" => result.penalty_weights = Some(table.each(column, weight)?),
            "fixed" => result.fixed = Some(table.each(column, fixed)?),
            "lower" | "upper" => {
                table.each(column, |cell| no_bound(cell, &column.heading))?;
            }
            _ => {
                return Err(table.bad(
                    Complaint::new(
                        format!("the heading {:?} is not known", quote(column.heading.as_bytes())),
                        "the headings are name, kind, penalty_weight, fixed, lower, upper",
                    )
                    .at_line(table.heading_line),
                ));
            }
        }
    }
    Ok(result)
}

/// One column: its heading and its place in the records.
struct Column {
    heading: String,
    place: usize,
}

struct Table {
    source: Source,
    heading_line: u64,
    columns: Vec<Column>,
    records: Vec<ByteRecord>,
}

impl Table {
    fn read(path: &Path, lines: usize, of: &str) -> Result<Self, FileError> {
        let source = Source::open(path)?;
        let kind = kind_of(source.bytes());
        if kind != Kind::Other || source.bytes().contains(&0) {
            return Err(source.unreadable(kind, "a table as comma-separated text"));
        }
        let parsed =
            parse(unmarked(source.bytes()), lines, of).map_err(|fault| source.bad(fault))?;
        let (heading_line, columns, records) = parsed;
        Ok(Self { source, heading_line, columns, records })
    }

    fn bad(&self, complaint: Complaint) -> FileError {
        self.source.bad(complaint)
    }

    /// The column's cells, each with its record.
    fn cells<'a>(
        &'a self,
        column: &Column,
    ) -> impl Iterator<Item = (&'a ByteRecord, &'a [u8])> + use<'a> {
        let place = column.place;
        self.records.iter().map(move |record| (record, record[place].trim_ascii()))
    }

    fn line_of(&self, record: &ByteRecord) -> u64 {
        line_of(unmarked(self.source.bytes()), record)
    }

    /// Reads every cell; a fault gets its line.
    fn each<T>(
        &self,
        column: &Column,
        read: impl Fn(&[u8]) -> Result<T, Complaint>,
    ) -> Result<Vec<T>, FileError> {
        self.cells(column)
            .map(|(record, cell)| {
                read(cell)
                    .map_err(|fault| self.bad(fault.at_line(self.line_of(record)).quoting(cell)))
            })
            .collect()
    }

    fn texts(&self, column: &Column) -> Vec<String> {
        self.cells(column).map(|(_, cell)| String::from_utf8_lossy(cell).into_owned()).collect()
    }

    /// Texts that are not empty and do not repeat.
    fn names(&self, column: &Column) -> Result<Vec<String>, FileError> {
        let mut records = HashMap::new();
        let heading = &column.heading;
        for (record, cell) in self.cells(column) {
            let fault = if cell.is_empty() {
                Complaint::new(
                    format!("the {heading} is empty"),
                    format!("give each line its {heading}"),
                )
            } else if let Some(earlier) = records.insert(cell, record) {
                let (earlier, line) = (self.line_of(earlier), self.line_of(record));
                Complaint::new(
                    format!("the {heading} stands on lines {earlier} and {line}"),
                    format!("give each line its own {heading}"),
                )
            } else {
                continue;
            };
            return Err(self.bad(fault.at_line(self.line_of(record)).quoting(cell)));
        }
        Ok(self.texts(column))
    }

    /// Numbers the groups in order of appearance.
    fn groups(&self, column: &Column) -> (Vec<u32>, Vec<String>) {
        let mut numbers: HashMap<&[u8], u32> = HashMap::new();
        let mut names = Vec::new();
        let groups = self
            .cells(column)
            .map(|(_, cell)| {
                *numbers.entry(cell).or_insert_with(|| {
                    names.push(String::from_utf8_lossy(cell).into_owned());
                    names.len() as u32 - 1
                })
            })
            .collect();
        (groups, names)
    }
}

/// The text without its byte order mark.
fn unmarked(bytes: &[u8]) -> &[u8] {
    bytes.strip_prefix(b"\xef\xbb\xbf").unwrap_or(bytes)
}

/// The line on which a record begins. The reader's own count is that of the blank lines before it,
/// and counting from the start is cheap enough for a message.
fn line_of(text: &[u8], record: &ByteRecord) -> u64 {
    let start = record.position().map_or(0, |position| position.byte() as usize);
    let blanks = text[start..].iter().take_while(|b| matches!(b, b'\r' | b'\n')).count();
    1 + text[..start + blanks].iter().filter(|&&b| b == b'\n').count() as u64
}

type Parsed = (u64, Vec<Column>, Vec<ByteRecord>);

/// Heading and records; every record has as many cells as there are headings.
fn parse(bytes: &[u8], lines: usize, of: &str) -> Result<Parsed, Complaint> {
    let mut reader = csv::ReaderBuilder::new().has_headers(false).flexible(true).from_reader(bytes);
    let mut records = reader.byte_records().map(|record| {
        let record = record.map_err(|error| {
            Complaint::new(
                format!("this is not a table: {error}"),
                "save it as comma-separated text",
            )
        })?;
        let cells = || record.iter().map(String::from_utf8_lossy).collect::<Vec<_>>().join(",");
        if record.iter().any(|cell| std::str::from_utf8(cell).is_err()) {
            return Err(Complaint::new("the text is not UTF-8", "save the table as UTF-8")
                .at_line(line_of(bytes, &record))
                .quoting(cells()));
        }
        Ok(record)
    });
    let Some(heading) = records.next().transpose()? else {
        return Err(Complaint::new("the table is empty", "give a heading and one line for each"));
    };
    let columns = headings(&heading, line_of(bytes, &heading))?;
    let records: Vec<ByteRecord> = records.collect::<Result<_, _>>()?;
    check_cells(bytes, &heading, &records)?;
    if records.len() != lines {
        return Err(Complaint::new(
            format!(
                "the table has {} lines below its heading, but the matrix has {lines} {of}",
                records.len()
            ),
            format!("give one line for each of the {of} of the matrix, in their order"),
        )
        .at_line(records.last().map_or(1, |last| line_of(bytes, last))));
    }
    Ok((line_of(bytes, &heading), columns, records))
}

fn headings(heading: &ByteRecord, line: u64) -> Result<Vec<Column>, Complaint> {
    let mut columns: Vec<Column> = Vec::new();
    for (place, cell) in heading.iter().enumerate() {
        let heading = String::from_utf8_lossy(cell.trim_ascii()).into_owned();
        let fault = if heading.is_empty() {
            Complaint::new(format!("heading {} is empty", place + 1), "give each column a heading")
        } else if heading.contains([';', '\t']) {
            Complaint::new("the headings are not separated by commas", "separate cells by commas")
        } else if columns.iter().any(|column| column.heading.eq_ignore_ascii_case(&heading)) {
            Complaint::new("two columns have the same heading", "give each column its own heading")
        } else {
            columns.push(Column { heading, place });
            continue;
        };
        return Err(fault.at_line(line).quoting(cell));
    }
    Ok(columns)
}

fn check_cells(
    bytes: &[u8],
    heading: &ByteRecord,
    records: &[ByteRecord],
) -> Result<(), Complaint> {
    // A quote that is never closed swallows all lines after it, so that it ends up in the last
    // record; then the number of quotes in the file is odd.
    let open = records.last().filter(|last| last.iter().any(|cell| cell.contains(&b'\n')));
    if let Some(last) = open.filter(|_| bytes.iter().filter(|&&b| b == b'"').count() % 2 == 1) {
        return Err(Complaint::new(
            "a quote that is opened here is never closed",
            "close it, or double a quote that belongs to the text",
        )
        .at_line(line_of(bytes, last)));
    }
    match records.iter().find(|record| record.len() != heading.len()) {
        None => Ok(()),
        Some(record) => Err(Complaint::new(
            format!(
                "the line has {} cells, but there are {} headings",
                record.len(),
                heading.len()
            ),
            "give every line as many cells; put text that holds a comma in double quotes",
        )
        .at_line(line_of(bytes, record))
        .quoting(record.iter().collect::<Vec<_>>().join(&b","[..]))),
    }
}

fn finite(cell: &[u8], what: &str) -> Result<f64, Complaint> {
    match number::real(cell) {
        Some(read) if read.value.is_finite() => Ok(read.value),
        _ => Err(Complaint::new(
            format!("{what} is not a finite number"),
            "write a number such as 1.5 or -2e-3",
        )),
    }
}

fn yes_or_no(cell: &[u8]) -> Result<bool, Complaint> {
    match cell.to_ascii_lowercase().as_slice() {
        b"1" | b"true" | b"yes" => Ok(true),
        b"0" | b"false" | b"no" => Ok(false),
        _ => Err(Complaint::new(
            "use is neither yes nor no",
            "write 1, true or yes to use a row; 0, false or no to leave it out",
        )),
    }
}

fn weight(cell: &[u8]) -> Result<f64, Complaint> {
    let weight = finite(cell, "penalty_weight")?;
    if weight < 0.0 {
        return Err(Complaint::new(
            "penalty_weight is negative",
            "give 0 for an unknown without a penalty, 1 for the usual one",
        ));
    }
    Ok(weight)
}

/// NaN, that is free, where the cell is empty.
fn fixed(cell: &[u8]) -> Result<f64, Complaint> {
    if cell.is_empty() { Ok(f64::NAN) } else { finite(cell, "fixed") }
}

fn no_bound(cell: &[u8], heading: &str) -> Result<(), Complaint> {
    if cell.is_empty() {
        return Ok(());
    }
    Err(Complaint::new(
        format!("bounds are not available in this version, but {heading} is given"),
        format!("leave {heading} empty"),
    ))
}
