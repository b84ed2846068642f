//! Truth events as structures of arrays: what the folding engine works on.

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
}
