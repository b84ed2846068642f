//! The `fold` command behind its file reading: what it writes, prints and returns.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use clap::Parser;
use peakfold::cli::fold::{FoldArgs, FoldFailure, Loaded, Outcome, run};
use peakfold::detector::{Calorimeter, Detector, EtaRange, Object};
use peakfold::files::{FileDigest, read_run};
use peakfold::problem::{Problem, Problems};
use peakfold::process::{
    Category, Channel, Cuts, Decay, EventSource, Intermediate, MassAxis, Natural, Production, Resonance, ShapeChoice,
    Study, Width,
};
use std::path::Path;

#[derive(Parser)]
struct Line {
    #[command(flatten)]
    args: FoldArgs,
}

fn args(out: &Path, more: &[&str]) -> FoldArgs {
    let line = ["fold", "study.toml", "-o", out.to_str().unwrap()];
    Line::try_parse_from(line.iter().chain(more)).unwrap().args
}

/// Two photons of 1 % each, at rest: sigma_m/m = 1 %/sqrt(2).
fn loaded(max_points: u64) -> Loaded {
    let calorimeter = Calorimeter {
        name: "ecal".to_owned(),
        object: Object::Photon,
        eta: EtaRange { low: 0.0, high: 3.0 },
        stochastic: 0.0,
        noise_gev: 0.0,
        constant: 0.01,
        bias: 0.0,
        scale: 0.0,
        tail: None,
        fraction: 1.0,
        uncertainties: Vec::new(),
    };
    let category = |name: &str, max_abs_eta| Category { name: name.to_owned(), max_abs_eta };
    let study = Study {
        name: "small".to_owned(),
        detector: Detector {
            name: "plain".to_owned(),
            calorimeters: vec![calorimeter],
            trackers: Vec::new(),
            directions: Vec::new(),
            vertex: None,
        },
        seed: 1,
        precision: 1e-3,
        max_points,
        resonance: Resonance {
            masses_gev: vec![150.0, 200.0],
            width: Width::Gev(0.0),
            natural: Natural::Relativistic,
            falloff_power: 0.0,
            source: EventSource::Generated(Production::Spectrum { pt_mean_gev: 0.0, rapidity_sigma: 0.0 }),
            intermediate: Intermediate { mass_gev: 91.188, width_gev: 2.4955 },
        },
        channels: vec![Channel {
            name: "two-photon".to_owned(),
            decay: Decay::Direct(vec![Object::Photon, Object::Photon]),
            cuts: Cuts { max_abs_eta: Some(2.5), ..Cuts::default() },
            axis: MassAxis { low: 0.9, high: 1.1, bins: 100, relative: true },
            shape: ShapeChoice::Gaussian,
            categories: vec![category("central", Some(1.0)), category("rest", None)],
        }],
    };
    let digest = |path: &str, fill: &str| FileDigest { path: path.to_owned(), sha256: fill.repeat(64) };
    Loaded { study, inputs: vec![digest("study.toml", "1"), digest("detector.toml", "2")], warnings: Vec::new() }
}

#[test]
fn a_run_is_written_and_its_table_printed() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    let mut screen = Vec::new();
    let outcome = run(&args(&out, &["--threads", "1", "--quiet"]), |_| Ok(loaded(1 << 24)), &mut screen).unwrap();
    assert_eq!((outcome, outcome.status()), (Outcome::Done, 0));
    let screen = String::from_utf8(screen).unwrap();
    println!("{screen}");
    let lines: Vec<&str> = screen.lines().collect();
    for word in ["channel", "category", "mass [GeV]", "acceptance", "peak [GeV]", "sigma_eff [GeV]", "FWHM [GeV]"] {
        assert!(lines[0].contains(word), "{word}");
    }
    for (line, start) in lines[1..5].iter().zip(["central", "rest", "central", "rest"]) {
        assert!(line.starts_with("two-photon") && line.contains(start), "{line}");
    }
    assert!(screen.contains("Written to"));
    let read = read_run(&out).unwrap();
    assert_eq!(read.templates.len(), 4);
    assert!(out.join("figures/two-photon.svg").is_file());
    for labelled in &read.templates {
        // At rest both photons have m/2 and the angle is exact; the product of two 1 % Gaussians is Gaussian to 1e-4.
        let sigma = labelled.template.widths().unwrap().sigma_eff_gev.value.unwrap();
        let expected = 0.01 / f64::sqrt(2.0) * labelled.mass_gev;
        assert!((sigma / expected - 1.0).abs() < 1e-3, "{sigma} {expected}");
    }
    // Another number of threads: the same bytes, and the same inputs replace without asking.
    let first = std::fs::read(out.join("templates.csv")).unwrap();
    run(&args(&out, &["--threads", "2", "--quiet"]), |_| Ok(loaded(1 << 24)), &mut Vec::new()).unwrap();
    assert_eq!(std::fs::read(out.join("templates.csv")).unwrap(), first);
}

#[test]
fn a_precision_not_reached_is_status_3_with_results() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    let load = |_: &Path| {
        let mut loaded = loaded(1 << 10);
        loaded.study.precision = 1e-9;
        Ok(loaded)
    };
    let outcome = run(&args(&out, &["--quiet"]), load, &mut Vec::new()).unwrap();
    assert_eq!((outcome, outcome.status()), (Outcome::NotReached, 3));
    let read = read_run(&out).unwrap();
    assert_eq!(read.record.not_reached.len(), 2);
    assert!(read.record.folds.iter().all(|fold| !fold.reached && fold.precision_reached.unwrap() > 1e-9));
}

#[test]
fn problems_are_status_1_and_nothing_is_written() {
    let place = tempfile::tempdir().unwrap();
    let out = place.path().join("out");
    let load = |path: &Path| Err(Problems::from(Problem::of_file(path, "is wrong")));
    let failure = run(&args(&out, &[]), load, &mut Vec::new()).unwrap_err();
    assert_eq!((failure.status(), failure.to_string().as_str()), (1, "study.toml: is wrong"));
    // The place is looked at before the work: this study would take far longer than a test may.
    std::fs::write(&out, "mine").unwrap();
    let load = |_: &Path| {
        let mut loaded = loaded(u64::MAX);
        loaded.study.precision = 1e-300;
        Ok(loaded)
    };
    let failure = run(&args(&out, &["--replace"]), load, &mut Vec::new()).unwrap_err();
    assert!(matches!(failure, FoldFailure::Target(_)) && failure.status() == 1, "{failure}");
    assert_eq!(std::fs::read_dir(place.path()).unwrap().count(), 1);
}

#[test]
fn options_are_checked() {
    let parse = |line: &[&str]| Line::try_parse_from(line).map(|_| ());
    assert!(parse(&["fold", "study.toml", "-o", "out", "--threads", "0"]).is_err());
    assert!(parse(&["fold", "study.toml"]).is_err(), "no output directory");
    assert!(parse(&["fold", "-o", "out"]).is_err(), "no study");
    assert!(parse(&["fold", "study.toml", "--output", "out", "--replace"]).is_ok());
}
