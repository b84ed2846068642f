//! Truth events as structures of arrays: what the folding engine works on.

use crate::kinematics::TruthEvent;
use crate::numerics::sobol::{BLOCK, Lane};

/// One leg of a block of events; GeV.
#[derive(Clone, Debug)]
pub struct LegLanes {
    /// Momentum along x.
    pub px: Lane,
    /// Momentum along y.
    pub py: Lane,
    /// Momentum along the beam.
    pub pz: Lane,
    /// Energy.
    pub e: Lane,
    /// Mass.
    pub mass: Lane,
}

impl Default for LegLanes {
    fn default() -> Self {
        let zero = [0.0; BLOCK];
        LegLanes { px: zero, py: zero, pz: zero, e: zero, mass: zero }
    }
}

/// A block of truth events.
#[derive(Clone, Debug)]
pub struct TruthBlock {
    /// The legs, in the order of the channel.
    pub legs: Vec<LegLanes>,
    /// Weights of the events as drawn.
    pub weight: Lane,
    /// What each counts in the sum of all generated weights: the weight but for the preference that the drawing gives to
    /// events within reach of the detector, which is 1 on average.
    pub generated: Lane,
    /// True mass of the resonance, in GeV.
    pub mass: Lane,
}

impl TruthBlock {
    /// A block of events with this many legs.
    pub fn new(legs: usize) -> Self {
        TruthBlock {
            legs: vec![LegLanes::default(); legs],
            weight: [0.0; BLOCK],
            generated: [0.0; BLOCK],
            mass: [0.0; BLOCK],
        }
    }

    /// Puts one event into lane `i`.
    pub fn set(&mut self, i: usize, event: &TruthEvent) {
        for (lanes, leg) in self.legs.iter_mut().zip(&event.legs) {
            lanes.px[i] = leg.px_gev;
            lanes.py[i] = leg.py_gev;
            lanes.pz[i] = leg.pz_gev;
            lanes.mass[i] = leg.mass_gev;
            let p_squared = leg.px_gev * leg.px_gev + leg.py_gev * leg.py_gev + leg.pz_gev * leg.pz_gev;
            lanes.e[i] = (p_squared + leg.mass_gev * leg.mass_gev).sqrt();
        }
        self.weight[i] = event.weight;
        self.generated[i] = event.weight;
        self.mass[i] = event.mass_gev;
    }

    /// Leaves lane `i` without an event: what stands there has no weight.
    pub fn clear(&mut self, i: usize) {
        self.weight[i] = 0.0;
        self.generated[i] = 0.0;
    }
}
