//! The directory that a run writes, whole or not at all.
//!
//! Everything is written into a hidden sibling directory, flushed to the disk, and renamed. An existing result is renamed
//! aside first and deleted last. Whatever fails, the sibling is removed and the old result is in its place.

use super::digest::{FileDigest, hexadecimal};
use super::interrupt::Undisturbed;
use super::run_record::PROGRAM;
use serde::Deserialize;
use sha2::{Digest, Sha256};
use std::ffi::OsString;
use std::fs::{self, File};
use std::io::{self, BufWriter, Write};
use std::path::{Path, PathBuf};
use std::sync::atomic::{AtomicUsize, Ordering};

/// Name of the file that marks a directory as a run.
pub(super) const RUN_FILE: &str = "run.json";

/// Why a run directory cannot be written.
#[derive(Debug, thiserror::Error)]
pub enum TargetError {
    /// The path has no last component to rename to.
    #[error("{}: names no directory of its own; give the name of a new directory", .0.display())]
    NoName(PathBuf),
    /// The directory that should hold it is not there.
    #[error("{}: cannot be made, because {} is not a directory; make that first or give another name", path.display(), parent.display())]
    NoParent {
        /// The path asked for.
        path: PathBuf,
        /// Its parent.
        parent: PathBuf,
    },
    /// Something that is not a directory has the name.
    #[error("{}: exists and is not a directory; give another name", .0.display())]
    NotADirectory(PathBuf),
    /// The directory holds something else.
    #[error("{}: exists and holds no peakfold run (no {RUN_FILE} of one); it is never replaced, give another name", .0.display())]
    NotARun(PathBuf),
    /// The directory holds a run and other files.
    #[error("{}: also holds {file}, which the run there did not write; move it away or give another name", path.display())]
    ForeignFile {
        /// The directory.
        path: PathBuf,
        /// What was found in it.
        file: String,
    },
    /// The directory holds the result of other inputs, or nothing.
    #[error("{}: exists and does not hold the result of the same inputs; use --replace to replace it, or give another name", .0.display())]
    NeedsReplace(PathBuf),
    /// The system refused.
    #[error("{}: cannot {action}: {source}; nothing was changed", path.display())]
    Io {
        /// The file or directory concerned.
        path: PathBuf,
        /// What was tried.
        action: &'static str,
        /// The system's reason.
        source: io::Error,
    },
}

impl TargetError {
    /// A file that cannot be put into words.
    pub(super) fn from_json(name: &str, error: serde_json::Error) -> Self {
        TargetError::Io { path: PathBuf::from(name), action: "write", source: io::Error::other(error) }
    }

    fn io(path: &Path, action: &'static str) -> impl FnOnce(io::Error) -> Self {
        let path = path.to_path_buf();
        move |source| TargetError::Io { path, action, source }
    }
}

/// What of `run.json` decides about replacing; other keys may differ between versions.
#[derive(Deserialize)]
struct Existing {
    program: String,
    version: String,
    inputs: Vec<FileDigest>,
    files: Vec<FileDigest>,
}

/// A run that stands in its place.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Committed {
    /// Where the replaced result still lies because the system would not delete it.
    pub old_left_at: Option<PathBuf>,
}

/// A place for a run directory, claimed before the work starts. Dropping it without [`Self::commit`] leaves no trace.
#[derive(Debug)]
pub struct Target {
    path: PathBuf,
    staging: PathBuf,
    replace: bool,
    inputs: Vec<FileDigest>,
    committed: bool,
}

impl Target {
    /// Checks that `path` can be written and may be replaced, and makes the hidden sibling.
    ///
    /// A run of the same inputs (digests, in any order) and version is replaced; any other directory only with `replace`,
    /// and one with files that no run wrote never.
    ///
    /// # Errors
    /// The reason why the run could not be written there.
    pub fn prepare(path: &Path, replace: bool, inputs: &[FileDigest]) -> Result<Self, TargetError> {
        // A link stays; what it leads to is replaced.
        let path = match fs::symlink_metadata(path) {
            Ok(found) if found.is_symlink() => {
                fs::canonicalize(path).map_err(TargetError::io(path, "follow the link"))?
            }
            _ => path.to_path_buf(),
        };
        let name = path.file_name().ok_or_else(|| TargetError::NoName(path.clone()))?.to_os_string();
        let parent = match path.parent() {
            Some(parent) if !parent.as_os_str().is_empty() => parent.to_path_buf(),
            _ => PathBuf::from("."),
        };
        if !parent.is_dir() {
            return Err(TargetError::NoParent { path, parent });
        }
        may_replace(&path, replace, inputs)?;
        let staging = make_sibling(&parent, &name)?;
        Ok(Target { path, staging, replace, inputs: inputs.to_vec(), committed: false })
    }

    /// Where the result will stand.
    pub fn path(&self) -> &Path {
        &self.path
    }

    /// Lets `write` fill the run, then puts it in its place.
    ///
    /// # Errors
    /// What `write` or the system reports; the old state is then restored.
    pub fn commit<F>(mut self, write: F) -> Result<Committed, TargetError>
    where
        F: FnOnce(&mut Staging<'_>) -> Result<(), TargetError>,
    {
        write(&mut Staging { root: &self.staging, files: Vec::new() })?;
        sync_directories(&self.staging).map_err(TargetError::io(&self.path, "write to the disk"))?;
        // Hours may have passed since the first look.
        may_replace(&self.path, self.replace, &self.inputs)?;
        let mut undisturbed = Undisturbed::enter();
        let old = with_suffix(&self.staging, ".old");
        let replaced = fs::symlink_metadata(&self.path).is_ok();
        if replaced {
            fs::rename(&self.path, &old).map_err(TargetError::io(&self.path, "move the old result aside"))?;
        }
        if let Err(error) = fs::rename(&self.staging, &self.path) {
            if replaced {
                fs::rename(&old, &self.path).map_err(TargetError::io(&old, "move the old result back"))?;
            }
            return Err(TargetError::io(&self.path, "move the result into place")(error));
        }
        self.committed = true;
        undisturbed.forget(&self.staging);
        if let Some(parent) = self.path.parent() {
            sync_directory(parent);
        }
        // The new result is in place; an old one that cannot be deleted is only in the way.
        let stays = replaced && fs::remove_dir_all(&old).is_err();
        Ok(Committed { old_left_at: stays.then_some(old) })
    }
}

impl Drop for Target {
    fn drop(&mut self) {
        if !self.committed {
            let mut undisturbed = Undisturbed::enter();
            // Dropping cannot report; what is left is hidden and named after the program.
            let _ = fs::remove_dir_all(&self.staging);
            undisturbed.forget(&self.staging);
        }
    }
}

/// The unfinished run that [`Target::commit`] lets one fill.
#[derive(Debug)]
pub struct Staging<'a> {
    root: &'a Path,
    files: Vec<FileDigest>,
}

impl Staging<'_> {
    /// Writes one file (path relative to the run, with `/`), flushes it to the disk, and keeps its digest.
    ///
    /// # Errors
    /// What `write` or the system reports, with the file's name.
    pub fn write<F>(&mut self, name: &str, write: F) -> Result<(), TargetError>
    where
        F: FnOnce(&mut dyn Write) -> io::Result<()>,
    {
        let path = self.root.join(name);
        let sha256 = self.write_file(&path, write).map_err(TargetError::io(Path::new(name), "write the file"))?;
        self.files.push(FileDigest { path: name.to_owned(), sha256 });
        Ok(())
    }

    fn write_file<F>(&self, path: &Path, write: F) -> io::Result<String>
    where
        F: FnOnce(&mut dyn Write) -> io::Result<()>,
    {
        let file = {
            // So that an interrupt does not remove the directory while a file is being made in it.
            let _undisturbed = Undisturbed::enter();
            if let Some(parent) = path.parent() {
                fs::create_dir_all(parent)?;
            }
            File::create_new(path)?
        };
        let mut out = Digesting { out: BufWriter::new(file), digest: Sha256::new() };
        write(&mut out)?;
        out.out.into_inner().map_err(io::IntoInnerError::into_error)?.sync_all()?;
        Ok(hexadecimal(&out.digest.finalize()))
    }

    /// The files written so far.
    pub fn files(&self) -> &[FileDigest] {
        &self.files
    }
}

struct Digesting<W> {
    out: W,
    digest: Sha256,
}

impl<W: Write> Write for Digesting<W> {
    fn write(&mut self, bytes: &[u8]) -> io::Result<usize> {
        let written = self.out.write(bytes)?;
        self.digest.update(&bytes[..written]);
        Ok(written)
    }

    fn flush(&mut self) -> io::Result<()> {
        self.out.flush()
    }
}

/// Digest of bytes, as it stands in `run.json`.
pub(super) fn digest_of(bytes: &[u8]) -> String {
    hexadecimal(&Sha256::digest(bytes))
}

fn may_replace(path: &Path, replace: bool, inputs: &[FileDigest]) -> Result<(), TargetError> {
    let found = match fs::symlink_metadata(path) {
        Ok(found) => found,
        Err(error) if error.kind() == io::ErrorKind::NotFound => return Ok(()),
        Err(error) => return Err(TargetError::io(path, "look at it")(error)),
    };
    if !found.is_dir() {
        return Err(TargetError::NotADirectory(path.to_path_buf()));
    }
    let same = match existing_run(path)? {
        None if list(path, path)?.is_empty() => false,
        None => return Err(TargetError::NotARun(path.to_path_buf())),
        Some(run) => {
            let known = |name: &String| name == RUN_FILE || run.files.iter().any(|file| &file.path == name);
            if let Some(file) = list(path, path)?.into_iter().find(|name| !known(name)) {
                return Err(TargetError::ForeignFile { path: path.to_path_buf(), file });
            }
            run.version == env!("CARGO_PKG_VERSION") && digests(&run.inputs) == digests(inputs)
        }
    };
    if same || replace { Ok(()) } else { Err(TargetError::NeedsReplace(path.to_path_buf())) }
}

fn digests(files: &[FileDigest]) -> Vec<&str> {
    let mut digests: Vec<&str> = files.iter().map(|file| file.sha256.as_str()).collect();
    digests.sort_unstable();
    digests
}

fn existing_run(path: &Path) -> Result<Option<Existing>, TargetError> {
    let file = path.join(RUN_FILE);
    match fs::read(&file) {
        Ok(bytes) => Ok(serde_json::from_slice(&bytes).ok().filter(|run: &Existing| run.program == PROGRAM)),
        Err(error) if matches!(error.kind(), io::ErrorKind::NotFound | io::ErrorKind::IsADirectory) => Ok(None),
        Err(error) => Err(TargetError::io(&file, "read it")(error)),
    }
}

/// Everything below a directory, relative to `root` and with `/`; an empty directory stands for itself.
fn list(root: &Path, directory: &Path) -> Result<Vec<String>, TargetError> {
    let read = || -> io::Result<Vec<fs::DirEntry>> { fs::read_dir(directory)?.collect() };
    let mut names = Vec::new();
    for entry in read().map_err(TargetError::io(directory, "read the directory"))? {
        let path = entry.path();
        let is_dir = entry.file_type().map_err(TargetError::io(&path, "look at it"))?.is_dir();
        let below = if is_dir { list(root, &path)? } else { Vec::new() };
        if below.is_empty() {
            let parts: Vec<_> = path.strip_prefix(root).unwrap_or(&path).iter().map(|p| p.to_string_lossy()).collect();
            names.push(parts.join("/"));
        } else {
            names.extend(below);
        }
    }
    names.sort_unstable();
    Ok(names)
}

fn make_sibling(parent: &Path, name: &OsString) -> Result<PathBuf, TargetError> {
    static COUNT: AtomicUsize = AtomicUsize::new(0);
    let mut undisturbed = Undisturbed::enter();
    loop {
        let mut hidden = OsString::from(".");
        hidden.push(name);
        hidden.push(format!(".{PROGRAM}-{}-{}", std::process::id(), COUNT.fetch_add(1, Ordering::Relaxed)));
        let sibling = parent.join(hidden);
        match fs::create_dir(&sibling) {
            Ok(()) => {
                undisturbed.add(&sibling);
                return Ok(sibling);
            }
            // Left by an earlier process of the same number that was killed.
            Err(error) if error.kind() == io::ErrorKind::AlreadyExists => {}
            Err(error) => return Err(TargetError::io(&parent.join(name), "write there")(error)),
        }
    }
}

fn with_suffix(path: &Path, suffix: &str) -> PathBuf {
    let mut text = path.as_os_str().to_os_string();
    text.push(suffix);
    PathBuf::from(text)
}

fn sync_directories(root: &Path) -> io::Result<()> {
    for entry in fs::read_dir(root)? {
        let entry = entry?;
        if entry.file_type()?.is_dir() {
            sync_directories(&entry.path())?;
        }
    }
    sync_directory(root);
    Ok(())
}

/// Makes the entries of a directory durable, where the system can open directories.
fn sync_directory(path: &Path) {
    let path = if path.as_os_str().is_empty() { Path::new(".") } else { path };
    if let Ok(directory) = File::open(path) {
        // Not every file system can do this; the files themselves are flushed already.
        let _ = directory.sync_all();
    }
}
