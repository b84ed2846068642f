//! What is done with any bytes, by the fuzz targets and by the test that replays their corpus: read them, and hold what is
//! accepted to what the documentation promises of it.
#![allow(dead_code, clippy::unwrap_used, clippy::expect_used, clippy::panic)]

use std::path::{Path, PathBuf};

use peakfold::detector::Object::{self, Electron, Muon, Photon};
use peakfold::events::{EventBatch, EventFile, Options, Selector};
use peakfold::files::{parse_detector, parse_study};
use peakfold::problem::Problems;
use peakfold::process::{Ancestry, Decay, LegChoice, Pairing, Pick};

/// Selectors for direct decays and cascades, by every kind of choice, bare and dressed.
fn selectors() -> Vec<Selector> {
    let nearest = LegChoice { pick: Pick::Nearest, pairing: Pairing::NearestSum, ancestry: Ancestry::Ignore };
    let decays = [
        Decay::Direct(vec![Electron, Electron]),
        Decay::Direct(vec![Photon, Photon]),
        Decay::Direct(vec![Muon, Photon, Muon]),
        Decay::Cascade([[Electron, Electron], [Muon, Muon]]),
        Decay::Cascade([[Electron, Electron], [Electron, Electron]]),
    ];
    let ways = [
        (LegChoice::default(), None),
        (LegChoice { ancestry: Ancestry::Require, ..LegChoice::default() }, Some(0.1)),
        (nearest, Some(2.0)),
    ];
    let of = |decay: &Decay| {
        let decay = decay.clone();
        ways.map(move |(choice, delta_r)| {
            Selector::new(&decay, 91.188).unwrap().with_choice(choice, 125.0).with_recombination(delta_r)
        })
    };
    decays.iter().flat_map(of).collect()
}

/// Reads an event file; what begins with `<` is LHE.
pub fn lhe(data: &[u8]) {
    events(data);
}

/// Reads an event file; what does not begin with `<` is CSV.
pub fn csv(data: &[u8]) {
    events(data);
}

/// Reads an event file, for the event weight and for a named one, and picks legs.
fn events(data: &[u8]) {
    let selectors = selectors();
    for weight in [None, Some("1002".to_owned())] {
        let Ok(mut file) = EventFile::from_reader(Path::new("fuzz"), data, &Options { weight }) else { continue };
        let mut batch = EventBatch::default();
        loop {
            let more = file.next_batch(&mut batch);
            for event in batch.events() {
                assert!(event.weight.is_finite() && event.line > 0);
                for truth in selectors.iter().filter_map(|selector| selector.select(&event).ok()) {
                    assert!(truth.mass_gev > 0.0 && truth.mass_gev.is_finite());
                    for leg in truth.legs.iter().take(truth.leg_count) {
                        let p = leg.four_vector();
                        assert!(p.e.is_finite() && p.pt() > 0.0 && leg.mass_gev >= 0.0, "{leg:?}");
                    }
                }
            }
            match more {
                Ok(true) => {}
                Ok(false) => break,
                Err(problem) => {
                    assert!(!problem.message.is_empty());
                    break;
                }
            }
        }
    }
}

/// The text and the path that it is read under: files that it names are looked for beside those of the tests, and no other
/// file of the machine is opened.
fn text_and_path(data: &[u8]) -> Option<(&str, PathBuf)> {
    let text = std::str::from_utf8(data).ok().filter(|text| !text.contains("..") && !text.contains(['/', '\\']))?;
    let root = Path::new(env!("CARGO_MANIFEST_DIR"));
    let beside = if root.ends_with("fuzz") { "../inputs/fuzz.toml" } else { "tests/inputs/fuzz.toml" };
    Some((text, root.join(beside)))
}

/// Reads a detector file.
pub fn detector(data: &[u8]) {
    let Some((text, path)) = text_and_path(data) else { return };
    match parse_detector(&path, text) {
        Ok(loaded) => {
            for object in Object::ALL {
                assert!(loaded.detector.coverage(object).iter().all(|range| range.low < range.high));
            }
        }
        Err(problems) => told(&problems),
    }
}

/// Reads a study file.
pub fn study(data: &[u8]) {
    let Some((text, path)) = text_and_path(data) else { return };
    match parse_study(&path, text) {
        Ok(loaded) => {
            for mass in &loaded.study.resonance.masses_gev {
                for channel in &loaded.study.channels {
                    assert!((2..=4).contains(&channel.decay.legs().len()));
                    let edges = channel.axis.edges_gev(*mass);
                    assert!(edges.len() == channel.axis.bins + 1 && edges.iter().all(|edge| edge.is_finite()));
                }
            }
        }
        Err(problems) => told(&problems),
    }
}

/// A refusal names its file and says something.
fn told(problems: &Problems) {
    assert!(!problems.0.is_empty());
    assert!(problems.0.iter().all(|problem| !problem.message.is_empty() && problem.line.is_none_or(|line| line > 0)));
}
