//! Reading and leg picking against an independent reader in Python (`tests/interop/lhe_read.py`, standard library only): which
//! events are used, weights, truth masses and momenta of the two-electron and the two-muon channel.
//!
//! Weights, momenta and masses from a column are the same bits, because both sides round decimal numbers correctly. Invariant
//! masses come from two formulas: each loses at most a few units of 1e-16 E²/m² of m², and E/m stays below 100 here, hence 1e-11.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod lhe_support;

use std::collections::HashMap;
use std::io::Read;
use std::path::Path;
use std::process::Command;

use lhe_support::*;
use peakfold::detector::Object::{Electron, Muon};
use peakfold::events::{Selection, Selector};
use peakfold::process::Decay;

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

fn compare(path: &Path, count: u64, left_out: u64) {
    let Some(python) = python() else {
        println!("skipped: no Python here");
        return;
    };
    let reading = read_path(path);
    let report = reading.report();
    assert_eq!(report.events, count);
    println!("warnings: {:?}", report.warnings());
    let numbers = event_numbers(path);
    let mut used = 0;
    for (channel, object) in [("two-electron", Electron), ("two-muon", Muon)] {
        let script = Path::new(env!("CARGO_MANIFEST_DIR")).join("tests/interop/lhe_read.py");
        let output =
            Command::new(python).args([script.as_os_str(), path.as_os_str(), channel.as_ref()]).output().unwrap();
        assert!(output.status.success(), "{}", String::from_utf8_lossy(&output.stderr));
        let theirs = String::from_utf8(output.stdout).unwrap();
        let selector = Selector::new(&Decay::Direct(vec![object; 2]), 91.188).unwrap();
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
            let mut ours = vec![truth.weight];
            for leg in &truth.legs[..2] {
                ours.extend([leg.px_gev, leg.py_gev, leg.pz_gev, leg.mass_gev]);
            }
            let momenta: Vec<u64> = ours.iter().map(|v| v.to_bits()).collect();
            let expected: Vec<u64> = [&values[..1], &values[2..]].concat().iter().map(|v| v.to_bits()).collect();
            assert_eq!(momenta, expected, "event of line {}", owned.line);
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
    assert_eq!(report.inconsistent_events().count, left_out);
    assert_eq!(used, count - left_out, "every event has one pair or the other");
}

#[test]
fn extract_agrees_with_python() {
    compare(&data("dilepton_200.lhe.gz"), 200, 0);
}

/// In one event of the file (line 8263) the generator wrote a final gluon of negative energy. Both readers leave it out.
#[test]
fn all_events_agree_with_python() {
    if let Some(path) = full_file() {
        compare(&path, 10_000, 1);
    }
}
