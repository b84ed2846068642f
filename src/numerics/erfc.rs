//! The complementary error function and the logarithm near 1, vectorised.

use super::kernel::{exp, ln};

/// Coefficients in rising powers of `y = (x - 3.5)/(x + 3.5)` of `(1 + 2x) exp(x²) erfc(x)` on x >= 0: the Chebyshev
/// interpolation with 60 nodes in 50-digit arithmetic (mpmath), cut after degree 23.
const SCALED: [f64; 24] = [
    1.2423492448711544,
    -0.1400091801376197,
    -0.010555596332221669,
    0.09751909515328706,
    -0.11508959816003075,
    0.08798315382403679,
    -0.04882332583088403,
    0.019099330953271102,
    -0.004215019879774098,
    -0.0003022679534328962,
    0.0005643842668700844,
    -0.00012151212092160807,
    -4.278173995827049e-05,
    2.4260300989800593e-05,
    2.32733095136096e-06,
    -3.814012593103494e-06,
    -4.3092371039118875e-08,
    6.014823948632315e-07,
    -8.611573785852724e-09,
    -9.640043238868368e-08,
    6.651903752422184e-10,
    1.3624445659666205e-08,
    6.040373062904371e-11,
    -1.1656692973877603e-09,
];

/// `exp(x²) erfc(x)` for `x >= 0`, relative error below 1e-15.
#[inline(always)]
pub fn erfcx(x: f64) -> f64 {
    let y = (x - 3.5) / (x + 3.5);
    let mut p = SCALED[23];
    let mut k = 23;
    while k > 0 {
        k -= 1;
        p = p * y + SCALED[k];
    }
    p / (1.0 + 2.0 * x)
}

/// The complementary error function, relative error below 3e-15 wherever the result is a normal number.
#[inline(always)]
pub fn erfc(x: f64) -> f64 {
    // Beyond 27 the result is 0; the clamp keeps infinite arguments from making NaN.
    let a = x.abs().min(30.0);
    // exp(-a²) with a² split exactly: the high part of a has 26 bits, so its square is exact.
    let high = f64::from_bits(a.to_bits() & 0xffff_ffff_f800_0000);
    let low = (a - high) * (a + high);
    let scaled = erfcx(a) * (exp(-high * high) * (1.0 - low * (1.0 - 0.5 * low)));
    if x < 0.0 { 2.0 - scaled } else { scaled }
}

/// `ln(1 + x)` for `x >= 0`, relative error below 1e-15.
#[inline(always)]
pub fn ln_1p(x: f64) -> f64 {
    let u = 1.0 + x;
    // What was lost by rounding u, restored to first order.
    let lost = if x < 1.0 { x - (u - 1.0) } else { 1.0 - (u - x) };
    ln(u) + lost / u
}

#[cfg(test)]
mod tests {
    use super::*;

    /// Against `libm`, whose errors are below 1 unit in the last place (musl's documentation of erf and log1p).
    #[test]
    fn agree_with_libm() {
        for i in 0..200_000 {
            let x = -6.0 + 32.0 * f64::from(i) / 200_000.0;
            let exact = libm::erfc(x);
            assert!((erfc(x) - exact).abs() <= 3e-15 * exact, "erfc({x}) = {} not {exact}", erfc(x));
            let y = libm::exp(0.3 * x * x.abs().min(9.0)) * 1e-9;
            let exact = libm::log1p(y);
            assert!((ln_1p(y) - exact).abs() <= 1e-15 * exact, "ln_1p({y}) = {} not {exact}", ln_1p(y));
        }
    }
}
