//! What is read and written: detector and study files, run directories.
//!
//! A file goes through three stages: its text is parsed as TOML with the place of every key, each value is read with a
//! check of its type and range, and the whole is checked for what its parts must satisfy together. Problems are
//! collected, with file, line and key, over all files of a study; only a study without any becomes typed.

mod channel_tables;
mod detector_entries;
mod detector_file;
mod domain;
mod reader;
mod resonance_table;
mod source;
mod spectrum_file;
mod study_checks;
mod study_file;
mod uncertainties;

use std::path::PathBuf;

pub use detector_file::load_detector;
pub use study_file::load_study;

use crate::detector::Detector;
use crate::problem::Problem;
use crate::process::Study;

/// A file that was read, and the digest of its bytes.
#[derive(Clone, Debug, PartialEq, Eq)]
pub struct InputFile {
    /// The path as it was opened.
    pub path: PathBuf,
    /// SHA-256 in lower-case hexadecimal.
    pub sha256: String,
}

/// A study that was read without a problem.
#[derive(Clone, Debug)]
pub struct LoadedStudy {
    /// The study.
    pub study: Study,
    /// Every file that it depends on: the study, the detector, then a spectrum table or an event file.
    pub inputs: Vec<InputFile>,
    /// What is allowed but likely not meant.
    pub warnings: Vec<Problem>,
}

/// A detector that was read without a problem.
#[derive(Clone, Debug)]
pub struct LoadedDetector {
    /// The detector.
    pub detector: Detector,
    /// Its file.
    pub input: InputFile,
    /// What is allowed but likely not meant.
    pub warnings: Vec<Problem>,
}
