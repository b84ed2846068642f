//! From the particles of a file to the truth event of a channel.
//!
//! # Which particles can be legs
//!
//! Final particles (status 1) by particle code: photon 22, electron ±11, muon ±13, jet ±1 to ±5 and 21. Two leptons of one
//! kind have opposite charge. Momentum and mass are the columns of the row; the printed energy is not used.
//!
//! # Dressed leptons
//!
//! With a recombination distance, every final photon that is no leg of the channel and lies within
//! sqrt(Δη² + Δφ²) of a final electron or muon is added to the nearest one. Distances are those of the directions in the
//! file. The leg gets the sum of energies and momenta, hence the mass of the sum: that is the energy which a calorimeter sees.
//! Photons further away are lost to the leg. Without a distance leptons are bare.
//!
//! Leptons are dressed first and chosen then, by their dressed momenta. A channel that has photon legs itself is chosen from
//! bare leptons, and its leptons are dressed then with the photons that are left.
//!
//! # The choice
//!
//! [`Ancestry`] says what resonance rows (status 2) count for. By default:
//!
//! 1. Legs that together are all the final descendants of one row, apart from further photons.
//! 2. Cascades: two pairs, each all the final descendants of a row, apart from further photons. Of one such row: its pair, and
//!    the other pair from the rest.
//! 3. Without such rows: from all final particles.
//!
//! In a cascade by 1, pairs that are the descendants of a row below stay together.
//!
//! [`Pick`] and [`Pairing`] say what is taken where this leaves a choice, among rows or particles. By default the hardest legs
//! (largest pT of each kind and charge; largest sum of pT among rows), and of four legs that pairing in which one pair is
//! nearest to the mass of the intermediate particle.
//!
//! # Order of the legs
//!
//! That of the channel. Among equal leptons negative and positive alternate, negative first; photons and jets fall in pT. When
//! both pairs of a cascade are of the same kinds, the first is the one nearer to the mass of the intermediate particle.
//!
//! # Truth mass
//!
//! That which the file gives for the event, else the mass column of the resonance row whose final descendants are the legs and
//! possibly further photons, which were radiated off; of several such rows that with the fewest descendants, of equals the
//! first. Without one, the invariant mass of the legs.

mod dress;
mod legs;
mod pairs;
mod tally;
mod tree;

use std::fmt;

use super::raw::RawEvent;
use crate::detector::Object;
use crate::kinematics::{MAX_LEGS, TruthEvent, TruthLeg};
use crate::process::{Ancestry, Decay, LegChoice, Pairing, Pick};
use dress::dress;
pub(super) use legs::object_of;
use legs::{Candidate, best, choose, holds, invariant_mass, pt_sum, without};
use pairs::{hardest_of_each, nearest_first, nearest_pairs, nearest_sum};
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
    /// The final particles are there, but are not the descendants of resonance rows, as was asked for.
    NoRow,
    /// A leg without transverse momentum: it stays in the beam pipe, where no direction can be measured.
    AlongBeam,
    /// The legs have no invariant mass.
    NoMass,
    /// The kinematics of the event contradict themselves; the reader has left it out.
    BadKinematics,
}

impl Skip {
    /// All reasons.
    pub const ALL: [Skip; 7] =
        [Skip::WrongKinds, Skip::TooFew, Skip::Charge, Skip::NoRow, Skip::AlongBeam, Skip::NoMass, Skip::BadKinematics];
}

impl fmt::Display for Skip {
    fn fmt(&self, f: &mut fmt::Formatter<'_>) -> fmt::Result {
        f.write_str(match self {
            Skip::WrongKinds => "no particle of a kind that the channel needs",
            Skip::TooFew => "too few particles of a kind",
            Skip::Charge => "no legs of opposite charge",
            Skip::NoRow => "no resonance row that decays to the legs",
            Skip::AlongBeam => "a leg along the beam",
            Skip::NoMass => "legs without invariant mass",
            Skip::BadKinematics => "kinematics that contradict themselves",
        })
    }
}

/// Two pairs of legs.
type Pairs = [Vec<Candidate>; 2];

/// Picks the legs of one channel.
#[derive(Clone, Debug)]
pub struct Selector {
    decay: Decay,
    wanted: Vec<Object>,
    choice: LegChoice,
    intermediate_mass_gev: f64,
    mass_gev: f64,
    recombination_delta_r: Option<f64>,
}

impl Selector {
    /// For a decay, by the default choice and with bare leptons; the mass of the intermediate particle matters only for
    /// cascades. `None` when the decay has fewer than 2 or more than [`MAX_LEGS`] legs.
    pub fn new(decay: &Decay, intermediate_mass_gev: f64) -> Option<Self> {
        let wanted = decay.legs();
        (2..=MAX_LEGS).contains(&wanted.len()).then(|| Selector {
            decay: decay.clone(),
            wanted,
            choice: LegChoice::default(),
            intermediate_mass_gev,
            mass_gev: intermediate_mass_gev,
            recombination_delta_r: None,
        })
    }

    /// The same with another choice; `mass_gev` is the mass of the resonance, to which [`Pick::Nearest`] looks in direct
    /// decays.
    #[must_use]
    pub fn with_choice(self, choice: LegChoice, mass_gev: f64) -> Self {
        Selector { choice, mass_gev, ..self }
    }

    /// The same with dressed leptons: photons are added up to this distance, if there is one.
    #[must_use]
    pub fn with_recombination(self, delta_r: Option<f64>) -> Self {
        Selector { recombination_delta_r: delta_r, ..self }
    }

    /// The truth event that an event gives for the channel.
    ///
    /// # Errors
    ///
    /// The reason why it gives none.
    pub fn select(&self, event: &RawEvent<'_>) -> Result<TruthEvent, Skip> {
        let particles = event.particles;
        let mut candidates: Vec<Candidate> =
            particles.iter().enumerate().filter_map(|(row, p)| Candidate::of_row(row, p)).collect();
        let photon_legs = self.wanted.contains(&Object::Photon);
        if let Some(delta_r) = self.recombination_delta_r.filter(|_| !photon_legs) {
            dress(&mut candidates, |_| false, delta_r);
        }
        let families = families(particles);
        let mut chosen = self.choose(&candidates, &families)?;
        if let Some(delta_r) = self.recombination_delta_r.filter(|_| photon_legs) {
            dress(&mut candidates, |photon| holds(&chosen, photon), delta_r);
            for leg in &mut chosen {
                *leg = candidates.iter().find(|dressed| dressed.row == leg.row).copied().unwrap_or(*leg);
            }
        }
        if chosen.iter().any(|leg| leg.pt <= 0.0) {
            return Err(Skip::AlongBeam);
        }
        let wholes = families.iter().filter(|family| family.is_whole(&chosen, particles));
        let whole = wholes.min_by_key(|family| family.finals.len());
        let resonance_mass = whole.and_then(|family| particles.get(family.row)).map(|row| row.mass);
        let resonance_mass = resonance_mass.filter(|m| *m > 0.0);
        let mass_gev = event.true_mass_gev.or(resonance_mass).unwrap_or_else(|| invariant_mass(&chosen));
        if !(mass_gev > 0.0 && mass_gev.is_finite()) {
            return Err(Skip::NoMass);
        }
        let mut legs = [TruthLeg::default(); MAX_LEGS];
        for (leg, candidate) in legs.iter_mut().zip(&chosen) {
            *leg = candidate.leg;
        }
        Ok(TruthEvent { legs, leg_count: chosen.len(), weight: event.weight, mass_gev })
    }

    fn choose(&self, candidates: &[Candidate], families: &[Family]) -> Result<Vec<Candidate>, Skip> {
        if self.choice.ancestry != Ancestry::Ignore
            && let Some(legs) = self.by_rows(candidates, families)
        {
            return Ok(legs);
        }
        let free = self.free(candidates)?;
        if self.choice.ancestry == Ancestry::Require { Err(Skip::NoRow) } else { Ok(free) }
    }

    /// The legs that resonance rows decay to.
    fn by_rows(&self, candidates: &[Candidate], families: &[Family]) -> Option<Vec<Candidate>> {
        let members = |family: &Family| family.members(candidates);
        let whole = families.iter().filter_map(members).filter_map(|members| {
            let legs = self.free(&members).ok()?;
            all_but_photons(&members, &legs).then_some(legs)
        });
        let whole = best(whole, |legs| self.score(legs));
        let Decay::Cascade(kinds) = &self.decay else { return whole };
        let pairs_of = |kinds: &[Object; 2], pool: &[Candidate]| -> Vec<Vec<Candidate>> {
            let pairs = families.iter().filter_map(members).filter_map(|members| {
                let pair = choose(&members, kinds).ok()?;
                (all_but_photons(&members, &pair) && pair.iter().all(|leg| holds(pool, leg))).then_some(pair)
            });
            pairs.collect()
        };
        let pool = whole.as_deref().unwrap_or(candidates);
        let (firsts, seconds) = (pairs_of(&kinds[0], pool), pairs_of(&kinds[1], pool));
        let both = firsts.iter().flat_map(|a| seconds.iter().map(move |b| [a.clone(), b.clone()]));
        let both = both.filter(|[a, b]| !a.iter().any(|leg| holds(b, leg))).map(|pairs| self.ordered(kinds, pairs));
        if let Some(legs) = best(both, |legs| self.score(legs)) {
            return Some(legs);
        }
        if whole.is_none() && self.choice.ancestry == Ancestry::Require {
            return None;
        }
        let with_first = firsts.iter().filter_map(|a| Some([a.clone(), self.other_pair(pool, a, &kinds[1])?]));
        let with_second = seconds.iter().filter_map(|b| Some([self.other_pair(pool, b, &kinds[0])?, b.clone()]));
        let one = with_first.chain(with_second).map(|pairs| self.ordered(kinds, pairs));
        best(one, |legs| self.score(legs)).or(whole)
    }

    /// The second pair, from what the first leaves.
    fn other_pair(&self, pool: &[Candidate], pair: &[Candidate], kinds: &[Object; 2]) -> Option<Vec<Candidate>> {
        let rest = without(pool, pair);
        match (self.choice.pick, self.choice.pairing) {
            (Pick::Nearest, Pairing::NearestSum) => {
                let pairs = nearest_pairs(&hardest_of_each(&rest), kinds, self.intermediate_mass_gev);
                pairs.first().map(|pair| pair.legs.to_vec())
            }
            _ => choose(&rest, kinds).ok(),
        }
    }

    /// The legs from particles of which nothing else is known.
    fn free(&self, candidates: &[Candidate]) -> Result<Vec<Candidate>, Skip> {
        let hardest = choose(candidates, &self.wanted)?;
        let nearest = self.choice.pick == Pick::Nearest;
        match (&self.decay, self.wanted.as_slice()) {
            (Decay::Cascade(kinds), _) => {
                let pool = if nearest { hardest_of_each(candidates) } else { hardest };
                let pairs = match self.choice.pairing {
                    Pairing::NearestPair => nearest_first(&pool, kinds, self.intermediate_mass_gev),
                    Pairing::NearestSum => nearest_sum(&pool, kinds, self.intermediate_mass_gev),
                };
                pairs.map(|pairs| self.ordered(kinds, pairs)).ok_or(Skip::Charge)
            }
            (Decay::Direct(_), [a, b]) if nearest => {
                let pairs = nearest_pairs(&hardest_of_each(candidates), &[*a, *b], self.mass_gev);
                pairs.first().map(|pair| pair.legs.to_vec()).ok_or(Skip::Charge)
            }
            (Decay::Direct(_), _) => Ok(hardest),
        }
    }

    /// What decides between the legs of several rows: the larger the better.
    fn score(&self, legs: &[Candidate]) -> f64 {
        let to_v = |pair: &[Candidate]| self.distance_to_v(pair);
        match (self.choice.pick, &self.decay, legs) {
            (Pick::Nearest, Decay::Direct(_), _) => -(invariant_mass(legs) - self.mass_gev).abs(),
            (Pick::Nearest, Decay::Cascade(_), [a, b, c, d]) => match self.choice.pairing {
                Pairing::NearestPair => -to_v(&[*a, *b]).min(to_v(&[*c, *d])),
                Pairing::NearestSum => -to_v(&[*a, *b]) - to_v(&[*c, *d]),
            },
            _ => pt_sum(legs),
        }
    }

    /// Joins two pairs; where both are of the same kinds, the one nearer to the intermediate mass comes first.
    fn ordered(&self, kinds: &[[Object; 2]; 2], [mut first, mut second]: Pairs) -> Vec<Candidate> {
        if kinds[0] == kinds[1] && self.distance_to_v(&second) < self.distance_to_v(&first) {
            std::mem::swap(&mut first, &mut second);
        }
        first.extend(second);
        first
    }

    fn distance_to_v(&self, pair: &[Candidate]) -> f64 {
        (invariant_mass(pair) - self.intermediate_mass_gev).abs()
    }
}

/// Whether legs are all of some particles apart from photons.
fn all_but_photons(members: &[Candidate], legs: &[Candidate]) -> bool {
    members.iter().all(|member| member.object == Object::Photon || holds(legs, member))
}
