//! `predict`: a new mass point against a direct fold of it, and what it refuses. The detector is invented.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use peakfold::files::{load_study, read_run};
use peakfold::fold::fold_channel;
use peakfold::process::Width;
use peakfold::template::{Cumulative, LabelledTemplate, Template};
use std::fs;
use std::path::{Path, PathBuf};
use std::process::{Command, Output};
use tempfile::TempDir;

const DETECTOR: &str = r#"
name = "Small detector"

[[calorimeter]]
name = "photon-barrel"
object = "photon"
eta = [0.0, 2.6]
stochastic = 0.10
noise_gev = 0.25
constant = 0.008
tail = { alpha_low = 1.6, n_low = 4.0, alpha_high = 2.0, n_high = 8.0 }
uncertainty = { scale = 0.001, constant = 0.001 }
"#;

fn study(masses: &str, width: &str) -> String {
    format!(
        r#"
name = "Small study"
detector = "detector.toml"
precision = 1e-3

[resonance]
masses_gev = {masses}
width = {width}
production = {{ pt_mean_gev = 40.0, rapidity_sigma = 1.2 }}

[[channel]]
name = "two-photon"
legs = ["photon", "photon"]
max_abs_eta = 2.5
min_pt_over_mass = [0.35, 0.25]
mass_axis = {{ low_gev = 0.8, high_gev = 1.2, bins = 200, relative = true }}
"#
    )
}

fn peakfold(arguments: &[&str]) -> Output {
    Command::new(env!("CARGO_BIN_EXE_peakfold")).args(arguments).output().unwrap()
}

fn text(path: &Path) -> &str {
    path.to_str().unwrap()
}

/// A folded run of these masses, and the directory that holds it.
fn run_of(masses: &str, width: &str) -> (TempDir, PathBuf) {
    let folder = tempfile::tempdir().unwrap();
    fs::write(folder.path().join("detector.toml"), DETECTOR).unwrap();
    let file = folder.path().join("study.toml");
    fs::write(&file, study(masses, width)).unwrap();
    let run = folder.path().join("run");
    let output = peakfold(&["fold", text(&file), "-o", text(&run), "--quiet"]);
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    (folder, run)
}

fn direct(folder: &Path, mass_gev: f64, width: Width) -> Template {
    let mut study = load_study(&folder.join("study.toml")).unwrap().study;
    study.resonance.masses_gev = vec![mass_gev];
    study.resonance.width = width;
    fold_channel(&study, 0, mass_gev, &|_| ()).unwrap().templates.remove(0).template
}

fn predicted(out: &Path) -> LabelledTemplate {
    read_run(out).unwrap().templates.remove(0)
}

/// The issue of a good prediction: peak within 0.02 sigma_eff, sigma_eff and acceptance within 1 %, |ΔCDF| below 0.005.
fn close(prediction: &Template, truth: &Template) {
    let (a, b) = (Cumulative::of(prediction).unwrap(), Cumulative::of(truth).unwrap());
    let width = b.sigma_eff().unwrap();
    assert!((a.peak().unwrap() - b.peak().unwrap()).abs() < 0.02 * width);
    assert!((a.sigma_eff().unwrap() / width - 1.0).abs() < 0.01);
    assert!((prediction.acceptance / truth.acceptance - 1.0).abs() < 0.01);
    for edge in &truth.edges_gev {
        let (p, t) = (a.at(*edge).unwrap(), b.at(*edge).unwrap());
        assert!((p - t).abs() < 0.005, "{edge}: {p} {t}");
    }
}

#[test]
fn a_mass_between_those_of_the_run() {
    let (folder, run) = run_of("[140.0, 160.0, 180.0, 200.0]", "{ gev = 0.0 }");
    let out = folder.path().join("at-171");
    for method in ["corrected", "quantiles"] {
        let arguments = ["predict", text(&run), "--mass", "171", "--method", method, "-o", text(&out), "--replace"];
        let output = peakfold(&arguments);
        assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
        let template = predicted(&out).template;
        let whole: f64 = template.probability.iter().sum::<f64>() + template.below_axis + template.above_axis;
        assert!((whole - 1.0).abs() < 1e-9);
        close(&template, &direct(folder.path(), 171.0, Width::Gev(0.0)));
    }
    // At a folded mass the corrected template is the folded one.
    let output = peakfold(&["predict", text(&run), "--mass", "160", "-o", text(&out), "--replace"]);
    assert!(output.status.success());
    let folded = read_run(&run).unwrap().templates.into_iter().find(|t| t.mass_gev == 160.0).unwrap().template;
    for (a, b) in predicted(&out).template.probability.iter().zip(&folded.probability) {
        assert!((a - b).abs() < 1e-9);
    }
    let shapes = fs::read_to_string(out.join("shapes.csv")).unwrap();
    for quantity in ["bias_gev", "sigma_gev", "alpha_low", "n_low", "alpha_high", "n_high", "acceptance"] {
        assert!(shapes.contains(&format!(",{quantity},")), "{shapes}");
    }
}

#[test]
fn a_width_that_was_never_folded() {
    let (folder, run) = run_of("[100.0, 125.0, 150.0, 175.0, 200.0, 240.0]", "{ gev = 0.0 }");
    let out = folder.path().join("wide");
    let output = peakfold(&["predict", text(&run), "--mass", "160", "--relative-width", "0.02", "-o", text(&out)]);
    assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
    close(&predicted(&out).template, &direct(folder.path(), 160.0, Width::Relative(0.02)));
}

#[test]
fn what_is_refused() {
    let (folder, run) = run_of("[140.0, 160.0, 180.0]", "{ gev = 0.0 }");
    let out = folder.path().join("new");
    let refused = |arguments: &[&str], status: i32, words: &[&str]| {
        let mut all = vec!["predict", text(&run), "-o", text(&out)];
        all.extend(arguments);
        let output = peakfold(&all);
        let message = String::from_utf8_lossy(&output.stderr).into_owned();
        assert_eq!(output.status.code(), Some(status), "{message}");
        assert!(words.iter().all(|word| message.contains(word)), "{message}");
        assert!(!out.exists());
    };
    refused(&["--mass", "300"], 1, &["two-photon", "300", "140 to 180", "extrapolation"]);
    refused(&["--mass", "-5"], 1, &["-5", "positive"]);
    refused(&["--mass", "NaN"], 1, &["NaN", "positive"]);
    refused(&["--mass", "160", "--width", "-1"], 1, &["-1", "0 or more"]);
    refused(&["--mass", "160", "--width", "1", "--relative-width", "0.1"], 2, &["cannot be used with"]);
    refused(&["--mass", "160", "--method", "best"], 2, &["corrected", "quantiles"]);
    // A width whose shape reaches beyond the masses of the run.
    refused(&["--mass", "175", "--relative-width", "0.05"], 1, &["outside the mass points", "extrapolation"]);
    // What lies outside is marked where it is allowed.
    let output = peakfold(&["predict", text(&run), "--mass", "185", "--extrapolate", "-o", text(&out)]);
    assert!(output.status.success());
    assert!(String::from_utf8_lossy(&output.stdout).contains("extrapolated"));
    fs::remove_dir_all(&out).unwrap();

    // A touched file, another version, no run at all.
    let model = run.join("model.json");
    let good = fs::read_to_string(&model).unwrap();
    fs::write(&model, good.replace("\"low_gev\":140.0", "\"low_gev\":139.0")).unwrap();
    refused(&["--mass", "160"], 1, &["model.json", "was changed"]);
    fs::write(&model, &good).unwrap();
    let record = run.join("run.json");
    let own = fs::read_to_string(&record).unwrap();
    fs::write(
        &record,
        own.replace(&format!("\"version\": \"{}\"", env!("CARGO_PKG_VERSION")), "\"version\": \"0.0.1\""),
    )
    .unwrap();
    refused(&["--mass", "160"], 1, &["run.json", "0.0.1", "fold the study again"]);
    fs::remove_file(&record).unwrap();
    refused(&["--mass", "160"], 1, &["run.json", "cannot be read"]);
}

#[test]
fn one_mass_makes_no_model() {
    let (folder, run) = run_of("[160.0]", "{ gev = 0.0 }");
    assert!(!run.join("model.json").exists());
    let out = folder.path().join("new");
    let output = peakfold(&["predict", text(&run), "--mass", "160", "-o", text(&out)]);
    assert_eq!(output.status.code(), Some(1));
    assert!(String::from_utf8_lossy(&output.stderr).contains("one mass point"));
}

/// The events of a file have the width of their generator, and here many negative weights: they make templates and no model,
/// which is no failure.
#[test]
fn events_from_a_file_make_no_model() {
    let folder = tempfile::tempdir().unwrap();
    let detector = DETECTOR.replace("object = \"photon\"", "object = \"electron\"");
    fs::write(folder.path().join("detector.toml"), detector).unwrap();
    let events = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/dilepton_200.lhe.gz");
    let source = format!("events = {:?}", text(&events));
    let own = study("[91.188]", "{ gev = 0.0 }")
        .replace("production = { pt_mean_gev = 40.0, rapidity_sigma = 1.2 }", &source)
        .replace("precision = 1e-3", "precision = 1e-2")
        .replace("legs = [\"photon\", \"photon\"]", "legs = [\"electron\", \"electron\"]")
        .replace("width = { gev = 0.0 }\n", "")
        .replace("min_pt_over_mass = [0.35, 0.25]\n", "");
    let file = folder.path().join("study.toml");
    fs::write(&file, own).unwrap();
    let run = folder.path().join("run");
    let output = peakfold(&["fold", text(&file), "-o", text(&run), "--quiet"]);
    assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
    assert!(run.join("templates.csv").exists() && !run.join("model.json").exists());
}
