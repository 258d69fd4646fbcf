//! Writing: every file appears whole or not at all.
//!
//! A file is written under a temporary name in the same folder, synced, renamed over its place, and
//! the folder is synced. Each of these calls, and each piece of content, passes one gate, so that a
//! test can make any of them fail.

use std::fs::{self, File, OpenOptions};
use std::io::{self, BufWriter, Read, Seek, SeekFrom, Write};
use std::path::{Path, PathBuf};
use std::sync::Arc;

use ndarray::{ArrayView, IxDyn};
use ndarray_npy::WriteNpyExt;

use super::FileError;

/// Content goes to the system in pieces of this size.
const WRITE_BYTES: usize = 1 << 18;

/// A call to the system that changes the disk.
#[derive(Debug, Clone, Copy, PartialEq, Eq)]
pub enum Step {
    CreateFolder,
    CreateFile,
    Write,
    SyncFile,
    Rename,
    Remove,
    SyncFolder,
    OpenLog,
}

impl Step {
    fn doing(self) -> &'static str {
        match self {
            Self::CreateFolder => "create the folder",
            Self::CreateFile => "create a temporary file beside it",
            Self::Write => "write",
            Self::SyncFile => "bring the content to the disk",
            Self::Rename => "move the finished file to its place",
            Self::Remove => "remove the file of an earlier run",
            Self::SyncFolder => "bring the folder to the disk",
            Self::OpenLog => "open the log",
        }
    }
}

/// Asked before every step; an error takes the place of the system's.
pub trait Gate: Send + Sync {
    /// # Errors
    /// Whatever the step is to fail with.
    fn pass(&self, step: Step, path: &Path) -> io::Result<()>;
}

/// Lets everything through.
struct OpenGate;

impl Gate for OpenGate {
    fn pass(&self, _: Step, _: &Path) -> io::Result<()> {
        Ok(())
    }
}

/// A folder that results are written to.
#[derive(Clone)]
pub struct Folder {
    path: PathBuf,
    gate: Arc<dyn Gate>,
}

impl Folder {
    /// Creates the folder, and those above it, where they do not exist.
    ///
    /// # Errors
    /// The system refuses, or a file of that name is in the way.
    pub fn create(path: &Path) -> Result<Self, FileError> {
        Self::create_gated(path, Arc::new(OpenGate))
    }

    /// A folder to read from: nothing is created, and it need not be there.
    pub fn at(path: &Path) -> Self {
        Self { path: path.to_path_buf(), gate: Arc::new(OpenGate) }
    }

    /// As [`Folder::create`], with a gate of one's own.
    ///
    /// # Errors
    /// As [`Folder::create`], or what the gate says.
    pub fn create_gated(path: &Path, gate: Arc<dyn Gate>) -> Result<Self, FileError> {
        let folder = Self { path: path.to_path_buf(), gate };
        if !path.is_dir() {
            folder.step(Step::CreateFolder, path, || fs::create_dir_all(path))?;
            // Its own entry must survive as well as what it will hold.
            let above = path.parent().filter(|above| !above.as_os_str().is_empty());
            let above = above.unwrap_or(Path::new("."));
            folder.step(Step::SyncFolder, path, || sync_folder(above))?;
        }
        Ok(folder)
    }

    /// As given to the constructor.
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// Path of a file in the folder.
    ///
    /// Panics if the name is not a plain file name.
    pub fn place(&self, name: &str) -> PathBuf {
        let plain = !name.is_empty() && !name.starts_with('.') && !name.contains(['/', '\\', '\0']);
        assert!(plain, "{name:?} is not a plain file name");
        self.path.join(name)
    }

    /// Whether a file of that name is there. Panics as [`Folder::place`].
    pub fn holds(&self, name: &str) -> bool {
        self.place(name).is_file()
    }

    /// The name under which a path lies directly in this folder, whatever way it is spelt.
    pub fn name_of(&self, path: &Path) -> Option<String> {
        let whole = |path: &Path| fs::canonicalize(path).ok();
        let path = whole(path)?;
        let inside = path.parent()? == whole(&self.path)?;
        inside.then(|| path.file_name()?.to_str().map(str::to_owned)).flatten()
    }

    /// Content of a file in the folder, `None` if there is none.
    ///
    /// # Errors
    /// The file is there but cannot be read. Panics as [`Folder::place`].
    pub fn read(&self, name: &str) -> Result<Option<Vec<u8>>, FileError> {
        let path = self.place(name);
        match fs::read(&path) {
            Ok(content) => Ok(Some(content)),
            Err(error) if error.kind() == io::ErrorKind::NotFound => Ok(None),
            Err(error) => Err(FileError::io(&path, "read the file")(error)),
        }
    }

    /// Writes a file whole, in place of an earlier one. Panics as [`Folder::place`].
    ///
    /// # Errors
    /// The system refuses; an earlier version is then untouched, unless only the last step failed
    /// (syncing the folder), when the new version is in place but may not survive a power cut.
    pub fn write(&self, name: &str, content: &[u8]) -> Result<(), FileError> {
        self.write_with(name, |out| out.write_all(content))
    }

    /// As [`Folder::write`], with content that `fill` writes piece by piece.
    ///
    /// # Errors
    /// As [`Folder::write`], and what `fill` returns.
    pub fn write_with(
        &self,
        name: &str,
        fill: impl FnOnce(&mut dyn Write) -> io::Result<()>,
    ) -> Result<(), FileError> {
        let path = self.place(name);
        let file = self.step(Step::CreateFile, &path, || temporary_beside(&self.path))?;
        let mut out = BufWriter::with_capacity(
            WRITE_BYTES,
            GatedWriter { gate: &*self.gate, path: &path, file: file.as_file() },
        );
        fill(&mut out)
            .and_then(|()| out.flush())
            .map_err(FileError::io(&path, Step::Write.doing()))?;
        drop(out);
        self.step(Step::SyncFile, &path, || file.as_file().sync_all())?;
        // If this fails the temporary file is removed when the error is dropped.
        self.step(Step::Rename, &path, || file.persist(&path).map_err(|failed| failed.error))?;
        self.step(Step::SyncFolder, &path, || sync_folder(&self.path))
    }

    /// Removes files of an earlier run, those that are there. Panics as [`Folder::place`].
    ///
    /// # Errors
    /// The system refuses; files named later are then still there.
    pub fn remove(&self, names: &[&str]) -> Result<(), FileError> {
        let mut any = false;
        for name in names {
            let path = self.place(name);
            any |= self.step(Step::Remove, &path, || match fs::remove_file(&path) {
                Ok(()) => Ok(true),
                Err(error) if error.kind() == io::ErrorKind::NotFound => Ok(false),
                Err(error) => Err(error),
            })?;
        }
        if any {
            self.step(Step::SyncFolder, &self.path, || sync_folder(&self.path))?;
        }
        Ok(())
    }

    /// Writes an array of f64 in C order as .npy, version 1.
    ///
    /// Panics as [`Folder::place`], or if the shape has not as many places as there are values.
    ///
    /// # Errors
    /// As [`Folder::write`].
    pub fn write_npy(&self, name: &str, shape: &[usize], values: &[f64]) -> Result<(), FileError> {
        let array = ArrayView::from_shape(IxDyn(shape), values).expect("one value per place");
        self.write_with(name, |out| {
            array.write_npy(out).map_err(|error| match error {
                ndarray_npy::WriteNpyError::Io(error) => error,
                error => io::Error::other(error),
            })
        })
    }

    /// Appends text to a log of lines, which is created if absent. A last line that an earlier run
    /// did not finish is ended first, so that every record stays on a line of its own.
    ///
    /// Panics as [`Folder::place`], or if the text does not end a line.
    ///
    /// # Errors
    /// The system refuses; the log may then end in a part of the text.
    pub fn append(&self, name: &str, lines: &str) -> Result<(), FileError> {
        assert!(lines.ends_with('\n'), "what is appended ends a line");
        let path = self.place(name);
        let mut file = self.step(Step::OpenLog, &path, || {
            OpenOptions::new().read(true).append(true).create(true).open(&path)
        })?;
        let torn = is_torn(&mut file).map_err(FileError::io(&path, Step::OpenLog.doing()))?;
        // One call for all of it, so that readers and other writers see whole lines.
        let text = if torn { format!("\n{lines}") } else { lines.to_string() };
        self.step(Step::Write, &path, || file.write_all(text.as_bytes()))
    }

    /// The one way to the disk.
    fn step<T>(
        &self,
        step: Step,
        path: &Path,
        act: impl FnOnce() -> io::Result<T>,
    ) -> Result<T, FileError> {
        self.gate.pass(step, path).and_then(|()| act()).map_err(FileError::io(path, step.doing()))
    }
}

struct GatedWriter<'a> {
    gate: &'a dyn Gate,
    path: &'a Path,
    file: &'a File,
}

impl Write for GatedWriter<'_> {
    fn write(&mut self, content: &[u8]) -> io::Result<usize> {
        self.gate.pass(Step::Write, self.path)?;
        self.file.write(content)
    }

    fn flush(&mut self) -> io::Result<()> {
        self.file.flush()
    }
}

fn temporary_beside(folder: &Path) -> io::Result<tempfile::NamedTempFile> {
    let mut builder = tempfile::Builder::new();
    builder.prefix(".writing-");
    // Left alone the file would be the owner's only; this asks for what the umask allows.
    #[cfg(unix)]
    builder.permissions(std::os::unix::fs::PermissionsExt::from_mode(0o666));
    builder.tempfile_in(folder)
}

/// A folder must be synced for a rename in it to survive a power failure.
fn sync_folder(path: &Path) -> io::Result<()> {
    if cfg!(unix) { File::open(path)?.sync_all() } else { Ok(()) }
}

/// Whether the last line lacks its end.
fn is_torn(file: &mut File) -> io::Result<bool> {
    if file.seek(SeekFrom::End(0))? == 0 {
        return Ok(false);
    }
    file.seek(SeekFrom::End(-1))?;
    let mut last = [0];
    file.read_exact(&mut last)?;
    Ok(last[0] != b'\n')
}

#[cfg(test)]
mod tests {
    use super::*;
    use std::sync::atomic::{AtomicUsize, Ordering};

    /// Makes the k-th step fail, counting from 0.
    struct Failing {
        at: usize,
        count: AtomicUsize,
    }

    impl Gate for Failing {
        fn pass(&self, _: Step, _: &Path) -> io::Result<()> {
            if self.count.fetch_add(1, Ordering::Relaxed) == self.at {
                return Err(io::Error::from(io::ErrorKind::StorageFull));
            }
            Ok(())
        }
    }

    fn failing(at: usize) -> Arc<Failing> {
        Arc::new(Failing { at, count: AtomicUsize::new(0) })
    }

    /// Content of three pieces where it is buffered, so that a write fails at the start, within and
    /// at the end.
    fn content(mark: u8) -> Vec<u8> {
        vec![mark; 2 * WRITE_BYTES + 10]
    }

    #[test]
    fn whichever_step_fails_files_are_whole_or_absent() {
        let mut failures = 0;
        for k in 0.. {
            let home = tempfile::tempdir().unwrap();
            let path = home.path().join("out");
            let earlier = Folder::create(&path).unwrap();
            earlier.write("old", &content(b'a')).unwrap();
            let outcome = Folder::create_gated(&path, failing(k)).and_then(|folder| {
                folder.write("old", &content(b'b'))?;
                folder.write_with("new", |out| {
                    content(b'c').chunks(WRITE_BYTES / 3).try_for_each(|part| out.write_all(part))
                })
            });
            let old = fs::read(path.join("old")).unwrap();
            assert!(old == content(b'a') || old == content(b'b'), "step {k}");
            let new = fs::read(path.join("new")).ok();
            assert!(new.is_none() || new == Some(content(b'c')), "step {k}");
            let names = fs::read_dir(&path).unwrap().count();
            assert_eq!(names, 1 + usize::from(new.is_some()), "nothing else is left, step {k}");
            if outcome.is_ok() {
                assert_eq!(new, Some(content(b'c')));
                break;
            }
            let error = outcome.unwrap_err();
            assert!(!error.is_user_fault());
            assert!(matches!(error, FileError::Io { .. }));
            failures += 1;
        }
        // Create, one large write, sync, rename, sync; the same with three writes.
        assert!(failures >= 5 + 7, "{failures} steps passed the gate");
    }

    #[test]
    fn a_new_folder_and_those_above_it_are_created_or_refused() {
        let home = tempfile::tempdir().unwrap();
        let path = home.path().join("a/b");
        for at in 0..2 {
            assert!(Folder::create_gated(&path, failing(at)).is_err(), "step {at}");
            let _ = fs::remove_dir_all(home.path().join("a"));
        }
        Folder::create(&path).unwrap().write("c", b"1").unwrap();
        Folder::create(&path).unwrap().write("c", b"2").unwrap();
        assert_eq!(fs::read(path.join("c")).unwrap(), b"2");
    }

    #[test]
    fn appended_lines_stay_lines_after_a_torn_one() {
        let home = tempfile::tempdir().unwrap();
        let folder = Folder::create(home.path()).unwrap();
        folder.append("log.jsonl", "{\"a\":1}\n").unwrap();
        folder.append("log.jsonl", "{\"a\":2}\n").unwrap();
        fs::write(home.path().join("torn.jsonl"), "{\"a\":1}\n{\"a").unwrap();
        folder.append("torn.jsonl", "{\"a\":2}\n").unwrap();
        assert_eq!(folder.read("log.jsonl").unwrap().unwrap(), b"{\"a\":1}\n{\"a\":2}\n");
        assert_eq!(folder.read("torn.jsonl").unwrap().unwrap(), b"{\"a\":1}\n{\"a\n{\"a\":2}\n");
        assert_eq!(folder.read("absent").unwrap(), None);
        for at in 0..2 {
            let gated = Folder { gate: failing(at), ..folder.clone() };
            assert!(gated.append("log.jsonl", "{}\n").is_err());
            assert_eq!(folder.read("log.jsonl").unwrap().unwrap().len(), 16);
        }
    }

    #[test]
    fn files_of_an_earlier_run_are_removed_where_they_are() {
        let home = tempfile::tempdir().unwrap();
        let folder = Folder::create(home.path()).unwrap();
        for name in ["a", "b", "kept"] {
            folder.write(name, b"1").unwrap();
        }
        // The second of two removals fails: the first is done, the other not.
        let gated = Folder { gate: failing(1), ..folder.clone() };
        assert!(gated.remove(&["a", "b"]).is_err());
        assert_eq!(folder.read("a").unwrap(), None);
        assert!(folder.read("b").unwrap().is_some());
        folder.remove(&["a", "b"]).unwrap();
        let names: Vec<_> =
            fs::read_dir(home.path()).unwrap().map(|e| e.unwrap().file_name()).collect();
        assert_eq!(names, ["kept"]);
        fs::create_dir(home.path().join("b")).unwrap();
        assert!(folder.remove(&["b"]).is_err(), "a folder is not ours to remove");
    }

    #[test]
    #[cfg(unix)]
    fn permissions_are_those_of_any_new_file() {
        use std::os::unix::fs::PermissionsExt;
        let home = tempfile::tempdir().unwrap();
        let folder = Folder::create(home.path()).unwrap();
        folder.write("ours", b"1").unwrap();
        fs::write(home.path().join("plain"), b"1").unwrap();
        let mode = |name: &str| fs::metadata(home.path().join(name)).unwrap().permissions().mode();
        assert_eq!(mode("ours"), mode("plain"));
    }

    #[test]
    fn a_file_where_the_folder_should_be_is_a_file_error() {
        let home = tempfile::tempdir().unwrap();
        let path = home.path().join("taken");
        fs::write(&path, b"1").unwrap();
        let error = Folder::create(&path).err().unwrap();
        assert!(error.to_string().contains("could not create the folder"), "{error}");
    }
}
