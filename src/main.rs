//! The program `peakfold`: a thin face on the library.

fn main() -> std::process::ExitCode {
    peakfold::cli::run()
}
