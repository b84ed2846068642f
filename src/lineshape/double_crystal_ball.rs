//! The double-sided Crystal Ball function, with one core width or two.

use super::error::{
    check_alpha_high, check_alpha_low, check_bias, check_n_high, check_n_low, check_sigma, check_sigma_high,
    check_sigma_low,
};
use super::half::Tail;
use super::{Resolution, ShapeError};

impl Resolution {
    /// The double-sided Crystal Ball function: a Gaussian core with a power tail on either side, as in
    /// [`Resolution::crystal_ball`]; `low` and `high` are (alpha, n).
    ///
    /// Parameters `bias`, `sigma` (GeV), `alpha_low`, `n_low`, `alpha_high`, `n_high`.
    ///
    /// # Errors
    /// A value outside its domain: sigma > 0, alpha > 0, n > 1.
    pub fn double_crystal_ball(bias: f64, sigma: f64, low: (f64, f64), high: (f64, f64)) -> Result<Self, ShapeError> {
        let bias = check_bias(bias)?;
        let sigma = check_sigma(sigma)?;
        let (low, high) = tails(low, high)?;
        Ok(Resolution::from_parts(bias, (sigma, sigma), true, low, high))
    }

    /// The same with `sigmas = (sigma_low, sigma_high)` below and above the peak, continuous there.
    ///
    /// Parameters `bias`, `sigma_low`, `sigma_high` (GeV), `alpha_low`, `n_low`, `alpha_high`, `n_high`. The integral with
    /// peak 1 is `Σ sigma_s [(n_s/alpha_s)/(n_s - 1) exp(-alpha_s²/2) + sqrt(π/2) erf(alpha_s/√2)]`.
    ///
    /// # Errors
    /// A value outside its domain: both sigma > 0, alpha > 0, n > 1.
    pub fn double_crystal_ball_two_sigmas(
        bias: f64,
        sigmas: (f64, f64),
        low: (f64, f64),
        high: (f64, f64),
    ) -> Result<Self, ShapeError> {
        let bias = check_bias(bias)?;
        let sigmas = (check_sigma_low(sigmas.0)?, check_sigma_high(sigmas.1)?);
        let (low, high) = tails(low, high)?;
        Ok(Resolution::from_parts(bias, sigmas, false, low, high))
    }
}

fn tails(low: (f64, f64), high: (f64, f64)) -> Result<(Tail, Tail), ShapeError> {
    Ok((
        Tail::Power { alpha: check_alpha_low(low.0)?, n: check_n_low(low.1)? },
        Tail::Power { alpha: check_alpha_high(high.0)?, n: check_n_high(high.1)? },
    ))
}
