//! Photons added to the leptons that they lie close to.

use super::legs::Candidate;
use crate::detector::Object;
use crate::kinematics::FourVector;

/// Adds each photon, except those that `is_leg`, to the nearest electron or muon whose direction as it stands in the file is
/// within `delta_r` = sqrt(d eta² + d phi²). Energies and momenta add up; the mass is that of the sum.
pub(super) fn dress(candidates: &mut [Candidate], is_leg: impl Fn(&Candidate) -> bool, delta_r: f64) {
    struct Bare {
        index: usize,
        eta: f64,
        phi: f64,
        sum: FourVector,
        dressed: bool,
    }
    let direction = |vector: &FourVector| (vector.eta(), libm::atan2(vector.py, vector.px));
    let mut leptons = Vec::new();
    for (index, lepton) in candidates.iter().enumerate().filter(|(_, c)| c.is_lepton()) {
        let sum = lepton.leg.four_vector();
        let (eta, phi) = direction(&sum);
        leptons.push(Bare { index, eta, phi, sum, dressed: false });
    }
    for photon in candidates.iter().filter(|c| c.object == Object::Photon && !is_leg(c)) {
        let vector = photon.leg.four_vector();
        let (eta, phi) = direction(&vector);
        let mut nearest: Option<(f64, &mut Bare)> = None;
        for lepton in &mut leptons {
            let turn = (phi - lepton.phi).abs();
            let turn = turn.min(2.0 * std::f64::consts::PI - turn);
            let distance = libm::hypot(eta - lepton.eta, turn);
            // Along the beam the distance is infinite or no number, hence outside.
            if distance <= delta_r && nearest.as_ref().is_none_or(|(least, _)| distance < *least) {
                nearest = Some((distance, lepton));
            }
        }
        if let Some((_, lepton)) = nearest {
            lepton.sum = lepton.sum + vector;
            lepton.dressed = true;
        }
    }
    for lepton in leptons.iter().filter(|lepton| lepton.dressed) {
        if let Some(candidate) = candidates.get_mut(lepton.index) {
            *candidate = candidate.with_vector(&lepton.sum);
        }
    }
}
