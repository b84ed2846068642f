//! Final particles as candidates for legs, and the choice among them.

use super::Skip;
use crate::detector::Object;
use crate::events::raw::{FINAL, Particle};
use crate::kinematics::TruthLeg;

/// What a particle is reconstructed as, with its charge where the choice looks at it (leptons; 0 otherwise).
///
/// Codes of the Review of Particle Physics, Monte Carlo particle numbering scheme: quarks 1 to 5 and the gluon 21 are jets; the
/// top quark, neutrinos and taus are no legs.
pub(in crate::events) fn object_of(code: i64) -> Option<(Object, i8)> {
    match code {
        22 => Some((Object::Photon, 0)),
        11 => Some((Object::Electron, -1)),
        -11 => Some((Object::Electron, 1)),
        13 => Some((Object::Muon, -1)),
        -13 => Some((Object::Muon, 1)),
        21 | -5..=-1 | 1..=5 => Some((Object::Jet, 0)),
        _ => None,
    }
}

/// The leg that a final particle becomes. Photons that a lepton has radiated would be added to it here.
pub(super) fn leg_of(particle: &Particle) -> TruthLeg {
    TruthLeg { px_gev: particle.px, py_gev: particle.py, pz_gev: particle.pz, mass_gev: particle.mass }
}

/// A final particle that can be a leg.
#[derive(Clone, Copy, Debug, PartialEq)]
pub(super) struct Candidate {
    /// Its row, from 0.
    pub row: usize,
    /// What it is reconstructed as.
    pub object: Object,
    /// Charge of a lepton.
    pub charge: i8,
    /// Transverse momentum in GeV.
    pub pt: f64,
}

impl Candidate {
    /// The candidate of a row, if it is a final particle that can be a leg.
    pub(super) fn of_row(row: usize, particle: &Particle) -> Option<Self> {
        let (object, charge) = object_of(particle.code).filter(|_| particle.status == FINAL)?;
        Some(Candidate { row, object, charge, pt: particle.pt() })
    }
}

/// Chooses legs for the wanted objects, in their order.
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
    let mut best: Option<(f64, Vec<Candidate>)> = None;
    for charges in single_charges {
        if let Some(chosen) = fill(candidates, wanted, *charges) {
            let sum: f64 = chosen.iter().map(|c| c.pt).sum();
            if best.as_ref().is_none_or(|(largest, _)| sum > *largest) {
                best = Some((sum, chosen));
            }
        }
    }
    best.map(|(_, chosen)| chosen).ok_or(Skip::Charge)
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
        let free = candidates
            .iter()
            .filter(|c| c.object == *object && c.charge == charge && chosen.iter().all(|taken| taken.row != c.row));
        let hardest = free.fold(None, |best: Option<&Candidate>, c| match best {
            Some(b) if b.pt >= c.pt => Some(b),
            _ => Some(c),
        });
        chosen.push(*hardest?);
    }
    Some(chosen)
}

/// Whether two legs can come from one neutral particle.
pub(super) fn neutral_pair(a: &Candidate, b: &Candidate) -> bool {
    a.charge + b.charge == 0 || (a.charge == 0 || b.charge == 0)
}
