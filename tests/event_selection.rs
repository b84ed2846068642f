//! Picking of legs for a channel.
//!
//! Events are built here, so that the right choice is known from the rules stated in the documentation of the module; those
//! of the samples are read from their text.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod lhe_support;

use std::path::Path;

use lhe_support::made::{V_MASS, event, leg, mass_of, row, rows_of};
use lhe_support::*;
use peakfold::detector::Object::{self, Electron, Jet, Muon, Photon};
use peakfold::events::{FINAL, INCOMING, Particle, RESONANCE, Selection, Selector, Skip};
use peakfold::kinematics::TruthEvent;
use peakfold::process::Decay;

fn pick(decay: &Decay, particles: &[Particle]) -> Result<TruthEvent, Skip> {
    Selector::new(decay, V_MASS).unwrap().select(&event(particles, 1.0, 1, 0))
}

fn direct(objects: &[Object], particles: &[Particle]) -> Result<TruthEvent, Skip> {
    pick(&Decay::Direct(objects.to_vec()), particles)
}

/// Without a resonance row: the hardest of each kind and charge, negative first; photons fall in pT.
#[test]
fn hardest_by_flavour_and_charge() {
    let particles = [
        leg(-11, 0, 20.0, 0.1),
        leg(11, 0, 25.0, 2.0),
        leg(-11, 0, 30.0, 3.0),
        leg(22, 0, 10.0, 4.0),
        leg(22, 0, 50.0, 5.0),
        leg(11, 0, 24.0, 6.0),
        leg(22, 0, 11.0, 1.0),
        leg(-13, 0, 9.0, 2.5),
    ];
    let rows = |objects: &[Object]| direct(objects, &particles).map(|t| rows_of(&t, &particles));
    assert_eq!(rows(&[Electron, Electron]), Ok(vec![1, 2]));
    assert_eq!(rows(&[Photon, Photon]), Ok(vec![4, 6]));
    assert_eq!(rows(&[Electron, Photon, Electron]), Ok(vec![1, 4, 2]));
    assert_eq!(rows(&[Electron, Electron, Electron, Electron]), Ok(vec![1, 2, 5, 0]));
    assert_eq!(rows(&[Electron, Photon]), Ok(vec![2, 4]));
    // Opposite charge: the muon is positive, so that the electron is negative although a positron is harder.
    assert_eq!(rows(&[Muon, Electron]), Ok(vec![7, 1]));
    assert_eq!(rows(&[Muon, Muon]), Err(Skip::TooFew));
    assert_eq!(rows(&[Jet, Jet]), Err(Skip::WrongKinds));
    let truth = direct(&[Electron, Electron], &particles).unwrap();
    assert!((truth.mass_gev - mass_of(&particles, &[1, 2])).abs() < 1e-12 * truth.mass_gev);
    assert_eq!(direct(&[Electron, Electron], &[particles[1], particles[5]]), Err(Skip::Charge));
}

/// Jets are light quarks, b quarks and gluons; a top quark or a tau is none.
#[test]
fn particle_codes() {
    for code in [1, -2, 3, -4, 5, -5, 21] {
        assert!(direct(&[Jet, Photon], &[leg(code, 0, 20.0, 0.0), leg(22, 0, 20.0, 2.0)]).is_ok(), "{code}");
    }
    for code in [6, 15, 12, 0, 9, 2212, i64::MIN, i64::MAX] {
        for object in Object::ALL {
            let got = direct(&[object, object], &[leg(code, 0, 20.0, 0.0), leg(code, 0, 20.0, 2.0)]);
            assert_eq!(got, Err(Skip::WrongKinds), "{code}");
        }
    }
}

/// With a resonance row: its legs, although others are harder. Its mass column when they are all of it.
#[test]
fn resonance_row_wins() {
    let mut particles = vec![
        row(21, INCOMING, 0, [0.0, 0.0, 80.0], 0.0),
        row(21, INCOMING, 0, [0.0, 0.0, -80.0], 0.0),
        row(32, RESONANCE, 0, [0.0, 0.0, 1.0], 77.0),
        row(32, RESONANCE, 3, [0.0, 0.0, 1.0], 76.5),
        leg(-11, 4, 20.0, 0.1),
        leg(11, 4, 25.0, 3.0),
        leg(11, 0, 70.0, 2.0),
        leg(-11, 0, 70.0, 5.0),
    ];
    let truth = direct(&[Electron, Electron], &particles).unwrap();
    assert_eq!((rows_of(&truth, &particles), truth.mass_gev), (vec![5, 4], 77.0));
    // A photon beside the second row: still these legs, and the mass of the row that decays to them alone.
    particles.push(leg(22, 3, 3.0, 1.0));
    let truth = direct(&[Electron, Electron], &particles).unwrap();
    assert_eq!((rows_of(&truth, &particles), truth.mass_gev), (vec![5, 4], 76.5));
    particles[8].mothers = [4, 4];
    let truth = direct(&[Electron, Electron], &particles).unwrap();
    // A photon radiated off: the row's mass is still the true one.
    assert_eq!((rows_of(&truth, &particles), truth.mass_gev), (vec![5, 4], 77.0));
    // A neutrino from the row: it is no two-electron resonance, and the hardest pair is taken.
    particles[8].code = 12;
    assert_eq!(rows_of(&direct(&[Electron, Electron], &particles).unwrap(), &particles), [6, 7]);
    // Two rows with fitting legs: the harder one.
    particles[8] = row(32, RESONANCE, 0, [0.0, 0.0, 1.0], 140.0);
    (particles[6].mothers, particles[7].mothers) = ([9, 9], [9, 0]);
    let truth = direct(&[Electron, Electron], &particles).unwrap();
    assert_eq!((rows_of(&truth, &particles), truth.mass_gev), (vec![6, 7], 140.0));
}

/// A resonance below without descendants: the decay is not known to its end, so that the row's mass is not that of the legs.
#[test]
fn unknown_decay_below_a_resonance() {
    let particles = [
        row(25, RESONANCE, 0, [0.0, 0.0, 1.0], 125.0),
        row(23, RESONANCE, 1, [0.0, 0.0, 1.0], 91.0),
        row(23, RESONANCE, 1, [0.0, 0.0, 0.0], 30.0),
        leg(11, 2, 45.0, 0.1),
        leg(-11, 2, 40.0, 3.0),
    ];
    let truth = direct(&[Electron, Electron], &particles).unwrap();
    assert_eq!((rows_of(&truth, &particles), truth.mass_gev), (vec![3, 4], 91.0));
}

const LEPTONS_2E2M: [[Object; 2]; 2] = [[Electron, Electron], [Muon, Muon]];
const LEPTONS_4E: [[Object; 2]; 2] = [[Electron, Electron], [Electron, Electron]];

/// The four-lepton sample, with its rows, with the resonance rows taken for something else one by one, and with all.
#[test]
fn cascades_of_the_sample() {
    let reading = read_text(&sample("x_zz4l.lhe"));
    let four_leptons =
        [(LEPTONS_2E2M, vec![5, 6, 7, 8]), (LEPTONS_4E, vec![5, 6, 7, 8]), (LEPTONS_2E2M, vec![7, 8, 5, 6])];
    let truth_masses = [125.0, 125.01, 124.99];
    for ((event, (kinds, expected)), mass) in reading.events.iter().zip(four_leptons).zip(truth_masses) {
        for hidden in [&[][..], &[3], &[4], &[3, 4], &[2, 3, 4]] {
            let mut particles = event.particles.clone();
            for row in hidden {
                particles[*row].status = 3;
            }
            let truth = pick(&Decay::Cascade(kinds), &particles).unwrap();
            assert_eq!(rows_of(&truth, &particles), expected, "{hidden:?}");
            // A row that is no resonance does not link the legs to the one at the top.
            let expected_mass = if hidden.is_empty() { mass } else { mass_of(&particles, &expected) };
            assert!((truth.mass_gev - expected_mass).abs() < 1e-9 * mass, "{hidden:?}: {}", truth.mass_gev);
            // Momenta of the sample have 11 digits, its mass column 11; sqrt of the rounding of E² - p² stays below 1e-6.
            assert!((mass_of(&particles, &expected) - mass).abs() < 1e-6);
        }
    }
    let flavours = Selector::new(&Decay::Cascade(LEPTONS_4E), V_MASS).unwrap();
    let outcome = flavours.select(&event(&reading.events[0].particles, 1.0, 1, 0));
    assert_eq!(outcome, Err(Skip::TooFew));
}

/// Four electrons without rows: the pairing with the pair nearest to the intermediate mass, that pair first.
#[test]
fn pairing_of_equal_flavours() {
    let particles = [
        row(11, FINAL, 0, [30.0, 0.0, 0.0], 0.0),
        row(-11, FINAL, 0, [0.0, 20.0, 3.0], 0.0),
        row(11, FINAL, 0, [0.0, -25.0, 5.0], 0.0),
        row(-11, FINAL, 0, [-28.0, 4.0, 0.0], 0.0),
    ];
    // By hand: m(0,3) = 57.9, m(2,1) = 44.8, m(0,1) = 34.8, m(2,3) = 40.9 GeV.
    let masses = [[0, 3], [2, 1], [0, 1], [2, 3]].map(|pair| mass_of(&particles, &pair));
    assert!(masses[0] > 57.0 && masses[1] < 46.0 && masses[2] < 36.0 && masses[3] < 44.0, "{masses:?}");
    let near = |mass: f64| {
        let selector = Selector::new(&Decay::Cascade(LEPTONS_4E), mass).unwrap();
        rows_of(&selector.select(&event(&particles, 1.0, 1, 0)).unwrap(), &particles)
    };
    assert_eq!(near(91.0), [0, 3, 2, 1]);
    assert_eq!(near(masses[1]), [2, 1, 0, 3]);
    assert_eq!(near(30.0), [0, 1, 2, 3]);
    assert_eq!(near(masses[3]), [2, 3, 0, 1]);
}

/// One intermediate row alone fixes its pair, against a pairing that would be nearer to the intermediate mass.
#[test]
fn one_intermediate_row() {
    let mut particles = vec![
        row(23, RESONANCE, 0, [0.0, 0.0, 0.0], 35.0),
        row(11, FINAL, 1, [30.0, 0.0, 0.0], 0.0),
        row(-11, FINAL, 1, [0.0, 20.0, 3.0], 0.0),
        row(11, FINAL, 0, [0.0, -25.0, 5.0], 0.0),
        row(-11, FINAL, 0, [-28.0, 4.0, 0.0], 0.0),
    ];
    let truth = pick(&Decay::Cascade(LEPTONS_4E), &particles).unwrap();
    assert_eq!(rows_of(&truth, &particles), [3, 4, 1, 2]);
    // Of more leptons outside the row the hardest are taken.
    particles.push(row(-11, FINAL, 0, [-50.0, 4.0, 0.0], 0.0));
    let truth = pick(&Decay::Cascade(LEPTONS_4E), &particles).unwrap();
    assert_eq!(rows_of(&truth, &particles), [3, 5, 1, 2]);
}

/// Kinds that differ inside a pair, and jets, of which every pairing is allowed.
#[test]
fn other_cascades() {
    let particles = [
        row(21, FINAL, 0, [30.0, 0.0, 0.0], 0.0),
        row(1, FINAL, 0, [0.0, 20.0, 3.0], 0.0),
        row(-3, FINAL, 0, [0.0, -25.0, 5.0], 0.0),
        row(5, FINAL, 0, [-28.0, 4.0, 0.0], 0.0),
        row(22, FINAL, 0, [-38.0, 4.0, 0.0], 0.0),
        row(22, FINAL, 0, [38.0, 4.0, 10.0], 0.0),
    ];
    let jets = pick(&Decay::Cascade([[Jet, Jet], [Jet, Jet]]), &particles).unwrap();
    assert_eq!(rows_of(&jets, &particles), [0, 3, 2, 1]);
    let mixed = pick(&Decay::Cascade([[Photon, Jet], [Jet, Photon]]), &particles).unwrap();
    let rows = rows_of(&mixed, &particles);
    assert!(rows[0] >= 4 && rows[3] >= 4 && rows[1] < 4 && rows[2] < 4, "{rows:?}");
}

/// What cannot be folded is skipped with its reason.
#[test]
fn degenerate_legs_are_skipped() {
    let along = row(22, FINAL, 0, [0.0, 0.0, 40.0], 0.0);
    assert_eq!(direct(&[Photon, Photon], &[along, leg(22, 0, 5.0, 0.0)]), Err(Skip::AlongBeam));
    let collinear = [row(22, FINAL, 0, [2.0, 0.0, 0.0], 0.0), row(22, FINAL, 0, [4.0, 0.0, 0.0], 0.0)];
    assert_eq!(direct(&[Photon, Photon], &collinear), Err(Skip::NoMass));
    assert_eq!(direct(&[Photon, Photon], &[]), Err(Skip::WrongKinds));
    assert!(Selector::new(&Decay::Direct(vec![Photon]), V_MASS).is_none());
    assert!(Selector::new(&Decay::Direct(vec![Photon; 5]), V_MASS).is_none());
    // Mothers that do not exist or run in a circle end in no panic and no hang; the reader refuses them.
    let mut circle = [row(23, RESONANCE, 2, [0.0; 3], 1.0), row(23, RESONANCE, 1, [0.0; 3], 1.0), leg(22, 1, 5.0, 0.0)];
    circle[2].mothers = [1, 1];
    assert_eq!(direct(&[Photon, Photon], &circle), Err(Skip::TooFew));
    circle[2].mothers = [99, 99];
    assert_eq!(direct(&[Photon, Photon], &circle), Err(Skip::TooFew));
}

/// Counts, sums and the effective number, where events of one group count as one: weights 2, then (3, -1), then 1 give
/// (2 + 2 + 1)² / (2² + 2² + 1²) = 25/9.
#[test]
fn selection_counts() {
    let selector = Selector::new(&Decay::Direct(vec![Photon, Photon]), V_MASS).unwrap();
    let pair = [leg(22, 0, 30.0, 0.0), leg(22, 0, 30.0, 3.0)];
    let mut selection = Selection::default();
    for (weight, line, group) in [(2.0, 10, 0), (3.0, 20, 1), (-1.0, 30, 1), (1.0, 40, 2)] {
        let event = event(&pair, weight, line, group);
        selection.add(&event, &selector.select(&event));
    }
    let bad = event(&pair[..1], 5.0, 50, 3);
    selection.add(&bad, &selector.select(&bad));
    assert_eq!((selection.used, selection.skipped_events(), selection.negative_weights), (4, 1, 1));
    assert_eq!((selection.weight_sum, selection.squared_weight_sum()), (5.0, 9.0));
    assert!((selection.effective_events() - 25.0 / 9.0).abs() < 1e-15);
    let reasons: Vec<_> = selection.reasons().map(|(reason, t)| (reason, t.count, t.first_line)).collect();
    assert_eq!(reasons, [(Skip::TooFew, 1, 50)]);
    assert!(selection.verdict(Path::new("a.lhe"), "two-photon").is_ok());
}

/// No event for the channel, weights that are all 0 or add up to nothing positive: no template exists.
#[test]
fn selections_that_give_no_template() {
    let verdict = |text: &str, objects: &[Object]| {
        let selector = Selector::new(&Decay::Direct(objects.to_vec()), V_MASS).unwrap();
        let reading = read_text(text);
        let mut selection = Selection::default();
        selection.add_left_out(&reading.report());
        for owned in &reading.events {
            let event = event(&owned.particles, owned.weight, owned.line, owned.group);
            selection.add(&event, &selector.select(&event));
        }
        selection.verdict(Path::new("a.lhe"), "mine").map_err(|p| p.to_string())
    };
    let text = sample("x_gammagamma.lhe");
    assert_eq!(verdict(&text, &[Photon, Photon]), Ok(()));
    let none = verdict(&text, &[Muon, Muon]).unwrap_err();
    assert!(none.contains("no event serves channel `mine` (3: no particle of a kind"), "{none}");
    let zero = verdict(
        &text.replace("+1.0000000e+00 1.25", "0 1.25").replace("+1.0000000e+00 1.24", "0 1.24"),
        &[Photon, Photon],
    );
    assert!(zero.unwrap_err().contains("all 3 events of channel `mine` have weight 0"));
    let negative = verdict(&text.replace("+1.0000000e+00 1.25", "-1 1.25"), &[Photon, Photon]).unwrap_err();
    assert!(negative.contains("add up to -1"), "{negative}");
}
