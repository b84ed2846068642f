//! Which final particles come from which resonance row.

use super::legs::{Candidate, PHOTON};
use crate::events::raw::{FINAL, Particle, RESONANCE};

/// A resonance row with the final particles that descend from it.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Family {
    /// The resonance row, from 0.
    pub row: usize,
    /// Rows of its final descendants, rising.
    pub finals: Vec<usize>,
}

/// The families of all resonance rows whose decay is known to its end, in the order of the file (a parent usually stands
/// before its daughters there). Descent goes by rows that have one mother, which is a resonance: a row with two mothers
/// belongs to the hard scattering, and only resonances are known to balance their daughters. Where a resonance below has no descendants, the decay is not known to its end.
pub(super) fn families(particles: &[Particle]) -> Vec<Family> {
    let resonances = particles.iter().enumerate().filter(|(_, p)| p.status == RESONANCE);
    let mut families: Vec<Family> = resonances.map(|(row, _)| Family { row, finals: Vec::new() }).collect();
    if families.is_empty() {
        return families;
    }
    for (row, _) in particles.iter().enumerate().filter(|(_, p)| p.status == FINAL) {
        for_each_ancestor(particles, row, |ancestor| {
            if let Some(family) = family_of(&mut families, ancestor) {
                family.finals.push(row);
            }
        });
    }
    let dead_ends: Vec<usize> = families.iter().filter(|f| f.finals.is_empty()).map(|f| f.row).collect();
    for row in dead_ends {
        for_each_ancestor(particles, row, |ancestor| {
            if let Some(family) = family_of(&mut families, ancestor) {
                family.finals.clear();
            }
        });
    }
    families.retain(|family| !family.finals.is_empty());
    families
}

fn for_each_ancestor(particles: &[Particle], row: usize, mut visit: impl FnMut(usize)) {
    let mut ancestor = particles.get(row).and_then(Particle::only_mother);
    // The reader refuses circles; the bound keeps any other caller safe.
    for _ in 0..particles.len() {
        let Some(mother) = ancestor else { break };
        let Some(particle) = particles.get(mother).filter(|p| p.status == RESONANCE) else { break };
        visit(mother);
        ancestor = particle.only_mother();
    }
}

/// The families are sorted by their rows.
fn family_of(families: &mut [Family], row: usize) -> Option<&mut Family> {
    let position = families.binary_search_by_key(&row, |family| family.row).ok()?;
    families.get_mut(position)
}

impl Family {
    /// The final descendants, if all of them can be legs.
    pub(super) fn members(&self, candidates: &[Candidate]) -> Option<Vec<Candidate>> {
        let members: Vec<Candidate> = candidates.iter().copied().filter(|c| self.finals.contains(&c.row)).collect();
        (members.len() == self.finals.len()).then_some(members)
    }

    /// Whether the final descendants are these legs and, possibly, further photons.
    pub(super) fn is_whole(&self, legs: &[Candidate], particles: &[Particle]) -> bool {
        let is_leg = |row: usize| legs.iter().any(|leg| leg.row == row);
        let is_photon = |row: usize| particles.get(row).is_some_and(|particle| particle.code == PHOTON);
        legs.iter().all(|leg| self.finals.contains(&leg.row))
            && self.finals.iter().all(|row| is_leg(*row) || is_photon(*row))
    }
}
