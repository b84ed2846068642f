//! The complex error function `w(z) = exp(-z²) erfc(-iz)` in the upper half plane.
//!
//! Near the real axis' middle: the trapezoidal rule for `w(z) = (i/π) ∫ exp(-t²)/(z - t) dt` with step `sqrt(π/13)`, plus
//! the term of the pole at t = z, and with nodes at the multiples of the step or half-way between them, whichever are
//! farther from Re z (M. Al Azah and S. N. Chandler-Wilde, SIAM J. Numer. Anal. 59 (2021) 2346; the pole term goes back
//! to C. Chiarella and A. Reichel, Math. Comput. 22 (1968) 137). Elsewhere: the Gauss-Hermite rule with 14 nodes, which
//! is the Laplace continued fraction (W. Gautschi, SIAM J. Numer. Anal. 7 (1970) 187). In both, Re w is a sum of positive
//! terms, so it keeps its relative precision however close z is to the real axis.

use super::kernel::{cos_sin_turns, exp};

const STEP: f64 = 0.49159024944872637;
const STEP_INVERSE: f64 = 2.0342144725641096;
/// Above this Im z the pole term is not there.
const POLE_LIMIT: f64 = 6.390673242833443;
/// Above this Im z the Gauss-Hermite rule serves everywhere.
const FAR_IMAGINARY: f64 = 8.0;

/// `(step/π) exp(-t²)` at `t = k step`; the node at 0 is met twice and has half its weight.
const STANDARD: [f64; 13] = [
    0.07823901817554269,
    0.1228857035552463,
    0.05951758195326714,
    0.017778091722798886,
    0.003275072753591905,
    0.00037209403421678707,
    2.6072363812877953e-05,
    1.1266889987530411e-06,
    3.002780905208313e-08,
    4.93559121782231e-10,
    5.00323227697579e-12,
    3.1279376966714436e-14,
    1.2060393223958514e-16,
];
/// The same at `t = (k + 1/2) step`.
const MIDPOINT: [f64; 13] = [
    0.14730428509589683,
    0.09084715393576354,
    0.03455438894607127,
    0.008105709855345079,
    0.001172667357695797,
    0.00010462959978952484,
    5.757450827874027e-06,
    1.9538978564846388e-07,
    4.089492546236238e-09,
    5.278772323349175e-11,
    4.2023516072663187e-13,
    2.06323068357716e-15,
    6.2473974299780044e-18,
];
/// Positive nodes of the Gauss-Hermite rule with 14 nodes, and their weights over π (50-digit arithmetic, mpmath).
const HERMITE: [(f64, f64); 7] = [
    (0.2917455106725621, 0.17074330406876811),
    (0.8787137873293994, 0.08693221533739516),
    (1.4766827311411408, 0.021805988801630986),
    (2.095183258507717, 0.0024987500265153564),
    (2.7484707249854026, 0.00011302948940441756),
    (3.4626569336022706, 1.5013035982337007e-06),
    (4.304448570473632, 2.7465658726523802e-09),
];

/// Points that are worked on together.
const BLOCK: usize = 64;

/// |Re z| from which the Gauss-Hermite rule holds to 1e-15 of Re w; it depends on how close z is to the real axis.
fn far_real(y: f64) -> f64 {
    // There the pole term, exp(-x²), must vanish beside Re w = y/(sqrt(π) x²).
    (-libm::log(1e-18 * y.clamp(f64::MIN_POSITIVE, 1.0))).sqrt().max(6.5)
}

/// w(x + iy) as (real part, imaginary part) for `y > 0`; relative errors below 2e-14 (Re) and 2e-15 of |w| (Im).
///
/// NaN for a negative or undefined y.
pub fn faddeeva(x: f64, y: f64) -> (f64, f64) {
    if !(y >= 0.0) || x.is_nan() {
        return (f64::NAN, f64::NAN);
    }
    let a = x.abs();
    let (re, im) = if y > FAR_IMAGINARY || a > far_real(y) {
        if a > 1e8 || y > 1e8 {
            far_away(a, y)
        } else {
            HERMITE.iter().fold((0.0, 0.0), |sum, &(t, weight)| add_pair(sum, a, y, t, weight))
        }
    } else {
        let (midpoint, pole) = pole_term(a, y);
        let (shift, weights) = if midpoint { (0.5 * STEP, &MIDPOINT) } else { (0.0, &STANDARD) };
        weights.iter().enumerate().fold(pole, |sum, (k, &weight)| add_pair(sum, a, y, k as f64 * STEP + shift, weight))
    };
    (re, if x < 0.0 { -im } else { im })
}

/// Leading term `i/(sqrt(π) z)`, free of overflow.
fn far_away(a: f64, y: f64) -> (f64, f64) {
    const FRAC_1_SQRT_PI: f64 = 0.564_189_583_547_756_3;
    let radius = libm::hypot(a, y);
    (FRAC_1_SQRT_PI * (y / radius) / radius, FRAC_1_SQRT_PI * (a / radius) / radius)
}

#[inline(always)]
fn add_pair(sum: (f64, f64), x: f64, y: f64, t: f64, weight: f64) -> (f64, f64) {
    let (below, above) = (x - t, x + t);
    let p = weight / (below * below + y * y);
    let q = weight / (above * above + y * y);
    (sum.0 + y * (p + q), sum.1 + (below * p + above * q))
}

/// Whether the half-way nodes are to be used at `x >= 0`, and the pole term for the nodes chosen.
#[inline(always)]
fn pole_term(x: f64, y: f64) -> (bool, (f64, f64)) {
    let (cosine, sine) = cos_sin_turns(x * STEP_INVERSE);
    let midpoint = cosine > 0.0;
    let y = y.min(POLE_LIMIT);
    let growth = exp(y * (2.0 * std::f64::consts::PI * STEP_INVERSE));
    // 1/(1 - exp(-2πiz/step)) or 1/(1 + ...): the choice of nodes makes both parts of the denominator safe.
    let re = 1.0 + growth * cosine.abs();
    let im = growth * if midpoint { -sine } else { sine };
    let (c, s) = cos_sin_turns(x * y * std::f64::consts::FRAC_1_PI);
    let size = if y < POLE_LIMIT { 2.0 * exp(y * y - x * x) / (re * re + im * im) } else { 0.0 };
    (midpoint, (size * (c * re - s * im), -size * (c * im + s * re)))
}

/// Re w(x + iy) times `factor` at `x = (m - centre) scale` for many m and one `y > 0`; relative error below 2e-14.
pub fn faddeeva_re_slice(m: &[f64], out: &mut [f64], centre: f64, scale: f64, y: f64, factor: f64) {
    let far = if y > FAR_IMAGINARY { -1.0 } else { far_real(y) };
    for (m, out) in m.chunks(BLOCK).zip(out.chunks_mut(BLOCK)) {
        block(m, out, centre, scale, (y, far), factor);
    }
}

crate::wide! {
    fn block(m: &[f64], out: &mut [f64], centre: f64, scale: f64, y_far: (f64, f64), factor: f64) {
        let (y, far) = y_far;
        let count = m.len().min(out.len()).min(BLOCK);
        // Sorted into the two regions: near from the front, far from the back.
        let mut x = [1.0; BLOCK];
        let mut place = [0_usize; BLOCK];
        let (mut near, mut back) = (0, BLOCK);
        for (i, &m) in m.iter().enumerate().take(count) {
            let a = ((m - centre) * scale).abs();
            let is_far = a > far;
            let slot = if is_far { back - 1 } else { near };
            back -= usize::from(is_far);
            near += usize::from(!is_far);
            x[slot & (BLOCK - 1)] = a;
            place[slot & (BLOCK - 1)] = i;
        }
        let mut sum = [0.0; BLOCK];
        near_sums(&x, &mut sum, near, y);
        far_sums(&x, &mut sum, back, y);
        for i in (0..near).chain(back..BLOCK) {
            // So far out the squares of squares would overflow; only the leading term is left.
            let leading = y / x[i] / x[i] * std::f64::consts::FRAC_2_SQRT_PI * 0.5;
            out[place[i]] = factor * if x[i] > 1e70 { leading } else { sum[i] };
        }
    }
}

#[inline(always)]
fn near_sums(x: &[f64; BLOCK], sum: &mut [f64; BLOCK], near: usize, y: f64) {
    if near == 0 {
        return;
    }
    // Rounded up to whole vectors; the surplus is overwritten or ignored.
    let count = near.next_multiple_of(4).min(BLOCK);
    let mut shift = [0.0; BLOCK];
    let mut pole = [0.0; BLOCK];
    for i in 0..count {
        let (midpoint, term) = pole_term(x[i], y);
        shift[i] = if midpoint { 0.5 * STEP } else { 0.0 };
        pole[i] = term.0;
    }
    let y2 = y * y;
    let mut total = [0.0; BLOCK];
    // Two pairs of nodes to one division.
    for k in 0..7 {
        let (j, last) = (2 * k, 2 * k + 1 > 12);
        let (t1, t2) = (j as f64 * STEP, (j + 1) as f64 * STEP);
        let (s1, m1) = (STANDARD[j], MIDPOINT[j]);
        let (s2, m2) = if last { (0.0, 0.0) } else { (STANDARD[j + 1], MIDPOINT[j + 1]) };
        for i in 0..count {
            let half_way = shift[i] > 0.0;
            let weight1 = if half_way { m1 } else { s1 };
            let weight2 = if half_way { m2 } else { s2 };
            let (a, b) = (x[i] - (t1 + shift[i]), x[i] + (t1 + shift[i]));
            let (c, d) = (x[i] - (t2 + shift[i]), x[i] + (t2 + shift[i]));
            let (a, b, c, d) = (a * a + y2, b * b + y2, c * c + y2, d * d + y2);
            let (ab, cd) = (a * b, c * d);
            total[i] += (weight1 * (a + b) * cd + weight2 * (c + d) * ab) / (ab * cd);
        }
    }
    for i in 0..count {
        sum[i] = y * total[i] + pole[i];
    }
}

#[inline(always)]
fn far_sums(x: &[f64; BLOCK], sum: &mut [f64; BLOCK], back: usize, y: f64) {
    if back >= BLOCK {
        return;
    }
    let y2 = y * y;
    let mut total = [0.0; BLOCK];
    let start = back - back % 4;
    for &(t, weight) in &HERMITE {
        for i in start..BLOCK {
            let (a, b) = (x[i] - t, x[i] + t);
            let (a, b) = (a * a + y2, b * b + y2);
            total[i] += weight * (a + b) / (a * b);
        }
    }
    for i in back..BLOCK {
        sum[i] = y * total[i];
    }
}
