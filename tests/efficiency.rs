//! Efficiencies of legs: against closed forms, against the plain path, in folds of event files, and in what a run writes.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod common;

use peakfold::detector::{Efficiency, EfficiencyCell, EfficiencyCurve, EtaRange, Object};
use peakfold::events::{EventBatch, Selector};
use peakfold::events::{EventFile, Options};
use peakfold::fold::{Folded, fold_channel, fold_shifted, plain};
use peakfold::kinematics::TruthEvent;
use peakfold::process::{Decay, EventList, EventSource, MassAxis, Natural, Study, Width};
use peakfold::template::Template;
use quadrature::integrate;
use std::path::{Path, PathBuf};
use std::process::Command;

fn fold(study: &Study) -> Folded {
    fold_channel(study, 0, study.resonance.masses_gev[0], &|_| ()).expect("a template")
}

fn entry(object: Object, curve: EfficiencyCurve) -> Efficiency {
    let name = format!("{object}-efficiency");
    Efficiency { name, object, eta: EtaRange { low: 0.0, high: f64::INFINITY }, curve, uncertainties: Vec::new() }
}

fn turn_on(threshold_gev: f64, width_gev: f64, plateau: f64) -> EfficiencyCurve {
    EfficiencyCurve::TurnOn { threshold_gev, width_gev, plateau }
}

/// Cells of (pT from, pT to, |eta| from, |eta| to, efficiency).
fn table(cells: &[(f64, f64, f64, f64, f64)]) -> EfficiencyCurve {
    let cell = |&(from, to, low, high, efficiency): &(f64, f64, f64, f64, f64)| EfficiencyCell {
        pt_gev: (from, to),
        eta: EtaRange { low, high },
        efficiency,
    };
    EfficiencyCurve::Table(cells.iter().map(cell).collect())
}

// --- closed forms ---

/// Two photons of a resonance of 125 GeV at rest: both have pT = 62.5 GeV sin(theta), cos(theta) uniform.
fn photons_at_rest(curve: EfficiencyCurve, min_efficient_legs: Option<usize>) -> Study {
    let mut detector = common::empty_detector();
    detector.calorimeters = vec![common::calorimeter("photons", Object::Photon, common::EVERYWHERE, 0.01)];
    detector.efficiencies = vec![entry(Object::Photon, curve)];
    let mut channel = common::channel("two-photon", Decay::Direct(vec![Object::Photon; 2]));
    channel.min_efficient_legs = min_efficient_legs;
    let mut study = common::at_rest(common::study(detector, 125.0, channel));
    // All points are used.
    study.precision = 1e-12;
    study.max_points = 1 << 19;
    study
}

fn assert_acceptance(template: &Template, expected: f64) {
    let (found, error) = (template.acceptance, template.acceptance_error);
    assert!(error < 1e-4 * expected, "{error:e} of {expected}");
    assert!((found - expected).abs() < 5.0 * error + 1e-9, "found {found} +- {error:e}, expected {expected}");
}

/// Mean over 0 <= cos(theta) < `end` of the probability that both, or any, of two legs are found.
fn mean_over_angle(end: f64, threshold: f64, width: f64, plateau: f64, any: bool) -> f64 {
    let integrand = |c: f64| {
        let pt = 62.5 * (1.0 - c * c).sqrt();
        let leg = 0.5 * plateau * (1.0 + libm::erf((pt - threshold) / (std::f64::consts::SQRT_2 * width)));
        if any { 1.0 - (1.0 - leg) * (1.0 - leg) } else { leg * leg }
    };
    let piece = |i: i32| integrate(integrand, end * f64::from(i) / 50.0, end * f64::from(i + 1) / 50.0, 1e-13).integral;
    (0..50).map(piece).sum::<f64>() / end
}

#[test]
fn a_turn_on_at_rest_is_an_integral_over_the_angle() {
    for (threshold, width, plateau) in [(50.0, 4.0, 0.95), (60.0, 1.5, 1.0), (20.0, 10.0, 0.3), (75.0, 2.0, 0.9)] {
        for (legs, any) in [(None, false), (Some(2), false), (Some(1), true)] {
            let mut study = photons_at_rest(turn_on(threshold, width, plateau), legs);
            let expected = mean_over_angle(1.0, threshold, width, plateau, any);
            let template = &fold(&study).templates[0].template;
            assert_acceptance(template, expected);
            // Nothing else loses events here.
            assert!((template.efficiency - template.acceptance).abs() < 1e-12);
            if threshold == 50.0 {
                // Within |eta| < 1, directions being exact: the efficiency alone is the mean over what is left.
                study.channels[0].cuts.max_abs_eta = Some(1.0);
                let inside = mean_over_angle(libm::tanh(1.0), threshold, width, plateau, any);
                let template = &fold(&study).templates[0].template;
                assert_acceptance(template, inside * libm::tanh(1.0));
                let off = (template.efficiency - inside).abs();
                assert!(template.efficiency_error < 1e-5 && off < 5.0 * template.efficiency_error + 1e-9, "{off:e}");
            }
        }
    }
}

#[test]
fn a_step_and_a_table_at_rest_are_areas() {
    // pT > 50 GeV is |cos theta| < 0.6.
    assert_acceptance(&fold(&photons_at_rest(turn_on(50.0, 0.0, 0.9), None)).templates[0].template, 0.81 * 0.6);
    // pT > 30 GeV is |cos theta| < sqrt(1 - 0.48²); |eta| < 0.5 is |cos theta| < tanh(0.5). Of the upper cell an edge at
    // 0.2 that changes nothing.
    let cells = table(&[
        (30.0, 50.0, 0.0, 9.0, 0.5),
        (50.0, 1e6, 0.0, 0.2, 0.9),
        (50.0, 1e6, 0.2, 0.5, 0.9),
        (50.0, 1e6, 0.5, 9.0, 0.7),
    ]);
    let (inner, upper, lower) = (libm::tanh(0.5), 0.6, (1.0f64 - 0.48 * 0.48).sqrt());
    let areas = [inner, upper - inner, lower - upper];
    for (legs, found) in [(None, [0.81, 0.49, 0.25]), (Some(1), [0.99, 0.91, 0.75])] {
        let folded = fold(&photons_at_rest(cells.clone(), legs));
        let expected = areas.iter().zip(found).map(|(area, found)| area * found).sum();
        assert_acceptance(&folded.templates[0].template, expected);
        // What lies below 30 GeV is told.
        let [note] = folded.record.notes.as_slice() else { panic!("{:?}", folded.record.notes) };
        let (percent, text) = note.split_once(" % of the generated weight ").unwrap();
        assert!((percent.parse::<f64>().unwrap() - 100.0 * (1.0 - lower)).abs() < 0.02, "{note}");
        assert!(text.contains("outside of every cell"), "{note}");
    }
}

/// Efficiencies that are the same for every leg of an object factorise, whatever the kinematics: the sum over the outcomes
/// of four legs is written out here.
#[test]
fn constant_efficiencies_factorise_exactly() {
    let (electron, muon) = (0.9, 0.6);
    let mut study = common::cascade_study(200.0, Object::Electron, Object::Muon);
    study.max_points = 1 << 14;
    let plain_acceptance = fold(&study).templates[0].template.clone();
    assert_eq!((plain_acceptance.efficiency, plain_acceptance.efficiency_error), (1.0, 0.0));
    study.detector.efficiencies = vec![
        entry(Object::Electron, turn_on(0.0, 0.0, electron)),
        entry(Object::Muon, table(&[(0.0, 1e9, 0.0, 99.0, muon)])),
    ];
    for wanted in 1..=4 {
        let mut expected = 0.0;
        for outcome in 0..16u32 {
            let leg = |index: u32| if index < 2 { electron } else { muon };
            let chance = |index| if outcome >> index & 1 == 1 { leg(index) } else { 1.0 - leg(index) };
            if outcome.count_ones() >= wanted {
                expected += (0..4).map(chance).product::<f64>();
            }
        }
        study.channels[0].min_efficient_legs = Some(wanted as usize);
        let folded = fold(&study);
        let template = &folded.templates[0].template;
        assert!((template.efficiency - expected).abs() < 1e-13, "{wanted}: {} {expected}", template.efficiency);
        let acceptance = expected * plain_acceptance.acceptance;
        assert!((template.acceptance - acceptance).abs() < 1e-13, "{wanted}: {} {acceptance}", template.acceptance);
        assert!((template.lost - expected * plain_acceptance.lost).abs() < 1e-13);
        // The shape does not change.
        for (a, b) in template.probability.iter().zip(&plain_acceptance.probability) {
            assert!((a - b).abs() < 1e-12, "{a} {b}");
        }
        assert!(folded.record.notes.is_empty(), "{:?}", folded.record.notes);
    }
    // Electrons are always found without an entry, and then any one leg is.
    study.detector.efficiencies.remove(0);
    for (wanted, expected) in [(1, 1.0), (2, 1.0), (3, 1.0 - 0.4 * 0.4), (4, 0.36)] {
        study.channels[0].min_efficient_legs = Some(wanted);
        assert!((fold(&study).templates[0].template.efficiency - expected).abs() < 1e-13);
    }
}

/// A plateau moved by 0.02 multiplies the acceptance by the square of the ratio, on both of two legs.
#[test]
fn a_plateau_is_a_number_that_shifts() {
    let mut study = photons_at_rest(turn_on(50.0, 4.0, 0.9), None);
    study.max_points = 1 << 14;
    let nominal = fold(&study);
    let term = study.detector.find_term("photon-efficiency.plateau").unwrap();
    let mut shifted = study.detector.clone();
    shifted.set_value(&term, 0.92);
    let up = fold_shifted(&study, &shifted, 0, &nominal.record, &|_| ()).unwrap();
    let ratio = up.templates[0].template.acceptance / nominal.templates[0].template.acceptance;
    assert!((ratio - (0.92f64 / 0.9).powi(2)).abs() < 1e-13, "{ratio}");
    assert!(!term.allowed().contains(1.001) && !term.allowed().contains(0.0) && term.allowed().contains(1.0));
}

// --- the plain path ---

/// Every category agrees with the plain path, which draws each leg: shape, acceptance, losses, efficiency.
fn agrees(study: &Study, seed: u64) {
    const EVENTS: u64 = 600_000;
    let folded = fold(study);
    assert!(folded.record.reached, "precision {:e}", folded.record.precision_reached);
    let sample = plain::smear_generated(study, 0, study.resonance.masses_gev[0], EVENTS, seed).expect("plain masses");
    for (category, labelled) in sample.categories.iter().zip(&folded.templates) {
        let template = &labelled.template;
        let index = folded.templates.iter().position(|other| other == labelled).unwrap();
        let comparison = common::compare::compare(&sample, index, template);
        let efficiency = category.accepted_weight() / category.unfiltered_weight;
        let error = (efficiency * (1.0 - efficiency) / category.unfiltered_weight).sqrt() + template.efficiency_error;
        println!("{}: {comparison:?} efficiency {efficiency} {} +- {error}", labelled.category, template.efficiency);
        assert!(comparison.agrees(), "{}: {comparison:?}", labelled.category);
        assert!(category.masses_gev.len() > 3000, "{}", category.masses_gev.len());
        assert!(efficiency < 0.97 && (efficiency - template.efficiency).abs() < 4.5 * error);
        let lost = category.lost_weight / sample.generated_weight;
        // The engine samples the losses of all legs but the last.
        let lost_error = (lost.max(1e-6) * (1.0 / EVENTS as f64 + 3.0 / folded.record.points as f64)).sqrt();
        assert!((lost - template.lost).abs() < 5.0 * lost_error, "lost {lost:e} {:e}", template.lost);
    }
}

#[test]
fn photons_near_their_threshold_agree_with_plain_drawing() {
    // A wide resonance whose lower half is cut away by the turn-on.
    let mut study = common::photon_study();
    study.resonance.width = Width::Gev(8.0);
    study.resonance.natural = Natural::BreitWigner;
    study.detector.efficiencies = vec![entry(Object::Photon, turn_on(62.0, 2.0, 0.95))];
    study.precision = 3e-3;
    agrees(&study, 1);
    let without = Study { detector: common::full_detector(), ..study.clone() };
    let half = |study: &Study| {
        let t = &fold(study).templates[0].template;
        t.below_axis + t.probability[..100].iter().sum::<f64>()
    };
    assert!(half(&study) < half(&without) - 0.05, "the turn-on shapes the peak");
}

#[test]
fn a_table_and_regions_agree_with_plain_drawing() {
    let mut study = common::photon_study();
    let cells = table(&[
        (20.0, 45.0, 0.0, 1.0, 0.55),
        (45.0, 70.0, 0.0, 0.6, 0.9),
        (45.0, 90.0, 0.6, 1.0, 0.8),
        (70.0, 1e6, 0.0, 0.6, 0.95),
        (30.0, 1e6, 1.0, 2.0, 0.7),
    ]);
    let inner = Efficiency { eta: EtaRange { low: 0.0, high: 1.8 }, ..entry(Object::Photon, cells) };
    study.detector.efficiencies = vec![inner, entry(Object::Photon, turn_on(40.0, 5.0, 0.85))];
    study.precision = 5e-4;
    agrees(&study, 2);
}

#[test]
fn one_of_two_electrons_agrees_with_plain_drawing() {
    let mut study = common::electron_study();
    study.detector.efficiencies = vec![entry(Object::Electron, turn_on(50.0, 6.0, 0.9))];
    study.channels[0].min_efficient_legs = Some(1);
    study.precision = 5e-4;
    agrees(&study, 3);
}

#[test]
fn two_of_four_leptons_agree_with_plain_drawing() {
    let mut study = common::cascade_study(200.0, Object::Electron, Object::Muon);
    let cells = table(&[(10.0, 40.0, 0.0, 9.0, 0.4), (40.0, 1e6, 0.0, 9.0, 0.8)]);
    study.detector.efficiencies = vec![entry(Object::Electron, turn_on(60.0, 5.0, 0.8)), entry(Object::Muon, cells)];
    study.channels[0].min_efficient_legs = Some(2);
    study.precision = 5e-4;
    agrees(&study, 4);
}

// --- events of a file ---

/// 200 events of `dilepton_events.lhe.gz` (open test data from scikit-hep-testdata, BSD-3).
fn extract() -> PathBuf {
    Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/data/dilepton_200.lhe.gz")
}

/// The truth events of the channel, as the reader picks them.
fn truth(study: &Study) -> Vec<TruthEvent> {
    let selector = Selector::new(&study.channels[0].decay, 91.188).unwrap();
    let mut file = EventFile::open(&extract(), &Options::default()).unwrap();
    let (mut batch, mut events) = (EventBatch::default(), Vec::new());
    while file.next_batch(&mut batch).unwrap() {
        events.extend(batch.events().filter_map(|event| selector.select(&event).ok()));
    }
    events
}

/// Without cuts and losses, each event is accepted with the probability that its legs are covered and found: the sums over
/// the list, and what they say of its errors, are written out.
#[test]
fn a_list_has_the_weighted_mean_of_its_efficiencies() {
    let reach = 2.0;
    let mut detector = common::empty_detector();
    detector.trackers = vec![common::tracker("tracker", Object::Muon, EtaRange { low: 0.0, high: reach }, 1e-4, 0.012)];
    let mut channel = common::channel("pair", Decay::Direct(vec![Object::Muon; 2]));
    channel.axis = MassAxis { low: 60.0, high: 120.0, bins: 60, relative: false };
    let mut study = common::study(detector, 91.188, channel);
    study.resonance.source = EventSource::File(EventList { path: extract(), weight: None });
    study.precision = 1e-2;
    let before = fold(&study);
    for wanted in [1, 2] {
        study.detector.efficiencies = vec![entry(Object::Muon, turn_on(40.0, 3.0, 0.9))];
        study.channels[0].min_efficient_legs = Some(wanted);
        let folded = fold(&study);
        let template = &folded.templates[0].template;
        // By event: weight, weight where covered, and that times the chance to be found.
        let rows: Vec<[f64; 3]> = truth(&study)
            .iter()
            .map(|event| {
                let chance = |leg: &peakfold::kinematics::TruthLeg| {
                    let pt = libm::hypot(leg.px_gev, leg.py_gev);
                    0.45 * (1.0 + libm::erf((pt - 40.0) / (3.0 * std::f64::consts::SQRT_2)))
                };
                let [a, b] = [chance(&event.legs[0]), chance(&event.legs[1])];
                let found = if wanted == 2 { a * b } else { a + b - a * b };
                let covered = event.legs[..2]
                    .iter()
                    .all(|leg| libm::asinh(leg.pz_gev.abs() / libm::hypot(leg.px_gev, leg.py_gev)) < reach);
                let weight = if covered { event.weight } else { 0.0 };
                [event.weight, weight, weight * found]
            })
            .collect();
        let sum = |k: usize| rows.iter().map(|row| row[k]).sum::<f64>();
        let error = |k: usize, l: usize| {
            let ratio = sum(k) / sum(l);
            rows.iter().map(|row| (row[k] - ratio * row[l]).powi(2)).sum::<f64>().sqrt() / sum(l).abs()
        };
        let close = |found: f64, expected: f64, what: &str| {
            assert!((found / expected - 1.0).abs() < 1e-9, "{what} of {wanted}: {found}, expected {expected}");
        };
        close(template.acceptance, sum(2) / sum(0), "acceptance");
        close(template.acceptance_list_error, error(2, 0), "its list error");
        close(template.efficiency, sum(2) / sum(1), "efficiency");
        close(template.efficiency_list_error, error(2, 1), "its list error");
        let squares: f64 = rows.iter().map(|row| row[0] * row[0]).sum();
        close(folded.record.events_effective.unwrap(), sum(0) * sum(0) / squares, "effective number");
        assert_eq!(folded.record.events_effective, before.record.events_effective);
    }
}

// --- the program ---

const DETECTOR: &str = r#"
name = "Small"
[[calorimeter]]
name = "photons"
object = "photon"
eta = [0.0, 2.5]
stochastic = 0.1
[[calorimeter]]
name = "jets"
object = "jet"
eta = [0.0, 2.5]
stochastic = 0.6
[[efficiency]]
object = "photon"
threshold_gev = 40.0
width_gev = 4.0
plateau = 0.9
uncertainty = { plateau = 0.01 }
[[efficiency]]
name = "jet-trigger"
object = "jet"
table = "jets.csv"
"#;

const STUDY: &str = r#"
name = "Small study"
detector = "detector.toml"
precision = 5e-3
[resonance]
masses_gev = [125.0]
production = { pt_mean_gev = 40.0, rapidity_sigma = 1.2 }
[[channel]]
name = "two-photon"
legs = ["photon", "photon"]
min_efficient_legs = 1
mass_axis = { low_gev = 80.0, high_gev = 170.0, bins = 90 }
[[channel]]
name = "photon-jet"
legs = ["photon", "jet"]
mass_axis = { low_gev = 40.0, high_gev = 220.0, bins = 90 }
"#;

fn peakfold(directory: &Path, vectors: &str, arguments: &[&str]) -> String {
    let output = Command::new(env!("CARGO_BIN_EXE_peakfold"))
        .args(arguments)
        .current_dir(directory)
        .env("PEAKFOLD_VECTORS", vectors)
        .output()
        .unwrap();
    assert_eq!(output.status.code(), Some(0), "{}", String::from_utf8_lossy(&output.stderr));
    String::from_utf8(output.stdout).unwrap()
}

#[test]
fn a_run_tells_the_efficiency_and_is_the_same_bytes_everywhere() {
    let directory = tempfile::tempdir().unwrap();
    let directory = directory.path();
    let write = |name: &str, text: &str| std::fs::write(directory.join(name), text).unwrap();
    write("detector.toml", DETECTOR);
    write("study.toml", STUDY);
    write("jets.csv", "pt_low_gev,pt_high_gev,efficiency\n30,60,0.5\n60,1e6,0.9\n");
    let read = |name: &str| std::fs::read_to_string(directory.join(name)).unwrap();

    let shown = peakfold(directory, "wide", &["fold", "study.toml", "-o", "wide", "--threads", "2"]);
    peakfold(directory, "narrow", &["fold", "study.toml", "-o", "narrow", "--threads", "1"]);
    assert_eq!(read("wide/templates.csv"), read("narrow/templates.csv"));
    assert_eq!(read("wide/summary.csv"), read("narrow/summary.csv"));
    let header = shown.lines().next().unwrap().split("  ").map(str::trim).filter(|word| !word.is_empty());
    assert_eq!(header.collect::<Vec<_>>()[3..5], ["acceptance", "efficiency"]);
    let note = shown.lines().find(|line| line.contains("outside of every cell")).unwrap();
    assert!(note.starts_with("photon-jet at 125 GeV: "), "{note}");

    let run = peakfold::files::read_run(&directory.join("wide")).unwrap();
    assert!(run.record.inputs.iter().any(|input| input.path.ends_with("jets.csv")), "{:?}", run.record.inputs);
    assert_eq!(run.record.folds[1].notes.len(), 1);
    for labelled in &run.templates {
        let t = &labelled.template;
        assert!(t.efficiency > 0.3 && t.efficiency < 0.99 && t.acceptance < t.efficiency, "{t:?}");
        assert!(t.efficiency_error > 0.0 && t.efficiency_list_error == 0.0);
    }

    // The table on the screen has no column of ones.
    write("detector.toml", DETECTOR.split("[[efficiency]]").next().unwrap());
    write("study.toml", &STUDY.replace("min_efficient_legs = 1\n", ""));
    let shown = peakfold(directory, "wide", &["fold", "study.toml", "-o", "plain"]);
    assert!(!shown.contains("efficiency"), "{shown}");
    let run = peakfold::files::read_run(&directory.join("plain")).unwrap();
    assert!(run.templates.iter().all(|labelled| labelled.template.efficiency == 1.0));
}

#[test]
fn check_describes_efficiencies() {
    let directory = tempfile::tempdir().unwrap();
    let directory = directory.path();
    let write = |name: &str, text: &str| std::fs::write(directory.join(name), text).unwrap();
    write("detector.toml", DETECTOR);
    write("study.toml", &STUDY.replace("[\"photon\", \"jet\"]", "[\"photon\", \"photon\"]"));
    write("jets.csv", "pt_low_gev,pt_high_gev,efficiency\n30,60,0.5\n60,1e6,0.9\n");
    let report = peakfold(directory, "wide", &["check", "study.toml"]);
    // Normal distribution function at -7.5, -5, 2.5 and 15 (published tables: 2.867e-7 at -5, 0.9937903 at 2.5).
    let expected = "\
  photon efficiency, in the middle of the region, in % at pT
    |eta|         entry                10 GeV    20 GeV    50 GeV   100 GeV
    0 to 2.5      photon-efficiency     0.000     0.000    89.441    90.000
                  half of the plateau 0.9 at 40 GeV, turn-on width 4 GeV
                  known to: plateau 0.01
";
    assert!(report.contains(expected), "{report}");
    let expected = "\
    0 to 2.5      jet-trigger           0.000     0.000    50.000    90.000
                  a table of 2 cells, pT 30 to 1000000 GeV; 0 outside of its cells
";
    assert!(report.contains(expected), "{report}");
    assert!(report.contains("\n  efficiency  at least 1 of the 2 legs must be found\n"), "{report}");
    assert!(report.contains("\n  efficiency  every leg must be found\n"), "{report}");
}
