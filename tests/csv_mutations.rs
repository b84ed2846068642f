//! Damage of every kind: 20 000 seeded random mutations of good CSV events.
//!
//! Expected: no panic, no hang, and no event handed out with numbers that cannot be. The judge shares no code with the reader.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod lhe_support;

use lhe_support::mutate::{Random, mutate};
use lhe_support::*;
use peakfold::detector::Object::{Electron, Muon, Photon};
use peakfold::events::{Options, Selector};
use peakfold::process::Decay;

const MUTATIONS: usize = 20_000;

const SAMPLES: [&str; 3] = [
    "code1,pt1_gev,eta1,phi1_rad,code2,pt2_gev,eta2,phi2_rad,weight,true_mass_gev\n\
     13,45.5,0.5,1.25,-13,44.5,-0.25,-1.875,1.5,91.25\n22,62.5,-1.5,3.0,22,60,0.0,-0.125,-0.5,\n\
     11,45.5,0.5,1.25,-11,44.5,-0.25,-1.875,1.5,91.25\n13,31,2.5,1.25,-13,44.5,2.25,-1.875,1,90.5\n",
    "event,code,pt_gev,eta,phi_rad,mass_gev,weight\n\
     1,13,45.5,0.5,1.25,0.1,1.5\n1,-13,44.5,-0.25,-1.875,,1.5\n2,22,62.5,-1.5,3.0,0,-0.5\n2,22,60,0.0,-0.125,0,-0.5\n\
     3,11,30,1,2,,1\n3,-11,40,-1,-1,,1\n3,13,50,2,0.5,,1\n3,-13,20,0.25,3.125,,1\n",
    "\"event\",\"code\",\"px_gev\",\"py_gev\",\"pz_gev\"\r\n1,22,40,1,-3\r\n1,22,-40,-2,80\r\n4,13,20,30,1e2\r\n4,-13,3,-30,-60\r\n",
];

#[test]
fn mutations_never_give_impossible_events() {
    let selectors = [
        Decay::Direct(vec![Electron, Electron]),
        Decay::Direct(vec![Muon, Muon]),
        Decay::Direct(vec![Photon, Photon]),
        Decay::Cascade([[Electron, Electron], [Muon, Muon]]),
    ]
    .map(|decay| Selector::new(&decay, 91.188).unwrap());
    let mut random = Random(20262);
    let (mut accepted, mut refused, mut handed_out, mut selected) = (0, 0, 0, 0);
    for number in 0..MUTATIONS {
        // Now and then enough good events that a bad one is left out instead of refusing the file.
        let base = SAMPLES[number % 3];
        let mut bytes = if number % 10 == 0 && number % 3 == 0 {
            let (header, rows) = base.split_once('\n').unwrap();
            format!("{header}\n{}", rows.repeat(40)).into_bytes()
        } else {
            base.as_bytes().to_vec()
        };
        for _ in 0..1 + random.below(3) {
            if !bytes.is_empty() {
                mutate(&mut bytes, &mut random, |byte| byte.is_ascii_whitespace() || byte == b',');
            }
        }
        let reading = read_with(bytes.as_slice(), &Options::default());
        match &reading.outcome {
            Ok(report) => {
                accepted += 1;
                assert_eq!(report.events, reading.events.len() as u64 + report.inconsistent_events().count);
            }
            Err(problem) => {
                refused += 1;
                assert!(!problem.message.is_empty());
            }
        }
        for event in &reading.events {
            handed_out += 1;
            assert!(event.weight.is_finite());
            assert!(event.true_mass_gev.is_none_or(|mass| mass.is_finite() && mass >= 0.0));
            for p in &event.particles {
                let excess = p.e * p.e - p.px * p.px - p.py * p.py - p.pz * p.pz - p.mass * p.mass;
                assert!(p.mass >= 0.0 && excess.abs() <= 1e-12 * p.e * p.e, "mutation {number}: {p:?}");
            }
            for selector in &selectors {
                if let Ok(truth) = selector.select(&event.event()) {
                    selected += 1;
                    let legs = truth.legs.iter().take(truth.leg_count).map(|leg| leg.four_vector());
                    let mass = legs.reduce(|a, b| a + b).unwrap().mass();
                    assert!(truth.mass_gev > 0.0 && truth.mass_gev.is_finite());
                    if event.true_mass_gev.is_none() {
                        assert!((mass / truth.mass_gev - 1.0).abs() < 1e-9, "mutation {number}");
                    }
                }
            }
        }
    }
    println!("{accepted} accepted, {refused} refused, {handed_out} events handed out, {selected} selected");
    assert!(accepted > 2_000 && refused > 2_000 && selected > 2_000);
}
