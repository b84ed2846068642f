//! Bytes of an event file: plain or gzip, counted, in lines of bounded length.

use std::fs::File;
use std::io::{self, BufRead, BufReader, Cursor, Read};
use std::path::{Path, PathBuf};
use std::sync::Arc;
use std::sync::atomic::{AtomicU64, Ordering};

use flate2::bufread::MultiGzDecoder;

use crate::problem::Problem;

/// Longest line that is read, in bytes.
pub(super) const LONGEST_LINE: usize = 1 << 20;

const BUFFER_BYTES: usize = 256 << 10;

/// Text that is looked at to tell the format.
const START_BYTES: u64 = 4096;

/// What some editors write before the first line of UTF-8 text.
pub(super) const BYTE_ORDER_MARK: &[u8] = b"\xef\xbb\xbf";

/// How far the reading of a file has come; can be asked from another thread.
#[derive(Clone, Debug)]
pub struct Progress {
    bytes_read: Arc<AtomicU64>,
    /// Size of the file in bytes (compressed, if it is), where it is known.
    pub total_bytes: Option<u64>,
}

impl Progress {
    /// Bytes of the file (compressed, if it is) that were read.
    pub fn bytes_read(&self) -> u64 {
        self.bytes_read.load(Ordering::Relaxed)
    }
}

struct Counted<R> {
    inner: R,
    bytes_read: Arc<AtomicU64>,
}

impl<R: Read> Read for Counted<R> {
    fn read(&mut self, buffer: &mut [u8]) -> io::Result<usize> {
        let count = self.inner.read(buffer)?;
        self.bytes_read.fetch_add(count as u64, Ordering::Relaxed);
        Ok(count)
    }
}

/// What a failed reading means.
fn unreadable(gzip: bool, error: &io::Error) -> String {
    match (gzip, error.kind()) {
        (true, io::ErrorKind::UnexpectedEof) => {
            "the gzip data end too early: the file was cut off; copy or write it again".to_owned()
        }
        (true, io::ErrorKind::InvalidData | io::ErrorKind::InvalidInput) => {
            format!("the gzip data are damaged ({error}); copy or write the file again")
        }
        _ => format!("the event file cannot be read: {error}"),
    }
}

/// The lines of a file.
pub(super) struct Source<'a> {
    pub file: PathBuf,
    reader: Box<dyn BufRead + Send + 'a>,
    gzip: bool,
    begins_with_tag: bool,
    /// Number of the line that was read last, from 1.
    pub line: usize,
}

impl<'a> Source<'a> {
    pub(super) fn open(path: &Path) -> Result<(Self, Progress), Problem> {
        let unreadable = |error: io::Error| Problem::of_file(path, format!("the event file cannot be read: {error}"));
        let file = File::open(path).map_err(unreadable)?;
        let metadata = file.metadata().map_err(unreadable)?;
        if metadata.is_dir() {
            return Err(Problem::of_file(
                path,
                "this is a directory; an event file (LHE or CSV, plain or gzip) is needed",
            ));
        }
        let total = metadata.is_file().then_some(metadata.len());
        Source::new(path, file, total)
    }

    pub(super) fn new(
        file: &Path,
        reader: impl Read + Send + 'a,
        total_bytes: Option<u64>,
    ) -> Result<(Self, Progress), Problem> {
        let bytes_read = Arc::new(AtomicU64::new(0));
        let progress = Progress { bytes_read: bytes_read.clone(), total_bytes };
        let mut counted = Counted { inner: reader, bytes_read };
        let mut magic = Vec::new();
        (&mut counted)
            .take(2)
            .read_to_end(&mut magic)
            .map_err(|error| Problem::of_file(file, format!("the event file cannot be read: {error}")))?;
        let empty = || Problem::of_file(file, "the file is empty; an event file (LHE or CSV, plain or gzip) is needed");
        if magic.is_empty() {
            return Err(empty());
        }
        let gzip = magic == [0x1f, 0x8b];
        let whole = BufReader::with_capacity(BUFFER_BYTES, Cursor::new(magic).chain(counted));
        let mut reader: Box<dyn BufRead + Send + 'a> = if gzip {
            Box::new(BufReader::with_capacity(BUFFER_BYTES, MultiGzDecoder::new(whole)))
        } else {
            Box::new(whole)
        };
        let mut start = Vec::new();
        (&mut reader)
            .take(START_BYTES)
            .read_to_end(&mut start)
            .map_err(|error| Problem::of_file(file, unreadable(gzip, &error)))?;
        if start.is_empty() {
            return Err(empty());
        }
        let text = start.strip_prefix(BYTE_ORDER_MARK).unwrap_or(&start);
        let begins_with_tag = text.trim_ascii_start().first() == Some(&b'<');
        let reader = Box::new(Cursor::new(start).chain(reader));
        Ok((Source { file: file.to_path_buf(), reader, gzip, begins_with_tag, line: 0 }, progress))
    }

    /// Whether the first character that is no blank is `<`.
    pub(super) fn begins_with_tag(&self) -> bool {
        self.begins_with_tag
    }

    /// Appends the next line with its end to `text`; false at the end of the file.
    pub(super) fn read_line(&mut self, text: &mut Vec<u8>) -> Result<bool, Problem> {
        let limit = LONGEST_LINE as u64 + 1;
        let count = (&mut *self.reader)
            .take(limit)
            .read_until(b'\n', text)
            .map_err(|error| self.problem(unreadable(self.gzip, &error)))?;
        if count == 0 {
            return Ok(false);
        }
        self.line += 1;
        if count > LONGEST_LINE {
            return Err(self.problem(format!(
                "the line is longer than {LONGEST_LINE} bytes; the file is damaged or not an event file"
            )));
        }
        Ok(true)
    }

    /// A problem of the line that was read last.
    pub(super) fn problem(&self, message: impl Into<String>) -> Problem {
        Problem { line: (self.line > 0).then_some(self.line), ..Problem::of_file(&self.file, message) }
    }
}
