//! Reading and leg picking against an independent reader in Python (`tests/interop/lhe_read.py`, standard library only): which
//! events are used, weights, truth masses and momenta of the two-electron and the two-muon channel, for every way to choose
//! legs, bare and dressed.
//!
//! Weights, momenta and masses from a column are the same bits, because both sides round decimal numbers correctly. Invariant
//! masses come from two formulas: each loses at most a few units of 1e-16 E²/m² of m², and E/m stays below 100 here, hence 1e-11.
//! Momenta of dressed leptons are sums in another order, good to 1e-14 of the energy; their masses lose a few units of
//! 1e-16 E²/m as above, hence 1e-12 E² in m².
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod lhe_support;

use std::collections::HashMap;
use std::io::Read;
use std::path::Path;
use std::process::Command;

use lhe_support::*;
use peakfold::detector::Object::{Electron, Muon};
use peakfold::events::{Selection, Selector};
use peakfold::process::{Ancestry, Decay, LegChoice, Pick};

const INVARIANT_MASS_TOLERANCE: f64 = 1e-11;

/// A float in the form of `float.hex` of Python: [-]0x1.hhhhhhhhhhhhhp[+-]d, or 0x0.0p+0.
fn from_hex(text: &str) -> f64 {
    let (sign, digits) = text.strip_prefix('-').map_or((1.0, text), |rest| (-1.0, rest));
    let (mantissa, exponent) = digits.strip_prefix("0x").unwrap().split_once('p').unwrap();
    let (whole, fraction) = mantissa.split_once('.').unwrap();
    let scale = 16_f64.powi(fraction.len() as i32);
    let bits = u64::from_str_radix(&format!("{whole}{fraction}"), 16).unwrap();
    sign * (bits as f64 / scale) * 2_f64.powi(exponent.parse().unwrap())
}

/// Number of the event that begins on a line, from 1.
fn event_numbers(path: &Path) -> HashMap<usize, u64> {
    let mut text = String::new();
    flate2::read::GzDecoder::new(std::fs::File::open(path).unwrap()).read_to_string(&mut text).unwrap();
    let begins = text.lines().enumerate().filter(|(_, line)| line.trim_start().starts_with("<event"));
    begins.zip(1..).map(|((index, _), number)| (index + 1, number)).collect()
}

fn python() -> Option<&'static str> {
    ["python3", "python"]
        .into_iter()
        .find(|name| Command::new(name).arg("--version").output().is_ok_and(|o| o.status.success()))
}

/// Whether two numbers of dressed legs agree: four numbers a leg, momentum and mass.
fn same_legs(ours: &[f64], theirs: &[f64]) -> bool {
    ours.chunks(4).zip(theirs.chunks(4)).all(|(a, b)| {
        let energy = a.iter().map(|x| x * x).sum::<f64>().sqrt();
        let momenta = a[..3].iter().zip(&b[..3]).all(|(x, y)| (x - y).abs() <= 1e-14 * energy);
        momenta && (a[3] * a[3] - b[3] * b[3]).abs() <= 1e-12 * energy * energy
    })
}

/// Compares both channels of a file; gives the number of events used.
fn compare(path: &Path, choice: LegChoice, delta_r: Option<f64>) -> u64 {
    let Some(python) = python() else {
        println!("skipped: no Python here");
        return 0;
    };
    let ancestry = match choice.ancestry {
        Ancestry::Prefer => "prefer",
        Ancestry::Ignore => "ignore",
        Ancestry::Require => "require",
    };
    let pick = if choice.pick == Pick::Nearest { "nearest" } else { "hardest" };
    let cone = delta_r.unwrap_or(0.0).to_string();
    let reading = read_path(path);
    let report = reading.report();
    println!("warnings: {:?}", report.warnings());
    let numbers = event_numbers(path);
    let mut used = 0;
    for (channel, object) in [("two-electron", Electron), ("two-muon", Muon)] {
        let script = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/interop/lhe_read.py");
        let output =
            Command::new(python).arg(script).arg(path).args([channel, ancestry, pick, &cone]).output().unwrap();
        assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
        let theirs = String::from_utf8(output.stdout).unwrap();
        let selector = Selector::new(&Decay::Direct(vec![object; 2]), 91.188).unwrap();
        let selector = selector.with_choice(choice, 91.188).with_recombination(delta_r);
        let mut lines = theirs.lines();
        let mut selection = Selection::default();
        let (mut from_column, mut largest) = (0, 0.0_f64);
        for owned in &reading.events {
            let event = owned.event();
            let outcome = selector.select(&event);
            selection.add(&event, &outcome);
            let Ok(truth) = outcome else { continue };
            let words: Vec<&str> = lines.next().expect("Python uses fewer events").split(' ').collect();
            assert_eq!(words[..2], [numbers[&owned.line].to_string().as_str(), channel]);
            let values: Vec<f64> = words[2..].iter().map(|w| from_hex(w)).collect();
            assert_eq!(truth.weight.to_bits(), values[0].to_bits());
            let legs = truth.legs.iter().take(2);
            let ours: Vec<f64> = legs.flat_map(|leg| [leg.px_gev, leg.py_gev, leg.pz_gev, leg.mass_gev]).collect();
            if delta_r.is_some() {
                assert!(same_legs(&ours, &values[2..]), "event of line {}: {ours:?} {values:?}", owned.line);
            } else {
                let bits = |values: &[f64]| values.iter().map(|v| v.to_bits()).collect::<Vec<u64>>();
                assert_eq!(bits(&ours), bits(&values[2..]), "event of line {}", owned.line);
            }
            if truth.mass_gev == values[1] {
                from_column += 1;
            } else {
                largest = largest.max((truth.mass_gev / values[1] - 1.0).abs());
            }
        }
        assert_eq!(lines.next(), None, "Python uses more events");
        assert!(largest < INVARIANT_MASS_TOLERANCE, "{largest:e}");
        let (low, high) = selection.mass_range_gev.unwrap();
        println!(
            "{channel}: {} used, {} skipped, {} negative, weight sum {}, effective {:.1}, mass {low} to {high} GeV; {from_column} \
             masses of the same bits, largest difference {largest:e}",
            selection.used,
            selection.skipped_events(),
            selection.negative_weights,
            selection.weight_sum,
            selection.effective_events()
        );
        used += selection.used;
    }
    used
}

#[test]
fn extract_agrees_with_python() {
    let used = compare(&data("dilepton_200.lhe.gz"), LegChoice::default(), None);
    assert!(used == 200 || python().is_none(), "every event has one pair or the other");
}

/// In one event of the file (line 8263) the generator wrote a final gluon of negative energy. Both readers leave it out.
#[test]
fn all_events_agree_with_python() {
    if let Some(path) = full_file() {
        let used = compare(&path, LegChoice::default(), None);
        assert!(used == 9_999 || python().is_none());
        assert_eq!(read_path(&path).report().inconsistent_events().count, 1);
    }
}

/// Invented events with several leptons and with photons near and far (written by `interop/lhe_make_radiating.py`).
#[test]
fn choice_and_dressing_agree_with_python() {
    let path = data("lhe/x_radiating.lhe.gz");
    let mut used = Vec::new();
    for ancestry in [Ancestry::Prefer, Ancestry::Ignore, Ancestry::Require] {
        for pick in [Pick::Hardest, Pick::Nearest] {
            for delta_r in [None, Some(0.1), Some(0.3)] {
                used.push(compare(&path, LegChoice { ancestry, pick, ..LegChoice::default() }, delta_r));
            }
        }
    }
    // With rows required fewer serve, and how leptons look changes nothing about that.
    assert!(python().is_none() || (used[0] > used[17] && used[17] > 0 && used[..12].iter().all(|n| *n == used[0])));
}
