//! What is read and written: detector and study files, run directories, data to fit.
//!
//! A file goes through three stages: its text is parsed as TOML with the place of every key, each value is read with a
//! check of its type and range, and the whole is checked for what its parts must satisfy together. Problems are
//! collected, with file, line and key, over all files of a study; only a study without any becomes typed.

mod anchor_table;
mod channel_tables;
mod closure_table;
mod detector_entries;
mod detector_file;
mod digest;
mod domain;
mod efficiency_file;
mod fit_data;
mod interrupt;
mod model_file;
mod number;
mod number_table;
mod reader;
mod resonance_table;
mod response_table;
mod run_read;
mod run_record;
mod run_target;
mod run_write;
mod simulated_tables;
mod source;
mod spectrum_file;
mod study_checks;
mod study_file;
mod uncertainties;

pub use detector_file::{load_detector, parse_detector};
pub use digest::FileDigest;
pub use fit_data::load_fit_data;
pub use interrupt::remove_unfinished_on_interrupt;
pub use model_file::{LoadedModels, NaturalOfRun, RunModels, load_models};
pub use number::shortest;
pub use run_read::{Run, read_run};
pub use run_record::{FoldSummary, MoveRecord, NuisanceRecord, RunRecord, Skipped};
pub use run_target::{Committed, Staging, Target, TargetError};
pub use run_write::{NOMINAL, RunContents, write_templates};
pub use study_file::{load_study, parse_study};

use crate::detector::Detector;
use crate::problem::Problem;
use crate::process::Study;

/// A study that was read without a problem.
#[derive(Clone, Debug)]
pub struct LoadedStudy {
    /// The study.
    pub study: Study,
    /// Every file that it depends on: the study, the detector with its efficiency tables, then a spectrum
    /// table or an event file, then simulated samples.
    pub inputs: Vec<FileDigest>,
    /// What is allowed but likely not meant.
    pub warnings: Vec<Problem>,
}

/// A detector that was read without a problem.
#[derive(Clone, Debug)]
pub struct LoadedDetector {
    /// The detector.
    pub detector: Detector,
    /// Every file that it depends on: its own, then its efficiency tables.
    pub inputs: Vec<FileDigest>,
    /// What is allowed but likely not meant.
    pub warnings: Vec<Problem>,
}
