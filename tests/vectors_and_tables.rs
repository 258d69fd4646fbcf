//! Data vectors, lists of cells and tables: what is accepted, what is refused, and in which words.

use std::io::Write;
use std::path::PathBuf;

use ellbow::files::vector::{self, NonFinite, read_active};
use ellbow::files::{FileError, Folder, read_text, table};
use ndarray::array;

struct Desk(tempfile::TempDir);

impl Desk {
    fn new() -> Self {
        Self(tempfile::tempdir().unwrap())
    }

    fn file(&self, content: impl AsRef<[u8]>) -> PathBuf {
        let path = self.0.path().join("a.csv");
        std::fs::write(&path, content).unwrap();
        path
    }

    fn values(&self, text: &str) -> ndarray::Array2<f64> {
        vector::read(&self.file(text), NonFinite::Refuse).unwrap().value
    }

    fn refuse(&self, text: impl AsRef<[u8]>) -> String {
        complaint(vector::read(&self.file(text), NonFinite::Refuse))
    }
}

fn complaint<T>(outcome: Result<T, FileError>) -> String {
    let error = outcome.err().expect("the file is refused");
    assert!(error.is_user_fault(), "{error}");
    let text = error.to_string();
    assert!(text.contains("a.csv") && text.contains("\n  remedy: "), "{text}");
    text
}

#[track_caller]
fn says(message: &str, pieces: &[&str]) {
    for piece in pieces {
        assert!(message.contains(piece), "{piece:?} is not in:\n{message}");
    }
}

#[test]
fn columns_of_text_in_every_form() {
    let desk = Desk::new();
    let pairs = array![[1.0, -2.5], [3.0, 400.0]];
    for text in [
        "1,-2.5\n3,4e2\n",
        "1;-2.5\r\n3;4e2\r\n",
        "1\t-2.5\n3\t4D2",
        "  1   -2.5\n 3 4e2\n\n\n",
        "# comment\n\ntime a, time b\n1, -2.5\n# between\n3, 4e2\n",
        "\u{feff}\"a\",\"b\"\n\"1\",-2.5\n3,\"4e2\"\n",
        "a\tb\n1\t-2.5\n3\t4e2\n",
        "travel time of a and b\n1 -2.5\n3 4e2\n",
        "première;_b\n1;-2.5\n3;4e2\n",
    ] {
        assert_eq!(desk.values(text), pairs, "{text:?}");
    }
    assert_eq!(desk.values("7"), array![[7.0]]);
    assert_eq!(desk.values("t\n7\n8\n"), array![[7.0], [8.0]]);
    let loaded = vector::read(&desk.file("a,b\n1,2\n"), NonFinite::Refuse).unwrap();
    assert_eq!(loaded.facts.format, "text, 2 columns separated by commas, heading");
    let mut packed = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::default());
    packed.write_all(b"t\n7\n8\n").unwrap();
    let loaded = vector::read(&desk.file(packed.finish().unwrap()), NonFinite::Refuse).unwrap();
    assert_eq!(
        (loaded.value, loaded.facts.format.as_str()),
        (array![[7.0], [8.0]], "text column, heading, gzip")
    );
}

#[test]
fn columns_of_text_with_a_fault() {
    let desk = Desk::new();
    for (text, pieces) in [
        ("1\n2\n1.5abc\n", ["line 3", "\"1.5abc\" is not a number", "text: 1.5abc"]),
        ("1.5abc\n2\n", ["line 1", "\"1.5abc\" is not a number", "1.5abc"]),
        ("1;2\n1,5;2\n", ["line 2", "\"1,5\" in column 1 is not a number", "a point, not a comma"]),
        ("1,2\n3\n", ["line 2", "1 cells separated by commas, but those before have 2", "text: 3"]),
        ("3\n1,5\n", ["line 2", "\"1,5\" is not a number", "a point, not a comma"]),
        ("a,b\n1,2,3\n", ["line 1", "2 headings, but 3 columns", "one heading"]),
        ("1\n\n2\n", ["line 2", "empty line between values", "write nan"]),
        ("1\nnan\n", ["line 2", "the value nan is not finite", "--missing nan"]),
        ("nan\n1\n", ["line 1", "the value nan is not finite", "--missing nan"]),
        ("1\n1e999\n", ["line 2", "not finite beyond double precision", "1e999"]),
        ("1,2\n3,\n", ["line 2", "the cell in column 2 is empty", "text: 3,"]),
        ("NA\n1\n", ["line 1", "\"NA\" is not a number", "nan for a missing value"]),
        ("a\nb\n1\n", ["line 2", "\"b\" is not a number", "text: b"]),
        ("# c\nonly words\n", ["the file holds no numbers", "one value a line", ""]),
        ("1\r2\r3", ["line 1", "the lines end in CR alone", "tr '\\r' '\\n'"]),
        ("", ["the file is empty", "", ""]),
    ] {
        says(&desk.refuse(text), &pieces);
    }
    says(&desk.refuse(b"\x00\x01\x02binary"), &["format is not known", "\\u{0}\\u{1}"]);
    says(&desk.refuse(b"PK\x03\x04"), &["archive of several arrays"]);
    let long = "1".repeat((1 << 20) + 1);
    says(&desk.refuse(format!("1\n{long}\n")), &["line 2", "longer than 1048576 bytes"]);
}

#[test]
fn missing_values_are_kept_on_demand() {
    let desk = Desk::new();
    let path = desk.file("a,b\n1,nan\n,2\nNaN,inf\n");
    let loaded = vector::read(&path, NonFinite::Keep).unwrap();
    let shown: Vec<String> = loaded.value.iter().map(f64::to_string).collect();
    assert_eq!(shown, ["1", "NaN", "NaN", "2", "NaN", "inf"]);
    assert_eq!(loaded.facts.nonfinite, 4);
    let array = Folder::create(desk.0.path()).unwrap();
    array.write_npy("a.csv", &[2, 2], &[1.0, f64::NAN, 2.0, 3.0]).unwrap();
    let path = desk.0.path().join("a.csv");
    assert_eq!(vector::read(&path, NonFinite::Keep).unwrap().facts.nonfinite, 1);
    let message = complaint(vector::read(&path, NonFinite::Refuse));
    says(&message, &["value 1 of data set 2 is NaN", "--missing nan"]);
}

#[test]
fn matrix_market_vectors() {
    let desk = Desk::new();
    let array = "%%MatrixMarket matrix array real general\n3 1\n1\n0\n-2\n";
    assert_eq!(desk.values(array), array![[1.0], [0.0], [-2.0]]);
    let sparse = "%%MatrixMarket matrix coordinate real general\n3 1 2\n3 1 5\n1 1 0.1\n";
    assert_eq!(desk.values(sparse), array![[0.1], [0.0], [5.0]]);
    let message = desk.refuse(sparse.replace("3 1 5", "1 1 5"));
    says(&message, &["line 4", "value 1 is given twice"]);
    let message = desk.refuse("%%MatrixMarket matrix coordinate real general\n3 2 1\n3 1 5\n");
    says(&message, &["line 2", "a sparse file of 2 columns stands where a vector is needed"]);
    let message = desk.refuse("%%MatrixMarket matrix array real general\n2 1\n1\nnan\n");
    says(&message, &["line 4", "the value nan is not a finite number"]);
}

#[test]
fn cells_by_mask_or_list() {
    let desk = Desk::new();
    let active = |text: &str, cells: usize| read_active(&desk.file(text), cells).unwrap();
    assert_eq!(active("1\n0\n1\n1\n", 4), [0, 2, 3]);
    assert_eq!(active("3\n0\n2\n", 4), [3, 0, 2]);
    assert_eq!(active("cell\n3\n2\n1\n0\n", 4), [3, 2, 1, 0]);
    assert_eq!(active("0\n1\n", 9), [0, 1]);
    assert_eq!(active("1\n1\n", 2), [0, 1]);
    assert_eq!(active("1\n", 1), [0]);
    let refuse = |text: &str, cells: usize| complaint(read_active(&desk.file(text), cells));
    says(&refuse("1\n0\n", 2), &["could be a mask as well as a list", "booleans"]);
    says(&refuse("0\n", 1), &["could be a mask as well as a list"]);
    says(&refuse("0\n0\n0\n", 3), &["leaves no cell active"]);
    says(&refuse("1\n0\n1\n", 4), &["looks like a mask of 3 values, but there are 4 cells"]);
    says(&refuse("1\n4\n", 4), &["value 2 is 4, beyond the 4 cells", "from 0 to 3"]);
    says(&refuse("2\n1.5\n", 4), &["value 2 is 1.5, not a cell number"]);
    says(&refuse("2\n-1\n", 4), &["value 2 is -1, not a cell number"]);
    says(&refuse("2\n3\n2\n", 4), &["cell 2 is listed twice, as values 1 and 3"]);
    says(&refuse("1,2\n3,4\n", 9), &["given as 2 columns"]);
    let mut boolean = b"\x93NUMPY\x01\x00".to_vec();
    let header = "{'descr': '|b1', 'fortran_order': False, 'shape': (2,), }\n";
    boolean.extend((header.len() as u16).to_le_bytes());
    boolean.extend(header.as_bytes());
    boolean.extend([1, 0]);
    assert_eq!(read_active(&desk.file(&boolean), 2).unwrap(), [0]);
    says(
        &complaint(read_active(&desk.file(&boolean), 9)),
        &["a mask of 2 values, but there are 9"],
    );
}

#[test]
fn table_of_rows() {
    let desk = Desk::new();
    let text = "\u{feff}ID,group,order,use,note,offset\r\n\
        r1,shot 7,0.5,1,\"said \"\"no\"\", twice\",3\r\n\
        r2,shot 2,-1e3,no,\"two\r\nlines\",4\r\n\
        \"r,3\",shot 7,2,TRUE, plain ,5";
    let rows = table::read_rows(&desk.file(text), 3).unwrap();
    assert_eq!(rows.ids.unwrap(), ["r1", "r2", "r,3"]);
    assert_eq!(
        (rows.groups.unwrap(), rows.group_names),
        (vec![0, 1, 0], vec!["shot 7".into(), "shot 2".into()])
    );
    assert_eq!(rows.order.unwrap(), [0.5, -1000.0, 2.0]);
    assert_eq!(rows.used.unwrap(), [true, false, true]);
    let note = ["said \"no\", twice", "two\r\nlines", "plain"].map(String::from).to_vec();
    let offset = ["3", "4", "5"].map(String::from).to_vec();
    assert_eq!(rows.others, [("note".into(), note), ("offset".into(), offset)]);
    let sparse = table::read_rows(&desk.file("order\n1\n2\n"), 2).unwrap();
    assert!(sparse.ids.is_none() && sparse.groups.is_none() && sparse.used.is_none());
}

#[test]
fn table_of_columns() {
    let desk = Desk::new();
    let text = "name,kind,penalty_weight,fixed,lower,upper\nc1,cell,1,,,\nc2,cell,0,2.5,, \nst,station,0.5,,,\n";
    let columns = table::read_columns(&desk.file(text), 3).unwrap();
    assert_eq!(columns.names.unwrap(), ["c1", "c2", "st"]);
    assert_eq!(columns.kinds.unwrap(), ["cell", "cell", "station"]);
    assert_eq!(columns.penalty_weights.unwrap(), [1.0, 0.0, 0.5]);
    let fixed = columns.fixed.unwrap();
    assert!(fixed[0].is_nan() && fixed[1] == 2.5 && fixed[2].is_nan());
}

#[test]
fn tables_with_a_fault() {
    let desk = Desk::new();
    let rows = |text: &str, m: usize| complaint(table::read_rows(&desk.file(text), m));
    let columns = |text: &str, n: usize| complaint(table::read_columns(&desk.file(text), n));
    says(
        &rows("id\na\nb\n", 5),
        &["line 3", "table has 2 lines below its heading, but the matrix has 5 rows"],
    );
    says(&columns("name\na\nb\n", 1), &["has 2 lines", "the matrix has 1 columns"]);
    says(&rows("id\na\nb\na\n", 3), &["line 4", "the id stands on lines 2 and 4", "text: a"]);
    says(&columns("name,kind\na,x\n\"a\",y\n", 2), &["line 3", "the name stands on lines 2 and 3"]);
    says(&rows("id,x\na,1\n,2\n", 2), &["line 3", "the id is empty"]);
    says(&rows("use\n1\nperhaps\n", 2), &["line 3", "use is neither yes nor no", "text: perhaps"]);
    says(&rows("use\n1\n\"\"\n", 2), &["line 3", "use is neither yes nor no"]);
    says(&rows("order\n1\nnan\n", 2), &["line 3", "order is not a finite number", "text: nan"]);
    says(
        &rows("id,x\na,1,2\n", 1),
        &["line 2", "3 cells, but there are 2 headings", "text: a,1,2"],
    );
    says(&rows("id,x\n\na\n", 1), &["line 3", "1 cells, but there are 2 headings"]);
    says(&rows("id,x\r\na,1\r\n\r\n\r\nb\r\n", 2), &["line 5", "1 cells"]);
    says(&rows("id,x\na,\"1\n2\n3\"\na,2\n", 2), &["line 5", "stands on lines 2 and 5"]);
    says(&rows("id,ID\na,b\n", 1), &["line 1", "two columns have the same heading", "text: ID"]);
    says(&rows(",x\na,b\n", 1), &["line 1", "heading 1 is empty"]);
    says(&rows("id;x\na;b\n", 1), &["line 1", "not separated by commas"]);
    says(
        &rows("id,x\na,b\nc,\"d\ne,f\ng,h\n", 4),
        &["line 3", "a quote that is opened here is never closed"],
    );
    says(&rows("id\n\u{1}\n\u{1}\n", 2), &["text: \\u{1}"]);
    says(
        &columns("name,colour\na,red\n", 1),
        &["line 1", "heading \"colour\" is not known", "penalty_weight"],
    );
    says(
        &columns("penalty_weight\n1\n-1\n", 2),
        &["line 3", "penalty_weight is negative", "text: -1"],
    );
    says(
        &columns("penalty_weight\ninf\n", 1),
        &["line 2", "penalty_weight is not a finite number"],
    );
    says(&columns("name,fixed\na,x\n", 1), &["line 2", "fixed is not a finite number"]);
    for bound in ["lower", "upper"] {
        let message = columns(&format!("name,{bound}\na,\nb,0\n"), 2);
        says(&message, &["line 3", "bounds are not available in this version", bound, "text: 0"]);
    }
    let outcome = table::read_rows(&desk.file(b"id\n\xff\xfe\n"), 1);
    says(&complaint(outcome), &["line 2", "not UTF-8"]);
    says(&complaint(table::read_rows(&desk.file(b"\x1f\x8b\x08"), 1)), &["format is not known"]);
    says(&complaint(table::read_rows(&desk.file("\u{feff}\n"), 1)), &["the table is empty"]);
}

#[test]
fn whole_texts() {
    let desk = Desk::new();
    assert_eq!(read_text(&desk.file("\u{feff}a = 1\n"), 100).unwrap(), "a = 1\n");
    let outcome = read_text(&desk.file(b"a\nb \xff\nc"), 100);
    says(&complaint(outcome), &["line 2", "not UTF-8", "text: b \u{fffd}"]);
    says(&complaint(read_text(&desk.file("12345"), 4)), &["5 bytes long, more than 4"]);
}
