//! Compressed rows as SciPy reads them: five .npy members, stored, not deflated.

use std::error::Error;
use std::fs::File;
use std::io::{BufWriter, Write};
use std::path::Path;

use ellbow::operator::CompressedRows;
use zip::write::SimpleFileOptions;
use zip::{CompressionMethod, ZipWriter};

/// Bytes gathered before they are handed to the archive, so that no second copy of an array is
/// ever held.
const BYTES_PER_WRITE: usize = 1 << 20;

/// # Errors
/// More than 2³¹ − 1 entries or columns, and whatever the disk says.
pub fn write(path: &Path, matrix: &CompressedRows) -> Result<(), Box<dyn Error>> {
    // SciPy's indices are signed.
    i32::try_from(matrix.entries().max(matrix.columns()))?;
    let mut archive = Archive(ZipWriter::new(BufWriter::new(File::create(path)?)));
    archive.member("format", "|S3", "()", b"csr".iter().map(|&byte| [byte]))?;
    let shape = [matrix.rows(), matrix.columns()].map(|size| (size as i64).to_le_bytes());
    archive.member("shape", "<i8", "(2,)", shape.into_iter())?;
    let pointers = matrix.pointers().iter().map(|&pointer| (pointer as i32).to_le_bytes());
    archive.member("indptr", "<i4", &format!("({},)", pointers.len()), pointers)?;
    let length = format!("({},)", matrix.entries());
    let columns = matrix.indices().iter().map(|&column| (column as i32).to_le_bytes());
    archive.member("indices", "<i4", &length, columns)?;
    let values = (0..matrix.rows()).flat_map(|i| matrix.row(i).entries()).map(|entry| entry.1);
    archive.member("data", "<f8", &length, values.map(f64::to_le_bytes))?;
    archive.0.finish()?.flush()?;
    Ok(())
}

struct Archive(ZipWriter<BufWriter<File>>);

impl Archive {
    fn member<const N: usize>(
        &mut self,
        name: &str,
        kind: &str,
        shape: &str,
        numbers: impl Iterator<Item = [u8; N]>,
    ) -> Result<(), Box<dyn Error>> {
        // Members above 4 GiB need the long form; it does no harm to the others.
        let options = SimpleFileOptions::default()
            .compression_method(CompressionMethod::Stored)
            .large_file(true);
        self.0.start_file(format!("{name}.npy"), options)?;
        self.0.write_all(&header(kind, shape))?;
        let mut bytes = Vec::with_capacity(BYTES_PER_WRITE + N);
        for number in numbers {
            bytes.extend(number);
            if bytes.len() >= BYTES_PER_WRITE {
                self.0.write_all(&bytes)?;
                bytes.clear();
            }
        }
        self.0.write_all(&bytes)?;
        Ok(())
    }
}

/// A version 1.0 header, padded so that the numbers start at a multiple of 64 bytes.
fn header(kind: &str, shape: &str) -> Vec<u8> {
    let text = format!("{{'descr': '{kind}', 'fortran_order': False, 'shape': {shape}, }}");
    let length = (10 + text.len() + 1).next_multiple_of(64) - 10;
    let mut bytes = b"\x93NUMPY\x01\x00".to_vec();
    bytes.extend((length as u16).to_le_bytes());
    bytes.extend(text.bytes());
    bytes.resize(10 + length - 1, b' ');
    bytes.push(b'\n');
    bytes
}
