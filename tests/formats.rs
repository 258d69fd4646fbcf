//! Every row of the table of formats: what is accepted, what is refused, and in which words.

use std::io::Write;
use std::path::{Path, PathBuf};

use ellbow::files::matrix::{self, ReadOptions};
use ellbow::files::vector::{self, NonFinite};
use ellbow::files::{FileError, Loaded};
use ellbow::operator::{CompressedRows, Duplicates, Precision};

/// A folder of its own for one test's files.
struct Desk(tempfile::TempDir);

impl Desk {
    fn new() -> Self {
        Self(tempfile::tempdir().unwrap())
    }

    fn file(&self, name: &str, content: impl AsRef<[u8]>) -> PathBuf {
        let path = self.0.path().join(name);
        std::fs::write(&path, content).unwrap();
        path
    }

    /// The matrix in a text, with options.
    fn load(&self, text: impl AsRef<[u8]>, options: &ReadOptions) -> Loaded<CompressedRows> {
        matrix::read(&self.file("a.mtx", text), options).unwrap()
    }

    fn accept(&self, text: impl AsRef<[u8]>) -> Loaded<CompressedRows> {
        self.load(text, &ReadOptions::default())
    }

    /// The complaint about a text; it must name the file, be the user's fault and carry a remedy.
    fn refuse(&self, text: impl AsRef<[u8]>) -> String {
        complaint(matrix::read(&self.file("a.mtx", text), &ReadOptions::default()), "a.mtx")
    }
}

fn complaint<T>(outcome: Result<T, FileError>, name: &str) -> String {
    let error = outcome.err().expect("the file is refused");
    assert!(error.is_user_fault(), "{error}");
    let text = error.to_string();
    assert!(text.contains(name) && text.contains("\n  remedy: "), "{text}");
    assert!(
        text.lines().count() <= 3 && text.chars().all(|c| c == '\n' || !c.is_control()),
        "{text}"
    );
    text
}

/// Checks that a message holds each of some pieces.
#[track_caller]
fn says(message: &str, pieces: &[&str]) {
    for piece in pieces {
        assert!(message.contains(piece), "{piece:?} is not in:\n{message}");
    }
}

fn dense(a: &CompressedRows) -> Vec<Vec<f64>> {
    (0..a.rows())
        .map(|i| {
            let mut row = vec![0.0; a.columns()];
            a.row(i).entries().for_each(|(j, value)| row[j] = value);
            row
        })
        .collect()
}

fn gz(text: &[u8]) -> Vec<u8> {
    let mut out = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::default());
    out.write_all(text).unwrap();
    out.finish().unwrap()
}

fn data(name: &str) -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data").join(name)
}

const REAL: &str = "%%MatrixMarket matrix coordinate real general\n";
const ALLOW: ReadOptions = ReadOptions {
    allow_nonfinite: true,
    duplicates: Duplicates::Sum,
    precision: Precision::Double,
};

#[test]
fn banner_in_any_case_with_extra_blanks() {
    let desk = Desk::new();
    for banner in [
        "%%MatrixMarket matrix coordinate double general",
        "%%MATRIXMARKET Matrix COORDINATE Real GENERAL",
        "%%matrixmarket  matrix\tcoordinate   real general   ",
        "%% MatrixMarket matrix coordinate real general\r",
    ] {
        let loaded = desk.accept(format!("{banner}\n2 2 1\n2 1 0.5\n"));
        assert_eq!(dense(&loaded.value), [[0.0, 0.0], [0.5, 0.0]]);
        assert!(loaded.warnings.is_empty(), "{banner}");
        assert_eq!(loaded.facts.format, "Matrix Market coordinate real general");
    }
    let unsigned = "%%MatrixMarket matrix coordinate unsigned-integer general\n1 1 1\n1 1 7\n";
    assert_eq!(dense(&desk.accept(unsigned).value), [[7.0]]);
    let message = desk.refuse("%%MatrixMarket matrix coordinate real\n1 1 1\n1 1 7\n");
    says(
        &message,
        &["line 1", "4 words instead of five", "matrix coordinate real", "write the first"],
    );
    let message = desk.refuse("%%MatrixMarket matrix coordinate quaternion general\n");
    says(&message, &["line 1", "field \"quaternion\" is not known", "real, integer or pattern"]);
    let message = desk.refuse("%%MatrixMarket vector coordinate real general\n");
    says(&message, &["line 1", "object \"vector\" is not known"]);
}

#[test]
fn byte_order_mark_leading_blank_and_single_percent_are_accepted_with_one_warning() {
    let desk = Desk::new();
    let rest = "MatrixMarket matrix coordinate real general\n1 1 1\n1 1 7\n";
    for (start, line, words) in [
        ("\u{feff}%%", 1, "byte order mark"),
        (" %%", 1, "blank space before the banner"),
        ("\n\n%%", 3, "blank space before the banner"),
        ("%", 1, "one % instead of two"),
        ("\u{feff}\n %", 1, "byte order mark"),
    ] {
        let loaded = desk.accept(format!("{start}{rest}"));
        assert_eq!(dense(&loaded.value), [[7.0]]);
        assert_eq!(loaded.warnings.len(), 1, "{start:?}");
        says(&loaded.warnings[0].to_string(), &["a.mtx", &format!("line {line}"), words]);
    }
}

#[test]
fn comments_blank_lines_line_ends_tabs_and_fortran_numbers() {
    let desk = Desk::new();
    let mut text =
        b"%%MatrixMarket matrix coordinate real general\r\n% any \xff\x00\x1b bytes\r\n\r\n"
            .to_vec();
    text.extend(b"  % indented\n3 3\t5 \r\n%between\n1\t1\t+1.5\n\n  2 2   1.5D+02  \r\n");
    text.extend(b"% more\n3 3 -2d-1\n1 3 .5\n 3 1 1.");
    let loaded = desk.accept(&text);
    assert_eq!(dense(&loaded.value), [[1.5, 0.0, 0.5], [0.0, 150.0, 0.0], [1.0, 0.0, -0.2]]);
    assert!(loaded.warnings.is_empty());
}

#[test]
fn lines_to_one_mebibyte() {
    let desk = Desk::new();
    let wide = " ".repeat((1 << 20) - 6);
    let text = format!("{REAL}%{wide}\n1 1 1\n1 1{wide}7\n");
    assert_eq!(dense(&desk.accept(text).value), [[7.0]]);
    let wide = " ".repeat(1 << 20);
    for text in [format!("{REAL}1 1 1\n1 1{wide}7\n"), format!("{REAL}1 1 1\n1 1 7\n%{wide}\n")] {
        says(&desk.refuse(text), &["line is longer than 1048576 bytes", "right file"]);
    }
    says(&desk.refuse(format!("{REAL}%{wide}\n")), &["line 2", "line is longer"]);
}

#[test]
fn a_number_followed_by_anything() {
    let desk = Desk::new();
    for (value, remedy) in [
        ("1.5abc", "write numbers such as"),
        ("1,5", "a point, not a comma"),
        ("0x1p3", "write numbers"),
    ] {
        let message = desk.refuse(format!("{REAL}2 2 2\n1 1 1\n2 1 {value}\n"));
        let quoted = format!("\"{value}\" is not a number");
        says(&message, &["line 4", &quoted, &format!("text: 2 1 {value}"), remedy]);
    }
    for entry in ["1x 1 2.0", "1.0 1 2.0", "1e0 1 2.0"] {
        let message = desk.refuse(format!("{REAL}2 2 1\n{entry}\n"));
        says(&message, &["line 3", "is not a whole number", "row numbers run from 1 to 2"]);
    }
    let message = desk.refuse("%%MatrixMarket matrix coordinate integer general\n1 1 1\n1 1 1.5\n");
    says(
        &message,
        &["line 3", "1.5 in an integer file is not a whole number", "declare the field real"],
    );
    let message = desk.refuse(format!("{REAL}2 2 1\n1 1 2.0 3.0\n"));
    says(
        &message,
        &["line 3", "the line has 4 columns, expected row, column and value", "1 1 2.0 3.0"],
    );
    let message = desk.refuse(format!("{REAL}2 2 1\n1 1\n"));
    says(&message, &["line 3", "the line has 2 columns"]);
    let message = desk.refuse("%%MatrixMarket matrix array real general\n1 2\n1\n2 3\n");
    says(&message, &["line 4", "the line has 2 columns, expected one value"]);
    let message =
        desk.refuse("%%MatrixMarket matrix coordinate unsigned-integer general\n1 1 1\n1 1 -2\n");
    says(&message, &["line 3", "-2 in an unsigned-integer file is negative"]);
    let message = desk.refuse(format!("{REAL}2 2 1\n1 1 \x1b[31m\u{202e}9{}\n", "x".repeat(400)));
    says(&message, &["text: 1 1 \\u{1b}[31m\\u{202e}9xxx", "…"]);
    assert!(message.lines().nth(1).unwrap().chars().count() < 260, "{message}");
}

#[test]
fn nan_infinity_and_overflow() {
    let desk = Desk::new();
    for (value, words) in
        [("nan", "is not a finite"), ("-Inf", "is not a finite"), ("1E310", "beyond the range")]
    {
        let text = format!("{REAL}2 2 2\n1 1 1\n2 1 {value}\n");
        let message = desk.refuse(&text);
        says(&message, &["line 4", "row 2, column 1", words, value, "--allow-nonfinite"]);
        let loaded = desk.load(&text, &ALLOW);
        assert_eq!(loaded.facts.nonfinite, 1);
        assert!(!dense(&loaded.value)[1][0].is_finite());
        assert_eq!(loaded.value.storage_name(), "f32");
    }
    let loaded = desk.accept(format!("{REAL}2 2 2\n1 1 1e-400\n2 1 -1d-5000\n"));
    assert_eq!((loaded.facts.underflows, loaded.value.entries()), (2, 2));
    assert_eq!(dense(&loaded.value), [[0.0, 0.0], [-0.0, 0.0]]);
}

#[test]
fn an_index_outside_the_matrix() {
    let desk = Desk::new();
    for (entry, words) in [
        ("0 1 5", ["the row number is 0", "row numbers run from 1 to 20", "add 1 to every index"]),
        ("1 0 5", ["the column number is 0", "from 1 to 30", "add 1"]),
        ("-3 1 5", ["the row number -3 is negative", "from 1 to 20", ""]),
        ("21 1 5", ["row 21 is beyond the 20 rows declared", "from 1 to 20", ""]),
        ("1 31 5", ["column 31 is beyond the 30 columns declared", "from 1 to 30", ""]),
        ("1 99999999999999999999999 5", ["beyond 2^64", "30 columns are declared", "from 1 to 30"]),
        ("18446744073709551615 1 5", ["row 18446744073709551615 is beyond the 20", "", ""]),
    ] {
        let message = desk.refuse(format!("{REAL}20 30 2\n1 1 1.0\n{entry}\n"));
        says(&message, &["line 4", &format!("text: {entry}")]);
        says(&message, &words);
    }
}

#[test]
fn explicit_zeros_are_kept_and_counted() {
    let loaded = Desk::new().accept(format!("{REAL}2 2 3\n1 1 0\n2 1 -0.0\n2 2 4\n"));
    assert_eq!((loaded.value.entries(), loaded.facts.explicit_zeros), (3, 2));
    assert!(loaded.warnings.is_empty());
}

#[test]
fn duplicates_are_added_refused_or_replaced() {
    let desk = Desk::new();
    // In this order the sum is 0; in another it would be 1.
    let text = format!("{REAL}2 3 5\n2 3 1e16\n1 1 2.5\n2 3 1\n2 3 -1e16\n1 2 0.1\n");
    let loaded = desk.accept(&text);
    assert_eq!(dense(&loaded.value), [[2.5, 0.1, 0.0], [0.0, 0.0, 0.0]]);
    assert_eq!((loaded.value.entries(), loaded.facts.duplicates), (3, 2));
    says(&loaded.warnings[0].to_string(), &["a.mtx", "2 entries were added", "--duplicates error"]);

    let with = |duplicates| ReadOptions { duplicates, ..ReadOptions::default() };
    let last = desk.load(&text, &with(Duplicates::Last));
    assert_eq!(dense(&last.value)[1][2], -1e16);
    says(&last.warnings[0].to_string(), &["2 entries were replaced"]);

    let outcome = matrix::read(&desk.file("a.mtx", &text), &with(Duplicates::Error));
    let message = complaint(outcome, "a.mtx");
    says(&message, &["line 6", "row 2, column 3 is given more than once (lines 3, 5, 6)"]);
    let packed = matrix::read(&desk.file("a.mtx", gz(text.as_bytes())), &with(Duplicates::Error));
    assert_eq!(complaint(packed, "a.mtx"), message);

    let message = desk.refuse(format!("{REAL}1 1 2\n1 1 1e308\n1 1 1e308\n"));
    says(&message, &["line 4", "add up to infinity (lines 3, 4)"]);
}

#[test]
fn symmetric_holds_one_triangle() {
    let desk = Desk::new();
    let banner = "%%MatrixMarket matrix coordinate real symmetric\n";
    let loaded = desk.accept(format!("{banner}3 3 3\n1 1 1\n2 1 2\n3 2 0.1\n"));
    assert_eq!(dense(&loaded.value), [[1.0, 2.0, 0.0], [2.0, 0.0, 0.1], [0.0, 0.1, 0.0]]);
    let message = desk.refuse(format!("{banner}3 3 2\n1 1 1\n1 2 2\n"));
    says(
        &message,
        &["line 4", "row 1, column 2 is above the diagonal", "lower triangle only", "1 2 2"],
    );
    let message = desk.refuse(format!("{banner}3 4 1\n1 1 1\n"));
    says(&message, &["line 2", "declared symmetric but is 3 by 4", "declare it general"]);
}

#[test]
fn skew_symmetric_has_no_diagonal() {
    let desk = Desk::new();
    let banner = "%%MatrixMarket matrix coordinate integer skew-symmetric\n";
    let loaded = desk.accept(format!("{banner}2 2 1\n2 1 3\n"));
    assert_eq!(dense(&loaded.value), [[0.0, -3.0], [3.0, 0.0]]);
    let message = desk.refuse(format!("{banner}2 2 2\n2 1 3\n2 2 4\n"));
    says(&message, &["line 4", "row 2, column 2 of a skew-symmetric matrix is 4, not 0"]);
    assert_eq!(desk.accept(format!("{banner}2 2 1\n2 2 0\n")).value.entries(), 1);
}

#[test]
fn pattern_is_one_without_stored_values() {
    let desk = Desk::new();
    let banner = "%%MatrixMarket matrix coordinate pattern general\n";
    let loaded = desk.accept(format!("{banner}2 2 3\n2 2\n1 2\n2 1\n"));
    assert_eq!(dense(&loaded.value), [[0.0, 1.0], [1.0, 1.0]]);
    assert_eq!(loaded.value.storage_name(), "pattern");
    let message = desk.refuse(format!("{banner}2 2 1\n2 2 1.0\n"));
    says(&message, &["line 3", "3 columns, expected row and column (a pattern has no values)"]);
    let twice = desk.accept(format!("{banner}2 2 3\n2 2\n1 2\n2 2\n"));
    assert_eq!(dense(&twice.value), [[0.0, 1.0], [0.0, 2.0]]);
    assert_eq!((twice.value.storage_name(), twice.facts.duplicates), ("f32", 1));
    let message = desk.refuse("%%MatrixMarket matrix array pattern general\n2 2\n");
    says(&message, &["line 1", "contradicts itself"]);
}

#[test]
fn complex_and_hermitian_are_refused() {
    let desk = Desk::new();
    let message = desk.refuse("%%MatrixMarket matrix coordinate complex general\n1 1 1\n1 1 1 0\n");
    says(
        &message,
        &["line 1", "complex matrices are not supported", "real and its imaginary part"],
    );
    let message = desk.refuse("%%MatrixMarket matrix coordinate real hermitian\n1 1 1\n1 1 1\n");
    says(&message, &["line 1", "hermitian matrices are not supported"]);
}

#[test]
fn too_few_or_too_many_entries() {
    let desk = Desk::new();
    let message = desk.refuse(format!("{REAL}% c\n9 9 3\n1 1 1\n2 2 2\n\n"));
    says(&message, &["line 6", "holds 2 entries, but line 3 declares 3", "give the whole file"]);
    let message = desk.refuse(format!("{REAL}9 9 2\n1 1 1\n2 2 2\n% c\n3 3 3\n4 4 4\n"));
    says(&message, &["line 6", "line 2 declares 2 entries, but there are more", "text: 3 3 3"]);
    // Far enough into the file that the fault lies in a later piece of it.
    let many: String = (0..100_000).map(|k| format!("{} {} 1\n", k % 9 + 1, k % 7 + 1)).collect();
    let message = desk.refuse(format!("{REAL}9 9 99999\n{many}"));
    says(&message, &["line 100002", "99999 entries, but there are more"]);
    let message = desk.refuse(format!("{REAL}9 9 100001\n{many}"));
    says(&message, &["line 100002", "holds 100000 entries"]);
    let message = desk.refuse(format!("{REAL}9 9 100001\n{many}1 1 x\n"));
    says(&message, &["line 100003", "\"x\" is not a number"]);
}

#[test]
fn arrays_are_read_column_by_column() {
    let desk = Desk::new();
    let text = "%%MatrixMarket matrix array real general\n2 3\n1\n0\n\n% c\n3\n4.5\n-0\n6\n";
    let loaded = desk.accept(text);
    assert_eq!(dense(&loaded.value), [[1.0, 3.0, 0.0], [0.0, 4.5, 6.0]]);
    assert_eq!((loaded.value.entries(), loaded.facts.explicit_zeros), (4, 0));
    let vector = vector::read(&desk.file("b.mtx", text), NonFinite::Refuse).unwrap().value;
    assert_eq!(vector, ndarray::array![[1.0, 3.0, 0.0], [0.0, 4.5, 6.0]]);
    let symmetric = "%%MatrixMarket matrix array integer symmetric\n3 3\n1\n2\n3\n4\n5\n6\n";
    let loaded = desk.accept(symmetric);
    assert_eq!(dense(&loaded.value), [[1.0, 2.0, 3.0], [2.0, 4.0, 5.0], [3.0, 5.0, 6.0]]);
    let skew = "%%MatrixMarket matrix array real skew-symmetric\n3 3\n1\n2\n3\n";
    let loaded = desk.accept(skew);
    assert_eq!(dense(&loaded.value), [[0.0, -1.0, -2.0], [1.0, 0.0, -3.0], [2.0, 3.0, 0.0]]);
    let message =
        desk.refuse("%%MatrixMarket matrix array real general\n2 2\n1\n2\n3\n% comment\n");
    says(&message, &["line 6", "holds 3 entries, but line 2 declares 4"]);
}

/// An array's places are worked out per piece of text; values too many must not get one.
#[test]
fn arrays_of_several_pieces_with_a_value_too_many() {
    let desk = Desk::new();
    for (symmetry, n, count) in
        [("general", 400, 160_000), ("symmetric", 500, 125_250), ("skew-symmetric", 500, 124_750)]
    {
        let text = |values: usize| {
            format!(
                "%%MatrixMarket matrix array real {symmetry}\n{n} {n}\n{}",
                "0.5\n".repeat(values)
            )
        };
        let mirrored = if symmetry == "symmetric" { count - n } else { 0 };
        let mirrored = if symmetry == "skew-symmetric" { count } else { mirrored };
        assert_eq!(desk.accept(text(count)).value.entries(), count + mirrored);
        for values in [count + 1, count + 200_000] {
            let message = desk.refuse(text(values));
            says(&message, &[&format!("line {}", count + 3), &format!("declares {count} entries")]);
        }
        says(&desk.refuse(text(count - 1)), &[&format!("holds {} entries", count - 1)]);
    }
}

#[test]
fn a_header_that_claims_more_than_the_bytes_could_hold() {
    let desk = Desk::new();
    let text = format!("{REAL}1000 1000 1000000000000\n1 1 1\n");
    for (name, content) in [("plain", text.clone().into_bytes()), ("gzip", gz(text.as_bytes()))] {
        let message = desk.refuse(content);
        says(&message, &["line 2", "1000000000000 entries are declared", "correct the size line"]);
        says(&message, &["the 6 bytes after the size line hold at most 1"]);
        assert!(!name.is_empty());
    }
    // The last line may lack its end: two entries in seven bytes are possible.
    let pattern = "%%MatrixMarket matrix coordinate pattern general\n2 2 2\n1 1\n2 2";
    assert_eq!(desk.accept(pattern).value.entries(), 2);
    let message = desk.refuse(format!("{REAL}4000000000 3 1\n1 1 1\n"));
    says(&message, &["line 2", "4000000000 rows are declared", "bytes long"]);
    let message = desk.refuse(format!("{REAL}3 5000000000 1\n1 1 1\n"));
    says(&message, &["line 2", "5000000000 columns are declared; at most 4294967295"]);
    assert_eq!(desk.accept(format!("{REAL}3 4294967295 1\n1 4294967295 1\n")).value.entries(), 1);
    let message = desk.refuse(format!("{REAL}3 3 99999999999999999999\n"));
    says(&message, &["line 2", "\"99999999999999999999\" is beyond 2^64"]);
    let message =
        desk.refuse("%%MatrixMarket matrix array real general\n4000000000 4000000000\n1\n");
    says(&message, &["line 2", "4000000000 rows are declared"]);
    let message = desk.refuse("%%MatrixMarket matrix array real general\n1000 1000\n1\n");
    says(&message, &["line 2", "1000000 entries are declared"]);
    for size in ["3 3", "3 3 1 1", "-3 3 1", "a 3 1", "0 3 0"] {
        says(&desk.refuse(format!("{REAL}{size}\n1 1 1\n")), &["line 2", &format!("text: {size}")]);
    }
    let outcome = vector::read(
        &desk.file("b.mtx", format!("{REAL}4000000000 1 1\n1 1 1\n")),
        NonFinite::Refuse,
    );
    says(&complaint(outcome, "b.mtx"), &["line 2", "4000000000 rows are declared"]);
}

#[test]
fn gzip_by_its_first_bytes() {
    let desk = Desk::new();
    let head = format!("{REAL}2 2 2\n1 1 0.1\n");
    let tail = "2 2 4\n";
    let two_members = [gz(head.as_bytes()), gz(tail.as_bytes())].concat();
    let loaded = desk.accept(&two_members);
    assert_eq!(dense(&loaded.value), [[0.1, 0.0], [0.0, 4.0]]);
    assert_eq!(loaded.facts.format, "Matrix Market coordinate real general, gzip");
    let whole = gz(format!("{head}{tail}").as_bytes());
    let message = desk.refuse(&whole[..whole.len() - 3]);
    says(&message, &["the gzip stream ends early", "cut short", "gzip -t"]);
    let mut damaged = whole.clone();
    damaged[whole.len() - 6] ^= 1;
    says(&desk.refuse(damaged), &["the gzip stream is damaged"]);
    // Only the first member is there: the stream is whole, the matrix is not.
    says(&desk.refuse(gz(head.as_bytes())), &["holds 1 entries, but line 2 declares 2"]);
    says(&desk.refuse(gz(b"hello\n")), &["what is compressed is not a Matrix Market file"]);
    says(&desk.refuse(gz(&whole)), &["itself an array or an archive", "gunzip"]);
    says(&desk.refuse(gz(b"")), &["empty inside"]);
}

#[test]
fn other_compressions_are_named() {
    let desk = Desk::new();
    for (magic, name, undo) in [
        (&b"BZh91AY&SY"[..], "bzip2", "bunzip2"),
        (b"\xfd7zXZ\0\0\x04", "xz", "unxz"),
        (b"\x28\xb5\x2f\xfd\x04", "zstd", "unzstd"),
    ] {
        let words = [&format!("compressed with {name}, which is not read"), undo, "gzip instead"];
        says(&desk.refuse(magic), &words.map(|w: &str| w));
        let outcome = vector::read(&desk.file("b.csv", magic), NonFinite::Keep);
        says(&complaint(outcome, "b.csv"), &words.map(|w: &str| w));
    }
}

#[test]
fn files_that_end_before_they_begin() {
    let desk = Desk::new();
    says(&desk.refuse(""), &["the file is empty"]);
    says(&desk.refuse("\n \n"), &["line 1", "format is not known"]);
    says(&desk.refuse(REAL), &["line 1", "ends before its size line"]);
    says(&desk.refuse(REAL.trim_end()), &["line 1", "ends before its size line"]);
    says(&desk.refuse(format!("{REAL}% c\n\n")), &["line 3", "ends before its size line"]);
    let message = desk.refuse(format!("{REAL}2 2 1\n1 1 5\n").replace('\n', "\r"));
    says(&message, &["line 1", "the lines end in CR alone", "tr '\\r' '\\n'"]);
    says(
        &desk.refuse("hello\n1 2 3\n"),
        &["line 1", "format is not known", "text: hello", "%%MatrixMarket"],
    );
    let missing = matrix::read(Path::new("no/such/file.mtx"), &ReadOptions::default()).unwrap_err();
    assert!(!missing.is_user_fault());
    says(&missing.to_string(), &["no/such/file.mtx: could not open the file"]);
    let folder = matrix::read(desk.0.path(), &ReadOptions::default());
    says(&folder.unwrap_err().to_string(), &["this is a folder, not a file"]);
}

#[test]
fn single_precision_rounds_and_refuses_by_entry() {
    let desk = Desk::new();
    let single = ReadOptions { precision: Precision::Single, ..ReadOptions::default() };
    let loaded = desk.load(format!("{REAL}1 2 2\n1 1 0.1\n1 2 2\n"), &single);
    assert_eq!(dense(&loaded.value), [[f64::from(0.1f32), 2.0]]);
    assert_eq!(loaded.value.storage_name(), "f32");
    for (value, words) in [("1e39", "overflows"), ("-1e-46", "vanishes")] {
        let path = desk.file("a.mtx", format!("{REAL}1 2 2\n1 1 0.1\n1 2 {value}\n"));
        let message = complaint(matrix::read(&path, &single), "a.mtx");
        says(&message, &["line 4", "row 1, column 2", words, "--precision double"]);
    }
    // Without being asked, f32 only where nothing is lost.
    let text = |value: &str| format!("{REAL}1 2 2\n1 1 0.5\n1 2 {value}\n");
    assert_eq!(desk.accept(text("-7")).value.storage_name(), "f32");
    assert_eq!(desk.accept(text("0.1")).value.storage_name(), "f64");
    // A sum of two f32 that is none needs f64.
    let sum = desk.accept(format!("{REAL}1 1 2\n1 1 16777216\n1 1 1\n"));
    assert_eq!((sum.value.storage_name(), dense(&sum.value)[0][0]), ("f64", 16_777_217.0));
}

#[test]
fn scipy_matrices_of_each_format() {
    let wanted = [
        vec![0.0, -2.5, 0.0, 0.0, 0.1],
        vec![0.0; 5],
        vec![0.0; 5],
        vec![7.0, 3.0, 0.0, 1e-3, 0.0],
    ];
    for (name, format) in [("coo.npz", "npz coo"), ("csr.npz", "npz csr"), ("csc.npz", "npz csc")] {
        let loaded = matrix::read(&data(name), &ReadOptions::default()).unwrap();
        assert_eq!(dense(&loaded.value), wanted, "{name}");
        assert_eq!((loaded.value.entries(), loaded.facts.explicit_zeros), (6, 1), "{name}");
        assert_eq!((loaded.facts.format.as_str(), loaded.value.storage_name()), (format, "f64"));
    }
    let single = matrix::read(&data("csr_array_f4.npz"), &ReadOptions::default()).unwrap().value;
    assert_eq!((single.storage_name(), dense(&single)[0][4]), ("f32", f64::from(0.1f32)));
    let boolean = matrix::read(&data("bool.npz"), &ReadOptions::default()).unwrap().value;
    assert_eq!((boolean.storage_name(), dense(&boolean)[3][3]), ("pattern", 1.0));
    let loaded = matrix::read(&data("unsorted.npz"), &ReadOptions::default()).unwrap();
    let sums = [[2.0, 0.0, 0.0, 1.5], [0.0, 4.0, 0.0, 0.0], [0.0; 4]];
    assert_eq!(dense(&loaded.value), sums);
    assert_eq!((loaded.facts.duplicates, loaded.warnings.len()), (2, 1));
    let refuse = ReadOptions { duplicates: Duplicates::Error, ..ReadOptions::default() };
    let message = complaint(matrix::read(&data("unsorted.npz"), &refuse), "unsorted.npz");
    says(&message, &["row 2, column 3 is given more than once"]);
}

#[test]
fn scipy_matrices_with_a_fault() {
    for (name, words) in [
        ("column_beyond.npz", "element 1 of indices.npy is column 5, but columns run from 0 to 4"),
        ("column_negative.npz", "element 4 of indices.npy is column -1"),
        ("row_beyond.npz", "element 4 of row.npy is row 4, but rows run from 0 to 3"),
        ("pointers_fall.npz", "pointer 2 in indptr.npy is 2, less than the 3 before it"),
        ("pointers_end.npz", "the last pointer in indptr.npy is 5, but data.npy holds 6 values"),
        ("pointers_start.npz", "the first pointer in indptr.npy is 1, not 0"),
        ("pointers_short.npz", "indptr.npy holds 3 numbers, but 5 are needed"),
        ("indices_short.npz", "indices.npy holds 3 numbers, but 6 are needed"),
        ("indices_float.npz", "indices.npy does not hold integers"),
        ("shape_huge.npz", "1099511627776 rows are declared"),
        ("nan.npz", "the value of row 4, column 1, NaN, is not a finite number"),
        ("twice.npz", "lists a member twice"),
        ("bsr.npz", "not csr, csc or coo"),
        ("dense.npz", "not a sparse matrix saved by SciPy"),
    ] {
        let message = complaint(matrix::read(&data(name), &ReadOptions::default()), name);
        says(&message, &[words]);
    }
    let whole = std::fs::read(data("csr.npz")).unwrap();
    let desk = Desk::new();
    for cut in [4, 40, whole.len() / 2, whole.len() - 1] {
        says(&desk.refuse(&whole[..cut]), &["archive is damaged", "save_npz"]);
    }
}

#[test]
fn arrays_of_numpy_with_a_fault() {
    let matrix = |name: &str| complaint(matrix::read(&data(name), &ReadOptions::default()), name);
    let vector = |name: &str| complaint(vector::read(&data(name), NonFinite::Refuse), name);
    for name in ["objects.npy", "dates.npy", "records.npy"] {
        assert_eq!(matrix(name), vector(name));
    }
    says(&vector("objects.npy"), &["Python objects", "unpickled", "allow_pickle=False"]);
    says(&vector("dates.npy"), &["dates or durations"]);
    says(&vector("records.npy"), &["structured", "array['value']"]);
    let whole = std::fs::read(data("big_endian_fortran.npy")).unwrap();
    let desk = Desk::new();
    let short = desk.refuse(&whole[..whole.len() - 1]);
    says(&short, &["the shape (4, 5) needs 160 bytes of 8 bytes each, but the file holds 159"]);
    says(&desk.refuse([&whole[..], b"\0"].concat()), &["the file holds 161"]);
    says(&desk.refuse(&whole[..50]), &["ends within the header"]);
    let loaded = matrix::read(&data("big_endian_fortran.npy"), &ReadOptions::default()).unwrap();
    assert_eq!(dense(&loaded.value)[3], [7.0, 3.0, 0.0, 1e-3, 0.0]);
    assert_eq!(loaded.value.entries(), 5);
    let values = vector::read(&data("big_endian_fortran.npy"), NonFinite::Refuse).unwrap().value;
    assert_eq!((values.dim(), values[[0, 4]], values[[3, 0]]), ((4, 5), 0.1, 7.0));
    assert!(values.is_standard_layout());
}
