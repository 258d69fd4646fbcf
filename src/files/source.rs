//! A file as bytes, and text as batches of whole lines.

use std::fs::File;
use std::io::{self, Read};
use std::ops::ControlFlow;
use std::path::{Path, PathBuf};

use flate2::bufread::MultiGzDecoder;
use memmap2::Mmap;

use super::FileError;
use crate::base::Complaint;

/// Text is worked through in batches of this size, so that memory is bounded whatever the file.
pub const BATCH_BYTES: usize = 4 << 20;

/// Of compressed text two batches exist at once, one being filled beside the one being read, so
/// they are smaller; still longer than any line may be.
const UNPACKED_BYTES: usize = 2 << 20;

/// Each batch is cut at line ends into pieces of this size, the unit of parallel work.
const PIECE_BYTES: usize = 256 << 10;

/// An input file, mapped into memory.
pub struct Source {
    pub path: PathBuf,
    map: Mmap,
}

/// What the first bytes say of a file.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Kind {
    Gzip,
    Zip,
    Npy,
    /// Compressed in a way that is not read: its name, and the command that undoes it.
    Foreign(&'static str, &'static str),
    Other,
}

pub const NPY_MAGIC: &[u8] = b"\x93NUMPY";

/// What the first bytes of a file, or of what was compressed in it, say.
pub fn kind_of(bytes: &[u8]) -> Kind {
    let table: [(&[u8], Kind); 7] = [
        (b"\x1f\x8b", Kind::Gzip),
        (b"PK\x03\x04", Kind::Zip),
        (b"PK\x05\x06", Kind::Zip),
        (NPY_MAGIC, Kind::Npy),
        (b"BZh", Kind::Foreign("bzip2", "bunzip2")),
        (b"\xfd7zXZ\0", Kind::Foreign("xz", "unxz")),
        (b"\x28\xb5\x2f\xfd", Kind::Foreign("zstd", "unzstd")),
    ];
    table.iter().find(|(magic, _)| bytes.starts_with(magic)).map_or(Kind::Other, |&(_, kind)| kind)
}

impl Source {
    /// Maps a regular file that is not empty.
    ///
    /// # Errors
    /// The file cannot be opened; it is a folder or a pipe; it is empty.
    pub fn open(path: &Path) -> Result<Self, FileError> {
        let file = File::open(path).map_err(FileError::io(path, "open the file"))?;
        let about = file.metadata().map_err(FileError::io(path, "look at the file"))?;
        if !about.is_file() {
            let what = if about.is_dir() { "a folder" } else { "a pipe or a device" };
            return Err(FileError::bad(path)(Complaint::new(
                format!("this is {what}, not a file"),
                "give an ordinary file; input is read more than once",
            )));
        }
        if about.len() == 0 {
            return Err(FileError::bad(path)(Complaint::new(
                "the file is empty",
                "check how it was written or copied",
            )));
        }
        // Safety: the map is only ever read as bytes, and every use checks what it finds, so a file
        // that changes meanwhile yields an error or other numbers, not undefined indices. A file that
        // is cut short meanwhile ends the process (SIGBUS): the price of not copying it.
        #[allow(unsafe_code)]
        let map = unsafe { Mmap::map(&file) }.map_err(FileError::io(path, "map the file"))?;
        Ok(Self { path: path.to_path_buf(), map })
    }

    pub fn bytes(&self) -> &[u8] {
        &self.map
    }

    pub fn len(&self) -> u64 {
        self.map.len() as u64
    }

    /// The file as text, decompressed if it is gzip.
    pub fn text(&self) -> Text<'_> {
        Text::new(self.bytes())
    }

    /// A complaint that names this file.
    pub fn name(&self, complaint: Complaint) -> Complaint {
        complaint.in_file(&self.path)
    }

    /// A complaint about this file.
    pub fn bad(&self, complaint: Complaint) -> FileError {
        FileError::bad(&self.path)(complaint)
    }

    /// The error for a file whose kind nobody here reads.
    pub fn unreadable(&self, kind: Kind, accepted: &str) -> FileError {
        self.bad(match kind {
            Kind::Foreign(name, undo) => Complaint::new(
                format!("the file is compressed with {name}, which is not read"),
                format!("decompress it with {undo}, or compress it with gzip instead"),
            ),
            _ => {
                let head = self.bytes().split(|&b| b == b'\n').next().unwrap_or_default();
                Complaint::new("the format is not known", format!("give {accepted}"))
                    .at_line(1)
                    .quoting(head.trim_ascii_end())
            }
        })
    }
}

/// Text in batches that end at line ends.
pub struct Text<'a> {
    raw: &'a [u8],
    /// Of mapped text: where the next batch begins.
    at: usize,
    unpacked: Option<Unpacked<'a>>,
}

/// Text that is being decompressed.
struct Unpacked<'a> {
    decoder: MultiGzDecoder<&'a [u8]>,
    buffer: Vec<u8>,
    /// Bytes of the buffer already consumed.
    used: usize,
    ended: bool,
    /// A buffer to be the next.
    spare: Vec<u8>,
}

impl<'a> Text<'a> {
    fn new(raw: &'a [u8]) -> Self {
        let unpacked = (kind_of(raw) == Kind::Gzip).then(|| Unpacked {
            decoder: MultiGzDecoder::new(raw),
            buffer: Vec::new(),
            used: 0,
            ended: false,
            spare: Vec::new(),
        });
        Self { raw, at: 0, unpacked }
    }

    pub fn is_packed(&self) -> bool {
        self.unpacked.is_some()
    }

    /// The next whole lines, at most [`BATCH_BYTES`]; the last line may lack its end, and a longer
    /// line comes in parts, each longer than any line may be. `None` at the end of the text.
    /// What is not consumed comes again.
    ///
    /// # Errors
    /// The compressed stream is damaged or ends early.
    pub fn batch(&mut self) -> Result<Option<&[u8]>, Complaint> {
        let (rest, ended) = match &mut self.unpacked {
            None => {
                let rest = &self.raw[self.at..];
                (&rest[..rest.len().min(BATCH_BYTES)], rest.len() <= BATCH_BYTES)
            }
            Some(unpacked) => {
                unpacked.fill().map_err(damaged)?;
                (&unpacked.buffer[..], unpacked.ended)
            }
        };
        let end = match rest.iter().rposition(|&b| b == b'\n') {
            Some(place) if !ended => place + 1,
            _ => rest.len(),
        };
        Ok((end > 0).then_some(&rest[..end]))
    }

    /// Marks bytes of the batch as done with.
    pub fn consume(&mut self, bytes: usize) {
        match &mut self.unpacked {
            None => self.at += bytes,
            Some(unpacked) => unpacked.used += bytes,
        }
    }

    /// Hands all that is left to `work`, batch by batch, until it breaks off or complains.
    ///
    /// Compressed text is inflated beside the work: while one batch is worked on, another thread of
    /// the pool, if it has one to spare, fills the next. Nothing waits for a thread, so this works
    /// with one as well; two buffers are all it takes.
    ///
    /// # Errors
    /// Those of `work` and of the compressed stream, whichever comes first in the text.
    pub fn each(
        mut self,
        mut work: impl FnMut(&[u8]) -> Result<ControlFlow<()>, Complaint> + Send,
    ) -> Result<ControlFlow<()>, Complaint> {
        while let Some(length) = self.batch()?.map(<[u8]>::len) {
            let flow = if let Some(unpacked) = &mut self.unpacked {
                let batch = unpacked.hand_over(length);
                let (flow, filled) = rayon::join(|| work(&batch), || unpacked.fill());
                unpacked.spare = batch;
                let flow = flow?;
                if flow.is_continue() {
                    filled.map_err(damaged)?;
                }
                flow
            } else {
                let flow = work(&self.raw[self.at..self.at + length])?;
                self.consume(length);
                flow
            };
            if flow.is_break() {
                return Ok(flow);
            }
        }
        Ok(ControlFlow::Continue(()))
    }

    /// Length of the whole text, by decompressing it once where needed.
    ///
    /// # Errors
    /// The compressed stream is damaged or ends early.
    pub fn measure(raw: &[u8]) -> Result<u64, Complaint> {
        if kind_of(raw) != Kind::Gzip {
            return Ok(raw.len() as u64);
        }
        io::copy(&mut MultiGzDecoder::new(raw), &mut io::sink()).map_err(damaged)
    }
}

impl Unpacked<'_> {
    /// Gives away the first `length` bytes that are not consumed; the rest stays to be gone on with.
    fn hand_over(&mut self, length: usize) -> Vec<u8> {
        let mut batch = std::mem::replace(&mut self.buffer, std::mem::take(&mut self.spare));
        batch.drain(..self.used);
        self.used = 0;
        self.buffer.clear();
        self.buffer.reserve_exact(UNPACKED_BYTES);
        self.buffer.extend_from_slice(&batch[length..]);
        batch.truncate(length);
        batch
    }

    /// Drops what was consumed and fills the buffer up.
    fn fill(&mut self) -> io::Result<()> {
        self.buffer.drain(..self.used);
        self.used = 0;
        if self.buffer.capacity() == 0 {
            self.buffer.reserve_exact(UNPACKED_BYTES);
        }
        let wanted = UNPACKED_BYTES - self.buffer.len();
        if !self.ended && wanted > 0 {
            let got = (&mut self.decoder).take(wanted as u64).read_to_end(&mut self.buffer)?;
            self.ended = got < wanted;
        }
        Ok(())
    }
}

fn damaged(error: io::Error) -> Complaint {
    let cause = match error.kind() {
        io::ErrorKind::UnexpectedEof => "the gzip stream ends early: the file is cut short".into(),
        _ => format!("the gzip stream is damaged: {error}"),
    };
    Complaint::new(cause, "copy or compress the file again; gzip -t checks it")
}

/// Cuts a batch at line ends into pieces.
pub fn pieces(batch: &[u8]) -> Vec<&[u8]> {
    let mut list = Vec::new();
    let mut rest = batch;
    while !rest.is_empty() {
        let cut = match rest.get(PIECE_BYTES..) {
            None => rest.len(),
            Some(tail) => tail
                .iter()
                .position(|&b| b == b'\n')
                .map_or(rest.len(), |place| PIECE_BYTES + place + 1),
        };
        let (piece, tail) = rest.split_at(cut);
        list.push(piece);
        rest = tail;
    }
    list
}

/// The line at the start of `bytes`, without its end, and the length with it.
pub fn first_line(bytes: &[u8]) -> (&[u8], usize) {
    match bytes.iter().position(|&b| b == b'\n') {
        Some(place) => (&bytes[..place], place + 1),
        None => (bytes, bytes.len()),
    }
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::io::Write;

    fn gz(text: &[u8]) -> Vec<u8> {
        let mut out = flate2::write::GzEncoder::new(Vec::new(), flate2::Compression::fast());
        out.write_all(text).unwrap();
        out.finish().unwrap()
    }

    /// Every line of a text, through batches and pieces.
    fn lines(raw: &[u8]) -> Vec<u8> {
        let mut text = Text::new(raw);
        let mut all = Vec::new();
        while let Some(batch) = text.batch().unwrap() {
            let parts = pieces(batch);
            assert!(parts[..parts.len() - 1].iter().all(|part| part.ends_with(b"\n")));
            all.extend(parts.concat());
            let length = batch.len();
            text.consume(length);
        }
        all
    }

    #[test]
    fn batches_and_pieces_hold_every_byte_once() {
        let long: Vec<u8> =
            (0..900_000).flat_map(|k: u32| format!("{k} {}\n", k * 7).into_bytes()).collect();
        assert!(long.len() > 3 * UNPACKED_BYTES);
        for text in [&long[..], &long[..long.len() - 1], b"one", b"a\n\nb\n"] {
            assert!(lines(text) == text);
            assert!(lines(&gz(text)) == text);
            let (head, tail) = text.split_at(text.len() / 3);
            assert!(lines(&[gz(head), gz(tail)].concat()) == text);
        }
    }

    #[test]
    fn a_stream_cut_short_is_an_error_wherever_it_is_cut() {
        let whole = gz(b"%%MatrixMarket matrix\n1 2 3\n");
        for cut in 2..whole.len() {
            let mut text = Text::new(&whole[..cut]);
            assert!(text.batch().unwrap_err().cause.contains("ends early"), "cut at {cut}");
        }
    }
}
