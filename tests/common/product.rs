//! Distribution of m = M sqrt((1 + s1 z1)(1 + s2 z2)), z1 and z2 standard normal, each under the condition 1 + s z > 0.
//!
//! Definition as in tests/reference/two_leg_product.csv; integrals by the `quadrature` crate.

use quadrature::integrate;
use std::f64::consts::{SQRT_2, TAU};

/// Reach of the integrals in standard deviations; beyond it a normal density is below 1e-22 of its peak.
const REACH: f64 = 10.0;
/// Absolute target of the integrals, in the dimensionless variables used here (values of order 1).
const TARGET: f64 = 1e-14;

fn response(u: f64, s: f64) -> f64 {
    let z = (u - 1.0) / s;
    libm::exp(-0.5 * z * z) / (TAU.sqrt() * s)
}

/// Part of the normal distribution with 1 + s z > 0.
fn positive(s: f64) -> f64 {
    0.5 * libm::erfc(-1.0 / (s * SQRT_2))
}

/// Integral over u1, split into pieces of one standard deviation so that no peak is missed.
fn over_first(s1: f64, integrand: impl Fn(f64) -> f64) -> f64 {
    let steps = 2.0 * REACH;
    (0..steps as u32)
        .map(|i| {
            let low = (1.0 + s1 * (f64::from(i) - REACH)).max(0.0);
            let high = (1.0 + s1 * (f64::from(i + 1) - REACH)).max(0.0);
            if high > low { integrate(&integrand, low, high, TARGET).integral } else { 0.0 }
        })
        .sum::<f64>()
        / positive(s1)
}

/// Density per GeV.
pub fn pdf(m: f64, mass: f64, s1: f64, s2: f64) -> f64 {
    // The wider leg is the one with the closed form, so that the integrand is as smooth as it can be.
    let (s1, s2) = (s1.min(s2), s1.max(s2));
    let w = (m / mass).powi(2);
    2.0 * m / (mass * mass) * over_first(s1, |u| response(u, s1) * response(w / u, s2) / (u * positive(s2)))
}

/// Cumulative distribution: P(u2 < W/u1) averaged over u1, W = (m/M)².
pub fn cdf(m: f64, mass: f64, s1: f64, s2: f64) -> f64 {
    let (s1, s2) = (s1.min(s2), s1.max(s2));
    let w = (m / mass).powi(2);
    let below = |u2: f64| 0.5 * libm::erfc((1.0 - u2) / (s2 * SQRT_2)) - 0.5 * libm::erfc(1.0 / (s2 * SQRT_2));
    over_first(s1, |u| response(u, s1) * below(w / u) / positive(s2))
}
