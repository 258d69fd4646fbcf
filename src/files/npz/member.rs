//! One .npy member of an archive, as a stream of checked numbers.

use std::collections::BTreeSet;
use std::io::{self, Read};

use zip::read::ZipFile;
use zip::{CompressionMethod, result::ZipError};

use super::super::dtype::Dtype;
use super::super::npy::{Descr, HEAD_BYTES_MAX, Header};
use super::Archive;
use crate::base::Complaint;
use crate::base::complaint::quote;

const AGAIN: &str = "copy the file again, or save the matrix again with scipy.sparse.save_npz";

pub fn damaged(error: &ZipError) -> Complaint {
    Complaint::new(format!("the archive is damaged: {error}"), AGAIN)
}

/// Refuses an archive that lists a name twice: readers differ in which one they take.
///
/// The directory is walked here because the archive's own index keeps one of them silently.
pub fn check_names(bytes: &[u8], archive: &Archive<'_>) -> Result<(), Complaint> {
    let mut rest = usize::try_from(archive.central_directory_start())
        .ok()
        .and_then(|start| bytes.get(start..))
        .unwrap_or_default();
    let mut names = BTreeSet::new();
    while let Some(head) = rest.first_chunk::<46>().filter(|head| head.starts_with(b"PK\x01\x02")) {
        let length = |at: usize| usize::from(u16::from_le_bytes([head[at], head[at + 1]]));
        let name = rest.get(46..46 + length(28)).unwrap_or_default();
        if !names.insert(name) {
            return Err(Complaint::new("the archive lists a member twice", AGAIN).quoting(name));
        }
        rest = rest.get(46 + length(28) + length(30) + length(32)..).unwrap_or_default();
    }
    if names.len() != archive.len() {
        return Err(Complaint::new("the archive's directory is damaged", AGAIN));
    }
    Ok(())
}

pub struct Member<'m, 'a> {
    name: &'static str,
    file: ZipFile<'m, io::Cursor<&'a [u8]>>,
    header: Header,
    /// Bytes read beyond the header, not yet used.
    ahead: Vec<u8>,
    raw: Vec<u8>,
}

impl<'m, 'a> Member<'m, 'a> {
    /// Opens a member and reads its header.
    pub fn open(archive: &'m mut Archive<'a>, name: &'static str) -> Result<Self, Complaint> {
        let refuse = |cause: String| Complaint::new(cause, AGAIN);
        let mut file = archive.by_name(name).map_err(|error| match error {
            ZipError::FileNotFound => refuse(format!("the archive lacks the member {name}")),
            error => damaged(&error),
        })?;
        if !matches!(file.compression(), CompressionMethod::Stored | CompressionMethod::Deflated) {
            return Err(refuse(format!("{name} is compressed in a way that numpy does not use")));
        }
        let mut head = Vec::new();
        (&mut file).take(HEAD_BYTES_MAX as u64).read_to_end(&mut head).map_err(fails(name))?;
        let header = Header::parse(&head).map_err(within(name))?;
        let ahead = head.split_off(header.length);
        let member = Self { name, file, header, ahead, raw: Vec::new() };
        member.check_size()?;
        Ok(member)
    }

    /// Opens a member of `count` elements in one dimension.
    pub fn sized(
        archive: &'m mut Archive<'a>,
        name: &'static str,
        count: u64,
    ) -> Result<Self, Complaint> {
        let member = Self::open(archive, name)?;
        let held = member.extent()?;
        if held != count {
            return Err(Complaint::new(
                format!("{name} holds {held} numbers, but {count} are needed"),
                AGAIN,
            ));
        }
        Ok(member)
    }

    /// The size in the directory must be that of the declared shape.
    fn check_size(&self) -> Result<(), Complaint> {
        let Ok(dtype) = self.header.dtype() else { return Ok(()) };
        let elements = self.header.count(dtype).map_err(within(self.name))?;
        let stated = (elements * dtype.bytes as u64).checked_add(self.header.length as u64);
        if stated != Some(self.file.size()) {
            return Err(Complaint::new(
                format!(
                    "{} declares the shape {}, but its length is {} bytes",
                    self.name,
                    self.header.shape_text(),
                    self.file.size()
                ),
                AGAIN,
            ));
        }
        Ok(())
    }

    /// Number of elements of a one-dimensional member.
    pub fn extent(&self) -> Result<u64, Complaint> {
        match self.header.shape.as_slice() {
            [extent] => Ok(*extent),
            _ => Err(Complaint::new(
                format!("{} has the shape {}", self.name, self.header.shape_text()),
                AGAIN,
            )),
        }
    }

    pub fn is_boolean(&self) -> bool {
        self.header.dtype().is_ok_and(Dtype::is_boolean)
    }

    fn dtype(&self) -> Result<Dtype, Complaint> {
        self.header.dtype().map_err(within(self.name))
    }

    /// The next `count` elements as they are stored.
    fn next(&mut self, count: u64, item_bytes: usize) -> Result<(), Complaint> {
        let bytes = count as usize * item_bytes;
        let ready = self.ahead.len().min(bytes);
        self.raw.clear();
        self.raw.extend(self.ahead.drain(..ready));
        self.raw.resize(bytes, 0);
        self.file.read_exact(&mut self.raw[ready..]).map_err(fails(self.name))
    }

    /// The next `count` numbers.
    pub fn values(&mut self, count: u64, out: &mut Vec<f64>) -> Result<(), Complaint> {
        let dtype = self.dtype()?;
        self.next(count, dtype.bytes)?;
        out.clear();
        dtype.decode(&self.raw, out);
        Ok(())
    }

    /// The next `count` whole numbers, each at least 0 and less than the bound; `first` is the
    /// number of the first.
    pub fn indices<I: TryFrom<i128>>(
        &mut self,
        first: u64,
        count: u64,
        (what, bound): (&str, u64),
        out: &mut Vec<I>,
    ) -> Result<(), Complaint> {
        let dtype = self.dtype()?;
        if !dtype.is_whole() {
            return Err(Complaint::new(format!("{} does not hold integers", self.name), AGAIN));
        }
        self.next(count, dtype.bytes)?;
        out.clear();
        let mut wrong = None;
        dtype.decode_whole(&self.raw, |value| match I::try_from(value) {
            Ok(index) if (0..i128::from(bound)).contains(&value) => out.push(index),
            _ => {
                wrong.get_or_insert((first + out.len() as u64, value));
            }
        });
        let Some((place, value)) = wrong else { return Ok(()) };
        Err(Complaint::new(
            format!(
                "element {place} of {} is {what} {value}, but {what}s run from 0 to {}",
                self.name,
                i128::from(bound) - 1
            ),
            AGAIN,
        ))
    }

    /// Exactly `count` sizes.
    pub fn small_whole(mut self, count: u64) -> Result<Vec<u64>, Complaint> {
        if self.extent()? != count {
            return Err(Complaint::new(
                format!("{} holds {} numbers, but {count} are needed", self.name, self.extent()?),
                AGAIN,
            ));
        }
        let mut list = Vec::new();
        self.indices(0, count, ("size", u64::MAX), &mut list)?;
        self.ended()?;
        Ok(list)
    }

    /// The text of a single string, as bytes or as 32-bit characters.
    pub fn text(mut self) -> Result<String, Complaint> {
        let refuse =
            || Complaint::new(format!("{} does not hold one short word", self.name), AGAIN);
        let Descr::Plain(descr) = &self.header.descr else { return Err(refuse()) };
        let big = descr.starts_with('>');
        let kind = descr.trim_start_matches(['<', '>', '|', '=']);
        let letters: usize =
            kind.get(1..).and_then(|n| n.parse().ok()).filter(|&n| n <= 64).ok_or_else(refuse)?;
        let wide = kind.starts_with('U');
        if !(wide || kind.starts_with('S')) || !self.header.shape.iter().all(|&extent| extent == 1)
        {
            return Err(refuse());
        }
        self.next(letters as u64, if wide { 4 } else { 1 })?;
        let code = |c: &[u8; 4]| if big { u32::from_be_bytes(*c) } else { u32::from_le_bytes(*c) };
        let text: String = if wide {
            let (letters, _) = self.raw.as_chunks::<4>();
            letters.iter().map(|c| char::from_u32(code(c)).unwrap_or('\u{fffd}')).collect()
        } else {
            quote(&self.raw[..self.raw.iter().position(|&b| b == 0).unwrap_or(letters)])
        };
        self.ended()?;
        Ok(text.trim_end_matches('\0').to_string())
    }

    /// Nothing may follow; the archive's checksum is compared at this point.
    pub fn ended(mut self) -> Result<(), Complaint> {
        let more = self.file.read(&mut [0]).map_err(fails(self.name))?;
        if more > 0 || !self.ahead.is_empty() {
            return Err(Complaint::new(
                format!("{} holds more than its shape {}", self.name, self.header.shape_text()),
                AGAIN,
            ));
        }
        Ok(())
    }
}

fn within(name: &'static str) -> impl Fn(Complaint) -> Complaint {
    move |mut complaint| {
        complaint.cause = format!("in {name}: {}", complaint.cause);
        complaint
    }
}

fn fails(name: &'static str) -> impl Fn(io::Error) -> Complaint {
    move |error| {
        let cause = match error.kind() {
            io::ErrorKind::UnexpectedEof => format!("{name} ends early"),
            _ => format!("{name} is damaged: {error}"),
        };
        Complaint::new(cause, AGAIN)
    }
}
