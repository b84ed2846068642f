//! Pairs of candidates by their mass.

use super::legs::{Candidate, best, choose, holds, invariant_mass, without};
use crate::detector::Object;

/// Of each kind and charge so many of the hardest are looked at: what an event costs must be bounded.
const MOST_OF_A_KIND: usize = 32;

/// A pair, in the order of its channel, with the distance of its mass from the one wanted, in GeV.
#[derive(Clone, Copy, Debug)]
pub(super) struct Pair {
    pub legs: [Candidate; 2],
    pub distance_gev: f64,
}

/// All neutral pairs of two kinds, each once, nearest to a mass first; equals in the order of the candidates. Two of one kind
/// stand negative first, or in falling pT.
pub(super) fn nearest_pairs(pool: &[Candidate], kinds: &[Object; 2], mass_gev: f64) -> Vec<Pair> {
    let mut pairs = Vec::new();
    for (i, a) in pool.iter().enumerate().filter(|(_, a)| a.object == kinds[0]) {
        for (j, b) in pool.iter().enumerate().filter(|(_, b)| b.object == kinds[1]) {
            let in_order = a.object != b.object
                || a.charge < b.charge
                || (a.charge == b.charge && (a.pt > b.pt || (a.pt == b.pt && i < j)));
            let neutral = a.charge + b.charge == 0 || a.charge == 0 || b.charge == 0;
            if i != j && in_order && neutral {
                let legs = [*a, *b];
                pairs.push(Pair { legs, distance_gev: (invariant_mass(&legs) - mass_gev).abs() });
            }
        }
    }
    pairs.sort_by(|a, b| a.distance_gev.total_cmp(&b.distance_gev));
    pairs
}

/// The pair nearest to a mass, of either kinds, and the hardest of what it leaves as the other.
pub(super) fn nearest_first(
    pool: &[Candidate],
    kinds: &[[Object; 2]; 2],
    mass_gev: f64,
) -> Option<[Vec<Candidate>; 2]> {
    let completed = |slot: usize| {
        nearest_pairs(pool, &kinds[slot], mass_gev).into_iter().find_map(|pair| {
            let other = choose(&without(pool, &pair.legs), &kinds[1 - slot]).ok()?;
            let pairs = if slot == 0 { [pair.legs.to_vec(), other] } else { [other, pair.legs.to_vec()] };
            Some((pair.distance_gev, pairs))
        })
    };
    let slots = if kinds[0] == kinds[1] { 0..1 } else { 0..2 };
    best(slots.filter_map(completed), |(distance, _)| -distance).map(|(_, pairs)| pairs)
}

/// The two pairs with the smallest sum of distances from a mass.
pub(super) fn nearest_sum(pool: &[Candidate], kinds: &[[Object; 2]; 2], mass_gev: f64) -> Option<[Vec<Candidate>; 2]> {
    let (firsts, seconds) = (nearest_pairs(pool, &kinds[0], mass_gev), nearest_pairs(pool, &kinds[1], mass_gev));
    let least = seconds.first()?.distance_gev;
    let mut found: Option<(f64, [Vec<Candidate>; 2])> = None;
    for first in &firsts {
        // Both lists rise: nothing better comes.
        if found.as_ref().is_some_and(|(sum, _)| first.distance_gev + least >= *sum) {
            break;
        }
        let disjoint = |second: &&Pair| second.legs.iter().all(|leg| !holds(&first.legs, leg));
        if let Some(second) = seconds.iter().find(disjoint) {
            let sum = first.distance_gev + second.distance_gev;
            if found.as_ref().is_none_or(|(smallest, _)| sum < *smallest) {
                found = Some((sum, [first.legs.to_vec(), second.legs.to_vec()]));
            }
        }
    }
    found.map(|(_, pairs)| pairs)
}

/// The hardest candidates of each kind and charge, in their order, as many as are looked at.
pub(super) fn hardest_of_each(candidates: &[Candidate]) -> Vec<Candidate> {
    let harder = |a: &Candidate, b: &Candidate| a.pt > b.pt || (a.pt == b.pt && a.row < b.row);
    let rank = |c: &Candidate| {
        let alike = candidates.iter().filter(|other| other.object == c.object && other.charge == c.charge);
        alike.filter(|other| harder(other, c)).count()
    };
    if candidates.len() <= MOST_OF_A_KIND {
        return candidates.to_vec();
    }
    candidates.iter().copied().filter(|c| rank(c) < MOST_OF_A_KIND).collect()
}
