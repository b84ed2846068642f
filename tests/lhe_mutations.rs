//! Damage of every kind: 10^5 seeded random mutations of good event files.
//!
//! Expected: no panic, no hang, and no event handed out whose numbers contradict each other. The judge below shares no code
//! with the reader: it looks at sums and masses with one tolerance, 1e-6 of the energies, which is above the worst rounding of
//! the samples (8 digits and more) and far below anything that would shift a template.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic)]

mod lhe_support;

use std::time::Instant;

use lhe_support::mutate::{Random, mutate};
use lhe_support::*;
use peakfold::detector::Object::{Electron, Muon, Photon};
use peakfold::events::{Options, Selector};
use peakfold::process::Decay;

const MUTATIONS: usize = 100_000;

/// What the numbers of an event must satisfy; `None` when they do.
fn contradiction(event: &Owned) -> Option<String> {
    const TOLERANCE: f64 = 1e-6;
    if !event.weight.is_finite() {
        return Some("weight".to_owned());
    }
    let particles = &event.particles;
    let four = |i: usize| [particles[i].px, particles[i].py, particles[i].pz, particles[i].e];
    let balanced = |plus: &[usize], minus: &[usize]| {
        let scale: f64 = plus.iter().chain(minus).map(|i| particles[*i].e).sum();
        (0..4).all(|k| {
            let sum: f64 =
                plus.iter().map(|i| four(*i)[k]).sum::<f64>() - minus.iter().map(|i| four(*i)[k]).sum::<f64>();
            sum.abs() <= TOLERANCE * scale
        })
    };
    let with_status =
        |status: i32| -> Vec<usize> { (0..particles.len()).filter(|i| particles[*i].status == status).collect() };
    for p in particles {
        if p.mothers.iter().any(|m| *m as usize > particles.len()) {
            return Some("mother".to_owned());
        }
        if matches!(p.status, -1 | 1 | 2) && p.e < 0.0 {
            return Some("negative energy".to_owned());
        }
        let excess = p.e * p.e - p.px * p.px - p.py * p.py - p.pz * p.pz - p.mass * p.mass;
        let close = excess.abs() <= 2e-3 * p.mass * p.mass + TOLERANCE * p.e * p.e;
        if matches!(p.status, -1 | 1 | 2) && !close {
            return Some(format!("mass of {p:?}"));
        }
    }
    let (incoming, fin) = (with_status(-1), with_status(1));
    if !incoming.is_empty() && !balanced(&incoming, &fin) {
        return Some("balance".to_owned());
    }
    for resonance in with_status(2) {
        let number = resonance as u32 + 1;
        let daughters: Vec<usize> = (0..particles.len())
            .filter(|i| matches!(particles[*i].status, 1 | 2))
            .filter(|i| [[number, number], [number, 0], [0, number]].contains(&particles[*i].mothers))
            .collect();
        if !daughters.is_empty() && !balanced(&daughters, &[resonance]) {
            return Some("resonance".to_owned());
        }
    }
    None
}

#[test]
fn mutations_never_give_inconsistent_events() {
    let start = Instant::now();
    let mut bases: Vec<String> = ["x_gammagamma.lhe", "x_zz4l.lhe", "x_gammagamma_v3weights.lhe"].map(sample).to_vec();
    let text = extract();
    let pieces: Vec<&str> = text.split_inclusive("</event>\n").collect();
    let (frame, _) = pieces[0].split_once("  <event").unwrap();
    // 40 parts of 5 events of the extract each, and now and then all of it.
    for five in pieces[..200].chunks(5) {
        let head = if five[0].starts_with('<') { "" } else { frame };
        bases.push(format!("{head}{}</LesHouchesEvents>\n", five.concat()));
    }
    let selectors = [
        Decay::Direct(vec![Electron, Electron]),
        Decay::Direct(vec![Muon, Muon]),
        Decay::Direct(vec![Photon, Photon]),
        Decay::Cascade([[Electron, Electron], [Muon, Muon]]),
        Decay::Cascade([[Electron, Electron], [Electron, Electron]]),
    ]
    .map(|decay| Selector::new(&decay, 91.188).unwrap());
    let mut random = Random(20261);
    let (mut accepted, mut refused, mut handed_out, mut left_out) = (0_u64, 0_u64, 0_u64, 0_u64);
    for number in 0..MUTATIONS {
        let base = if number % 500 == 0 {
            &text
        } else {
            &bases[if number % 2 == 0 { number / 2 % 3 } else { random.below(bases.len()) }]
        };
        let mut bytes = base.clone().into_bytes();
        for _ in 0..1 + random.below(3) {
            if !bytes.is_empty() {
                mutate(&mut bytes, &mut random, |byte| byte.is_ascii_whitespace());
            }
        }
        let weight = (number % 7 == 0).then(|| "1002".to_owned());
        let reading = read_with(bytes.as_slice(), &Options { weight });
        match &reading.outcome {
            Ok(report) => {
                accepted += 1;
                left_out += report.inconsistent_events().count;
                assert_eq!(report.events, reading.events.len() as u64 + report.inconsistent_events().count);
            }
            Err(problem) => {
                refused += 1;
                assert!(!problem.message.is_empty());
            }
        }
        for owned in &reading.events {
            handed_out += 1;
            if let Some(what) = contradiction(owned) {
                panic!("mutation {number}, line {}: {what}\n{}", owned.line, String::from_utf8_lossy(&bytes));
            }
            let event = owned.event();
            for selector in &selectors {
                if let Ok(truth) = selector.select(&event) {
                    let legs = truth.legs.iter().take(truth.leg_count).map(|leg| leg.four_vector());
                    let mass = legs.reduce(|a, b| a + b).unwrap().mass();
                    // Nothing in the samples is radiated off, so that both are one mass. A mass column of few digits is
                    // trusted to 1e-3 of itself.
                    assert!((mass / truth.mass_gev - 1.0).abs() < 2e-3, "mutation {number}: {mass} {}", truth.mass_gev);
                }
            }
        }
    }
    println!(
        "{accepted} accepted, {refused} refused, {handed_out} events handed out, {left_out} left out, {:.1} s",
        start.elapsed().as_secs_f64()
    );
    // The mutations do reach every outcome.
    assert!(accepted > 10_000 && refused > 10_000 && left_out > 0);
}
