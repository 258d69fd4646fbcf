//! The header of .npy arrays, versions 1 to 3.

use super::dtype::Dtype;
use super::source::NPY_MAGIC;
use crate::base::Complaint;
use crate::base::complaint::quote;

/// The longest header that is read.
pub const HEADER_BYTES_MAX: usize = 10_000;

/// Bytes before the header text: magic, version, length.
const PREFIX_BYTES_MAX: usize = 12;

/// Bytes that hold any acceptable header.
pub const HEAD_BYTES_MAX: usize = PREFIX_BYTES_MAX + HEADER_BYTES_MAX;

/// What stands before the elements.
#[derive(Debug, Clone, PartialEq, Eq)]
pub struct Header {
    pub descr: Descr,
    /// Columns are contiguous.
    pub fortran: bool,
    pub shape: Vec<u64>,
    /// Where the elements begin.
    pub length: usize,
}

#[derive(Debug, Clone, PartialEq, Eq)]
pub enum Descr {
    Plain(String),
    Structured,
}

impl Header {
    /// Reads the header at the start of `bytes`, which may end anywhere after it.
    ///
    /// # Errors
    /// Not an .npy header, one of an unknown version, or one that is too long or makes no sense.
    pub fn parse(bytes: &[u8]) -> Result<Self, Complaint> {
        let cut = || broken("the file ends within the header");
        let rest =
            bytes.strip_prefix(NPY_MAGIC).ok_or_else(|| broken("this is not an .npy array"))?;
        let &[major, _minor] = rest.first_chunk().ok_or_else(cut)?;
        let (length, start) = match major {
            1 => {
                let length = rest.get(2..4).ok_or_else(cut)?;
                (usize::from(u16::from_le_bytes([length[0], length[1]])), 10)
            }
            2 | 3 => {
                let length = rest.get(2..6).ok_or_else(cut)?;
                (u32::from_le_bytes([length[0], length[1], length[2], length[3]]) as usize, 12)
            }
            _ => {
                return Err(Complaint::new(
                    format!("version {major} of the .npy format is not known"),
                    "save the array again with numpy.save",
                ));
            }
        };
        if length > HEADER_BYTES_MAX {
            return Err(broken(&format!(
                "the header is {length} bytes long, more than {HEADER_BYTES_MAX}"
            )));
        }
        let text = bytes.get(start..start + length).ok_or_else(cut)?;
        let text = std::str::from_utf8(text)
            .map_err(|_| broken("the header is not text").quoting(text))?;
        let mut header = Dictionary::read(text).map_err(|fault| fault.quoting(text))?;
        header.length = start + length;
        Ok(header)
    }

    /// The element type.
    ///
    /// # Errors
    /// Structured arrays, and types that are not plain real numbers.
    pub fn dtype(&self) -> Result<Dtype, Complaint> {
        match &self.descr {
            Descr::Plain(text) => Dtype::parse(text),
            Descr::Structured => Err(Complaint::new(
                "the array is structured: its elements are records",
                "save the one field that is meant, for example numpy.save(file, array['value'])",
            )),
        }
    }

    /// Number of elements.
    ///
    /// # Errors
    /// More than 2⁶⁴ bytes.
    pub fn count(&self, dtype: Dtype) -> Result<u64, Complaint> {
        let count = self.shape.iter().try_fold(1u64, |count, &extent| count.checked_mul(extent));
        count
            .filter(|count| count.checked_mul(dtype.bytes as u64).is_some())
            .ok_or_else(|| broken(&format!("the shape {} is beyond all memory", self.shape_text())))
    }

    /// Number of elements, once it is clear that the file holds exactly them.
    ///
    /// # Errors
    /// The file's length is not that of header and elements.
    pub fn count_in(&self, dtype: Dtype, file_bytes: usize) -> Result<usize, Complaint> {
        let count = self.count(dtype)?;
        let (stated, held) = (count * dtype.bytes as u64, (file_bytes - self.length) as u64);
        if stated != held {
            return Err(Complaint::new(
                format!(
                    "the shape {} needs {stated} bytes of {} bytes each, but the file holds {held}",
                    self.shape_text(),
                    dtype.bytes
                ),
                "copy the whole file again, or save the array again",
            ));
        }
        Ok(count as usize)
    }

    /// e.g. `(3, 4)`.
    pub fn shape_text(&self) -> String {
        let extents: Vec<String> = self.shape.iter().map(u64::to_string).collect();
        format!("({})", extents.join(", "))
    }
}

fn broken(cause: &str) -> Complaint {
    Complaint::new(cause, "save the array again with numpy.save")
}

/// The header text: a Python dictionary of three keys. Only what numpy writes there is understood,
/// so nothing nests and nothing recurs.
struct Dictionary<'a> {
    rest: &'a str,
    descr: Option<Descr>,
    fortran: Option<bool>,
    shape: Option<Vec<u64>>,
}

impl<'a> Dictionary<'a> {
    fn read(text: &'a str) -> Result<Header, Complaint> {
        let mut reader = Self { rest: text.trim(), descr: None, fortran: None, shape: None };
        reader.expect('{')?;
        while !reader.skip('}') {
            reader.pair()?;
            if !reader.skip(',') && !reader.rest.starts_with('}') {
                return Err(broken("the header is not a dictionary that numpy would write"));
            }
        }
        match reader {
            Self { rest: "", descr: Some(descr), fortran: Some(fortran), shape: Some(shape) } => {
                Ok(Header { descr, fortran, shape, length: 0 })
            }
            _ => Err(broken("the header does not state descr, fortran_order and shape, once each")),
        }
    }

    fn pair(&mut self) -> Result<(), Complaint> {
        let key = self.string()?;
        self.expect(':')?;
        let repeated = match key {
            "descr" => {
                let descr = self.descr()?;
                self.descr.replace(descr).is_some()
            }
            "fortran_order" => {
                let value = self.boolean()?;
                self.fortran.replace(value).is_some()
            }
            "shape" => {
                let shape = self.shape()?;
                self.shape.replace(shape).is_some()
            }
            _ => {
                return Err(broken(&format!(
                    "the header has the unknown key {}",
                    quote(key.as_bytes())
                )));
            }
        };
        if repeated {
            return Err(broken(&format!("the header states {key} twice")));
        }
        Ok(())
    }

    fn skip(&mut self, wanted: char) -> bool {
        let Some(rest) = self.rest.strip_prefix(wanted) else { return false };
        self.rest = rest.trim_start();
        true
    }

    fn expect(&mut self, wanted: char) -> Result<(), Complaint> {
        if self.skip(wanted) {
            Ok(())
        } else {
            Err(broken(&format!("the header lacks a {wanted}")))
        }
    }

    fn string(&mut self) -> Result<&'a str, Complaint> {
        let quoted =
            |mark: char| self.rest.strip_prefix(mark).and_then(|rest| rest.split_once(mark));
        let (text, rest) = quoted('\'')
            .or_else(|| quoted('"'))
            .ok_or_else(|| broken("the header lacks a quoted word"))?;
        self.rest = rest.trim_start();
        Ok(text)
    }

    fn boolean(&mut self) -> Result<bool, Complaint> {
        for (word, value) in [("True", true), ("False", false)] {
            if let Some(rest) = self.rest.strip_prefix(word) {
                self.rest = rest.trim_start();
                return Ok(value);
            }
        }
        Err(broken("fortran_order is neither True nor False"))
    }

    fn descr(&mut self) -> Result<Descr, Complaint> {
        if !self.rest.starts_with('[') {
            return self.string().map(|text| Descr::Plain(text.to_string()));
        }
        // A structured type is refused anyway: skip to its closing bracket.
        let mut depth = 0usize;
        for (place, c) in self.rest.char_indices() {
            depth = match c {
                '[' => depth + 1,
                ']' => depth - 1,
                _ => depth,
            };
            if depth == 0 {
                self.rest = self.rest[place + 1..].trim_start();
                return Ok(Descr::Structured);
            }
        }
        Err(broken("the header lacks a ]"))
    }

    fn shape(&mut self) -> Result<Vec<u64>, Complaint> {
        self.expect('(')?;
        let mut shape = Vec::new();
        while !self.skip(')') {
            let digits = self.rest.bytes().take_while(u8::is_ascii_digit).count();
            let extent = self.rest[..digits].parse();
            shape.push(extent.map_err(|_| broken("the shape is not a tuple of whole numbers"))?);
            // Python 2 wrote long integers with an L.
            self.rest = self.rest[digits..].trim_start_matches('L').trim_start();
            if !self.skip(',') && !self.rest.starts_with(')') {
                return Err(broken("the shape is not a tuple of whole numbers"));
            }
        }
        Ok(shape)
    }
}

#[cfg(test)]
mod tests {
    use super::*;

    fn head(major: u8, text: &str) -> Vec<u8> {
        let mut bytes = NPY_MAGIC.to_vec();
        bytes.extend([major, 0]);
        match major {
            1 => bytes.extend((text.len() as u16).to_le_bytes()),
            _ => bytes.extend((text.len() as u32).to_le_bytes()),
        }
        bytes.extend(text.as_bytes());
        bytes
    }

    const GOOD: &str = "{'descr': '<f8', 'fortran_order': False, 'shape': (3, 4), }   \n";

    #[test]
    fn versions_and_forms_that_numpy_writes() {
        for major in 1..=3 {
            let header = Header::parse(&head(major, GOOD)).unwrap();
            assert_eq!((header.shape_text(), header.fortran), ("(3, 4)".to_string(), false));
            assert_eq!(header.length, head(major, GOOD).len());
        }
        let shape = |text: &str| {
            let text = format!("{{'descr': '<f8', 'fortran_order': True, 'shape': {text}}}");
            Header::parse(&head(1, &text)).map(|header| header.shape)
        };
        assert!(shape("()").unwrap().is_empty());
        assert_eq!(shape("(5,)").unwrap(), [5]);
        assert_eq!(shape("(5L, 2L)").unwrap(), [5, 2]);
        for wrong in ["(-1,)", "(3 4)", "5", "(1,,2)", "(99999999999999999999,)", "(1"] {
            assert!(shape(wrong).is_err(), "{wrong}");
        }
    }

    #[test]
    fn headers_that_make_no_sense_are_refused() {
        for (text, words) in [
            ("", "lacks a {"),
            ("{}", "does not state"),
            ("{'descr': '<f8', 'fortran_order': False}", "does not state"),
            ("{'descr': '<f8', 'descr': '<f8'}", "twice"),
            ("{'a': 1}", "unknown key"),
            ("{'descr': '<f8', 'fortran_order': 0, 'shape': ()}", "neither True nor False"),
            ("{'descr': [[[[", "lacks a ]"),
        ] {
            let cause = Header::parse(&head(1, text)).unwrap_err().cause;
            assert!(cause.contains(words), "{text}: {cause}");
        }
        let deep = format!("{{'descr': {}", "[".repeat(9000));
        assert!(Header::parse(&head(1, &deep)).is_err());
        let long = GOOD.to_string() + &" ".repeat(HEADER_BYTES_MAX);
        assert!(Header::parse(&head(2, &long)).unwrap_err().cause.contains("more than 10000"));
        let whole = head(2, GOOD);
        for cut in 0..whole.len() {
            assert!(Header::parse(&whole[..cut]).is_err());
        }
        assert!(Header::parse(&head(4, GOOD)).unwrap_err().cause.contains("version 4"));
        let records =
            "{'descr': [('a', '<f8'), ('b', '<i4')], 'fortran_order': False, 'shape': (3,)}";
        let header = Header::parse(&head(1, records)).unwrap();
        assert!(header.dtype().unwrap_err().cause.contains("structured"));
    }
}
