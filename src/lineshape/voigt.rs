//! Breit-Wigner ⊗ Gaussian (the Voigt profile), and the relativistic shapes ⊗ Gaussian, by the complex error function.

use std::f64::consts::{FRAC_1_SQRT_2, PI};

use num_complex::Complex64;

use super::pole_pair::PolePair;
use crate::numerics::faddeeva::{faddeeva, faddeeva_re_slice};

/// `1/sqrt(2π)`.
const PEAK: f64 = 0.398_942_280_401_432_7;

/// The Voigt profile of standard deviation `sigma` and half width at half maximum `gamma`, at the distance x from its
/// centre: `Re w(z)/(sigma sqrt(2π))`, `z = (x + i gamma)/(sigma √2)`. Relative error below 5e-14.
pub(super) fn voigt(x: f64, sigma: f64, gamma: f64) -> f64 {
    let scale = FRAC_1_SQRT_2 / sigma;
    PEAK / sigma * faddeeva(x * scale, gamma * scale).0
}

/// The same for many masses.
pub(super) fn voigt_slice(m: &[f64], out: &mut [f64], centre: f64, sigma: f64, gamma: f64) {
    let scale = FRAC_1_SQRT_2 / sigma;
    faddeeva_re_slice(m, out, centre, scale, gamma * scale, PEAK / sigma);
}

/// The Voigt profile with its derivatives in the centre, sigma and gamma.
pub(super) fn voigt_gradient(x: f64, sigma: f64, gamma: f64) -> [f64; 4] {
    let scale = FRAC_1_SQRT_2 / sigma;
    let (zx, zy) = (x * scale, gamma * scale);
    let (re, im) = faddeeva(zx, zy);
    let z = Complex64::new(zx, zy);
    // w' = 2i/sqrt(π) - 2zw cancels far out, where its asymptotic series takes over.
    let slope = if libm::hypot(zx, zy) > 30.0 {
        let inverse = (z * z).inv();
        // w = i/(sqrt(π) z) (1 + 1/(2z²) + 3/(4z⁴) + 15/(8z⁶) + 105/(16z⁸) + 945/(32 z¹⁰)).
        let terms = [1.0, 1.5, 3.75, 13.125, 59.0625, 324.84375];
        let series = terms.iter().rev().fold(Complex64::new(0.0, 0.0), |sum, &c| sum * inverse + c);
        Complex64::new(0.0, -std::f64::consts::FRAC_2_SQRT_PI * 0.5) * inverse * series
    } else {
        Complex64::new(0.0, std::f64::consts::FRAC_2_SQRT_PI) - 2.0 * z * Complex64::new(re, im)
    };
    let value = PEAK / sigma * re;
    let front = PEAK / sigma * scale;
    // d Re w = Re(w' dz).
    let by_x = front * slope.re;
    let by_gamma = -front * slope.im;
    [value, -by_x, -(value + x * by_x + gamma * by_gamma) / sigma, by_gamma]
}

/// The distance above 0, in sigma, from which the truncation of a relativistic shape at m = 0 changes nothing: what the
/// Gaussian carries across is below exp(-72) of it.
const CLEAR_OF_ZERO: f64 = 12.0;

/// A relativistic shape ⊗ Gaussian of standard deviation `sigma` at x, with the true mass on m > 0.
///
/// From the poles ±a of the shape, `c Im{h [I(a) - I(-a)]}` with `I(p) = ∫ N(x - t; sigma)/(t - p) dt =
/// iπ/(sigma sqrt(2π)) w((p - x)/(sigma √2))` for Im p > 0 and its mirror image below (R. Kycia and S. Jadach,
/// arXiv:1711.09304). That integral runs over the whole line. The part at t < 0 is negligible for x above 12 sigma; below,
/// and far above the mass where the two poles cancel, the result is `None` and the caller integrates over t > 0.
pub(super) fn relativistic_voigt(poles: &PolePair, x: f64, sigma: f64) -> Option<f64> {
    let a = poles.pole();
    if !(x > CLEAR_OF_ZERO * sigma && x < 5.0 * a.re) {
        return None;
    }
    let scale = FRAC_1_SQRT_2 / sigma;
    let (re, im) = faddeeva((a.re - x) * scale, a.im * scale);
    let upper = Complex64::new(re, im);
    // -a lies below; I(-a) is the conjugate of I(-a*).
    let (re, im) = faddeeva((-a.re - x) * scale, a.im * scale);
    let lower = Complex64::new(re, im);
    let front = PI * PEAK / sigma;
    let i = Complex64::new(0.0, 1.0);
    let sum = poles.half_residue() * (i * upper - (i * lower).conj());
    Some(poles.scale() * front * sum.im)
}
