//! How legs are chosen where an event leaves a choice: ancestry, pick and pairing, each against the documented rule, on events
//! built here and against a search through all combinations.
#![allow(clippy::unwrap_used, clippy::expect_used, clippy::panic, clippy::approx_constant)]

mod lhe_support;

use lhe_support::made::{V_MASS, event, leg, mass_of, row, rows_of};
use peakfold::detector::Object::{self, Electron, Jet, Muon, Photon};
use peakfold::events::{FINAL, Particle, RESONANCE, Selector, Skip};
use peakfold::process::{Ancestry, Decay, LegChoice, Pairing, Pick};

const FOUR_ELECTRONS: [[Object; 2]; 2] = [[Electron, Electron], [Electron, Electron]];

const IGNORE: LegChoice = LegChoice { ancestry: Ancestry::Ignore, pick: Pick::Hardest, pairing: Pairing::NearestPair };
const REQUIRE: LegChoice = LegChoice { ancestry: Ancestry::Require, ..IGNORE };
const NEAREST: LegChoice = LegChoice { pick: Pick::Nearest, ..IGNORE };
const SUM: LegChoice = LegChoice { pairing: Pairing::NearestSum, ..IGNORE };
const NEAREST_SUM: LegChoice = LegChoice { pick: Pick::Nearest, pairing: Pairing::NearestSum, ..IGNORE };

/// Rows of the chosen legs and the truth mass, for a mass of the resonance and of the intermediate particle.
fn choose(
    decay: &Decay,
    choice: LegChoice,
    particles: &[Particle],
    mass: f64,
    v_mass: f64,
) -> Result<(Vec<usize>, f64), Skip> {
    let selector = Selector::new(decay, v_mass).unwrap().with_choice(choice, mass);
    let truth = selector.select(&event(particles, 1.0, 1, 0))?;
    Ok((rows_of(&truth, particles), truth.mass_gev))
}

fn rows(decay: &Decay, choice: LegChoice, particles: &[Particle], mass: f64, v_mass: f64) -> Vec<usize> {
    choose(decay, choice, particles, mass, v_mass).unwrap().0
}

/// Two legs: the hardest, or the pair nearest to the mass of the resonance, which is not that of the intermediate particle.
#[test]
fn direct_hardest_or_nearest() {
    let particles = [
        leg(11, 0, 25.0, 2.0),
        leg(-11, 0, 20.0, 0.1),
        leg(-11, 0, 30.0, 3.0),
        leg(11, 0, 24.0, 6.0),
        leg(22, 0, 9.0, 1.0),
        leg(22, 0, 50.0, 4.0),
        leg(22, 0, 11.0, 5.0),
    ];
    let pair = Decay::Direct(vec![Electron, Electron]);
    let masses = [[0, 1], [0, 2], [3, 1], [3, 2]].map(|rows| mass_of(&particles, &rows));
    assert_eq!(rows(&pair, IGNORE, &particles, masses[0], V_MASS), [0, 2]);
    for (mass, expected) in masses.iter().zip([[0, 1], [0, 2], [3, 1], [3, 2]]) {
        assert_eq!(rows(&pair, NEAREST, &particles, *mass, V_MASS), expected);
        // Two more pairs lie within 2 GeV at most; a small step does not change the nearest.
        assert_eq!(rows(&pair, NEAREST, &particles, mass + 0.01, V_MASS), expected);
    }
    let photons = Decay::Direct(vec![Photon, Photon]);
    assert_eq!(rows(&photons, IGNORE, &particles, 1.0, V_MASS), [5, 6]);
    assert_eq!(rows(&photons, NEAREST, &particles, mass_of(&particles, &[4, 6]), V_MASS), [6, 4]);
    // Kinds that differ: electron and photon, in the order of the channel.
    let mixed = Decay::Direct(vec![Photon, Electron]);
    assert_eq!(rows(&mixed, NEAREST, &particles, mass_of(&particles, &[4, 3]), V_MASS), [4, 3]);
    // Not enough particles: the reason is that of the hardest.
    assert_eq!(choose(&Decay::Direct(vec![Muon, Muon]), NEAREST, &particles, 1.0, V_MASS), Err(Skip::WrongKinds));
    let same_charge = [particles[0], particles[3]];
    assert_eq!(choose(&pair, NEAREST, &same_charge, 1.0, V_MASS), Err(Skip::Charge));
}

/// Four electrons in which one pairing has the pair nearest to V and the other the smaller sum of distances.
#[test]
fn pairings_of_four_electrons_differ() {
    let particles = [
        row(11, FINAL, 0, [30.0, 0.0, 0.0], 0.0),
        row(-11, FINAL, 0, [0.0, 20.0, 3.0], 0.0),
        row(11, FINAL, 0, [0.0, -25.0, 5.0], 0.0),
        row(-11, FINAL, 0, [-28.0, 4.0, 0.0], 0.0),
    ];
    // By hand: m(0,3) = 57.9 and m(2,1) = 44.8, against m(0,1) = 34.8 and m(2,3) = 40.9 GeV. From 43 GeV: 1.8 is the
    // smallest distance, of the first pairing; the sums are 16.7 and 10.3.
    let distance = |pair: [usize; 2]| (mass_of(&particles, &pair) - 43.0).abs();
    assert!(distance([2, 1]) < 1.9 && distance([2, 3]) > 2.0 && distance([0, 1]) > 8.0);
    assert!(distance([2, 1]) + distance([0, 3]) > 16.0 && distance([2, 3]) + distance([0, 1]) < 11.0);
    let four = Decay::Cascade(FOUR_ELECTRONS);
    assert_eq!(rows(&four, IGNORE, &particles, 125.0, 43.0), [2, 1, 0, 3]);
    assert_eq!(rows(&four, SUM, &particles, 125.0, 43.0), [2, 3, 0, 1]);
    // With four particles there is nothing to pick.
    assert_eq!(rows(&four, NEAREST, &particles, 125.0, 43.0), [2, 1, 0, 3]);
    assert_eq!(rows(&four, NEAREST_SUM, &particles, 125.0, 43.0), [2, 3, 0, 1]);
    // A row that decays to the four says nothing about their pairs.
    let mut of_row = particles.map(|p| Particle { mothers: [5, 0], ..p }).to_vec();
    of_row.push(row(25, RESONANCE, 0, [0.0; 3], 125.0));
    for (pairing, expected) in [(Pairing::NearestPair, [2, 1, 0, 3]), (Pairing::NearestSum, [2, 3, 0, 1])] {
        for ancestry in [Ancestry::Prefer, Ancestry::Require] {
            let choice = LegChoice { ancestry, pairing, ..LegChoice::default() };
            assert_eq!(choose(&four, choice, &of_row, 125.0, 43.0), Ok((expected.to_vec(), 125.0)));
        }
    }
}

/// Six electrons: the four hardest and their pairing, or the pair at the mass of V although it is soft, with the hardest rest.
#[test]
fn cascade_picks_among_more_than_four() {
    let particles = [
        row(11, FINAL, 0, [30.0, 0.0, 0.0], 0.0),
        row(-11, FINAL, 0, [0.0, 20.0, 3.0], 0.0),
        row(11, FINAL, 0, [0.0, -25.0, 5.0], 0.0),
        row(-11, FINAL, 0, [-28.0, 4.0, 0.0], 0.0),
        row(11, FINAL, 0, [8.0, 8.0, 60.0], 0.0),
        row(-11, FINAL, 0, [-7.0, 8.0, -50.0], 0.0),
    ];
    let four = Decay::Cascade(FOUR_ELECTRONS);
    let v = mass_of(&particles, &[4, 5]);
    assert!(v > 100.0);
    assert_eq!(rows(&four, IGNORE, &particles, 125.0, v), [0, 3, 2, 1]);
    assert_eq!(rows(&four, NEAREST, &particles, 125.0, v), [4, 5, 0, 3]);
}

/// A row for X, one for V alone, none: what is taken from rows and what is not.
#[test]
fn ancestry_of_cascades() {
    let four = Decay::Cascade(FOUR_ELECTRONS);
    let prefer = LegChoice::default();
    // 0: X; 1: V from X; 2, 3 from V; 4, 5 from X; 6, 7 harder, from nowhere.
    let particles = vec![
        row(25, RESONANCE, 0, [0.0; 3], 125.0),
        row(23, RESONANCE, 1, [0.0; 3], 35.0),
        row(11, FINAL, 2, [30.0, 0.0, 0.0], 0.0),
        row(-11, FINAL, 2, [0.0, 20.0, 3.0], 0.0),
        row(11, FINAL, 1, [0.0, -25.0, 5.0], 0.0),
        row(-11, FINAL, 1, [-28.0, 4.0, 0.0], 0.0),
        row(11, FINAL, 0, [60.0, 1.0, 0.0], 0.0),
        row(-11, FINAL, 0, [50.0, 70.0, 0.0], 0.0),
    ];
    // The rest of X joins V's pair; by the masses alone (2,5) and (4,3) would be pairs. 40.9 is nearer to V than 34.8.
    for choice in [prefer, REQUIRE] {
        assert_eq!(choose(&four, choice, &particles, 125.0, V_MASS), Ok((vec![4, 5, 2, 3], 125.0)));
    }
    let (ignoring, mass) = choose(&four, IGNORE, &particles, 125.0, V_MASS).unwrap();
    assert!(ignoring.contains(&6) && ignoring.contains(&7) && mass != 125.0, "{ignoring:?}");
    // V's row alone: its pair and the hardest of the rest, of opposite charge and the same flavour.
    let mut alone = particles.clone();
    alone[0].status = 3;
    alone.push(row(-13, FINAL, 0, [90.0, 0.0, 0.0], 0.0));
    let (chosen, _) = choose(&four, prefer, &alone, 125.0, V_MASS).unwrap();
    let mut sorted = chosen.clone();
    sorted.sort_unstable();
    assert_eq!((sorted, chosen.chunks(2).any(|pair| pair == [2, 3])), (vec![2, 3, 6, 7], true));
    assert_eq!(choose(&four, REQUIRE, &alone, 125.0, V_MASS), Err(Skip::NoRow));
    // Nearest in sum: the rest joins by its mass.
    let nearest = LegChoice { ancestry: Ancestry::Prefer, ..NEAREST_SUM };
    let v = mass_of(&alone, &[4, 7]);
    let (chosen, _) = choose(&four, nearest, &alone, 125.0, v).unwrap();
    assert_eq!(chosen, [4, 7, 2, 3]);
    // No row at all, and no such particles at all, which is the better reason.
    let none: Vec<Particle> = particles[2..].iter().map(|p| Particle { mothers: [0, 0], ..*p }).collect();
    assert!(choose(&four, prefer, &none, 125.0, V_MASS).is_ok());
    assert_eq!(choose(&four, REQUIRE, &none, 125.0, V_MASS), Err(Skip::NoRow));
    let muons = Decay::Cascade([[Muon, Muon], [Muon, Muon]]);
    assert_eq!(choose(&muons, REQUIRE, &none, 125.0, V_MASS), Err(Skip::WrongKinds));
}

/// Direct decays: rows first, only, or not at all. Rows that are ignored in the choice still know the true mass.
#[test]
fn ancestry_of_direct_decays() {
    let pair = Decay::Direct(vec![Electron, Electron]);
    let particles = [
        row(23, RESONANCE, 0, [0.0; 3], 91.0),
        leg(11, 1, 20.0, 0.0),
        leg(-11, 1, 20.0, 3.0),
        leg(11, 0, 40.0, 1.0),
        leg(-11, 0, 40.0, 5.0),
    ];
    let prefer = LegChoice::default();
    assert_eq!(choose(&pair, prefer, &particles, 91.0, V_MASS), Ok((vec![1, 2], 91.0)));
    assert_eq!(choose(&pair, REQUIRE, &particles, 91.0, V_MASS), Ok((vec![1, 2], 91.0)));
    assert_eq!(rows(&pair, IGNORE, &particles, 91.0, V_MASS), [3, 4]);
    assert_eq!(
        choose(
            &pair,
            REQUIRE,
            &particles[1..].iter().map(|p| Particle { mothers: [0, 0], ..*p }).collect::<Vec<_>>(),
            91.0,
            V_MASS
        ),
        Err(Skip::NoRow)
    );
    assert_eq!(choose(&pair, IGNORE, &particles[..3], 91.0, V_MASS), Ok((vec![1, 2], 91.0)));
    // Of two rows the harder one, or the one whose legs are nearest to the mass of the resonance.
    let mut two = particles.to_vec();
    two.push(row(23, RESONANCE, 0, [0.0; 3], 60.0));
    (two[3].mothers, two[4].mothers) = ([6, 6], [6, 6]);
    assert_eq!(choose(&pair, prefer, &two, 40.0, V_MASS), Ok((vec![3, 4], 60.0)));
    let nearest = LegChoice { pick: Pick::Nearest, ..prefer };
    assert_eq!(choose(&pair, nearest, &two, mass_of(&two, &[1, 2]), V_MASS), Ok((vec![1, 2], 91.0)));
}

/// Numbers from 0 to 1, from a linear congruential generator (D. E. Knuth's MMIX multiplier; from memory).
struct Random(u64);

impl Random {
    fn next(&mut self) -> f64 {
        self.0 = self.0.wrapping_mul(6364136223846793005).wrapping_add(1442695040888963407);
        (self.0 >> 11) as f64 / (1_u64 << 53) as f64
    }

    fn leg(&mut self, code: i64) -> Particle {
        let (pt, phi, pz) = (5.0 + 60.0 * self.next(), 6.283 * self.next(), 80.0 * (self.next() - 0.5));
        row(code, FINAL, 0, [pt * phi.cos(), pt * phi.sin(), pz], 0.0)
    }
}

/// All ways to two disjoint pairs of electrons, negative first, as rows.
fn all_pairings(particles: &[Particle], allowed: &[usize]) -> Vec<[usize; 4]> {
    let of = |code: i64| allowed.iter().copied().filter(move |i| particles[*i].code == code);
    let mut found = Vec::new();
    for (a, b) in of(11).flat_map(|a| of(-11).map(move |b| (a, b))) {
        for (c, d) in of(11).flat_map(|c| of(-11).map(move |d| (c, d))) {
            if a != c && b != d {
                found.push([a, b, c, d]);
            }
        }
    }
    found
}

/// Random events of five to nine electrons, each rule by going through all combinations.
#[test]
fn every_rule_against_all_combinations() {
    let mut random = Random(7);
    let four = Decay::Cascade(FOUR_ELECTRONS);
    let mut differ = [[0; 4]; 4];
    for _ in 0..400 {
        let count = 5 + (5.0 * random.next()) as usize;
        let mut particles: Vec<Particle> = (0..count).map(|i| random.leg(if i % 2 == 0 { 11 } else { -11 })).collect();
        // Photons and jets are no electrons.
        particles.extend([random.leg(22), random.leg(21)]);
        let pt = |i: usize| particles[i].pt();
        let distance = |a: usize, b: usize| (mass_of(&particles, &[a, b]) - V_MASS).abs();
        let mut hardest = Vec::new();
        for code in [11, -11] {
            let mut of: Vec<usize> = (0..count).filter(|i| particles[*i].code == code).collect();
            of.sort_by(|a, b| pt(*b).total_cmp(&pt(*a)));
            hardest.extend(&of[..2]);
        }
        let all: Vec<usize> = (0..count).collect();
        let best = |allowed: &[usize], score: &dyn Fn(&[usize; 4]) -> f64| {
            let ways = all_pairings(&particles, allowed).into_iter();
            let best = ways.min_by(|x, y| score(x).total_cmp(&score(y))).unwrap();
            let [a, b, c, d] = best;
            if distance(c, d) < distance(a, b) { [c, d, a, b] } else { [a, b, c, d] }
        };
        let sum = |w: &[usize; 4]| distance(w[0], w[1]) + distance(w[2], w[3]);
        // The first pair nearest; the rest by pT, which is below 1e3 GeV in sum.
        let first = |w: &[usize; 4]| distance(w[0], w[1]) * 1e9 - pt(w[2]) - pt(w[3]);
        let results = [
            (IGNORE, best(&hardest, &first)),
            (SUM, best(&hardest, &sum)),
            (NEAREST, best(&all, &first)),
            (NEAREST_SUM, best(&all, &sum)),
        ];
        for (choice, expected) in results {
            assert_eq!(rows(&four, choice, &particles, 125.0, V_MASS), expected, "{choice:?} {particles:?}");
        }
        for (i, (_, a)) in results.iter().enumerate() {
            for (j, (_, b)) in results.iter().enumerate() {
                differ[i][j] += usize::from(a != b);
            }
        }
    }
    // Any two of the rules are told apart.
    assert!((0..4).all(|i| (0..i).all(|j| differ[i][j] > 40)), "{differ:?}");
}

/// Thousands of jets: of each kind the 32 hardest are looked at, so that an event takes no time worth speaking of.
#[test]
fn crowded_events_are_bounded() {
    let mut random = Random(11);
    let mut particles: Vec<Particle> = (0..5000).map(|_| random.leg(21)).collect();
    let jets = Decay::Direct(vec![Jet, Jet]);
    particles.push(leg(21, 0, 0.5, 0.0));
    particles.push(leg(21, 0, 0.4, 3.0));
    let soft = mass_of(&particles, &[5000, 5001]);
    let found = rows(&jets, NEAREST, &particles, soft, V_MASS);
    assert!(found.iter().all(|row| *row < 5000), "{found:?}");
    let begun = std::time::Instant::now();
    let four = Decay::Cascade([[Jet, Jet], [Jet, Jet]]);
    assert_eq!(rows(&four, NEAREST_SUM, &particles, 125.0, V_MASS).len(), 4);
    assert!(begun.elapsed().as_secs() < 20);
}
