//! The command line: one file per command, and how each of them ends.
//!
//! A command is a struct of arguments (clap) and a function `run(&args, &mut out) -> Outcome`. To add one: a file, and
//! an arm in the enum `Command` and in its `run`.

pub mod check;
pub mod fit;
mod fit_text;
pub mod fold;
mod outcome;
pub mod predict;
pub mod shape;
mod table;

pub use outcome::{Failure, Outcome};

use clap::{Parser, Subcommand};
use std::io::{BufWriter, Write};
use std::process::ExitCode;

const LONG_HELP: &str = "\
Results go to standard output, messages to standard error.

Exit status:
  0  done
  1  a problem with the input; nothing was written
  2  wrong usage
  3  a numerical failure, such as a precision that was not reached; what did work was written

Environment:
  PEAKFOLD_VECTORS=narrow  do without the wide vectors of the processor (slower, the same results)
  RAYON_NUM_THREADS=N      use N threads instead of one per processor (the same results)";

/// Fold the resolution of a detector into the line shape of a reconstructed mass
///
/// peakfold takes a detector as it was calibrated or proposed, a resonance and its decay channels,
/// and computes the shape that the resonance draws in the reconstructed mass, with the numerical
/// error of every bin.
#[derive(Debug, Parser)]
#[command(name = "peakfold", version, verbatim_doc_comment, after_long_help = LONG_HELP)]
struct Program {
    #[command(subcommand)]
    command: Command,
}

#[derive(Debug, Subcommand)]
enum Command {
    Check(check::CheckArgs),
    Fit(Box<fit::FitArgs>),
    Fold(fold::FoldArgs),
    Predict(predict::PredictArgs),
    Shape(Box<shape::ShapeArgs>),
}

impl Command {
    fn run(&self, out: &mut impl Write) -> Outcome {
        match self {
            Command::Check(args) => check::run(args, out),
            Command::Fit(args) => fit::run(args, out),
            Command::Fold(args) => fold::run(args, out),
            Command::Predict(args) => predict::run(args, out),
            Command::Shape(args) => shape::run(args, out),
        }
    }
}

/// Runs the program with the arguments of the process and returns its exit status.
pub fn run() -> ExitCode {
    let program = match Program::try_parse() {
        Ok(program) => program,
        Err(message) => {
            // Help, version or wrong usage; whoever reads may be gone already.
            let _ = message.print();
            return ExitCode::from(u8::try_from(message.exit_code()).unwrap_or(outcome::USAGE));
        }
    };
    if let Err(error) = crate::files::remove_unfinished_on_interrupt() {
        outcome::say(&format!("warning: an interrupted run may leave a temporary directory: {error}"));
    }
    let mut out = BufWriter::new(std::io::stdout().lock());
    let outcome = program.command.run(&mut out);
    // Also after a failure: what did work was computed to be read.
    let flushed = out.flush().map_err(Failure::Output);
    outcome::report(outcome.and(flushed))
}
