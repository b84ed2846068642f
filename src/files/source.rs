//! Reading a text file whole, and keeping the line of everything that is said about it.

use std::cell::RefCell;
use std::fs::File;
use std::io::Read;
use std::path::{Path, PathBuf};

use sha2::{Digest, Sha256};
use toml::Spanned;
use toml::de::DeTable;

use super::digest::{FileDigest, hexadecimal};
use crate::problem::Problem;

/// Files written by hand are far smaller; a larger one is refused rather than read into memory.
const MOST_BYTES: u64 = 64 << 20;

/// A text file in memory.
#[derive(Debug)]
pub(super) struct InputText {
    pub text: String,
    pub input: FileDigest,
}

impl InputText {
    /// A text that is in memory already, with its digest as if it stood in the file.
    pub fn of_memory(path: &Path, text: &str) -> Self {
        let sha256 = hexadecimal(&Sha256::digest(text.as_bytes()));
        InputText { text: text.to_owned(), input: FileDigest { path: path.display().to_string(), sha256 } }
    }
}

/// Why a file could not be read.
#[derive(Debug)]
pub(super) enum Unreadable {
    /// It cannot be opened or is no file; told where the file is named.
    Access(String),
    /// Its content is no text; told in the file itself.
    Content(Problem),
}

impl Unreadable {
    /// The problem when nothing but the user named the file.
    pub fn of_file(self, path: &Path) -> Problem {
        match self {
            Unreadable::Access(message) => Problem::of_file(path, message),
            Unreadable::Content(problem) => problem,
        }
    }
}

/// Reads a text file.
pub(super) fn read_text(path: &Path) -> Result<InputText, Unreadable> {
    let mut bytes = Vec::new();
    let failed = |error| Unreadable::Access(access_message(path, &error));
    open(path)?.take(MOST_BYTES + 1).read_to_end(&mut bytes).map_err(failed)?;
    if bytes.len() as u64 > MOST_BYTES {
        let message = format!("the file is larger than {} MiB, which no such file should be", MOST_BYTES >> 20);
        return Err(Unreadable::Content(Problem::of_file(path, message)));
    }
    let sha256 = hexadecimal(&Sha256::digest(&bytes));
    let text = String::from_utf8(bytes).map_err(|error| {
        let valid = error.utf8_error().valid_up_to();
        let line = 1 + error.as_bytes()[..valid].iter().filter(|byte| **byte == b'\n').count();
        let message = format!("byte {} of the file is not UTF-8; save the file as UTF-8 text", valid + 1);
        Unreadable::Content(Problem::at_line(path, line, message))
    })?;
    Ok(InputText { text, input: FileDigest { path: path.display().to_string(), sha256 } })
}

/// The digest of a file of any size.
pub(super) fn digest(path: &Path) -> Result<FileDigest, String> {
    let failed = |error| access_message(path, &error);
    let mut file = open(path).map_err(|error| match error {
        Unreadable::Access(message) => message,
        Unreadable::Content(problem) => problem.message,
    })?;
    // It is read more than once, and must end.
    if !file.metadata().map_err(failed)?.is_file() {
        return Err(format!("{} is a device or a pipe; name a file", path.display()));
    }
    let mut sha = Sha256::new();
    let mut buffer = vec![0; 1 << 16];
    loop {
        let count = file.read(&mut buffer).map_err(failed)?;
        if count == 0 {
            break;
        }
        sha.update(&buffer[..count]);
    }
    Ok(FileDigest { path: path.display().to_string(), sha256: hexadecimal(&sha.finalize()) })
}

fn open(path: &Path) -> Result<File, Unreadable> {
    let failed = |error| Unreadable::Access(access_message(path, &error));
    if std::fs::metadata(path).map_err(failed)?.is_dir() {
        return Err(Unreadable::Access(format!("{} is a directory; name a file", path.display())));
    }
    File::open(path).map_err(failed)
}

fn access_message(path: &Path, error: &std::io::Error) -> String {
    let path = path.display();
    match error.kind() {
        std::io::ErrorKind::NotFound => format!("there is no file {path}; correct the path"),
        std::io::ErrorKind::PermissionDenied => format!("{path} may not be read; change its permissions"),
        _ => format!("{path} cannot be read: {error}"),
    }
}

/// What was found in one file so far. Everything is collected, so that the user hears of all problems at once.
#[derive(Debug)]
pub(super) struct Sheet {
    path: PathBuf,
    line_starts: Vec<usize>,
    problems: RefCell<Vec<Problem>>,
    warnings: RefCell<Vec<Problem>>,
}

impl Sheet {
    pub fn new(path: &Path, text: &str) -> Self {
        let after_break = text.bytes().enumerate().filter(|(_, byte)| *byte == b'\n').map(|(place, _)| place + 1);
        Sheet {
            path: path.to_path_buf(),
            line_starts: std::iter::once(0).chain(after_break).collect(),
            problems: RefCell::default(),
            warnings: RefCell::default(),
        }
    }

    /// Parses the text as TOML; syntax errors are collected, and then there is no table.
    pub fn parse<'i>(&self, text: &'i str) -> Option<Spanned<DeTable<'i>>> {
        let (table, errors) = DeTable::parse_recoverable(text);
        if errors.is_empty() {
            return Some(table);
        }
        let mut last_line = 0;
        for error in errors {
            let line = error.span().map_or(1, |span| self.line_at(span.start));
            // What follows a first error on a line is mostly its echo.
            if line != last_line {
                self.push_problem(line, None, format!("not TOML: {}", error.message()));
            }
            last_line = line;
        }
        None
    }

    /// The path of a file that this file names.
    pub fn resolve(&self, named: &str) -> PathBuf {
        self.path.parent().map_or_else(|| PathBuf::from(named), |directory| directory.join(named))
    }

    /// The line, from 1, of a byte of the text.
    pub fn line_at(&self, offset: usize) -> usize {
        self.line_starts.partition_point(|start| *start <= offset).max(1)
    }

    pub fn problem(&self, line: usize, key: &str, message: impl Into<String>) {
        self.push_problem(line, Some(key), message.into());
    }

    pub fn warn(&self, line: usize, key: &str, message: impl Into<String>) {
        self.warnings.borrow_mut().push(Problem::at_line(&self.path, line, message).with_key(key));
    }

    fn push_problem(&self, line: usize, key: Option<&str>, message: String) {
        let mut problem = Problem::at_line(&self.path, line, message);
        problem.key = key.map(str::to_owned);
        self.problems.borrow_mut().push(problem);
    }

    /// Problems and warnings, in the order of the lines.
    pub fn into_findings(self) -> (Vec<Problem>, Vec<Problem>) {
        let by_line = |mut findings: Vec<Problem>| {
            findings.sort_by_key(|problem| problem.line);
            findings
        };
        (by_line(self.problems.into_inner()), by_line(self.warnings.into_inner()))
    }
}
