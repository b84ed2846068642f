//! What measures each leg, how well, and which leg comes last.

use super::last_leg::Reading;
use super::plan::Plan;
use crate::events::LegLanes;
use crate::numerics::sobol::{BLOCK, Lane};
use crate::wide;

/// How a leg is measured, by event of the block.
#[derive(Clone, Debug)]
pub(super) struct Resolved {
    pub reading: [Reading; BLOCK],
    /// Relative widths of calorimeter and tracker at truth.
    pub sigma_calorimeter: Lane,
    pub sigma_tracker: Lane,
    /// 1 + scale, of each.
    pub gain_calorimeter: Lane,
    pub gain_tracker: Lane,
    /// 1 + bias.
    pub centre: Lane,
    /// Index of the tailed response; [`GAUSSIAN`] without.
    pub tail: [usize; BLOCK],
    /// Weight of the calorimeter in the measured energy.
    pub share: Lane,
    /// Change of half the squared mass with the logarithm of the leg's energy, GeV².
    pub lever: Lane,
    /// Squares of the terms of the calorimeter and the tracker.
    stochastic: Lane,
    noise: Lane,
    constant: Lane,
    curvature: Lane,
    scattering: Lane,
}

/// No tail.
pub(super) const GAUSSIAN: usize = usize::MAX;

impl Default for Resolved {
    fn default() -> Self {
        let zero = [0.0; BLOCK];
        Resolved {
            reading: [Reading::Calorimeter; BLOCK],
            sigma_calorimeter: zero,
            sigma_tracker: zero,
            gain_calorimeter: [1.0; BLOCK],
            gain_tracker: [1.0; BLOCK],
            centre: [1.0; BLOCK],
            tail: [GAUSSIAN; BLOCK],
            share: zero,
            lever: zero,
            stochastic: zero,
            noise: zero,
            constant: zero,
            curvature: zero,
            scattering: zero,
        }
    }
}

impl Resolved {
    /// Looks up what measures the leg in event `i`, at true |cot theta|; false where nothing does. `choice` is a uniform
    /// number that decides between entries that share a region.
    pub fn look_up(&mut self, plan: &Plan, leg: usize, i: usize, abs_cot: f64, choice: f64) -> bool {
        let leg_plan = &plan.legs[leg];
        let shares = leg_plan.calorimeter.as_ref().and_then(|regions| regions.at(abs_cot));
        let entry = shares
            .and_then(|shares| shares.iter().find(|(sum, _)| choice < *sum).or(shares.last()).map(|(_, entry)| *entry));
        let tracker = leg_plan.tracker.as_ref().and_then(|regions| regions.at(abs_cot)).copied().flatten();
        self.reading[i] = match (entry, tracker) {
            (Some(_), Some(_)) => Reading::Both,
            (Some(_), None) => Reading::Calorimeter,
            (None, Some(_)) => Reading::Tracker,
            (None, None) => return false,
        };
        self.tail[i] = GAUSSIAN;
        if let Some(entry) = entry {
            let terms = &plan.calorimeters[entry];
            self.stochastic[i] = terms.stochastic_squared;
            self.noise[i] = terms.noise_squared;
            self.constant[i] = terms.constant_squared;
            self.gain_calorimeter[i] = terms.gain;
            self.centre[i] = terms.centre;
            self.tail[i] = terms.tail.unwrap_or(GAUSSIAN);
        }
        if let Some(entry) = tracker {
            let terms = &plan.trackers[entry];
            let slant = if terms.slanted { (1.0 + abs_cot * abs_cot).sqrt() } else { 1.0 };
            self.curvature[i] = terms.curvature_squared;
            self.scattering[i] = terms.scattering_squared * slant;
            self.gain_tracker[i] = terms.gain;
        }
        true
    }

    /// Standard deviation that the leg's measured value alone gives half the squared mass, GeV², with the sign with which
    /// its normal number acts; the tracker's part of an electron measured by both counts apart.
    pub fn pull(&self, i: usize) -> f64 {
        match self.reading[i] {
            Reading::Calorimeter => self.lever[i] * self.sigma_calorimeter[i],
            Reading::Both => self.lever[i] * self.share[i] * self.sigma_calorimeter[i],
            Reading::Tracker => -self.lever[i] * self.sigma_tracker[i],
        }
    }
}

wide! {
    /// Widths at truth and the lever, from the total four-momentum.
    pub(super) fn widths(truth: &LegLanes, pt: &Lane, total: &LegLanes, r: &mut Resolved) {
        for i in 0..BLOCK {
            let inverse = 1.0 / truth.e[i];
            let calorimeter = r.stochastic[i] * inverse + r.noise[i] * (inverse * inverse) + r.constant[i];
            let tracker = r.curvature[i] * (pt[i] * pt[i]) + r.scattering[i];
            r.sigma_calorimeter[i] = calorimeter.sqrt();
            r.sigma_tracker[i] = tracker.sqrt();
            r.share[i] = tracker / (calorimeter + tracker);
            r.lever[i] = total.e[i] * truth.e[i]
                - (total.px[i] * truth.px[i] + total.py[i] * truth.py[i] + total.pz[i] * truth.pz[i]);
        }
    }
}
