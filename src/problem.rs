//! What is wrong with an input, said so that the user can mend it.

use std::fmt;
use std::path::{Path, PathBuf};

/// One problem of an input file: where it stands, what was found, what is allowed and what to do.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct Problem {
    /// The file, as the user named it.
    pub file: PathBuf,
    /// Line number from 1, where one is known.
    pub line: Option<usize>,
    /// The key or column concerned, in the file's own notation (`calorimeter.photon-barrel.constant`).
    pub key: Option<String>,
    /// One sentence: what was found, what is allowed, what to do.
    pub message: String,
}

impl Problem {
    /// A problem of a whole file.
    pub fn of_file(file: &Path, message: impl Into<String>) -> Self {
        Problem { file: file.to_path_buf(), line: None, key: None, message: message.into() }
    }

    /// A problem of one line of a file.
    pub fn at_line(file: &Path, line: usize, message: impl Into<String>) -> Self {
        Problem { file: file.to_path_buf(), line: Some(line), key: None, message: message.into() }
    }

    /// The same problem with the key that it concerns.
    #[must_use]
    pub fn with_key(mut self, key: impl Into<String>) -> Self {
        self.key = Some(key.into());
        self
    }
}

impl std::error::Error for Problem {}

impl fmt::Display for Problem {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        write!(f, "{}", self.file.display())?;
        if let Some(line) = self.line {
            write!(f, ":{line}")?;
        }
        if let Some(key) = &self.key {
            write!(f, ": {key}")?;
        }
        write!(f, ": {}", self.message)
    }
}

/// All problems that were found in one reading; never empty when it is an error.
#[derive(Clone, Debug, Default, PartialEq, Eq, thiserror::Error)]
pub struct Problems(pub Vec<Problem>);

impl fmt::Display for Problems {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        for (i, problem) in self.0.iter().enumerate() {
            if i > 0 {
                writeln!(f)?;
            }
            write!(f, "{problem}")?;
        }
        Ok(())
    }
}

impl From<Problem> for Problems {
    fn from(problem: Problem) -> Self {
        Problems(vec![problem])
    }
}

/// The candidate that a misspelt word was most likely meant to be.
fn nearest<'c>(word: &str, candidates: impl IntoIterator<Item = &'c str>) -> Option<&'c str> {
    let lower = word.to_lowercase();
    let distance = |candidate: &str| strsim::osa_distance(&lower, candidate);
    // Two letters of five may be wrong; a key that lacks its unit is near whatever its length.
    let near = |candidate: &&str| {
        let letters = lower.chars().count().max(candidate.chars().count());
        5 * distance(candidate) <= 2 * letters || (lower.len() >= 3 && candidate.starts_with(&lower))
    };
    candidates.into_iter().filter(near).min_by_key(|candidate| distance(candidate))
}

/// The end of a message about an unknown word.
pub(crate) fn suggestion(word: &str, candidates: &[&str]) -> String {
    let allowed = candidates.iter().map(|c| format!("`{c}`")).collect::<Vec<_>>().join(", ");
    match nearest(word, candidates.iter().copied()) {
        Some(meant) => format!("did you mean `{meant}`? (allowed: {allowed})"),
        None => format!("allowed: {allowed}"),
    }
}
