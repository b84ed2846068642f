//! Cuts and categories.

use super::detect::{LegOutcome, MeasuredLeg, true_abs_eta};
use crate::kinematics::{MAX_LEGS, TruthLeg};
use crate::process::{Channel, Cuts};

/// Whether a leg truly points into the gap.
pub(super) fn in_gap(cuts: &Cuts, truth: &[TruthLeg]) -> bool {
    cuts.gap_abs_eta.is_some_and(|gap| truth.iter().any(|leg| gap.contains(true_abs_eta(leg))))
}

/// The category of an event by its measured directions; `None` when they fail the cut or every category.
pub(super) fn category_of_directions(channel: &Channel, outcomes: &[LegOutcome]) -> Option<usize> {
    let most_forward = outcomes.iter().map(LegOutcome::abs_eta).fold(0.0, f64::max);
    let within = |limit: Option<f64>| limit.is_none_or(|limit| most_forward <= limit);
    if !within(channel.cuts.max_abs_eta) {
        return None;
    }
    channel.categories.iter().position(|category| within(category.max_abs_eta))
}

/// Whether the legs, in falling measured pT, pass the cuts on pT and on pT over measured mass.
pub(super) fn energies_pass(cuts: &Cuts, legs: &[MeasuredLeg], mass: f64) -> bool {
    let mut falling = [0.0; MAX_LEGS];
    falling.iter_mut().zip(legs).for_each(|(pt, leg)| *pt = leg.pt());
    let falling = &mut falling[..legs.len()];
    falling.sort_by(|a, b| b.total_cmp(a));
    let above = |limits: &[f64], unit: f64| falling.iter().zip(limits).all(|(pt, limit)| *pt >= limit * unit);
    above(&cuts.min_pt_gev, 1.0) && above(&cuts.min_pt_over_mass, mass)
}
