//! What a file was, so that a record can say which one was used.

use std::fs::File;
use std::path::Path;

use super::FileError;

/// Length and content of a file.
#[derive(Debug, Clone, PartialEq, Eq, serde::Serialize, serde::Deserialize)]
pub struct Identity {
    /// Length of the file, compressed if it is.
    pub bytes: u64,
    /// BLAKE3 of the content, 64 hexadecimal digits.
    pub checksum: String,
}

/// Reads a whole file and takes its BLAKE3 checksum, in constant memory.
///
/// # Errors
/// The file cannot be read.
pub fn identity(path: &Path) -> Result<Identity, FileError> {
    let file = File::open(path).map_err(FileError::io(path, "open the file"))?;
    let mut hasher = blake3::Hasher::new();
    hasher.update_reader(file).map_err(FileError::io(path, "read the file"))?;
    Ok(Identity { bytes: hasher.count(), checksum: hasher.finalize().to_hex().to_string() })
}

#[cfg(test)]
mod tests {
    use super::*;

    #[test]
    fn length_and_checksum_of_known_content() {
        let file = tempfile::NamedTempFile::new().unwrap();
        std::fs::write(file.path(), b"abc").unwrap();
        let found = identity(file.path()).unwrap();
        // BLAKE3 of "abc": the test vector printed in the BLAKE3 team's own documentation of b3sum.
        let known = "6437b3ac38465133ffb63b75273a8db548c558465d79db03fd359c6cd5bd9d85";
        assert_eq!((found.bytes, found.checksum.as_str()), (3, known));
        let missing = identity(Path::new("/nowhere/at/all")).unwrap_err();
        assert!(!missing.is_user_fault());
    }
}
