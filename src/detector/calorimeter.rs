//! What a calorimeter resolves.

use super::{EtaRange, Object, Uncertainty};

/// Power-law tails of a calorimeter response: a double-sided Crystal Ball core with these tails.
#[derive(Clone, Copy, Debug, PartialEq)]
pub struct Tail {
    /// Where the low tail begins, in core widths below the peak; larger than 0.
    pub alpha_low: f64,
    /// Power of the low tail; larger than 1.
    pub n_low: f64,
    /// Where the high tail begins, in core widths above the peak; larger than 0.
    pub alpha_high: f64,
    /// Power of the high tail; larger than 1.
    pub n_high: f64,
}

/// One entry of the calorimeter: what one region measures of one kind of object.
///
/// measured/true = (1 + scale)(1 + bias + sigma t), with t a unit shape whose *peak* is at 0 and sigma the core width
/// `stochastic/sqrt(E) (+) noise_gev/E (+) constant` at the true E in GeV, (+) the quadratic sum.
#[derive(Clone, Debug, PartialEq)]
pub struct Calorimeter {
    /// Unique name of the entry.
    pub name: String,
    /// What it measures.
    pub object: Object,
    /// Where, in the leg's true |eta| seen from the detector centre.
    pub eta: EtaRange,
    /// Stochastic term in sqrt(GeV).
    pub stochastic: f64,
    /// Noise term in GeV.
    pub noise_gev: f64,
    /// Constant term.
    pub constant: f64,
    /// Position of the core relative to the true value, minus 1.
    pub bias: f64,
    /// Energy scale, minus 1; 0 unless a shift or a calibration moves it.
    pub scale: f64,
    /// Tails; Gaussian without.
    pub tail: Option<Tail>,
    /// Share of the legs of this region that this entry takes, 0 to 1.
    pub fraction: f64,
    /// How well its numbers are known.
    pub uncertainties: Vec<Uncertainty>,
}

impl Calorimeter {
    /// Core width of measured over true energy, sigma_E/E, at a true energy in GeV (larger than 0):
    /// `stochastic/sqrt(E) (+) noise_gev/E (+) constant`.
    ///
    /// Source: Review of Particle Physics, 2002 edition, table 24.5, with the constant term added in quadrature.
    pub fn relative_sigma(&self, energy_gev: f64) -> f64 {
        let noise = self.noise_gev / energy_gev;
        (self.stochastic * self.stochastic / energy_gev + noise * noise + self.constant * self.constant).sqrt()
    }
}
