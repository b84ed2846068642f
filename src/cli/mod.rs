//! The command line: one file per command.

pub mod shape;

use std::process::ExitCode;

use clap::{Parser, Subcommand};

/// Folds detector resolution into the line shape of a reconstructed mass
#[derive(Parser)]
#[command(version, about)]
struct Program {
    #[command(subcommand)]
    command: Command,
}

#[derive(Subcommand)]
enum Command {
    Shape(shape::ShapeArgs),
}

/// Runs the program with the arguments of the process and returns its exit status.
pub fn run() -> ExitCode {
    match Program::parse().command {
        Command::Shape(args) => match shape::run(&args, &mut std::io::stdout().lock()) {
            Ok(()) => ExitCode::SUCCESS,
            Err(failure) => {
                eprintln!("error: {failure}");
                ExitCode::from(failure.status())
            }
        },
    }
}
