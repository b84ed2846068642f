//! Which final particles come from which resonance row.

use super::legs::Candidate;
use crate::events::raw::{FINAL, Particle, RESONANCE};

/// A resonance row with the final particles that descend from it.
#[derive(Clone, Debug, PartialEq)]
pub(super) struct Family {
    /// The resonance row, from 0.
    pub row: usize,
    /// Rows of its final descendants, rising.
    pub finals: Vec<usize>,
}

/// The families of all resonance rows that have final descendants, in the order of the file (a parent stands before its
/// daughters there). Descent goes by rows that have one mother: a row with two mothers belongs to the hard scattering.
pub(super) fn families(particles: &[Particle]) -> Vec<Family> {
    let resonances = particles.iter().enumerate().filter(|(_, p)| p.status == RESONANCE);
    let mut families: Vec<Family> = resonances.map(|(row, _)| Family { row, finals: Vec::new() }).collect();
    if families.is_empty() {
        return families;
    }
    for (row, _) in particles.iter().enumerate().filter(|(_, p)| p.status == FINAL) {
        let mut ancestor = particles.get(row).and_then(Particle::only_mother);
        // The reader refuses circles; the bound keeps any other caller safe.
        for _ in 0..particles.len() {
            let Some(mother) = ancestor else { break };
            if let Ok(position) = families.binary_search_by_key(&mother, |family| family.row)
                && let Some(family) = families.get_mut(position)
            {
                family.finals.push(row);
            }
            ancestor = particles.get(mother).and_then(Particle::only_mother);
        }
    }
    families.retain(|family| !family.finals.is_empty());
    families
}

impl Family {
    /// Whether the final descendants are exactly these legs.
    pub(super) fn is_exactly(&self, legs: &[Candidate]) -> bool {
        self.finals.len() == legs.len() && legs.iter().all(|leg| self.finals.contains(&leg.row))
    }
}
