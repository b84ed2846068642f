//! Decay channels with their cuts and categories.

use std::path::PathBuf;

use super::MassAxis;
use crate::detector::{EtaRange, Object};
use crate::fit::Masses;

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

/// What intermediate rows of an event file (status 2) count for in the choice of legs.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Ancestry {
    /// Legs that such rows decay to go first; without them, all final particles are looked at.
    #[default]
    Prefer,
    /// Nothing: all final particles are looked at.
    Ignore,
    /// Everything: an event without such legs is skipped.
    Require,
}

/// Which particles of an event file become legs where there is a choice.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Pick {
    /// The largest pT of each kind and charge.
    #[default]
    Hardest,
    /// Those with the mass looked for: the two legs of a direct decay nearest to the mass point, the pairs of a cascade
    /// nearest to the mass of V, by the [`Pairing`].
    Nearest,
}

/// How legs of an event file are paired in a cascade.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum Pairing {
    /// The pair nearest to the mass of V first; the other one is the hardest of what it leaves.
    #[default]
    NearestPair,
    /// The two pairs with the smallest sum of distances from the mass of V.
    NearestSum,
}

/// How the legs of a channel are chosen from the particles of an event file.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub struct LegChoice {
    /// What intermediate rows count for.
    pub ancestry: Ancestry,
    /// Which particles are taken.
    pub pick: Pick,
    /// How they are paired in a cascade.
    pub pairing: Pairing,
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

impl ShapeChoice {
    /// All kinds.
    pub const ALL: [ShapeChoice; 5] = [
        ShapeChoice::Gaussian,
        ShapeChoice::CrystalBall,
        ShapeChoice::DoubleCrystalBall,
        ShapeChoice::DoubleCrystalBallTwoSigmas,
        ShapeChoice::GaussExp,
    ];

    /// Its word in the files.
    pub fn name(self) -> &'static str {
        match self {
            ShapeChoice::Gaussian => "gaussian",
            ShapeChoice::CrystalBall => "crystal-ball",
            ShapeChoice::DoubleCrystalBall => "double-crystal-ball",
            ShapeChoice::DoubleCrystalBallTwoSigmas => "double-crystal-ball-two-sigmas",
            ShapeChoice::GaussExp => "gauss-exp",
        }
    }

    /// The kind of that word.
    pub fn from_name(name: &str) -> Option<Self> {
        ShapeChoice::ALL.into_iter().find(|shape| shape.name() == name)
    }
}

/// What simulated samples are for.
#[derive(Clone, Copy, Debug, Default, PartialEq, Eq)]
pub enum SimulatedUse {
    /// They are compared with the folded templates.
    #[default]
    Beside,
    /// They replace the folded templates at their masses in the mass model, or join them at other masses.
    Instead,
}

/// Reconstructed masses of a full simulation, of the events that pass cuts and category.
#[derive(Clone, Debug, PartialEq)]
pub struct SimulatedSample {
    /// Mass of the simulated resonance in GeV.
    pub mass_gev: f64,
    /// Number of the category in the channel, from 0.
    pub category: usize,
    /// The file.
    pub path: PathBuf,
    /// The reconstructed masses, on the axis or off it; weights may be negative.
    pub masses: Masses,
    /// Sum of the weights of all generated events, from which the acceptance follows.
    pub generated: Option<f64>,
}

/// The simulated samples of a channel.
#[derive(Clone, Debug, Default, PartialEq)]
pub struct Simulated {
    /// What they are for.
    pub usage: SimulatedUse,
    /// The samples, in the order of the study.
    pub samples: Vec<SimulatedSample>,
}

/// A decay channel as it is analysed.
#[derive(Clone, Debug, PartialEq)]
pub struct Channel {
    /// Its name, unique in the study.
    pub name: String,
    /// The decay.
    pub decay: Decay,
    /// How its legs are chosen from an event file; without meaning for generated events.
    pub choice: LegChoice,
    /// What events must satisfy.
    pub cuts: Cuts,
    /// How many legs the efficiency of the detector must find, as when a trigger on one lepton of four suffices: at least
    /// this many, any of them; all without. A leg of an object without efficiency counts as found.
    pub min_efficient_legs: Option<usize>,
    /// The axis of reconstructed mass.
    pub axis: MassAxis,
    /// The shape that the model fits.
    pub shape: ShapeChoice,
    /// The categories, at least one.
    pub categories: Vec<Category>,
    /// What a full simulation gave.
    pub simulated: Simulated,
}
