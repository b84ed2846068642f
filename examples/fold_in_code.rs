//! Folds one channel of the demo from code, with the detector as it is and with a better one.
//!
//! `cargo run --release --example fold_in_code`

use std::error::Error;
use std::path::Path;

use peakfold::files::load_study;
use peakfold::fold::{Progress, fold_channel};
use peakfold::process::Study;

/// Folds a channel at one mass and prints the width of each category.
fn print_widths(title: &str, study: &Study, channel: usize, mass_gev: f64) -> Result<(), Box<dyn Error>> {
    // The fold runs on the current rayon thread pool; the result does not depend on the number of threads.
    let silent = |_: Progress| {};
    let folded = fold_channel(study, channel, mass_gev, &silent)?;
    println!("{title}: {} points", folded.record.points);
    if !folded.record.reached {
        println!("  the precision was not reached: {:e}", folded.record.precision_reached);
    }
    for labelled in &folded.templates {
        let sigma_eff = labelled.template.widths()?.sigma_eff_gev;
        // Every value carries its numerical error; a value is `None` where the axis does not hold it.
        if let (Some(value), Some(error)) = (sigma_eff.value, sigma_eff.error) {
            println!("  {:8} sigma_eff = {value:.4} +- {error:.4} GeV", labelled.category);
        }
    }
    Ok(())
}

fn main() -> Result<(), Box<dyn Error>> {
    // A study and its detector, checked: from here on nothing in it is missing or out of range.
    let path = Path::new(env!("CARGO_MANIFEST_DIR")).join("calib-demo/study.toml");
    let mut study = load_study(&path)?.study;
    let channel = study.channels.iter().position(|c| c.name == "two-photon").ok_or("the demo has no such channel")?;
    let mass_gev = 190.0;
    print_widths("as it is", &study, channel, mass_gev)?;

    // The study is plain data: change what you like and fold again. Here: half the constant term of every calorimeter.
    for calorimeter in &mut study.detector.calorimeters {
        calorimeter.constant *= 0.5;
    }
    print_widths("half the constant term", &study, channel, mass_gev)
}
