//! A Gaussian core with exponential tails.

use super::error::{check_bias, check_k_high, check_k_low, check_sigma};
use super::half::Tail;
use super::{Resolution, ShapeError};

impl Resolution {
    /// A Gaussian core with an exponential tail on the low side: with `t = (x - bias)/sigma`, `exp(-t²/2)` for
    /// `t > -k_low` and `exp(k²/2 + k t)` below.
    ///
    /// Parameters `bias`, `sigma` (GeV), `k_low`. Source: S. Das, arXiv:1603.08591.
    ///
    /// # Errors
    /// A value outside its domain: sigma > 0, k > 0.
    pub fn gauss_exp(bias: f64, sigma: f64, k_low: f64) -> Result<Self, ShapeError> {
        let bias = check_bias(bias)?;
        let sigma = check_sigma(sigma)?;
        let low = Tail::Exponential { k: check_k_low(k_low)? };
        Ok(Resolution::from_parts(bias, (sigma, sigma), true, low, Tail::None))
    }

    /// The same with an exponential tail on either side.
    ///
    /// Parameters `bias`, `sigma` (GeV), `k_low`, `k_high`.
    ///
    /// # Errors
    /// A value outside its domain: sigma > 0, both k > 0.
    pub fn double_gauss_exp(bias: f64, sigma: f64, k_low: f64, k_high: f64) -> Result<Self, ShapeError> {
        let bias = check_bias(bias)?;
        let sigma = check_sigma(sigma)?;
        let low = Tail::Exponential { k: check_k_low(k_low)? };
        let high = Tail::Exponential { k: check_k_high(k_high)? };
        Ok(Resolution::from_parts(bias, (sigma, sigma), true, low, high))
    }
}
