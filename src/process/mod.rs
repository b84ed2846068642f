//! What is studied: resonance, channels, cuts, categories, mass axis.

mod axis;
mod channel;
mod resonance;

pub use axis::MassAxis;
pub use channel::{
    Ancestry, Category, Channel, Cuts, Decay, LegChoice, Pairing, Pick, ShapeChoice, Simulated, SimulatedSample,
    SimulatedUse,
};
pub use resonance::{
    EventList, EventSource, Intermediate, Natural, Production, Radiation, Resonance, SpectrumCell, Width,
};

use crate::detector::Detector;

/// A study, validated: everything that a fold needs.
#[derive(Clone, Debug)]
pub struct Study {
    /// Its name.
    pub name: String,
    /// The detector that it folds with.
    pub detector: Detector,
    /// Seed of the scramblings.
    pub seed: u64,
    /// Numerical error aimed at: RMS over the bins of the axis, relative to the highest bin.
    pub precision: f64,
    /// Most points per channel and mass.
    pub max_points: u64,
    /// Calibration shifts that change |CDF| and relative acceptance by less are left out; 0 keeps all.
    pub prune_shifts_below: f64,
    /// Signal events for which the shapes of the model should not bias a fitted mass by half its statistical error; where they
    /// do, the run says so.
    pub expected_events: f64,
    /// The resonance.
    pub resonance: Resonance,
    /// The channels.
    pub channels: Vec<Channel>,
}
