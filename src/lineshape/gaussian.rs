//! The Gaussian resolution.

use super::error::{check_bias, check_sigma};
use super::half::Tail;
use super::{Resolution, ShapeError};

impl Resolution {
    /// A Gaussian, `exp(-t²/2)/(sqrt(2π) sigma)` with `t = (x - bias)/sigma`.
    ///
    /// Parameters `bias`, `sigma`, in GeV.
    ///
    /// # Errors
    /// A bias that is not finite; a sigma that is not finite and positive.
    pub fn gaussian(bias: f64, sigma: f64) -> Result<Self, ShapeError> {
        let sigma = check_sigma(sigma)?;
        Ok(Resolution::from_parts(check_bias(bias)?, (sigma, sigma), true, Tail::None, Tail::None))
    }
}
