//! The unit response with power-law tails: distribution function by pieces, and quantile.

use crate::detector::Tail;
use crate::numerics::kernel;
use crate::numerics::normal::normal_cdf;

/// sqrt(2 pi).
const ROOT_TWO_PI: f64 = 2.506_628_274_631_000_5;

/// A double-sided Crystal Ball of core width 1 with its peak at 0 (PHYSICS: Gaussian core, power-law tails joined with
/// continuous slope), as constants of its distribution function:
///
/// * t < -alpha_low: `low (1 + (alpha_low/n_low)(-t - alpha_low))^(1 - n_low)`
/// * core: `low + core (Phi(t) - Phi(-alpha_low))`
/// * t > alpha_high: `1 - high (1 + (alpha_high/n_high)(t - alpha_high))^(1 - n_high)`
#[derive(Clone, Debug)]
pub(super) struct UnitTail {
    pub alpha_low: f64,
    pub n_low: f64,
    pub alpha_high: f64,
    pub n_high: f64,
    /// Probability of the low tail.
    pub low: f64,
    /// Weight of the Gaussian core.
    pub core: f64,
    /// Probability of the high tail.
    pub high: f64,
    /// Phi(-alpha_low), in the same arithmetic as the core.
    pub phi_low: f64,
}

impl UnitTail {
    pub fn new(tail: &Tail) -> Self {
        let part = |alpha: f64, n: f64| (n / alpha) / (n - 1.0) * libm::exp(-0.5 * alpha * alpha);
        let phi = |t: f64| 0.5 * libm::erfc(-t * std::f64::consts::FRAC_1_SQRT_2);
        let (low, high) = (part(tail.alpha_low, tail.n_low), part(tail.alpha_high, tail.n_high));
        let core = ROOT_TWO_PI * (phi(tail.alpha_high) - phi(-tail.alpha_low));
        let norm = low + core + high;
        UnitTail {
            alpha_low: tail.alpha_low,
            n_low: tail.n_low,
            alpha_high: tail.alpha_high,
            n_high: tail.n_high,
            low: low / norm,
            core: ROOT_TWO_PI / norm,
            high: high / norm,
            phi_low: phi(-tail.alpha_low),
        }
    }

    /// Distribution function.
    #[inline(always)]
    pub fn cdf(&self, t: f64) -> f64 {
        if t < -self.alpha_low {
            self.low * power_tail(-t, self.alpha_low, self.n_low)
        } else if t > self.alpha_high {
            1.0 - self.high * power_tail(t, self.alpha_high, self.n_high)
        } else {
            self.low + self.core * (normal_cdf(t) - self.phi_low)
        }
    }

    /// Quantile, 0 < u < 1.
    #[inline(always)]
    pub fn quantile(&self, u: f64) -> f64 {
        let from_end = |rest: f64, part: f64, alpha: f64, n: f64| {
            alpha + (n / alpha) * (kernel::power_brief(part / rest, 1.0 / (n - 1.0)) - 1.0)
        };
        if u < self.low {
            -from_end(u, self.low, self.alpha_low, self.n_low)
        } else if 1.0 - u < self.high {
            from_end(1.0 - u, self.high, self.alpha_high, self.n_high)
        } else {
            kernel::normal_quantile(self.phi_low + (u - self.low) / self.core)
        }
    }
}

/// (1 + (alpha/n)(t - alpha))^(1 - n), for t beyond alpha; t infinite gives 0.
#[inline(always)]
pub(super) fn power_tail(t: f64, alpha: f64, n: f64) -> f64 {
    let base = 1.0 + (alpha / n) * (t - alpha);
    // The kernel wants a finite number.
    let base = if base < 1e300 { base } else { 1e300 };
    kernel::power_brief(base, 1.0 - n)
}
