//! Final particles as candidates for legs, and the hardest among them.

use super::Skip;
use crate::detector::Object;
use crate::events::raw::{FINAL, Particle};
use crate::kinematics::{FourVector, TruthLeg};

/// What a particle is reconstructed as, with its charge where the choice looks at it (leptons; 0 otherwise).
///
/// Codes of the Review of Particle Physics, Monte Carlo particle numbering scheme: quarks 1 to 5 and the gluon 21 are jets; the
/// top quark, neutrinos and taus are no legs.
pub(in crate::events) fn object_of(code: i64) -> Option<(Object, i8)> {
    match code {
        PHOTON => Some((Object::Photon, 0)),
        11 => Some((Object::Electron, -1)),
        -11 => Some((Object::Electron, 1)),
        13 => Some((Object::Muon, -1)),
        -13 => Some((Object::Muon, 1)),
        21 | -5..=-1 | 1..=5 => Some((Object::Jet, 0)),
        _ => None,
    }
}

/// Particle code of the photon.
pub(super) const PHOTON: i64 = 22;

/// A final particle that can be a leg.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Candidate {
    /// Its row, from 0.
    pub row: usize,
    /// What it is reconstructed as.
    pub object: Object,
    /// Charge of a lepton.
    pub charge: i8,
    /// Transverse momentum of the leg, in GeV.
    pub pt: f64,
    /// The leg that it becomes.
    pub leg: TruthLeg,
}

impl Candidate {
    /// The candidate of a row, if it is a final particle that can be a leg.
    pub(super) fn of_row(row: usize, particle: &Particle) -> Option<Self> {
        let (object, charge) = object_of(particle.code).filter(|_| particle.status == FINAL)?;
        let leg = TruthLeg { px_gev: particle.px, py_gev: particle.py, pz_gev: particle.pz, mass_gev: particle.mass };
        Some(Candidate { row, object, charge, pt: particle.pt(), leg })
    }

    /// Whether it is an electron or a muon.
    pub(super) fn is_lepton(&self) -> bool {
        matches!(self.object, Object::Electron | Object::Muon)
    }

    /// The same particle with another momentum and mass.
    pub(super) fn with_vector(self, vector: &FourVector) -> Self {
        let leg = TruthLeg { px_gev: vector.px, py_gev: vector.py, pz_gev: vector.pz, mass_gev: vector.mass() };
        Candidate { pt: vector.pt(), leg, ..self }
    }
}

/// Chooses the hardest legs for the wanted objects, in their order.
///
/// Of each kind the hardest (largest pT; the earlier row at equal pT). Leptons of one kind alternate between negative and
/// positive, each the hardest of its charge. One electron and one muon that are left over are of opposite charge, and have
/// the largest sum of pT; a single lepton beside neutral legs may have either charge.
pub(super) fn choose(candidates: &[Candidate], wanted: &[Object]) -> Result<Vec<Candidate>, Skip> {
    let count = |object: Object| wanted.iter().filter(|w| **w == object).count();
    for object in Object::ALL {
        let need = count(object);
        let have = candidates.iter().filter(|c| c.object == object).count();
        if need > 0 && have == 0 {
            return Err(Skip::WrongKinds);
        }
        if have < need {
            return Err(Skip::TooFew);
        }
    }
    let (electrons, muons) = (count(Object::Electron), count(Object::Muon));
    let single_charges: &[[i8; 2]] = match (electrons % 2, muons % 2) {
        (1, 1) => &[[-1, 1], [1, -1]],
        (1, 0) | (0, 1) => &[[-1, -1], [1, 1]],
        _ => &[[0, 0]],
    };
    let filled = single_charges.iter().filter_map(|charges| fill(candidates, wanted, *charges));
    best(filled, |chosen| pt_sum(chosen)).ok_or(Skip::Charge)
}

/// Fills the wanted objects one after the other; `single_charges` are those of an electron and a muon without partner.
fn fill(candidates: &[Candidate], wanted: &[Object], single_charges: [i8; 2]) -> Option<Vec<Candidate>> {
    let mut chosen: Vec<Candidate> = Vec::with_capacity(wanted.len());
    for (slot, object) in wanted.iter().enumerate() {
        let number = wanted.iter().take(slot).filter(|w| *w == object).count();
        let last_of_odd = wanted.iter().filter(|w| *w == object).count() == number + 1 && number % 2 == 0;
        let charge = match object {
            Object::Photon | Object::Jet => 0,
            Object::Electron if last_of_odd => single_charges[0],
            Object::Muon if last_of_odd => single_charges[1],
            _ if number % 2 == 0 => -1,
            _ => 1,
        };
        let free = candidates.iter().filter(|c| c.object == *object && c.charge == charge && !holds(&chosen, c));
        chosen.push(*best(free, |c| c.pt)?);
    }
    Some(chosen)
}

/// The item with the largest score; the first one of equals.
pub(super) fn best<T>(items: impl Iterator<Item = T>, score: impl Fn(&T) -> f64) -> Option<T> {
    items
        .map(|item| (score(&item), item))
        .reduce(|best, next| if next.0 > best.0 { next } else { best })
        .map(|(_, item)| item)
}

/// Whether a candidate is among others.
pub(super) fn holds(legs: &[Candidate], candidate: &Candidate) -> bool {
    legs.iter().any(|leg| leg.row == candidate.row)
}

/// What is left of candidates without some of them.
pub(super) fn without(candidates: &[Candidate], taken: &[Candidate]) -> Vec<Candidate> {
    candidates.iter().copied().filter(|candidate| !holds(taken, candidate)).collect()
}

/// Sum of the transverse momenta in GeV.
pub(super) fn pt_sum(legs: &[Candidate]) -> f64 {
    legs.iter().map(|leg| leg.pt).sum()
}

/// Invariant mass in GeV.
pub(super) fn invariant_mass(legs: &[Candidate]) -> f64 {
    legs.iter().fold(FourVector::default(), |sum, leg| sum + leg.leg.four_vector()).mass()
}
