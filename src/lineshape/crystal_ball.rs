//! The Crystal Ball function, with its power tail on the low side.

use super::error::{check_alpha_low, check_bias, check_n_low, check_sigma};
use super::half::Tail;
use super::{Resolution, ShapeError};

impl Resolution {
    /// The Crystal Ball function: with `t = (x - bias)/sigma`, `exp(-t²/2)` for `t > -alpha_low` and
    /// `A (B - t)^-n_low` below, `A = (n/alpha)^n exp(-alpha²/2)`, `B = n/alpha - alpha`; value and slope are continuous.
    ///
    /// Parameters `bias`, `sigma` (GeV), `alpha_low`, `n_low`. The mean exists for n > 2, the variance for n > 3.
    /// Source: J. Gaiser, thesis 1982, report R-255, appendix F. The tail is evaluated as
    /// `exp(-alpha²/2 - n log1p((alpha/n)(|t| - alpha)))`, which does not overflow.
    ///
    /// # Errors
    /// A value outside its domain: sigma > 0, alpha > 0, n > 1.
    pub fn crystal_ball(bias: f64, sigma: f64, alpha_low: f64, n_low: f64) -> Result<Self, ShapeError> {
        let bias = check_bias(bias)?;
        let sigma = check_sigma(sigma)?;
        let low = Tail::Power { alpha: check_alpha_low(alpha_low)?, n: check_n_low(n_low)? };
        Ok(Resolution::from_parts(bias, (sigma, sigma), true, low, Tail::None))
    }
}
