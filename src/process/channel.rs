//! Decay channels with their cuts and categories.

use super::MassAxis;
use crate::detector::{EtaRange, Object};

/// How the resonance reaches its legs.
#[derive(Clone, Debug, PartialEq)]
pub enum Decay {
    /// Straight to the legs: two from generated events, two to four from a file.
    Direct(Vec<Object>),
    /// By two intermediate particles, each of which decays to a pair: X -> V V(*) -> 4 legs.
    Cascade([[Object; 2]; 2]),
}

impl Decay {
    /// The legs in the order in which truth events carry them.
    pub fn legs(&self) -> Vec<Object> {
        match self {
            Decay::Direct(legs) => legs.clone(),
            Decay::Cascade(pairs) => pairs.concat(),
        }
    }
}

/// What an event must satisfy, in measured values except for the gap.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Cuts {
    /// Largest measured |eta| of every leg; the detector's coverage without.
    pub max_abs_eta: Option<f64>,
    /// Range of true |eta| that loses a leg.
    pub gap_abs_eta: Option<EtaRange>,
    /// Least pT of the legs in falling measured pT, in GeV; shorter than the number of legs where some have none.
    pub min_pt_gev: Vec<f64>,
    /// Least pT over measured mass of the legs in falling measured pT.
    pub min_pt_over_mass: Vec<f64>,
}

/// A category: takes an event when every leg satisfies it (measured values); the first match wins.
#[derive(Clone, Debug, PartialEq)]
pub struct Category {
    /// Its name, unique in the channel.
    pub name: String,
    /// Largest measured |eta| of every leg.
    pub max_abs_eta: Option<f64>,
}

/// The resolution shape that a model fits to the templates of a channel.
#[derive(Clone, Copy, Debug, PartialEq, Eq)]
pub enum ShapeChoice {
    /// A Gaussian.
    Gaussian,
    /// A Gaussian core with a power-law tail on the low side.
    CrystalBall,
    /// A Gaussian core with power-law tails on both sides.
    DoubleCrystalBall,
    /// The same with a core width of its own on either side of the peak.
    DoubleCrystalBallTwoSigmas,
    /// A Gaussian core with exponential tails.
    GaussExp,
}

/// A decay channel as it is analysed.
#[derive(Clone, Debug, PartialEq)]
pub struct Channel {
    /// Its name, unique in the study.
    pub name: String,
    /// The decay.
    pub decay: Decay,
    /// What events must satisfy.
    pub cuts: Cuts,
    /// The axis of reconstructed mass.
    pub axis: MassAxis,
    /// The shape that the model fits.
    pub shape: ShapeChoice,
    /// The categories, at least one.
    pub categories: Vec<Category>,
}
