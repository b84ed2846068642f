//! Which legs are found, drawn one by one.

use rand::RngExt;
use rand::rngs::StdRng;
use statrs::function::erf::erf;
use std::f64::consts::SQRT_2;

use super::detect::true_abs_eta;
use crate::detector::{Detector, Efficiency, EfficiencyCurve};
use crate::kinematics::TruthLeg;
use crate::process::Channel;

/// What finds the legs of a channel.
pub(super) struct Finding<'a> {
    /// By leg: the entries of its object.
    legs: Vec<Vec<&'a Efficiency>>,
    /// How many legs must be found.
    wanted: usize,
}

impl<'a> Finding<'a> {
    pub(super) fn new(detector: &'a Detector, channel: &Channel) -> Self {
        let objects = channel.decay.legs();
        let legs: Vec<Vec<&Efficiency>> = objects
            .iter()
            .map(|object| detector.efficiencies.iter().filter(|entry| entry.object == *object).collect())
            .collect();
        Finding { wanted: channel.min_efficient_legs.unwrap_or(legs.len()), legs }
    }

    /// Draws whether enough legs are found. A leg without entries is, and takes no random number.
    pub(super) fn found(&self, truth: &[TruthLeg], rng: &mut StdRng) -> bool {
        let mut count = 0;
        for (leg, entries) in truth.iter().zip(&self.legs) {
            if entries.is_empty() || rng.random::<f64>() < probability(entries, leg) {
                count += 1;
            }
        }
        count >= self.wanted
    }
}

fn probability(entries: &[&Efficiency], leg: &TruthLeg) -> f64 {
    let pt = libm::hypot(leg.px_gev, leg.py_gev);
    let abs_eta = true_abs_eta(leg);
    let Some(entry) = entries.iter().find(|entry| entry.eta.contains(abs_eta)) else { return 0.0 };
    match &entry.curve {
        EfficiencyCurve::TurnOn { threshold_gev, width_gev, plateau } => {
            if *width_gev == 0.0 {
                return if pt > *threshold_gev { *plateau } else { 0.0 };
            }
            0.5 * plateau * (1.0 + erf((pt - threshold_gev) / (SQRT_2 * width_gev)))
        }
        EfficiencyCurve::Table(cells) => {
            for cell in cells {
                let (low, high) = cell.pt_gev;
                if (low..high).contains(&pt) && (cell.eta.low..cell.eta.high).contains(&abs_eta) {
                    return cell.efficiency;
                }
            }
            0.0
        }
    }
}
