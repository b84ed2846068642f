//! From the particles of a file to the truth event of a channel.
//!
//! # Which particles become legs
//!
//! Final particles (status 1) by particle code: photon 22, electron ±11, muon ±13, jet ±1 to ±5 and 21. Two leptons of one
//! kind have opposite charge. Momentum and mass are the columns of the row; the printed energy is not used.
//!
//! * **Direct decays**: legs that together are all the final descendants of one resonance row (status 2), apart from further
//!   photons. Without such a row: from all final particles. Where there is a choice, the hardest legs (largest sum of pT
//!   among resonance rows, largest pT of each kind and charge otherwise).
//! * **Cascades**: a pair is all the final descendants of one resonance row, apart from further photons. With two such rows:
//!   their pairs, the hardest where there is a choice. With one: its pair, and the hardest of the rest. With none: the hardest
//!   legs, in that pairing in which one pair is nearest to the mass of the intermediate particle.
//!
//! # Order of the legs
//!
//! That of the channel. Among equal leptons negative and positive alternate, negative first; photons and jets fall in pT. When
//! both pairs of a cascade are of the same kinds, the first is the one nearer to the mass of the intermediate particle.
//!
//! # Truth mass
//!
//! That which the file gives for the event, else the mass column of the first resonance row whose final descendants are exactly the legs, else the invariant mass of the
//! legs.

mod legs;
mod tally;
mod tree;

use std::fmt;

use super::raw::{Particle, RawEvent};
use crate::detector::Object;
use crate::kinematics::{FourVector, MAX_LEGS, TruthEvent, TruthLeg};
use crate::process::Decay;
pub(super) use legs::object_of;
use legs::{Candidate, choose, leg_of, neutral_pair};
pub use tally::Selection;
use tree::{Family, families};

/// Why an event does not serve a channel.
#[derive(Clone, Copy, Debug, PartialEq, Eq, Hash)]
pub enum Skip {
    /// No final particle at all of a kind that the channel needs.
    WrongKinds,
    /// Some final particles of each kind, but not enough.
    TooFew,
    /// Enough final particles, but not of the right charges.
    Charge,
    /// A leg without transverse momentum: it stays in the beam pipe, where no direction can be measured.
    AlongBeam,
    /// The legs have no invariant mass.
    NoMass,
    /// The kinematics of the event contradict themselves; the reader has left it out.
    BadKinematics,
}

impl Skip {
    /// All reasons.
    pub const ALL: [Skip; 6] =
        [Skip::WrongKinds, Skip::TooFew, Skip::Charge, Skip::AlongBeam, Skip::NoMass, Skip::BadKinematics];
}

impl fmt::Display for Skip {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Skip::WrongKinds => "no particle of a kind that the channel needs",
            Skip::TooFew => "too few particles of a kind",
            Skip::Charge => "no legs of opposite charge",
            Skip::AlongBeam => "a leg along the beam",
            Skip::NoMass => "legs without invariant mass",
            Skip::BadKinematics => "kinematics that contradict themselves",
        })
    }
}

/// Picks the legs of one channel.
#[derive(Clone, Debug)]
pub struct Selector {
    decay: Decay,
    wanted: Vec<Object>,
    intermediate_mass_gev: f64,
}

impl Selector {
    /// For a decay; the mass of the intermediate particle matters only for cascades. `None` when the decay has fewer than 2
    /// or more than [`MAX_LEGS`] legs.
    pub fn new(decay: &Decay, intermediate_mass_gev: f64) -> Option<Self> {
        let wanted = decay.legs();
        (2..=MAX_LEGS).contains(&wanted.len()).then(|| Selector { decay: decay.clone(), wanted, intermediate_mass_gev })
    }

    /// The truth event that an event gives for the channel.
    ///
    /// # Errors
    ///
    /// The reason why it gives none.
    pub fn select(&self, event: &RawEvent<'_>) -> Result<TruthEvent, Skip> {
        let particles = event.particles;
        let candidates: Vec<Candidate> =
            particles.iter().enumerate().filter_map(|(row, p)| Candidate::of_row(row, p)).collect();
        let families = families(particles);
        let chosen = match &self.decay {
            Decay::Direct(_) => self.direct(&candidates, &families)?,
            Decay::Cascade(pairs) => self.cascade(pairs, particles, &candidates, &families)?,
        };
        if chosen.iter().any(|leg| leg.pt <= 0.0) {
            return Err(Skip::AlongBeam);
        }
        let whole = families.iter().find(|family| family.is_exactly(&chosen));
        let resonance_mass = whole.and_then(|family| particles.get(family.row)).map(|row| row.mass);
        let resonance_mass = resonance_mass.filter(|m| *m > 0.0);
        let mass_gev = event.true_mass_gev.or(resonance_mass).unwrap_or_else(|| invariant_mass(particles, &chosen));
        if !(mass_gev > 0.0 && mass_gev.is_finite()) {
            return Err(Skip::NoMass);
        }
        let mut legs = [TruthLeg::default(); MAX_LEGS];
        for (leg, candidate) in legs.iter_mut().zip(&chosen) {
            *leg = particles.get(candidate.row).map(leg_of).unwrap_or_default();
        }
        Ok(TruthEvent { legs, leg_count: chosen.len(), weight: event.weight, mass_gev })
    }

    fn direct(&self, candidates: &[Candidate], families: &[Family]) -> Result<Vec<Candidate>, Skip> {
        let whole = families.iter().filter_map(|family| complete(family, candidates, &self.wanted));
        match hardest(whole, |legs| pt_sum(legs)) {
            Some(legs) => Ok(legs),
            None => choose(candidates, &self.wanted),
        }
    }

    fn cascade(
        &self,
        kinds: &[[Object; 2]; 2],
        particles: &[Particle],
        candidates: &[Candidate],
        families: &[Family],
    ) -> Result<Vec<Candidate>, Skip> {
        let pairs_of = |kinds: &[Object; 2]| -> Vec<Vec<Candidate>> {
            families.iter().filter_map(|family| complete(family, candidates, kinds)).collect()
        };
        let (firsts, seconds) = (pairs_of(&kinds[0]), pairs_of(&kinds[1]));
        let both = firsts.iter().flat_map(|a| seconds.iter().map(move |b| (a, b)));
        let both = hardest(both.filter(|(a, b)| disjoint(a, b)), |(a, b)| pt_sum(a) + pt_sum(b));
        if let Some((a, b)) = both {
            return Ok(self.ordered(kinds, particles, a.clone(), b.clone()));
        }
        let one_known = |known: &[Vec<Candidate>], other: &[Object; 2]| {
            let known = hardest(known.iter(), |pair| pt_sum(pair))?;
            let rest: Vec<Candidate> = candidates.iter().copied().filter(|c| !known.contains(c)).collect();
            Some((known.clone(), choose(&rest, other).ok()?))
        };
        if let Some((a, b)) = one_known(&firsts, &kinds[1]) {
            return Ok(self.ordered(kinds, particles, a, b));
        }
        if let Some((b, a)) = one_known(&seconds, &kinds[0]) {
            return Ok(self.ordered(kinds, particles, a, b));
        }
        self.pair_up(kinds, particles, &choose(candidates, &self.wanted)?)
    }

    /// Joins two pairs; where both are of the same kinds, the one nearer to the intermediate mass comes first.
    fn ordered(
        &self,
        kinds: &[[Object; 2]; 2],
        particles: &[Particle],
        mut first: Vec<Candidate>,
        mut second: Vec<Candidate>,
    ) -> Vec<Candidate> {
        if kinds[0] == kinds[1] && self.distance(particles, &second) < self.distance(particles, &first) {
            std::mem::swap(&mut first, &mut second);
        }
        first.extend(second);
        first
    }

    /// The pairing of four legs in which one pair is nearest to the intermediate mass.
    fn pair_up(
        &self,
        kinds: &[[Object; 2]; 2],
        particles: &[Particle],
        four: &[Candidate],
    ) -> Result<Vec<Candidate>, Skip> {
        let mut pairings = Vec::new();
        for (i, a) in four.iter().enumerate() {
            for (j, b) in four.iter().enumerate() {
                let rest: Vec<Candidate> =
                    four.iter().enumerate().filter(|(k, _)| *k != i && *k != j).map(|(_, c)| *c).collect();
                let [c, d] = rest.as_slice() else { continue };
                // Equal kinds: negative first, else in the order of the choice.
                let in_order = |x: &Candidate, y: &Candidate, rising: bool| {
                    x.object != y.object || x.charge < y.charge || (x.charge == y.charge && rising)
                };
                for (c, d, rising) in [(c, d, true), (d, c, false)] {
                    let fits = [a.object, b.object] == kinds[0] && [c.object, d.object] == kinds[1];
                    if fits
                        && in_order(a, b, i < j)
                        && in_order(c, d, rising)
                        && neutral_pair(a, b)
                        && neutral_pair(c, d)
                    {
                        pairings.push((vec![*a, *b], vec![*c, *d]));
                    }
                }
            }
        }
        let nearness =
            |(a, b): &(Vec<Candidate>, Vec<Candidate>)| -self.distance(particles, a).min(self.distance(particles, b));
        let (a, b) = hardest(pairings.into_iter(), nearness).ok_or(Skip::Charge)?;
        Ok(self.ordered(kinds, particles, a, b))
    }

    fn distance(&self, particles: &[Particle], pair: &[Candidate]) -> f64 {
        (invariant_mass(particles, pair) - self.intermediate_mass_gev).abs()
    }
}

/// The legs of a family when they are all of it, apart from further photons.
fn complete(family: &Family, candidates: &[Candidate], wanted: &[Object]) -> Option<Vec<Candidate>> {
    if family.finals.len() < wanted.len() {
        return None;
    }
    let members: Vec<Candidate> = candidates.iter().copied().filter(|c| family.finals.contains(&c.row)).collect();
    // A final particle that can be no leg, such as a neutrino.
    if members.len() != family.finals.len() {
        return None;
    }
    let legs = choose(&members, wanted).ok()?;
    members.iter().all(|m| m.object == Object::Photon || legs.contains(m)).then_some(legs)
}

/// The item with the largest score; the first one of equals.
fn hardest<T>(items: impl Iterator<Item = T>, score: impl Fn(&T) -> f64) -> Option<T> {
    items
        .map(|item| (score(&item), item))
        .reduce(|best, next| if next.0 > best.0 { next } else { best })
        .map(|(_, t)| t)
}

fn pt_sum(legs: &[Candidate]) -> f64 {
    legs.iter().map(|leg| leg.pt).sum()
}

fn disjoint(a: &[Candidate], b: &[Candidate]) -> bool {
    a.iter().all(|leg| b.iter().all(|other| other.row != leg.row))
}

fn invariant_mass(particles: &[Particle], legs: &[Candidate]) -> f64 {
    let vectors = legs.iter().filter_map(|leg| particles.get(leg.row)).map(Particle::four_vector);
    vectors.fold(FourVector::default(), |sum, vector| sum + vector).mass()
}
