//! How a command ends: done, or a failure with its exit status.

use crate::files::TargetError;
use crate::problem::{Problem, Problems};
use std::io::{ErrorKind, Write};
use std::process::ExitCode;

/// Exit status after a problem with the input.
const INPUT: u8 = 1;
/// Exit status after wrong usage.
pub(super) const USAGE: u8 = 2;
/// Exit status after a numerical failure.
const NUMERICAL: u8 = 3;

/// Why a command did not do all of its job. A message may have several lines, one for each thing to mend.
#[derive(Debug, thiserror::Error)]
pub enum Failure {
    /// A problem with the input, or with a file or directory to write; nothing was written. Exit status 1.
    #[error("{0}")]
    Input(String),
    /// Options that do not go together. Exit status 2.
    #[error("{0}")]
    Usage(String),
    /// A numerical failure: what did work is written. Exit status 3.
    #[error("{0}")]
    Numerical(String),
    /// Standard output cannot be written. Exit status 1, unless the reader merely stopped reading: then 0.
    #[error("standard output: {0}")]
    Output(#[source] std::io::Error),
}

/// What a command returns.
pub type Outcome = Result<(), Failure>;

impl From<Problems> for Failure {
    fn from(problems: Problems) -> Self {
        Failure::Input(problems.to_string())
    }
}

impl From<TargetError> for Failure {
    fn from(error: TargetError) -> Self {
        Failure::Input(error.to_string())
    }
}

impl From<Problem> for Failure {
    fn from(problem: Problem) -> Self {
        Failure::Input(problem.to_string())
    }
}

impl Failure {
    /// Exit status of the program.
    pub fn status(&self) -> u8 {
        match self {
            Failure::Output(error) if error.kind() == ErrorKind::BrokenPipe => 0,
            Failure::Input(_) | Failure::Output(_) => INPUT,
            Failure::Usage(_) => USAGE,
            Failure::Numerical(_) => NUMERICAL,
        }
    }
}

/// Prints what is to be said about an outcome to standard error and turns it into the exit status.
pub(super) fn report(outcome: Outcome) -> ExitCode {
    let Err(failure) = outcome else { return ExitCode::SUCCESS };
    let status = failure.status();
    if status != 0 {
        say(&failure.to_string());
    }
    ExitCode::from(status)
}

/// Prints a message to standard error, each line marked as the program's.
pub(super) fn say(message: &str) {
    let mut stderr = std::io::stderr().lock();
    for line in message.lines() {
        // Nobody is left to be told when standard error is closed.
        let _ = writeln!(stderr, "peakfold: {line}");
    }
}
