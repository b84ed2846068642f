//! Four-vectors, decays and the truth event.

mod decay;
mod vector;

pub use decay::{phase_space_lambda, two_body_momentum};
pub use vector::FourVector;

/// The largest number of legs that a channel can have.
pub const MAX_LEGS: usize = 4;

/// One decay product as it truly was.
#[derive(Clone, Copy, Debug, Default, PartialEq)]
pub struct TruthLeg {
    /// Momentum along x, in GeV.
    pub px_gev: f64,
    /// Momentum along y, in GeV.
    pub py_gev: f64,
    /// Momentum along the beam, in GeV.
    pub pz_gev: f64,
    /// Mass, in GeV; the energy follows from it, so that no precision is lost for light particles.
    pub mass_gev: f64,
}

impl TruthLeg {
    /// The four-vector of the leg.
    pub fn four_vector(&self) -> FourVector {
        FourVector::from_momentum(self.px_gev, self.py_gev, self.pz_gev, self.mass_gev)
    }
}

/// One decay of the resonance as it truly was.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct TruthEvent {
    /// The legs, in the order of the channel; only the first `leg_count` count.
    pub legs: [TruthLeg; MAX_LEGS],
    /// Number of legs, 2 to [`MAX_LEGS`].
    pub leg_count: usize,
    /// Weight; may be negative.
    pub weight: f64,
    /// True mass of the resonance, in GeV.
    pub mass_gev: f64,
}
