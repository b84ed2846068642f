//! The command line: one file per command.

pub mod fold;
mod table;

use std::process::ExitCode;

/// Runs the program with the arguments of the process and returns its exit status.
pub fn run() -> ExitCode {
    ExitCode::SUCCESS
}
