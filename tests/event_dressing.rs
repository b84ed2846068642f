//! Photons added to leptons: which, to which lepton, and what a dressed leg is. Events are built here.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod common;
mod lhe_support;

use lhe_support::made::{V_MASS, event, leg, mass_of, row, rows_of};
use peakfold::detector::EtaRange;
use peakfold::detector::Object::{self, Electron, Muon, Photon};
use peakfold::events::{FINAL, Particle, RESONANCE, Selector};
use peakfold::fold::fold_channel;
use peakfold::kinematics::{TruthEvent, TruthLeg};
use peakfold::process::{Decay, EventList, EventSource, MassAxis, Radiation, Study};

/// A particle by pT, pseudorapidity and azimuth.
fn at(code: i64, mother: u32, pt: f64, eta: f64, phi: f64) -> Particle {
    let mass = if code.abs() == 13 { 0.105658 } else { 0.0 };
    row(code, FINAL, mother, [pt * phi.cos(), pt * phi.sin(), pt * eta.sinh()], mass)
}

fn pick(objects: &[Object], particles: &[Particle], delta_r: Option<f64>) -> TruthEvent {
    let selector = Selector::new(&Decay::Direct(objects.to_vec()), V_MASS).unwrap().with_recombination(delta_r);
    selector.select(&event(particles, 1.0, 1, 0)).unwrap()
}

/// Whether a leg is the sum of these rows.
fn is_sum(leg: &TruthLeg, particles: &[Particle], rows: &[usize]) -> bool {
    let sum = |f: fn(&Particle) -> f64| rows.iter().map(|i| f(&particles[*i])).sum::<f64>();
    let mass = if rows.len() == 1 { particles[rows[0]].mass } else { mass_of(particles, rows) };
    let energy = (leg.px_gev.powi(2) + leg.py_gev.powi(2) + leg.pz_gev.powi(2) + leg.mass_gev.powi(2)).sqrt();
    let near = |a: f64, b: f64| (a - b).abs() < 1e-12 * energy;
    near(leg.px_gev, sum(|p| p.px))
        && near(leg.py_gev, sum(|p| p.py))
        && near(leg.pz_gev, sum(|p| p.pz))
        && near(energy, sum(|p| p.e))
        && (leg.mass_gev.powi(2) - mass.powi(2)).abs() < 1e-12 * energy * energy
}

/// Just inside and just outside, in azimuth across pi, in pseudorapidity, and in both together.
#[test]
fn inside_and_outside_of_the_cone() {
    let cases = [
        ([0.0, 0.099], true),
        ([0.0, 0.101], false),
        ([-0.099, 0.0], true),
        ([-0.101, 0.0], false),
        ([0.07, 0.0713], true),
        ([0.07, 0.0715], false),
        ([0.08, -0.08], false),
    ];
    for (code, object) in [(11, Electron), (13, Muon)] {
        for ([eta, phi], inside) in cases {
            let particles =
                [at(code, 0, 40.0, 0.7, 3.1), at(-code, 0, 35.0, -0.4, 0.2), at(22, 0, 5.0, 0.7 + eta, 3.1 + phi)];
            let truth = pick(&[object, object], &particles, Some(0.1));
            let expected: &[usize] = if inside { &[0, 2] } else { &[0] };
            assert!(is_sum(&truth.legs[0], &particles, expected), "{eta} {phi}: {:?}", truth.legs[0]);
            assert!(is_sum(&truth.legs[1], &particles, &[1]));
            // Bare without a distance.
            let bare = pick(&[object, object], &particles, None);
            assert!(is_sum(&bare.legs[0], &particles, &[0]));
            assert_eq!(bare.legs[0].mass_gev, particles[0].mass);
        }
    }
}

/// The nearest of two leptons gets the photon, also when it is no leg; a photon with no final status counts for nothing.
#[test]
fn the_nearest_lepton_gets_the_photon() {
    let mut particles = vec![
        at(11, 0, 40.0, 0.0, 1.0),
        at(-11, 0, 35.0, 0.0, 1.15),
        at(22, 0, 5.0, 0.0, 1.08),
        at(22, 0, 4.0, 0.02, 1.07),
        at(22, 0, 3.0, 0.0, 4.0),
    ];
    let truth = pick(&[Electron, Electron], &particles, Some(0.1));
    assert!(is_sum(&truth.legs[0], &particles, &[0, 3]));
    assert!(is_sum(&truth.legs[1], &particles, &[1, 2]));
    // A muon beside, which is no leg, is nearer to both photons.
    particles.push(at(13, 0, 30.0, 0.01, 1.075));
    let truth = pick(&[Electron, Electron], &particles, Some(0.1));
    assert!(is_sum(&truth.legs[0], &particles, &[0]) && is_sum(&truth.legs[1], &particles, &[1]));
    particles.pop();
    particles[2].status = 3;
    let truth = pick(&[Electron, Electron], &particles, Some(0.1));
    assert!(is_sum(&truth.legs[1], &particles, &[1]));
    // Jets get none, and a photon along the beam belongs to nobody.
    particles[2] = row(22, FINAL, 0, [0.0, 0.0, 50.0], 0.0);
    particles.push(at(21, 0, 30.0, 0.0, 4.0));
    let truth = pick(&[Electron, Object::Jet], &particles, Some(0.1));
    assert!(is_sum(&truth.legs[0], &particles, &[0, 3]) && is_sum(&truth.legs[1], &particles, &[5]));
}

/// Several photons add up, and distances are those of the lepton as the file has it: the second photon lies 0.12 from it, but
/// within 0.1 of the sum with the first.
#[test]
fn distances_are_from_the_bare_lepton() {
    let particles = [
        at(13, 0, 20.0, 0.0, 0.0),
        at(-13, 0, 35.0, 0.0, 3.0),
        at(22, 0, 20.0, 0.0, 0.09),
        at(22, 0, 5.0, 0.0, 0.12),
        at(22, 0, 1.0, 0.0, -0.09),
    ];
    let truth = pick(&[Muon, Muon], &particles, Some(0.1));
    assert!(is_sum(&truth.legs[0], &particles, &[0, 2, 4]));
    // By hand, one photon alone: m² = m_mu² + 2 (E E' - p p') with nearly massless 20 GeV each, hence
    // about 4 · 400 · sin²(0.045) + m_mu².
    let truth = pick(&[Muon, Muon], &particles[..3], Some(0.1));
    let expected = 1600.0 * 0.045_f64.sin().powi(2) + 0.105658_f64.powi(2);
    assert!((truth.legs[0].mass_gev.powi(2) / expected - 1.0).abs() < 0.01, "{}", truth.legs[0].mass_gev);
}

/// Dressed first, chosen then: 25 + 10 GeV are harder than 30.
#[test]
fn the_choice_is_that_of_dressed_leptons() {
    let particles =
        [at(11, 0, 30.0, 0.0, 0.0), at(11, 0, 25.0, 0.5, 2.0), at(22, 0, 10.0, 0.5, 2.05), at(-11, 0, 35.0, 0.0, 4.0)];
    let bare = pick(&[Electron, Electron], &particles, None);
    assert_eq!(rows_of(&bare, &particles), [0, 3]);
    let dressed = pick(&[Electron, Electron], &particles, Some(0.1));
    assert!(is_sum(&dressed.legs[0], &particles, &[1, 2]) && is_sum(&dressed.legs[1], &particles, &[3]));
}

/// A photon that is a leg stays one, although it lies beside an electron; the others are added. The choice is that of bare
/// leptons then: 30 GeV are harder than 25.
#[test]
fn photon_legs_are_not_eaten() {
    let particles = [
        at(11, 0, 25.0, 0.0, 0.0),
        at(22, 0, 20.0, 0.0, 0.05),
        at(22, 0, 10.0, 0.0, -0.05),
        at(-11, 0, 35.0, 0.0, 3.0),
        at(11, 0, 30.0, 1.0, 5.0),
    ];
    let truth = pick(&[Electron, Electron, Photon], &particles[..4], Some(0.1));
    assert!(is_sum(&truth.legs[0], &particles, &[0, 2]));
    assert!(is_sum(&truth.legs[1], &particles, &[3]) && is_sum(&truth.legs[2], &particles, &[1]));
    let truth = pick(&[Photon, Electron, Electron], &particles, Some(0.1));
    assert!(is_sum(&truth.legs[0], &particles, &[1]) && is_sum(&truth.legs[1], &particles, &[4]));
    // Two photons: nothing is left to add, and leptons do not matter.
    let truth = pick(&[Photon, Photon], &particles, Some(0.1));
    assert_eq!(rows_of(&truth, &particles), [1, 2]);
}

/// A resonance at rest in no frame of interest that radiates: row, two leptons, one photon within the cone and, if wanted, one
/// outside. Its mass is that of all together.
fn radiating(wide: bool) -> Vec<Particle> {
    let mut particles =
        vec![Particle::default(), at(11, 1, 45.0, 0.3, 0.0), at(-11, 1, 48.0, -0.5, 3.0), at(22, 1, 12.0, 0.33, 0.04)];
    if wide {
        particles.push(at(22, 1, 9.0, 1.5, 1.5));
    }
    let all: Vec<usize> = (1..particles.len()).collect();
    let sum = |f: fn(&Particle) -> f64| particles[1..].iter().map(f).sum::<f64>();
    let mass = mass_of(&particles, &all);
    particles[0] = row(23, RESONANCE, 0, [sum(|p| p.px), sum(|p| p.py), sum(|p| p.pz)], mass);
    particles
}

/// Invariant mass of the legs of a truth event.
fn legs_mass(truth: &TruthEvent) -> f64 {
    let legs = truth.legs.iter().take(truth.leg_count).map(TruthLeg::four_vector);
    legs.reduce(|a, b| a + b).unwrap().mass()
}

/// The dressed mass is that of the resonance when all photons lie within the cone, the bare one lower; the truth mass is
/// always that of the resonance.
#[test]
fn dressed_mass_of_a_radiating_resonance() {
    let pair = [Electron, Electron];
    let particles = radiating(false);
    let mass = particles[0].mass;
    let (bare, dressed) = (pick(&pair, &particles, None), pick(&pair, &particles, Some(0.1)));
    assert_eq!((bare.mass_gev, dressed.mass_gev), (mass, mass));
    assert!((legs_mass(&dressed) / mass - 1.0).abs() < 1e-13, "{} {mass}", legs_mass(&dressed));
    assert!(legs_mass(&bare) < mass - 5.0);
    let particles = radiating(true);
    let mass = particles[0].mass;
    let (bare, dressed) = (pick(&pair, &particles, None), pick(&pair, &particles, Some(0.1)));
    assert_eq!((bare.mass_gev, dressed.mass_gev), (mass, mass));
    assert!(legs_mass(&bare) < legs_mass(&dressed) - 5.0 && legs_mass(&dressed) < mass - 5.0);
    // A photon that belongs to another resonance above is not radiated off: X -> V photon, V -> legs.
    let mut above = radiating(false);
    above.push(row(25, RESONANCE, 0, [0.0; 3], 300.0));
    above.push(leg(22, 5, 100.0, 1.0));
    above[0].mothers = [5, 5];
    assert_eq!(pick(&pair, &above, Some(0.1)).mass_gev, above[0].mass);
    // A cascade with a photon from one pair.
    let mut cascade = vec![row(25, RESONANCE, 0, [0.0; 3], 200.0)];
    cascade.extend(radiating(false).into_iter().map(|p| Particle { mothers: p.mothers.map(|m| m + 1), ..p }));
    cascade.push(leg(13, 1, 30.0, 1.0));
    cascade.push(leg(-13, 1, 30.0, 5.0));
    let selector = Selector::new(&Decay::Cascade([[Electron; 2], [Muon; 2]]), V_MASS).unwrap();
    let truth = selector.with_recombination(Some(0.1)).select(&event(&cascade, 1.0, 1, 0)).unwrap();
    assert_eq!(truth.mass_gev, 200.0);
    assert!(is_sum(&truth.legs[0], &cascade, &[2, 4]));
}

/// From the file to the template: 1e-3 of resolution puts the dressed peak at the resonance and the bare one below.
#[test]
fn a_fold_of_dressed_and_bare_leptons() {
    let particles = radiating(false);
    let rows: String = particles
        .iter()
        .map(|p| {
            let mother = p.mothers[0];
            let numbers = [p.px, p.py, p.pz, p.e, p.mass].map(|x| format!("{x:.15e}")).join(" ");
            format!("{} {} {mother} {mother} 0 0 {numbers} 0 9\n", p.code, p.status)
        })
        .collect();
    let directory = tempfile::tempdir().unwrap();
    let path = directory.path().join("radiating.lhe");
    let events = format!("<event>\n4 1 1.0 -1 -1 -1\n{rows}</event>\n").repeat(3);
    std::fs::write(&path, lhe_support::framed(&events)).unwrap();
    let mut detector = common::empty_detector();
    let reach = EtaRange { low: 0.0, high: 4.0 };
    detector.calorimeters = vec![common::calorimeter("calorimeter", Electron, reach, 1e-3)];
    let mass = particles[0].mass;
    let mut channel = common::channel("pair", Decay::Direct(vec![Electron; 2]));
    channel.axis = MassAxis { low: 0.8, high: 1.1, bins: 300, relative: true };
    let mut study = common::study(detector, mass, channel);
    study.resonance.source = EventSource::File(EventList { path, weight: None });
    study.precision = 1e-3;
    let mean = |study: &Study| {
        let folded = fold_channel(study, 0, mass, &|_| ()).unwrap();
        let template = &folded.templates[0].template;
        let edges = study.channels[0].axis.edges_gev(mass);
        let bins = template.probability.iter().zip(edges.windows(2));
        let (sum, weighted) = bins.fold((0.0, 0.0), |(s, w), (p, e)| (s + p, w + p * 0.5 * (e[0] + e[1])));
        weighted / sum
    };
    let bare = mean(&study);
    study.resonance.radiation = Some(Radiation { recombination_delta_r: 0.1 });
    let dressed = mean(&study);
    let bare_mass = mass_of(&particles, &[1, 2]);
    // The mean of sqrt((1 + s x)(1 + s y)) is 1 - s²/4, and a bin is 0.1 % wide: 1e-4 is enough room.
    assert!((dressed / mass - 1.0).abs() < 1e-4, "{dressed} {mass}");
    assert!((bare / bare_mass - 1.0).abs() < 1e-4 && bare_mass < 0.95 * mass, "{bare} {bare_mass}");
}
